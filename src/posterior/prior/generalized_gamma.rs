//! Generalized gamma: p(d) = alpha d^beta exp(-(d/L)^alpha) / (Gamma((beta+1)/alpha) L^(beta+1)), d > 0.
//!
//! Source: Bailer-Jones et al. 2021, AJ 161, 147. Units: kpc. alpha = 1, beta = 2 is the exponentially decreasing density. With
//! d = L G^(1/alpha), G of the gamma distribution of shape (beta+1)/alpha, the variance of ln d is trigamma(shape)/alpha^2.
//! beta below 0, which would put infinite density at the observer, is refused.

use super::super::MAGNITUDES_PER_LN;
use super::super::shape::{Decline, Shape};
use super::{Describe, Refusal, check_length};
use crate::numerics::gamma::trigamma;

pub(super) struct Settings {
    pub alpha: f64,
    pub beta: f64,
    pub length_kpc: f64,
}

impl Describe for Settings {
    fn check(&self) -> Result<(), Refusal> {
        check_length("length_kpc", self.length_kpc)?;
        if !(0.1..=10.0).contains(&self.alpha) {
            return Err(("alpha", format!("alpha = {} is not between 0.1 and 10; give one in that range", self.alpha)));
        }
        if !(0.0..=20.0).contains(&self.beta) {
            return Err(("beta", format!("beta = {} is not between 0 and 20; give one in that range", self.beta)));
        }
        Ok(())
    }

    fn citation(&self) -> &'static str {
        "Bailer-Jones et al. 2021, AJ 161, 147"
    }

    fn describe(&self) -> String {
        format!(
            "p(d) ~ d^beta exp(-(d/L)^alpha), alpha = {}, beta = {}, L = {} kpc",
            self.alpha, self.beta, self.length_kpc
        )
    }

    fn shape(&self) -> Shape {
        Shape {
            power: self.beta + 1.0,
            decline: Some(Decline { alpha: self.alpha, ln_length: libm::log(self.length_kpc) }),
            high: f64::INFINITY,
        }
    }

    fn modulus_variance(&self) -> f64 {
        let scale = MAGNITUDES_PER_LN / self.alpha;
        scale * scale * trigamma((self.beta + 1.0) / self.alpha)
    }
}
