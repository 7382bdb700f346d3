//! All integration tests in one binary, so that polars is linked once.

mod draft;
mod exact_sum;
mod house;
mod magnitudes;
mod mock;
mod posterior;
mod release;
mod storage;
mod tables;
mod verdicts;
mod world;
mod wrong;
