//! Random numbers by counter: a star's numbers depend on the seed and its row number, never on what was drawn before.
//!
//! Each row opens a stream of its own, so any thread can make any row and the bytes stay the same. Mixing: the
//! finalizer and the odd step of SplitMix64 (Steele, Lea & Flood 2014, OOPSLA, 453). Two of N streams of 64 draws
//! overlap with a chance near 64 N^2 / 2^64, which is 1e-3 for 2e7 rows, and then in a few draws of one pair of stars.
//!
//! Normal deviates: ziggurat of 256 layers (Marsaglia & Tsang 2000, J. Stat. Software 5, 8), with the layer and the
//! position taken from separate bits, which removes the correlation of the first form (Doornik 2005, "An improved
//! ziggurat method to generate normal random samples"). Tables are worked out with `libm` at the start.

use std::sync::LazyLock;

const STEP: u64 = 0x9E37_79B9_7F4A_7C15;

/// A bijection of 64-bit numbers that leaves no visible trace of its input.
pub fn mix(mut z: u64) -> u64 {
    z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
    z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
    z ^ (z >> 31)
}

/// A bijection of the 63-bit numbers, keyed by the seed: distinct rows get distinct positive identifiers.
///
/// Every step (exclusive or with a constant, a right shift folded in, a product with an odd number modulo 2^63) can be
/// undone, so no table of used numbers is needed.
pub fn identifier(seed: u64, row: u64) -> i64 {
    const MASK: u64 = (1 << 63) - 1;
    let mut z = (row ^ mix(seed ^ 0x1D)) & MASK;
    for odd in [0x2545_F491_4F6C_DD1D, 0x5851_F42D_4C95_7F2D, 0x1B87_3593_CC9E_2D51_u64] {
        z = z.wrapping_mul(odd) & MASK;
        z ^= z >> 32;
    }
    z as i64
}

/// The stream of one row.
pub struct Draws {
    state: u64,
    ziggurat: &'static Ziggurat,
}

impl Draws {
    /// Opens the stream of a row.
    pub fn of_row(seed: u64, row: u64) -> Self {
        Self { state: mix(mix(seed).wrapping_add(row.wrapping_mul(STEP))), ziggurat: &ZIGGURAT }
    }

    /// 64 random bits.
    pub fn bits(&mut self) -> u64 {
        self.state = self.state.wrapping_add(STEP);
        mix(self.state)
    }

    /// Uniform in the open interval 0..1 (never 0, so a logarithm of it is finite).
    pub fn uniform(&mut self) -> f64 {
        ((self.bits() >> 12) as f64 + 0.5) * (1.0 / (1u64 << 52) as f64)
    }

    /// True with a chance of `p`.
    pub fn chance(&mut self, p: f64) -> bool {
        self.uniform() < p
    }

    /// A normal deviate with mean 0 and standard deviation 1.
    pub fn normal(&mut self) -> f64 {
        loop {
            let bits = self.bits();
            let layer = (bits & 0xFF) as usize;
            // 53 bits above the layer's eight: uniform in -1..1.
            let u = (bits >> 11) as f64 * (2.0 / (1u64 << 53) as f64) - 1.0;
            let x = u * self.ziggurat.edge[layer];
            if x.abs() < self.ziggurat.edge[layer + 1] {
                return x;
            }
            if layer == 0 {
                let tail = self.tail();
                return if u < 0.0 { -tail } else { tail };
            }
            let (low, high) = (self.ziggurat.height[layer], self.ziggurat.height[layer + 1]);
            if low + self.uniform() * (high - low) < libm::exp(-0.5 * x * x) {
                return x;
            }
        }
    }

    /// A deviate beyond the last edge (Marsaglia 1964, Technometrics 6, 101).
    fn tail(&mut self) -> f64 {
        loop {
            let x = -libm::log(self.uniform()) / TAIL;
            let y = -libm::log(self.uniform());
            if y + y > x * x {
                return TAIL + x;
            }
        }
    }

