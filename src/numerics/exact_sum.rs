//! Sums of `f64` that do not depend on the order of their terms, not by a single bit.
//!
//! Method: a wide fixed-point register in the manner of Kulisch (Kulisch & Miranker 1986, SIAM Review 28, 1): every
//! finite double is an integer multiple of 2^-1074 (a square of one, of 2^-2148), so a long enough integer holds any
//! sum exactly, and only reading it rounds, once, to nearest even. Exact addition commutes and associates, therefore
//! batches, threads and the order of merging cannot change a bit.
//!
//! The register is a window of 32-bit limbs in `i64`, grown to the exponents that occur: a sum of magnitudes takes
//! about four limbs. The upper halves of the limbs collect carries, which are passed on every 2^30 additions.
//! Squares are formed exactly as 106-bit integers, so the variance n sum(x^2) - (sum x)^2 suffers no cancellation.
//!
//! Domain: finite values; infinities and NaN are left out (they mean "missing" here, and callers count them).

use serde::{Deserialize, Serialize};

const LIMB_BITS: i32 = 32;
const LIMB_MASK: i64 = 0xffff_ffff;
/// Each addition moves a limb by less than 2^32, so 2^30 of them stay far within an `i64`.
const CARRY_AFTER: u32 = 1 << 30;

/// Exact sum of doubles, or of their squares; sum over i of `limbs[i]` 2^(32 (base + i)).
#[derive(Debug, Clone, Default)]
pub struct ExactSum {
    base: i32,
    limbs: Vec<i64>,
    pending: u32,
}

impl ExactSum {
    /// Adds `x`; a value that is not finite is left out.
    #[inline]
    pub fn add(&mut self, x: f64) {
        if let Some((mantissa, exponent)) = split(x) {
            self.add_part(mantissa, exponent, x < 0.0);
        }
    }

    /// Adds `x` squared, exactly; a value that is not finite is left out.
    #[inline]
    pub fn add_square(&mut self, x: f64) {
        if let Some((mantissa, exponent)) = split(x) {
            let square = u128::from(mantissa) * u128::from(mantissa);
            self.add_part(square as u64, 2 * exponent, false);
            self.add_part((square >> 64) as u64, 2 * exponent + 64, false);
        }
    }

    /// Adds an integer.
    pub fn add_integer(&mut self, n: i128) {
        let size = n.unsigned_abs();
        self.add_part(size as u64, 0, n < 0);
        self.add_part((size >> 64) as u64, 64, n < 0);
    }

    /// Adds another sum.
    pub fn merge(&mut self, other: &ExactSum) {
        if other.limbs.is_empty() {
            return;
        }
        // Carried limbs are below 2^32 in size, as a single addition is; an uncarried one may be anything.
        self.carry();
        let mut other = other.clone();
        other.carry();
        self.cover(other.base, other.limbs.len());
        let shift = (other.base - self.base) as usize;
        for (i, limb) in other.limbs.iter().enumerate() {
            self.limbs[shift + i] += limb;
        }
        self.pending = 2;
    }

    /// The sum, rounded once to the nearest double (ties to even); infinite beyond the range of doubles.
    pub fn value(&self) -> f64 {
        self.whole().round()
    }

    /// True when the sum is exactly zero.
    pub fn is_zero(&self) -> bool {
        self.whole().digits.is_empty()
    }

    #[inline]
    fn add_part(&mut self, value: u64, exponent: i32, negative: bool) {
        if value == 0 {
            return;
        }
        let limb = exponent.div_euclid(LIMB_BITS);
        let wide = u128::from(value) << exponent.rem_euclid(LIMB_BITS);
        let start = limb.wrapping_sub(self.base) as usize;
        if start.saturating_add(3) > self.limbs.len() || limb < self.base {
            self.cover(limb, 3);
        }
        let start = (limb - self.base) as usize;
        let parts = [wide as i64 & LIMB_MASK, (wide >> 32) as i64 & LIMB_MASK, (wide >> 64) as i64 & LIMB_MASK];
        for (to, part) in self.limbs[start..start + 3].iter_mut().zip(parts) {
            *to += if negative { -part } else { part };
        }
        self.pending += 1;
        if self.pending >= CARRY_AFTER {
            self.carry();
        }
    }

