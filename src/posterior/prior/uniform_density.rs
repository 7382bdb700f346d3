//! Uniform space density up to a limit: p(d) = 3 d^2 / D^3, 0 < d <= D.
//!
//! Source: the assumption of Lutz & Kelker 1973, PASP 85, 573, made proper by the limit D. Units: kpc. ln(D/d) is
//! exponential with rate 3, so the variance of ln d is 1/9.

use super::super::MAGNITUDES_PER_LN;
use super::super::shape::Shape;
use super::{Describe, Refusal, check_length};

pub(super) struct Settings {
    pub limit_kpc: f64,
}

impl Describe for Settings {
    fn check(&self) -> Result<(), Refusal> {
        check_length("limit_kpc", self.limit_kpc)
    }

    fn citation(&self) -> &'static str {
        "Lutz & Kelker 1973, PASP 85, 573"
    }

    fn describe(&self) -> String {
        format!("p(d) = 3 d^2 / D^3 up to D = {} kpc", self.limit_kpc)
    }

    fn shape(&self) -> Shape {
        Shape { power: 3.0, decline: None, high: libm::log(self.limit_kpc) }
    }

    fn modulus_variance(&self) -> f64 {
        MAGNITUDES_PER_LN * MAGNITUDES_PER_LN / 9.0
    }
}
