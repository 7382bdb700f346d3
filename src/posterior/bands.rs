//! Absolute magnitudes by two fast and exact routes: M = m - A - mu, photometric error convolved with the posterior.
//!
//! Convolution with a Gaussian of variance v obeys the heat equation, and near a normal distribution everything follows
//! from cumulants. So, in x = ln d and v in the same unit:
//! - **Heat series** (error small against the posterior's finest structure): a quantile of the convolved distribution is
//!   q + D_1 (v/2) + D_2 (v/2)^2 + ... with coefficients from the derivatives of the density at the unconvolved quantile;
//!   four terms, computed once a star and good for all bands.
//! - **Cornish-Fisher expansion** to sixth order (Cornish & Fisher 1938, Rev. Inst. Int. Stat. 5, 307; coefficients derived
//!   anew at z = 0 and z = 1 by inverting the Edgeworth series in rational arithmetic), on the posterior's cumulants, the
//!   second increased by v.
//!
//! Each is used only where its last term shows it converged; the remainder goes to `convolve`, which is slower and always
//! good. Which route a row takes depends on the row alone.

use pulp::Simd;

use super::local::ORDERS;
use crate::numerics::lanes::Lanes;

/// Largest last term of the heat series, in units of x: 2e-7 mag; what is left out is below half of it.
const HEAT_TOLERANCE: f64 = 9e-8;
/// Largest error estimate of the expansion, in units of x: 5e-8 mag. Estimates have been up to four times too small.
const EXPANSION_TOLERANCE: f64 = 2.3e-8;

/// Coefficients D_1 ..= D_4 of the heat series, from Taylor coefficients of the density at the quantile in units of `step`.
#[inline(always)]
pub(super) fn heat_series<S: Simd>(a: &[Lanes<S>; ORDERS], step: Lanes<S>) -> [Lanes<S>; 4] {
    // C_m: Taylor coefficients of the distribution function; F_kn: coefficient of delta^k (v/2)^n
    let [_, a1, a2, a3, a4, a5, a6, a7] = *a;
    let (c2, c3, c4, c5) = (a1 * 0.5, a2 * (1.0 / 3.0), a3 * 0.25, a4 * 0.2);
    let (c6, c7, c8) = (a5 * (1.0 / 6.0), a6 * (1.0 / 7.0), a7 * 0.125);
    let d1 = -(c2 * 2.0);
    let d1d1 = d1 * d1;
    let d2 = -(c4 * 12.0 + c3 * d1 * 6.0 + c2 * d1d1);
    let d1d2 = d1 * d2;
    let d3 = -(c6 * 120.0 + c5 * d1 * 60.0 + c3 * d2 * 6.0 + c4 * d1d1 * 12.0 + c2 * d1d2 * 2.0 + c3 * d1d1 * d1);
    let d4 = -(c8 * 1680.0
        + c7 * d1 * 840.0
        + c5 * d2 * 60.0
        + c3 * d3 * 6.0
        + c6 * d1d1 * 180.0
        + c4 * d1d2 * 24.0
        + c2 * (d1 * d3 * 2.0 + d2 * d2)
        + c5 * d1d1 * d1 * 20.0
        + c3 * d1 * d1d2 * 3.0
        + c4 * d1d1 * d1d1);
    let inverse = 1.0 / (step * step);
    let inverse2 = inverse * inverse;
    [d1 * step * inverse, d2 * step * inverse2, d3 * step * (inverse2 * inverse), d4 * step * (inverse2 * inverse2)]
}

/// Convolved quantile and 1 where it can be trusted.
#[inline(always)]
pub(super) fn heat<S: Simd>(quantile: Lanes<S>, d: &[Lanes<S>; 4], variance: Lanes<S>) -> (Lanes<S>, Lanes<S>) {
    let zero = quantile.like(0.0);
    let v = variance * 0.5;
    let third = d[2] * (v * v * v);
    let fourth = d[3] * (v * v) * (v * v);
    let value = quantile + d[0] * v + d[1] * (v * v) + third + fourth;
    // terms fall at least threefold, so what is left out is below half the last term
    let small = fourth.abs().below(zero + HEAT_TOLERANCE);
    let falling = (fourth.abs() * 3.0).below(third.abs() + HEAT_TOLERANCE * 0.1);
    (value, small.and(falling).select(zero + 1.0, zero))
}

