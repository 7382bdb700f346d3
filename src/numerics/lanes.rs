//! A bundle of f64 lanes with operators, and exp and ln built on nothing but IEEE arithmetic.
//!
//! Purpose: kernels are written once, as formulas over [`Lanes`], and run at whatever SIMD width the machine offers. Each
//! lane is an independent star and every operation (+, -, *, /, sqrt, comparison, selection, bit shifts) is exactly
//! rounded, so a result has the same bits at any width. Fused multiply-add is never used.
//!
//! Method: exp by reduction with ln 2 in two pieces and a Taylor polynomial of degree 12; ln by splitting off the
//! exponent and the series of 2 atanh (Cody & Waite 1980, "Software Manual for the Elementary Functions").
//! Domains: exp of [-700, 700] (clamped), ln of positive normal numbers; outside, callers select something else.

use std::ops::{Add, Div, Mul, Neg, Sub};

use pulp::{Simd, bytemuck};

/// As many f64 as the SIMD unit holds, with the token that proves the unit is there.
pub struct Lanes<S: Simd> {
    simd: S,
    value: S::f64s,
}

impl<S: Simd> Clone for Lanes<S> {
    #[inline(always)]
    fn clone(&self) -> Self {
        *self
    }
}

impl<S: Simd> Copy for Lanes<S> {}

/// One truth value a lane.
pub struct Mask<S: Simd> {
    simd: S,
    value: S::m64s,
}

impl<S: Simd> Clone for Mask<S> {
    #[inline(always)]
    fn clone(&self) -> Self {
        *self
    }
}

impl<S: Simd> Copy for Mask<S> {}

macro_rules! operator {
    ($trait:ident, $method:ident, $call:ident) => {
        impl<S: Simd> $trait for Lanes<S> {
            type Output = Self;
            #[inline(always)]
            fn $method(self, other: Self) -> Self {
                Self { simd: self.simd, value: self.simd.$call(self.value, other.value) }
            }
        }
        impl<S: Simd> $trait<f64> for Lanes<S> {
            type Output = Self;
            #[inline(always)]
            fn $method(self, other: f64) -> Self {
                Self { simd: self.simd, value: self.simd.$call(self.value, self.simd.splat_f64s(other)) }
            }
        }
        impl<S: Simd> $trait<Lanes<S>> for f64 {
            type Output = Lanes<S>;
            #[inline(always)]
            fn $method(self, other: Lanes<S>) -> Lanes<S> {
                Lanes { simd: other.simd, value: other.simd.$call(other.simd.splat_f64s(self), other.value) }
            }
        }
    };
}

operator!(Add, add, add_f64s);
operator!(Sub, sub, sub_f64s);
operator!(Mul, mul, mul_f64s);
operator!(Div, div, div_f64s);

impl<S: Simd> Neg for Lanes<S> {
    type Output = Self;
    #[inline(always)]
    fn neg(self) -> Self {
        self * -1.0
    }
}

impl<S: Simd> Mask<S> {
    /// `yes` where true, `no` elsewhere.
    #[inline(always)]
    pub fn select(self, yes: Lanes<S>, no: Lanes<S>) -> Lanes<S> {
        Lanes { simd: self.simd, value: self.simd.select_f64s(self.value, yes.value, no.value) }
    }

    /// Both true.
    #[inline(always)]
    pub fn and(self, other: Self) -> Self {
        Self { simd: self.simd, value: self.simd.and_m64s(self.value, other.value) }
    }

    /// Either true.
    #[inline(always)]
    pub fn or(self, other: Self) -> Self {
        Self { simd: self.simd, value: self.simd.or_m64s(self.value, other.value) }
    }
}

impl<S: Simd> Lanes<S> {
    /// Number of lanes.
    pub const WIDTH: usize = S::F64_LANES;

    /// The same number in every lane.
    #[inline(always)]
    pub fn splat(simd: S, value: f64) -> Self {
        Self { simd, value: simd.splat_f64s(value) }
    }

    /// The first [`Self::WIDTH`] numbers of a slice, which must hold as many.
    #[inline(always)]
    pub fn load(simd: S, from: &[f64]) -> Self {
        Self { simd, value: S::as_simd_f64s(from).0[0] }
    }

    /// Into the first [`Self::WIDTH`] places of a slice, which must have as many.
    #[inline(always)]
    pub fn store(self, to: &mut [f64]) {
        S::as_mut_simd_f64s(to).0[0] = self.value;
    }

    /// The token of the SIMD unit.
    #[inline(always)]
    pub fn token(self) -> S {
        self.simd
    }

    /// From a vector of the SIMD interface.
    #[inline(always)]
    pub fn of(simd: S, value: S::f64s) -> Self {
        Self { simd, value }
    }

    /// To a vector of the SIMD interface.
    #[inline(always)]
    pub fn vector(self) -> S::f64s {
        self.value
    }

