//! Exact sums against known cases and against integer arithmetic.

use proptest::prelude::*;
use tenparsec::numerics::exact_sum::{ExactSum, Moments};

fn sum(terms: &[f64]) -> ExactSum {
    let mut sum = ExactSum::default();
    terms.iter().for_each(|x| sum.add(*x));
    sum
}

#[test]
fn sums_that_doubles_get_wrong() {
    // The correctly rounded sums are plain arithmetic; a loop of `+` misses each but the last.
    let tiny = f64::from_bits(1);
    let half_place = 2_f64.powi(-53);
    let cases: [(&[f64], f64); 9] = [
        (&[0.1; 10], 1.0),
        (&[1e16, 1.0, -1e16], 1.0),
        (&[1e100, 1.0, -1e100, 1e-100], 1.0),
        (&[1e308, 1e308, -1e308], 1e308),
        (&[1.0, half_place], 1.0),
        (&[1.0, half_place, tiny], 1.0 + f64::EPSILON),
        (&[1.0 + f64::EPSILON, half_place], 1.0 + 2.0 * f64::EPSILON),
        (&[-1.0, -half_place, -tiny], -1.0 - f64::EPSILON),
        (&[tiny, tiny, -tiny], tiny),
    ];
    for (terms, expected) in cases {
        assert_eq!(sum(terms).value(), expected, "{terms:?}");
        let backwards: Vec<f64> = terms.iter().rev().copied().collect();
        assert_eq!(sum(&backwards).value(), expected, "{terms:?} backwards");
    }
    assert_eq!(sum(&[]).value().to_bits(), 0);
    assert_eq!(sum(&[5.0, -5.0]).value().to_bits(), 0);
    assert!(sum(&[5.0, -5.0]).is_zero());
    assert_eq!(sum(&[f64::MAX, f64::MAX]).value(), f64::INFINITY);
    assert_eq!(sum(&[f64::MIN, f64::MIN]).value(), f64::NEG_INFINITY);
    assert_eq!(sum(&[f64::MAX, f64::MAX, f64::MIN, -f64::MAX, 2.5]).value(), 2.5);
    assert_eq!(sum(&[f64::NAN, f64::INFINITY, 2.5]).value(), 2.5, "not finite is left out");
}

#[test]
fn carries_reach_far() {
    let mut up = ExactSum::default();
    let mut down = ExactSum::default();
    for _ in 0..100_000 {
        up.add(f64::from(u32::MAX));
        down.add(-f64::from(u32::MAX));
    }
    assert_eq!(up.value(), 100_000.0 * f64::from(u32::MAX));
    assert_eq!(down.value(), -100_000.0 * f64::from(u32::MAX));
    for _ in 0..100 {
        let copy = up.clone();
        up.merge(&down);
        up.merge(&copy);
    }
    assert_eq!(up.value(), 100_000.0 * f64::from(u32::MAX));
    up.merge(&down);
    assert!(up.is_zero());
}

#[test]
fn variance_without_cancellation() {
    // A textbook case: {4, 7, 13, 16} has the sample variance 30, whatever is added to each.
    for shift in [0.0, 1e9, 1e15] {
        let mut m = Moments::default();
        [4.0, 7.0, 13.0, 16.0].iter().for_each(|x| m.add(x + shift));
        assert_eq!(m.variance(1), Some(30.0), "shifted by {shift}");
        assert_eq!(m.variance(0), Some(22.5));
    }
    let mut m = Moments::default();
    assert_eq!(m.variance(0), None);
    m.add(3.0);
    assert_eq!((m.variance(1), m.variance(0)), (None, Some(0.0)));
    // The square of 1e-200 is below the least double, and is kept all the same.
    let mut small = Moments::default();
    (0..4).for_each(|i| small.add(f64::from(i) * 2_f64.powi(-530)));
    assert_eq!(small.variance(0), Some(1.25 * 2_f64.powi(-1060)));
}

/// Doubles whose sums fit an i128 when counted in units of 2^-40.
fn doubles() -> impl Strategy<Value = Vec<f64>> {
    let one = (-(1_i64 << 53)..(1_i64 << 53), -40_i32..20).prop_map(|(m, e)| m as f64 * 2_f64.powi(e));
    prop::collection::vec(one, 0..60)
}

fn units(x: f64) -> i128 {
    (x * 2_f64.powi(20)) as i128 * (1 << 20) + ((x * 2_f64.powi(20)).fract() * 2_f64.powi(20)) as i128
}

proptest! {
    #[test]
    fn agrees_with_integers(terms in doubles()) {
        // `as f64` rounds an integer to nearest even, once, like the sum; the scaling is exact.
        let exact: i128 = terms.iter().map(|x| units(*x)).sum();
        prop_assert_eq!(sum(&terms).value(), exact as f64 * 2_f64.powi(-40));
    }

    #[test]
    fn order_and_merging_change_nothing(terms in prop::collection::vec(any::<f64>(), 0..40), cut in 0_usize..40, seed in any::<u64>()) {
        let whole = sum(&terms);
        let mut shuffled = terms.clone();
        let mut state = seed;
        for i in (1..shuffled.len()).rev() {
            state = state.wrapping_mul(6364136223846793005).wrapping_add(1442695040888963407);
            shuffled.swap(i, (state >> 33) as usize % (i + 1));
        }
        let (a, b) = shuffled.split_at(cut.min(shuffled.len()));
        let (mut merged, b) = (sum(b), sum(a));
        merged.merge(&b);
        prop_assert_eq!(&merged, &whole);
        prop_assert_eq!(merged.value().to_bits(), whole.value().to_bits());
        let text = serde_json::to_string(&merged).unwrap();
        prop_assert_eq!(&text, &serde_json::to_string(&whole).unwrap());
        let mut back: ExactSum = serde_json::from_str(&text).unwrap();
        prop_assert_eq!(&back, &whole);
        // A sum that was read back goes on.
        back.add(1.5);
        merged.add(1.5);
        prop_assert_eq!(back.value().to_bits(), merged.value().to_bits());
    }

    #[test]
    fn variance_agrees_with_integers(terms in prop::collection::vec(-1_000_000_000_i64..1_000_000_000, 2..50)) {
        let mut moments = Moments::default();
        terms.iter().for_each(|x| moments.add(*x as f64));
        let n = terms.len() as i128;
        let (s, q) = terms.iter().fold((0_i128, 0_i128), |(s, q), x| (s + i128::from(*x), q + i128::from(*x).pow(2)));
        prop_assert_eq!(moments.variance(1), Some((n * q - s * s) as f64 / (n * (n - 1)) as f64));
    }
}

#[test]
fn a_damaged_record_is_refused() {
    assert!(serde_json::from_str::<ExactSum>(r#"{"b":2000000000,"d":[1]}"#).is_err());
    assert!(serde_json::from_str::<ExactSum>(r#"{"b":-2000000000,"d":[1]}"#).is_err());
}