/// Cumulants 2 to 8 from the sums of weight times p^k, k = 0..=8, p in units of `step`.
#[inline(always)]
pub(super) fn cumulants<S: Simd>(sums: &[Lanes<S>; 9], step: Lanes<S>) -> [Lanes<S>; 7] {
    let inverse = 1.0 / sums[0];
    let mean = sums[1] * inverse;
    // central moments by repeated synthetic shift: m_k = sum_j C(k, j) (-mean)^(k-j) raw_j
    let mut m = [sums[0].like(1.0); 9];
    for k in 1..9 {
        m[k] = sums[k] * inverse;
    }
    for start in 0..8 {
        for k in (start + 1..9).rev() {
            m[k] = m[k] - mean * m[k - 1];
        }
    }
    let [_, _, m2, m3, m4, m5, m6, m7, m8] = m;
    let m22 = m2 * m2;
    let m33 = m3 * m3;
    let k4 = m4 - m22 * 3.0;
    let k5 = m5 - m3 * m2 * 10.0;
    let k6 = m6 - m4 * m2 * 15.0 - m33 * 10.0 + m22 * m2 * 30.0;
    let k7 = m7 - m5 * m2 * 21.0 - m4 * m3 * 35.0 + m3 * m22 * 210.0;
    let k8 =
        m8 - m6 * m2 * 28.0 - m5 * m3 * 56.0 - m4 * m4 * 35.0 + m4 * m22 * 420.0 + m33 * m2 * 560.0 - m22 * m22 * 630.0;
    let mut out = [m2, m3, k4, k5, k6, k7, k8];
    let mut unit = step;
    for k in &mut out {
        unit = unit * step;
        *k = *k * unit;
    }
    out
}

/// Quantiles at Phi(-1), 1/2, Phi(1) from mean and cumulants 2 to 8, and 1 where they can be trusted.
#[inline(always)]
pub(super) fn cornish_fisher<S: Simd>(mean: Lanes<S>, cumulants: &[Lanes<S>; 7]) -> ([Lanes<S>; 3], Lanes<S>) {
    let zero = mean.like(0.0);
    let sd = cumulants[0].sqrt();
    let inverse = 1.0 / sd;
    let mut power = inverse * inverse;
    let mut l = [zero; 6];
    for k in 0..6 {
        power = power * inverse;
        l[k] = cumulants[k + 1] * power;
    }
    let [l3, l4, l5, l6, l7, l8] = l;
    let l33 = l3 * l3;
    let l34 = l3 * l4;
    let l35 = l3 * l5;
    let l44 = l4 * l4;
    let l333 = l33 * l3;
    let middle1 = l3 * (-1.0 / 6.0);
    let middle3 = l5 * (1.0 / 40.0) - l34 * (1.0 / 12.0) + l333 * (17.0 / 324.0);
    let middle5 = l7 * (-1.0 / 336.0) + l4 * l5 * (1.0 / 30.0) + l3 * l6 * (1.0 / 48.0)
        - l3 * l44 * (1.0 / 9.0)
        - l33 * l5 * (1.0 / 12.0)
        + l33 * l34 * (19.0 / 81.0)
        - l33 * l333 * (2651.0 / 29160.0);
    let side2 = (l33 - l4) * (1.0 / 12.0);
    let side3 = l5 * (-1.0 / 60.0) + l34 * (1.0 / 12.0) - l333 * (2.0 / 27.0);
    let side4 = l6 * (1.0 / 120.0) - l44 * (1.0 / 48.0) - l35 * (1.0 / 30.0) + l33 * l4 * (1.0 / 16.0)
        - l33 * l33 * (25.0 / 2592.0);
    let side5 = l7 * (1.0 / 315.0) - l4 * l5 * (1.0 / 24.0) - l3 * l6 * (1.0 / 36.0)
        + l3 * l44 * (5.0 / 32.0)
        + l33 * l5 * (23.0 / 180.0)
        - l33 * l34 * (3.0 / 8.0)
        + l33 * l333 * (739.0 / 4860.0);
    let side6 = l8 * (-1.0 / 2016.0)
        + l5 * l5 * (7.0 / 3600.0)
        + l4 * l6 * (1.0 / 288.0)
        + l4 * l44 * (1.0 / 384.0)
        + l3 * l7 * (1.0 / 504.0)
        + l34 * l5 * (1.0 / 60.0)
        + l33 * l6 * (5.0 / 864.0)
        - l33 * l44 * (85.0 / 576.0)
        - l333 * l5 * (34.0 / 405.0)
        + l333 * l34 * (1325.0 / 3456.0)
        - l333 * l333 * (252611.0 / 1399680.0);
    let odd = side3 + side5;
    let even = 1.0 + side2 + side4 + side6;
    let quantiles = [mean + sd * (odd - even), mean + sd * (middle1 + middle3 + middle5), mean + sd * (odd + even)];
    // the next order is smaller than the last two by about the skewness
    let ratio = l3.abs().max(l4.abs().sqrt());
    let last = (middle5.abs() + side5.abs()).max(side6.abs()) * sd * ratio;
    let good = last.below(zero + EXPANSION_TOLERANCE).and(ratio.below(zero + 0.5));
    (quantiles, good.select(zero + 1.0, zero))
}