    /// The same number in every lane, of the kind that `self` is.
    #[inline(always)]
    pub fn like(self, value: f64) -> Self {
        Self::splat(self.simd, value)
    }

    /// Square root, exactly rounded.
    #[inline(always)]
    pub fn sqrt(self) -> Self {
        Self { simd: self.simd, value: self.simd.sqrt_f64s(self.value) }
    }

    /// True where `self < other`; false for NaN.
    #[inline(always)]
    pub fn below(self, other: Self) -> Mask<S> {
        Mask { simd: self.simd, value: self.simd.less_than_f64s(self.value, other.value) }
    }

    /// True where `self <= other`; false for NaN.
    #[inline(always)]
    pub fn at_most(self, other: Self) -> Mask<S> {
        Mask { simd: self.simd, value: self.simd.less_than_or_equal_f64s(self.value, other.value) }
    }

    /// The larger one; neither may be NaN (machines differ there).
    #[inline(always)]
    pub fn max(self, other: Self) -> Self {
        Self { simd: self.simd, value: self.simd.max_f64s(self.value, other.value) }
    }

    /// The smaller one; neither may be NaN.
    #[inline(always)]
    pub fn min(self, other: Self) -> Self {
        Self { simd: self.simd, value: self.simd.min_f64s(self.value, other.value) }
    }

    /// Whether any lane is above 0.
    #[inline(always)]
    pub fn any_positive(self) -> bool {
        self.simd.reduce_max_f64s(self.value) > 0.0
    }

    /// Absolute value.
    #[inline(always)]
    pub fn abs(self) -> Self {
        self.max(-self)
    }

    /// Limits to `[low, high]`.
    #[inline(always)]
    pub fn clamp(self, low: f64, high: f64) -> Self {
        self.max(self.like(low)).min(self.like(high))
    }

    /// Nearest integer, ties to even, for |x| < 2^51.
    #[inline(always)]
    pub fn round(self) -> Self {
        (self + ROUND) - ROUND
    }

    /// Largest integer not above, for |x| < 2^51.
    #[inline(always)]
    pub fn floor(self) -> Self {
        let near = self.round();
        self.below(near).select(near - 1.0, near)
    }

    #[inline(always)]
    fn words(self) -> S::u32s {
        bytemuck::cast(self.value)
    }

    #[inline(always)]
    fn of_words(self, words: S::u32s) -> Self {
        Self { simd: self.simd, value: bytemuck::cast(words) }
    }

    #[inline(always)]
    fn word_pairs(self, low: u32, high: u32) -> S::u32s {
        bytemuck::cast(self.simd.splat_u64s((u64::from(high) << 32) | u64::from(low)))
    }

    /// 2^k for integer k in [-1022, 1023]. A constant 1.5 * 2^20 puts k into the upper word, where a 32-bit shift moves
    /// it to the exponent's place (no 64-bit shift is needed, which the vector interface lacks).
    #[inline(always)]
    fn power_of_two(self) -> Self {
        let shifted = (self + (1023.0 + HIGH_WORD)).words();
        self.of_words(self.simd.wrapping_dyn_shl_u32s(shifted, self.word_pairs(0, 20)))
    }

    /// e^x with relative error below 3e-16; x is limited to [-700, 700].
    #[inline(always)]
    pub fn exp(self) -> Self {
        let x = self.clamp(-700.0, 700.0);
        let k = (x * std::f64::consts::LOG2_E).round();
        let r = (x - k * LN2_HIGH) - k * LN2_LOW;
        let mut sum = r * INVERSE_FACTORIAL[12] + INVERSE_FACTORIAL[11];
        for n in (0..11).rev() {
            sum = sum * r + INVERSE_FACTORIAL[n];
        }
        sum * k.power_of_two()
    }

    /// e^x with relative error below 3e-6 (and below |x|^6/700 for small x): for deciding where to look, not for results.
    #[inline(always)]
    pub fn rough_exp(self) -> Self {
        let x = self.clamp(-700.0, 700.0);
        let k = (x * std::f64::consts::LOG2_E).round();
        let r = x - k * std::f64::consts::LN_2;
        let mut sum = r * INVERSE_FACTORIAL[5] + INVERSE_FACTORIAL[4];
        for n in (0..4).rev() {
            sum = sum * r + INVERSE_FACTORIAL[n];
        }
        sum * k.power_of_two()
    }

    /// e^y for use as a weight: the relative error stays below 1e-11 for -5 < y <= 1 and 6e-10 at y = -10, growing to 3e-5
    /// at -40, where weights no longer count. Below -40 the weight of -40 (4e-18) is given; above 1, that of 1.
    #[inline(always)]
    pub fn weight(self) -> Self {
        const UNIT: f64 = 1.0 / 1024.0;
        const C2: f64 = UNIT * UNIT / 2.0;
        const C3: f64 = UNIT * UNIT * UNIT / 6.0;
        const C4: f64 = UNIT * UNIT * UNIT * UNIT / 24.0;
        let y = self.clamp(-40.0, 1.0);
        let mut e = (((y * C4 + C3) * y + C2) * y + UNIT) * y + 1.0;
        for _ in 0..10 {
            e = e * e;
        }
        e
    }

