//! The mode where Newton's method from the nearest node does not settle: two maxima about to merge, or a very flat top.
//!
//! Scan and bisection of the slope, one star at a time; such stars are rare. Domain: a `Shape`'s density times a Gaussian
//! parallax likelihood on a given interval of x = ln(d / kpc).

use super::shape::Shape;

/// x of the highest density in distance within `[low, high]`; `signal` is parallax over error, `ln_error` ln(error / mas).
pub(super) fn search(shape: &Shape, signal: f64, ln_error: f64, low: f64, high: f64) -> f64 {
    const NODES: usize = 1024;
    let decline = |x: f64| match shape.decline {
        Some(d) => (d.alpha, libm::exp(d.alpha * (x - d.ln_length))),
        None => (1.0, 0.0),
    };
    let height = |x: f64| {
        let u = libm::exp(-x - ln_error);
        let s = signal.max(0.0);
        (shape.power - 1.0) * x - decline(x).1 - 0.5 * (s - u) * (s - u) + signal.min(0.0) * u
    };
    let slope = |x: f64| {
        let u = libm::exp(-x - ln_error);
        let (alpha, t) = decline(x);
        shape.power - 1.0 - alpha * t + u * (u - signal)
    };
    let at = |j: usize| low + (high - low) * j as f64 / (NODES - 1) as f64;
    let mut best = 0;
    for j in 1..NODES {
        if height(at(j)) > height(at(best)) {
            best = j;
        }
    }
    let (mut left, mut right) = (at(best.saturating_sub(1)), at((best + 1).min(NODES - 1)));
    if slope(right) >= 0.0 {
        return right;
    }
    if slope(left) <= 0.0 {
        return left;
    }
    for _ in 0..100 {
        let middle = 0.5 * (left + right);
        if slope(middle) > 0.0 {
            left = middle;
        } else {
            right = middle;
        }
    }
    0.5 * (left + right)
}
