//! What catalogue, verdicts, release and tables share of Arrow and Parquet.
//!
//! `source` opens Parquet files without trusting them; `pread`, `pages` and `compact` are its tools; `guard` turns the panics
//! of a decoder on damaged input into errors.

mod compact;
pub mod guard;
mod pages;
mod pread;
pub mod source;
