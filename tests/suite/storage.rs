//! Catalogue and release on disk: reading, splicing, encoding again, damage, folders, ledger.
//!
//! Files are written with the parquet crate and compared with the arrays that went in, so the reference is the data
//! itself. All values are invented here.

mod catalogues;
mod damage;
mod encodings;
mod files;
mod folders;
mod round_trips;
