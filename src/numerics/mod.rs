//! PURE. Numbers and nothing else.

pub mod exact_sum;
