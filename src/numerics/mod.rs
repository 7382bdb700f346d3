//! Pure numerical tools: lanes of f64 with elementary functions that give the same bits on every machine.

pub mod gamma;
pub mod lanes;
