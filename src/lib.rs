//! tenparsec turns star catalogues in Parquet into calibrated luminosity releases.
//!
//! Data flow: plan -> catalogue rows -> calibration stages -> posterior -> verdicts -> parts -> tables.
//!
//! Imports run one way (a test reads the `use` lines and fails on an upward one):
//! numerics, frame, sky <- posterior <- calibration <- plan <- columnar <- catalogue, verdicts, release, tables,
//! mock <- engine <- cli. `error` may be used by all. The folders numerics, frame, sky, posterior and calibration are
//! PURE: no files, no Arrow, no logging; slices in, slices out. catalogue, verdicts, release, tables and mock never
//! import each other; engine hands data on.

pub mod error;
pub mod frame;
pub mod mock;
pub mod plan;
pub mod sky;