    /// Makes the window hold limbs `from .. from + count`.
    fn cover(&mut self, from: i32, count: usize) {
        if self.limbs.is_empty() {
            self.base = from;
        }
        if from < self.base {
            let missing = (self.base - from) as usize;
            self.limbs.splice(0..0, std::iter::repeat_n(0, missing));
            self.base = from;
        }
        let end = (from - self.base) as usize + count;
        if end > self.limbs.len() {
            self.limbs.resize(end, 0);
        }
    }

    /// Brings every limb but the last into 0 .. 2^32, and the last into -2^32 .. 2^32.
    fn carry(&mut self) {
        let mut carry = 0_i64;
        let mut i = 0;
        while i < self.limbs.len() || carry != 0 {
            if i == self.limbs.len() {
                self.limbs.push(0);
            }
            let sum = self.limbs[i] + carry;
            if i + 1 == self.limbs.len() && sum.unsigned_abs() < 1 << LIMB_BITS {
                self.limbs[i] = sum;
                break;
            }
            self.limbs[i] = sum & LIMB_MASK;
            carry = sum >> LIMB_BITS;
            i += 1;
        }
        self.pending = 1;
    }

    fn whole(&self) -> Whole {
        let mut carried = self.clone();
        carried.carry();
        let negative = carried.limbs.last().is_some_and(|top| *top < 0);
        if negative {
            carried.limbs.iter_mut().for_each(|limb| *limb = -*limb);
            carried.carry();
        }
        // The total is now positive, so every carried limb is in 0 .. 2^32.
        Whole::new(negative, carried.base, carried.limbs.iter().map(|limb| *limb as u32).collect())
    }

    fn from_whole(whole: &Whole) -> Self {
        let sign = if whole.negative { -1 } else { 1 };
        Self { base: whole.base, limbs: whole.digits.iter().map(|d| sign * i64::from(*d)).collect(), pending: 1 }
    }
}

impl PartialEq for ExactSum {
    fn eq(&self, other: &Self) -> bool {
        self.whole() == other.whole()
    }
}

impl Serialize for ExactSum {
    fn serialize<S: serde::Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        self.whole().serialize(serializer)
    }
}

impl<'de> Deserialize<'de> for ExactSum {
    fn deserialize<D: serde::Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        let whole = Whole::deserialize(deserializer)?;
        // Squares of doubles span limbs -68 .. 64; sums of 2^64 of them two more. A record beyond is damaged.
        let end = i64::from(whole.base) + whole.digits.len() as i64;
        if whole.base < -80 || end > 80 {
            return Err(serde::de::Error::custom("a sum outside the range that sums of doubles can have"));
        }
        Ok(Self::from_whole(&Whole::new(whole.negative, whole.base, whole.digits)))
    }
}

/// Mantissa and exponent with x = +-mantissa 2^exponent; `None` for NaN and infinities.
#[inline]
fn split(x: f64) -> Option<(u64, i32)> {
    let bits = x.to_bits();
    let exponent = ((bits >> 52) & 0x7ff) as i32;
    let fraction = bits & ((1 << 52) - 1);
    match exponent {
        0x7ff => None,
        0 => Some((fraction, -1074)),
        _ => Some((fraction | 1 << 52, exponent - 1075)),
    }
}

/// Sign and size of an exact number: digits (least first, none zero at either end) times 2^(32 base).
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
struct Whole {
    #[serde(rename = "n", default, skip_serializing_if = "std::ops::Not::not")]
    negative: bool,
    #[serde(rename = "b")]
    base: i32,
    #[serde(rename = "d")]
    digits: Vec<u32>,
}

