//! The settings of cuts and tables (the rest of the plan is merged by its owner).

pub mod cuts;
pub mod tables;
