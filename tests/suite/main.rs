//! Integration tests, one binary: a module a subject.

mod exact_sum;
mod tables;
mod verdicts;
