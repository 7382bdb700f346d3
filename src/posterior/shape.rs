//! What a prior looks like to the kernel: a power law of the distance, an exponential decline or a sharp end.
//!
//! In x = ln(d / kpc) every density of the family is exp(power x - (d / L)^alpha) up to an end, so its logarithm has all
//! derivatives in closed form; the kernel lives on that. A prior file only fills in the constants.
//! Domain: power > 0, alpha > 0; either a decline or an upper end.

/// Density of x = ln(d / kpc), unnormalised: exp(power x - exp(alpha (x - ln_length))) for x <= high.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Shape {
    /// Exponent of the distance in the density of ln d (one more than in the density of d).
    pub power: f64,
    /// The decline, where there is one.
    pub decline: Option<Decline>,
    /// Upper end of ln(d / kpc); +inf if none.
    pub high: f64,
}

/// exp(-(d / L)^alpha).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Decline {
    /// alpha.
    pub alpha: f64,
    /// ln(L / kpc).
    pub ln_length: f64,
}
