//! Cuts: SQL keep-conditions over batches of rows, the verdict of each row, and counts by reason.
//!
//! A verdict is a bit mask: bit i set says that the row fails cut i of the plan. A condition that is null for a row,
//! because a value it needs is missing, is not met: the row fails, and is counted as missing besides.

mod batch;
mod counts;
mod cuts;
pub mod statistics;

pub use batch::BatchVerdict;
pub use counts::{CutCount, CutCounts};
pub use cuts::{Cuts, Judgement, MOST};
