//! Columns in memory: the hand-over to polars, and SQL expressions over batches of rows.

pub mod bridge;
pub mod sql;