    /// Exponential deviate with mean 1.
    pub fn exponential(&mut self) -> f64 {
        -libm::log(self.uniform())
    }
}

/// Right edge of the base strip of 256 layers (Marsaglia & Tsang 2000).
const TAIL: f64 = 3.654_152_885_361_009;

struct Ziggurat {
    /// Right edge of each layer; layer 0 is the base strip widened so that its area counts the tail.
    edge: [f64; 257],
    /// exp(-x^2 / 2) at each edge.
    height: [f64; 257],
}

/// Area of each layer: the base strip with the tail behind it.
fn area() -> f64 {
    let half_pi = std::f64::consts::FRAC_PI_2;
    TAIL * libm::exp(-0.5 * TAIL * TAIL) + half_pi.sqrt() * libm::erfc(TAIL / std::f64::consts::SQRT_2)
}

static ZIGGURAT: LazyLock<Ziggurat> = LazyLock::new(|| {
    let density = |x: f64| libm::exp(-0.5 * x * x);
    let area = area();
    let mut edge = [0.0; 257];
    edge[0] = area / density(TAIL);
    edge[1] = TAIL;
    for i in 2..256 {
        edge[i] = (-2.0 * libm::log(density(edge[i - 1]) + area / edge[i - 1])).sqrt();
    }
    let mut height = [0.0; 257];
    for (h, &x) in height.iter_mut().zip(&edge) {
        *h = density(x);
    }
    Ziggurat { edge, height }
});

#[cfg(test)]
mod tests {
    use super::*;

    /// Moments of the normal distribution: 0, 1, 0, 3; share beyond 3 standard deviations 0.0026998 (common practice).
    #[test]
    fn normal_deviates_have_normal_moments_and_tails() {
        let n = 4_000_000u64;
        let (mut sums, mut beyond, mut far) = ([0.0; 4], 0u64, 0u64);
        for row in 0..n / 8 {
            let mut draws = Draws::of_row(7, row);
            for _ in 0..8 {
                let x = draws.normal();
                let mut power = 1.0;
                for sum in &mut sums {
                    power *= x;
                    *sum += power;
                }
                beyond += u64::from(x.abs() > 3.0);
                far += u64::from(x.abs() > TAIL);
            }
        }
        let mean = sums.map(|s| s / n as f64);
        // Five standard errors: those of the moments are sqrt(1, 2, 15, 96) / sqrt(n).
        let error = (n as f64).sqrt();
        assert!(mean[0].abs() < 5.0 / error, "{mean:?}");
        assert!((mean[1] - 1.0).abs() < 5.0 * 1.4143 / error, "{mean:?}");
        assert!(mean[2].abs() < 5.0 * 3.873 / error, "{mean:?}");
        assert!((mean[3] - 3.0).abs() < 5.0 * 9.798 / error, "{mean:?}");
        for (count, share) in [(beyond, libm::erfc(3.0 / 2f64.sqrt())), (far, libm::erfc(TAIL / 2f64.sqrt()))] {
            let expected = share * n as f64;
            assert!((count as f64 - expected).abs() < 5.0 * expected.sqrt(), "{count} against {expected}");
        }
    }

    /// The widths close: the topmost layer, bounded by the density at 0, has the area of the others.
    #[test]
    fn layers_have_one_area() {
        let top = ZIGGURAT.edge[255] * (1.0 - ZIGGURAT.height[255]);
        assert!((top - area()).abs() < 1e-12, "{top}");
    }

    #[test]
    fn identifiers_are_positive_and_distinct() {
        let mut seen: Vec<i64> = (0..200_000).map(|row| identifier(3, row)).collect();
        assert!(seen.iter().all(|&id| id >= 0));
        seen.sort_unstable();
        seen.dedup();
        assert_eq!(seen.len(), 200_000);
    }
}
