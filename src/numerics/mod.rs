//! PURE. Numerical tools: magnitudes and moduli, sums that no order changes, elementary and gamma functions with the same
//! bits on every machine.

pub mod exact_sum;
pub mod gamma;
pub mod lanes;
pub mod magnitude;