impl Whole {
    fn new(negative: bool, base: i32, mut digits: Vec<u32>) -> Self {
        while digits.last() == Some(&0) {
            digits.pop();
        }
        let zeros = digits.iter().take_while(|d| **d == 0).count();
        digits.drain(..zeros);
        if digits.is_empty() {
            return Self { negative: false, base: 0, digits };
        }
        Self { negative, base: base + zeros as i32, digits }
    }

    fn product(&self, other: &Whole) -> Whole {
        let mut digits = vec![0_u32; self.digits.len() + other.digits.len()];
        for (i, a) in self.digits.iter().enumerate() {
            let mut carry = 0_u64;
            for (j, b) in other.digits.iter().enumerate() {
                // (2^32-1)^2 + 2 (2^32-1) = 2^64 - 1: never overflows.
                let sum = u64::from(digits[i + j]) + u64::from(*a) * u64::from(*b) + carry;
                digits[i + j] = sum as u32;
                carry = sum >> 32;
            }
            digits[i + other.digits.len()] = carry as u32;
        }
        Whole::new(self.negative != other.negative, self.base + other.base, digits)
    }

    /// Bit `i` of the digits, from the least.
    fn bit(&self, i: i64) -> u64 {
        if i < 0 { 0 } else { self.digits.get((i / 32) as usize).map_or(0, |d| u64::from(d >> (i % 32) & 1)) }
    }

    fn round(&self) -> f64 {
        let Some(top) = self.digits.last() else { return 0.0 };
        let low = i64::from(self.base) * 32;
        let leading = self.digits.len() as i64 * 32 - 1 - i64::from(top.leading_zeros());
        let sign = if self.negative { -1.0 } else { 1.0 };
        if leading + low > 1023 {
            return sign * f64::INFINITY;
        }
        // Exponent of the last place of the result, and that place as an index into the digits.
        let place = (leading + low - 52).max(-1074);
        let last = place - low;
        let mut mantissa = (last..=leading).rev().fold(0_u64, |m, i| m << 1 | self.bit(i));
        let half = self.bit(last - 1) == 1;
        let below = (0..last - 1).any(|i| self.bit(i) == 1);
        if half && (below || mantissa & 1 == 1) {
            mantissa += 1;
        }
        sign * libm::scalbn(mantissa as f64, place as i32)
    }
}

/// Count, sum and sum of squares, all exact: mean and variance that depend on the values alone.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub struct Moments {
    /// Values added.
    pub count: u64,
    sum: ExactSum,
    squares: ExactSum,
}

impl Moments {
    /// Adds a value; one that is not finite is left out.
    #[inline]
    pub fn add(&mut self, x: f64) {
        if x.is_finite() {
            self.count += 1;
            self.sum.add(x);
            self.squares.add_square(x);
        }
    }

    /// Adds what another has seen.
    pub fn merge(&mut self, other: &Moments) {
        self.count += other.count;
        self.sum.merge(&other.sum);
        self.squares.merge(&other.squares);
    }

    /// [n sum(x^2) - (sum x)^2] / [n (n - less)], the bracket exact before it is rounded; `less` is 1 for the sample
    /// variance, 0 for that of the population. `None` for fewer than `less + 1` values.
    pub fn variance(&self, less: u64) -> Option<f64> {
        if self.count <= less {
            return None;
        }
        let mut count = ExactSum::default();
        count.add_integer(i128::from(self.count));
        let mut bracket = ExactSum::from_whole(&count.whole().product(&self.squares.whole()));
        let sum = self.sum.whole();
        let mut square = sum.product(&sum);
        square.negative = !square.digits.is_empty();
        bracket.merge(&ExactSum::from_whole(&square));
        let n = self.count as f64;
        Some(bracket.value() / (n * (self.count - less) as f64))
    }
}
