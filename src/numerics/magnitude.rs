//! Magnitudes, fluxes, parallaxes and distance moduli.
//!
//! Method and source: Pogson's scale, m = zp - 2.5 log10 f (Pogson 1856, MNRAS 17, 12), and the distance modulus
//! mu = 5 log10(d / 10 pc) = m - M - A, both common practice; the zero point of the bolometric scale and the parsec from
//! IAU 2015 Resolution B2, the astronomical unit from IAU 2012 Resolution B2.
//!
//! Units: magnitudes mag, distances pc, parallaxes mas; fluxes in any unit, as long as the zero point belongs to it.
//!
//! Domain: finite input; distances, parallaxes and fluxes above zero; flux errors not below zero. Outside it every
//! function returns NaN, which means missing: a modulus of a negative parallax does not exist, and an infinite one
//! would survive into sums. Logarithms come from `libm`, so that every machine computes the same bits.

use std::f64::consts::{LN_10, PI};

/// Astronomical unit in m, exact by definition (IAU 2012 Resolution B2).
pub const AU_M: f64 = 149_597_870_700.0;

/// Parsec in m: 648000/pi au (IAU 2015 Resolution B2, note 4), 3.085677581491367e16.
pub const PARSEC_M: f64 = AU_M * (648_000.0 / PI);

/// Radiative luminosity in W of absolute bolometric magnitude 0 (IAU 2015 Resolution B2).
pub const L0: f64 = 3.0128e28;

/// Irradiance in W m^-2 of apparent bolometric magnitude 0 (IAU 2015 Resolution B2): [`L0`] seen from 10 pc. The
/// resolution prints the first digits, 2.518021002...e-8; here they are all.
pub const F0: f64 = L0 / (4.0 * PI * (10.0 * PARSEC_M) * (10.0 * PARSEC_M));

/// Magnitudes of a relative flux change of one, to first order: 2.5 / ln 10 = 1.0857.
pub const MAG_PER_RELATIVE_FLUX: f64 = 2.5 / LN_10;

/// `value` when it is finite and above zero, else NaN.
fn positive(value: f64) -> f64 {
    if value > 0.0 && value < f64::INFINITY { value } else { f64::NAN }
}

/// `value` when it is finite, else NaN.
fn finite(value: f64) -> f64 {
    if value.is_finite() { value } else { f64::NAN }
}

/// Distance modulus in mag of a distance in pc: 5 log10(d) - 5.
///
/// NaN unless the distance is finite and above zero.
pub fn modulus_from_parsec(parsec: f64) -> f64 {
    5.0 * libm::log10(positive(parsec)) - 5.0
}

/// Distance in pc of a distance modulus in mag: 10^(mu/5 + 1), the inverse of [`modulus_from_parsec`].
///
/// NaN for a modulus that is not finite or whose distance leaves the range of an `f64` (|mu| of about 1500 mag).
pub fn parsec_from_modulus(modulus: f64) -> f64 {
    positive(libm::exp10(modulus / 5.0 + 1.0))
}

/// Distance modulus in mag of a parallax in mas taken at its face value: 10 - 5 log10(parallax).
///
/// This is the inverted parallax, biased when the parallax is noisy; the posterior is the better answer.
/// NaN unless the parallax is finite and above zero.
pub fn modulus_from_parallax_mas(parallax_mas: f64) -> f64 {
    10.0 - 5.0 * libm::log10(positive(parallax_mas))
}

/// Absolute magnitude in mag: m + 5 log10(parallax/mas) - 10 - A.
///
/// `magnitude`: apparent, mag; `parallax_mas`: mas; `extinction`: A in the same band, mag.
/// NaN unless the parallax is above zero and all three are finite.
pub fn absolute_magnitude(magnitude: f64, parallax_mas: f64, extinction: f64) -> f64 {
    finite(magnitude - modulus_from_parallax_mas(parallax_mas) - extinction)
}

/// Magnitude of a flux: zp - 2.5 log10 f, where `zero_point` is the magnitude of a flux of one unit.
///
/// NaN unless the flux is finite and above zero and the zero point finite.
pub fn magnitude_from_flux(flux: f64, zero_point: f64) -> f64 {
    finite(zero_point - 2.5 * libm::log10(positive(flux)))
}

/// Magnitude error in mag of a flux and its error (same unit), to first order: (2.5 / ln 10) error / flux.
///
/// The error of the zero point is common to a whole band and not part of it.
/// NaN unless the flux is finite and above zero and the error finite and not below zero.
pub fn magnitude_error_from_flux(flux: f64, flux_error: f64) -> f64 {
    if flux_error >= 0.0 { finite(MAG_PER_RELATIVE_FLUX * (flux_error / positive(flux))) } else { f64::NAN }
}