    /// x = 2^k (1 + f) with 1 + f in [sqrt(1/2), sqrt(2)]: k and f.
    #[inline(always)]
    fn split(self) -> (Self, Self) {
        let simd = self.simd;
        let words = self.words();
        let exponent = simd.and_u32s(words, self.word_pairs(0, 0x7ff0_0000));
        let exponent = simd.wrapping_dyn_shr_u32s(exponent, self.word_pairs(0, 20));
        // as a double: 2^52 + exponent * 2^32
        let exponent = self.of_words(simd.or_u32s(exponent, self.word_pairs(0, 0x4330_0000)));
        let exponent = (exponent - 4503599627370496.0) * (1.0 / 4294967296.0) - 1023.0;
        let mantissa = simd.and_u32s(words, self.word_pairs(0xffff_ffff, 0x000f_ffff));
        let mantissa = self.of_words(simd.or_u32s(mantissa, self.word_pairs(0, 0x3ff0_0000)));
        let large = self.like(std::f64::consts::SQRT_2).below(mantissa);
        let m = large.select(mantissa * 0.5, mantissa);
        let k = large.select(exponent + 1.0, exponent);
        (k, m - 1.0)
    }

    /// ln x with absolute error below 4e-16 or relative error below 4e-16, for positive normal x.
    #[inline(always)]
    pub fn ln(self) -> Self {
        let (k, f) = self.split();
        let s = f / (f + 2.0);
        let q = s * s;
        let mut sum = q * (2.0 / 23.0) + 2.0 / 21.0;
        for n in (1..10).rev() {
            sum = sum * q + 2.0 / f64::from(2 * n + 1);
        }
        // ln m = 2 s + s q (...); 2 s = f - s f keeps the leading term exact
        k * LN2_HIGH + (f - (s * (f - q * sum) - k * LN2_LOW))
    }

    /// ln x with absolute error below 1e-7: for deciding where to look, not for results.
    #[inline(always)]
    pub fn rough_ln(self) -> Self {
        let (k, f) = self.split();
        let s = f / (f + 2.0);
        let q = s * s;
        k * std::f64::consts::LN_2 + s * (((q * (2.0 / 7.0) + 0.4) * q + 2.0 / 3.0) * q + 2.0)
    }
}

/// 1.5 * 2^52: adding it rounds to an integer.
const ROUND: f64 = 6755399441055744.0;
/// 2^20: adding it puts an integer into the upper word of the double.
const HIGH_WORD: f64 = 1048576.0;
/// ln 2 = high + low; the high piece has 32 trailing zero bits, so that k * high is exact.
const LN2_HIGH: f64 = f64::from_bits(0x3fe6_2e42_fee0_0000);
const LN2_LOW: f64 = f64::from_bits(0x3dea_39ef_3579_3c76);
const INVERSE_FACTORIAL: [f64; 13] = [
    1.0,
    1.0,
    1.0 / 2.0,
    1.0 / 6.0,
    1.0 / 24.0,
    1.0 / 120.0,
    1.0 / 720.0,
    1.0 / 5040.0,
    1.0 / 40320.0,
    1.0 / 362880.0,
    1.0 / 3628800.0,
    1.0 / 39916800.0,
    1.0 / 479001600.0,
];

#[cfg(test)]
mod tests {
    use super::*;

    /// Against the `libm` crate (a general-purpose library) over the range that kernels use.
    #[test]
    fn exp_and_ln_agree_with_libm() {
        let simd = pulp::Scalar256b;
        for i in 0..200_000 {
            let x = -690.0 + 1380.0 * f64::from(i) / 199_999.0;
            let mut e = [0.0; 4];
            Lanes::splat(simd, x).exp().store(&mut e);
            let truth = libm::exp(x);
            assert!((e[0] / truth - 1.0).abs() < 4e-16, "exp {x}: {} {truth}", e[0]);
            for y in [truth, 1.0 + x * 1e-3, 1.0 + x * 1e-12] {
                if y > 0.0 {
                    let mut l = [0.0; 4];
                    Lanes::splat(simd, y).ln().store(&mut l);
                    let truth = libm::log(y);
                    assert!((l[0] - truth).abs() <= 4e-16 * truth.abs(), "ln {y}: {} {truth}", l[0]);
                }
            }
        }
    }

    #[test]
    fn weights_are_exponentials() {
        let simd = pulp::Scalar256b;
        for i in 0..41_000 {
            let y = 1.0 - f64::from(i) / 1000.0;
            let mut e = [0.0; 4];
            Lanes::splat(simd, y).weight().store(&mut e);
            // absolute error relative to a peak of 1 is what counts in a sum
            assert!((e[0] - libm::exp(y)).abs() < 1e-12, "weight {y}: {}", e[0]);
        }
    }
}
