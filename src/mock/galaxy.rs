//! Where the stars and the dust of the invented sky are.
//!
//! Stars: thin disc, thick disc and halo of Juric et al. 2008, ApJ 673, 864, as densities relative to the thin disc at
//! the Sun's radius in the mid-plane. Ours: a core of 500 pc that keeps the halo finite at the centre.
//!
//! Dust: a slab that thins out exponentially with height, seen from inside. The column to distance d is
//! k h / |sin b| (1 - exp(-d |sin b| / h)) (Parenago 1940, Astron. Zh. 17, 3), times a smooth invented pattern on the
//! sky. k = 0.7 mag/kpc is near the mean of the solar neighbourhood (common practice).
//!
//! Units: pc, mag. Any distance of 0 or more.

/// Scale lengths and heights of the two discs (pc), share of the thick disc at the Sun.
const THIN: (f64, f64) = (2600.0, 300.0);
const THICK: (f64, f64) = (3600.0, 900.0);
const THICK_SHARE: f64 = 0.12;
/// Halo: share at the Sun, power, flattening.
const HALO_SHARE: f64 = 0.0051;
const HALO_POWER: f64 = 2.77;
const HALO_FLATTENING: f64 = 0.64;
const HALO_CORE: f64 = 500.0;
/// The Sun: distance from the axis and height above the plane (pc).
const SUN_RADIUS: f64 = 8000.0;
const SUN_HEIGHT: f64 = 25.0;
/// Dust: V-band magnitudes per pc in the plane, scale height (pc).
const DUST_PER_PC: f64 = 0.7e-3;
const DUST_HEIGHT: f64 = 120.0;

/// Thin disc, thick disc, halo.
pub const COMPONENTS: usize = 3;

/// Densities of thin disc, thick disc and halo at distance `d` along the direction with cosine of longitude `cos_l` and
/// sine of latitude `sin_b`, relative to the thin disc at the Sun's radius in the mid-plane.
pub fn densities(cos_l: f64, sin_b: f64, d: f64) -> [f64; COMPONENTS] {
    let along = d * (1.0 - sin_b * sin_b).max(0.0).sqrt();
    let radius2 = (SUN_RADIUS * SUN_RADIUS - 2.0 * SUN_RADIUS * along * cos_l + along * along).max(0.0);
    let radius = radius2.sqrt();
    let z = d * sin_b;
    let above_plane = (z + SUN_HEIGHT).abs();
    let disc = |(length, height): (f64, f64)| libm::exp((SUN_RADIUS - radius) / length - above_plane / height);
    let flattened = radius2 + (z / HALO_FLATTENING) * (z / HALO_FLATTENING) + HALO_CORE * HALO_CORE;
    let halo = libm::exp(0.5 * HALO_POWER * libm::log(SUN_RADIUS * SUN_RADIUS / flattened));
    [disc(THIN), THICK_SHARE * disc(THICK), HALO_SHARE * halo]
}

/// Extinction in V (mag) at distance `d` and sine of latitude `sin_b`, for a pattern of 1.
pub fn extinction(sin_b: f64, d: f64) -> f64 {
    let depth = d * sin_b.abs() / DUST_HEIGHT;
    // (1 - exp(-x)) / x tends to 1 - x/2; below 1e-8 the difference from 1 is beyond double precision.
    let filled = if depth < 1e-8 { 1.0 } else { -libm::expm1(-depth) / depth };
    DUST_PER_PC * d * filled
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Worked out with the published formula of Juric et al. 2008 and its values (Sun at 8 kpc, 25 pc above the plane):
    /// thin, thick and halo at (l, b, d). The halo is compared with the core put in by hand.
    #[test]
    fn densities_follow_the_published_formula() {
        let rows = [
            (0.0, 90.0, 1000.0, 0.03282165833, 0.03842094885, 0.004842299865),
            (90.0, 30.0, 1000.0, 0.1706780348, 0.06610044646, 0.004953578212),
            (270.0, -45.0, 3000.0, 0.0008300122285, 0.01082056998, 0.00377767348),
        ];
        for (l, b, d, thin, thick, halo) in rows {
            let got = densities(libm::cos(l * crate::sky::RADIANS), libm::sin(b * crate::sky::RADIANS), d);
            assert!((got[0] / thin - 1.0).abs() < 1e-8, "{l} {b} {d}: {}", got[0]);
            assert!((got[1] / thick - 1.0).abs() < 1e-8, "{l} {b} {d}: {}", got[1]);
            // share [R0^2 / s^2]^(n/2) gives s^2, to which the core is added.
            let reach2 = SUN_RADIUS * SUN_RADIUS * libm::pow(HALO_SHARE / halo, 2.0 / HALO_POWER);
            let cored = halo * libm::pow(reach2 / (reach2 + HALO_CORE * HALO_CORE), HALO_POWER / 2.0);
            assert!((got[2] / cored - 1.0).abs() < 1e-8, "{l} {b} {d}: {} {cored}", got[2]);
        }
    }

    /// In the plane the column grows evenly; at the pole it ends at the full half-column k h.
    #[test]
    fn dust_fills_a_slab() {
        assert!((extinction(0.0, 1000.0) - 0.7).abs() < 1e-12);
        assert!((extinction(1.0, 1e5) - DUST_PER_PC * DUST_HEIGHT).abs() < 1e-12);
        assert!((extinction(1e-7, 1000.0) - 0.7).abs() < 1e-6);
    }
}
