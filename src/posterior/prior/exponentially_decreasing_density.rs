//! Exponentially decreasing space density: p(d) = d^2 exp(-d/L) / (2 L^3), d > 0.
//!
//! Source: Bailer-Jones 2015, PASP 127, 994. Units: kpc. Mode 2 L, mean 3 L. With d = L G, G of the gamma distribution of
//! shape 3, the variance of ln d is trigamma(3) = pi^2/6 - 5/4.

use super::super::MAGNITUDES_PER_LN;
use super::super::shape::{Decline, Shape};
use super::{Describe, Refusal, check_length};

pub(super) struct Settings {
    pub length_kpc: f64,
}

impl Describe for Settings {
    fn check(&self) -> Result<(), Refusal> {
        check_length("length_kpc", self.length_kpc)
    }

    fn citation(&self) -> &'static str {
        "Bailer-Jones 2015, PASP 127, 994"
    }

    fn describe(&self) -> String {
        format!("p(d) = d^2 exp(-d/L) / (2 L^3), L = {} kpc", self.length_kpc)
    }

    fn shape(&self) -> Shape {
        Shape {
            power: 3.0,
            decline: Some(Decline { alpha: 1.0, ln_length: libm::log(self.length_kpc) }),
            high: f64::INFINITY,
        }
    }

    fn modulus_variance(&self) -> f64 {
        let pi = std::f64::consts::PI;
        MAGNITUDES_PER_LN * MAGNITUDES_PER_LN * (pi * pi / 6.0 - 1.25)
    }
}
