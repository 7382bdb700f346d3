//! PURE. What a column is (name, type, unit, UCD, meaning) and what a stage may see: rows as borrowed slices.
//!
//! Inside kernels every value is an `f64` and NaN means missing; the edges turn NaN into Arrow nulls and back.

mod declare;
pub mod unit;

pub use declare::{Declared, Type};
