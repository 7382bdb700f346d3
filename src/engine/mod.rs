//! Puts it together: binds a plan to a catalogue, shares the work between threads, writes the release.

pub mod bind;
pub mod build;
pub mod check;
pub mod coordinates;
pub mod fields;
pub mod job;
pub mod machine;
pub mod piece;
pub mod pipeline;
pub mod progress;
pub mod schedule;
pub mod schemas;
pub mod stop;
pub mod summary;
pub mod tally;
pub mod values;
pub mod votable;
