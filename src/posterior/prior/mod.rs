//! Priors on the distance of a star: one file each, and the list.
//!
//! A prior file holds the check of its settings, the formula with its source, the shape that the kernel works on and the
//! variance of the distance modulus. [`Prior`] is the list as the plan spells it; a new prior is a file, a variant and a
//! line in `Prior::with`.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use super::shape::Shape;

mod exponentially_decreasing_density;
mod generalized_gamma;
mod uniform_density;

/// A setting that cannot be: its key under `[distance]` and the reason.
pub type Refusal = (&'static str, String);

/// Prior density of the distance, as it stands in the plan's `[distance]` section.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(tag = "prior", rename_all = "kebab-case")]
pub enum Prior {
    /// d^2 exp(-d/L): space density falling exponentially (Bailer-Jones 2015, PASP 127, 994).
    ExponentiallyDecreasingDensity {
        /// L, kpc.
        length_kpc: f64,
    },
    /// d^beta exp(-(d/L)^alpha): rise and fall of the space density set apart (Bailer-Jones et al. 2021, AJ 161, 147).
    GeneralizedGamma {
        /// Steepness of the decline.
        alpha: f64,
        /// Power of the distance before the decline.
        beta: f64,
        /// L, kpc.
        length_kpc: f64,
    },
    /// d^2 up to a limit, nothing beyond: constant space density (Lutz & Kelker 1973, PASP 85, 573, with an end).
    UniformDensity {
        /// Largest distance, kpc.
        limit_kpc: f64,
    },
}

/// What every prior file provides.
trait Describe {
    /// Bounds of the settings.
    fn check(&self) -> Result<(), Refusal>;
    /// Authors, year, journal.
    fn citation(&self) -> &'static str;
    /// The density with its numbers.
    fn describe(&self) -> String;
    /// The constants of the kernel.
    fn shape(&self) -> Shape;
    /// Variance of the distance modulus under the prior alone, mag^2.
    fn modulus_variance(&self) -> f64;
}

impl Prior {
    fn with<R>(&self, f: impl FnOnce(&dyn Describe) -> R) -> R {
        match *self {
            Self::ExponentiallyDecreasingDensity { length_kpc } => {
                f(&exponentially_decreasing_density::Settings { length_kpc })
            }
            Self::GeneralizedGamma { alpha, beta, length_kpc } => {
                f(&generalized_gamma::Settings { alpha, beta, length_kpc })
            }
            Self::UniformDensity { limit_kpc } => f(&uniform_density::Settings { limit_kpc }),
        }
    }

    /// Refuses settings outside their bounds (NaN and infinities included): the key and the reason.
    pub fn check(&self) -> Result<(), Refusal> {
        self.with(|p| p.check())
    }

    /// Source of the formula: authors, year, journal.
    pub fn citation(&self) -> &'static str {
        self.with(|p| p.citation())
    }

    /// The density as a formula with its numbers.
    pub fn describe(&self) -> String {
        self.with(|p| p.describe())
    }

    /// Variance of the distance modulus under the prior alone, mag^2.
    pub fn modulus_variance(&self) -> f64 {
        self.with(|p| p.modulus_variance())
    }

    /// The constants that the kernel works on.
    pub fn shape(&self) -> Shape {
        self.with(|p| p.shape())
    }
}

/// Bounds of lengths in kpc: wider than any stellar survey, narrow enough that no intermediate result overflows.
fn check_length(key: &'static str, value: f64) -> Result<(), Refusal> {
    if (1e-6..=1e6).contains(&value) {
        Ok(())
    } else {
        Err((key, format!("{key} = {value} is not a length between 0.000001 and 1000000 kpc; give one in that range")))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn settings_stand_as_in_the_plan() {
        let prior = Prior::ExponentiallyDecreasingDensity { length_kpc: 1.35 };
        let text = serde_json::to_string(&prior).unwrap();
        assert_eq!(text, r#"{"prior":"exponentially-decreasing-density","length_kpc":1.35}"#);
        assert_eq!(serde_json::from_str::<Prior>(&text).unwrap(), prior);
    }

    #[test]
    fn bounds_refuse_nan_and_infinity() {
        for bad in [f64::NAN, f64::INFINITY, f64::NEG_INFINITY, 0.0, -1.0, 1e-9, 1e9] {
            let (key, message) = Prior::ExponentiallyDecreasingDensity { length_kpc: bad }.check().unwrap_err();
            assert_eq!(key, "length_kpc");
            assert!(message.contains("kpc"));
            assert_eq!(Prior::UniformDensity { limit_kpc: bad }.check().unwrap_err().0, "limit_kpc");
        }
        assert!(Prior::UniformDensity { limit_kpc: 20.0 }.check().is_ok());
        let gamma = |alpha, beta| Prior::GeneralizedGamma { alpha, beta, length_kpc: 1.0 }.check();
        assert_eq!(gamma(f64::NAN, 2.0).unwrap_err().0, "alpha");
        assert_eq!(gamma(1.0, -0.5).unwrap_err().0, "beta");
        assert!(gamma(1.0, 2.0).is_ok());
    }

    /// alpha = 1, beta = 2 is the exponentially decreasing density.
    #[test]
    fn priors_meet_where_they_should() {
        let gamma = Prior::GeneralizedGamma { alpha: 1.0, beta: 2.0, length_kpc: 1.35 };
        let exponential = Prior::ExponentiallyDecreasingDensity { length_kpc: 1.35 };
        assert_eq!(gamma.shape(), exponential.shape());
        assert!((gamma.modulus_variance() - exponential.modulus_variance()).abs() < 1e-14);
    }
}
