//! PURE. Magnitudes and moduli, exact sums, special functions.

pub mod magnitude;
