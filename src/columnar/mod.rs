//! What catalogue, verdicts, release and tables share of Arrow, Parquet and polars.
//!
//! `source` opens Parquet files without trusting them; `pread`, `pages` and `compact` are its tools; `guard` turns the
//! panics of a decoder on damaged input into errors. `bridge` hands columns to polars, `sql` evaluates expressions there.

pub mod bridge;
mod compact;
pub mod guard;
mod pages;
mod pread;
pub mod source;
pub mod sql;
