//! The trigamma function, the variance of the logarithm of a gamma variate.
//!
//! Method: recurrence psi'(x) = psi'(x+1) + 1/x^2 up to x >= 12, then the asymptotic series (Abramowitz & Stegun 1964, 6.4.6
//! and 6.4.12). Domain: x > 0; NaN elsewhere. Relative error below 1e-14.

/// psi'(x) for x > 0.
pub fn trigamma(x: f64) -> f64 {
    if !(x > 0.0 && x.is_finite()) {
        return f64::NAN;
    }
    let (mut x, mut sum) = (x, 0.0);
    while x < 12.0 {
        sum += 1.0 / (x * x);
        x += 1.0;
    }
    let y = 1.0 / (x * x);
    let series = 1.0 / 6.0
        + y * (-1.0 / 30.0
            + y * (1.0 / 42.0 + y * (-1.0 / 30.0 + y * (5.0 / 66.0 + y * (-691.0 / 2730.0 + y * (7.0 / 6.0))))));
    sum + 1.0 / x + 0.5 * y + y / x * series
}

#[cfg(test)]
mod tests {
    use super::trigamma;

    /// psi'(1) = pi^2/6, psi'(1/2) = pi^2/2 (Abramowitz & Stegun 1964, 6.4.2, 6.4.4), and the recurrence.
    #[test]
    fn closed_forms() {
        let pi2 = std::f64::consts::PI * std::f64::consts::PI;
        assert!((trigamma(1.0) / (pi2 / 6.0) - 1.0).abs() < 1e-14);
        assert!((trigamma(0.5) / (pi2 / 2.0) - 1.0).abs() < 1e-14);
        assert!((trigamma(3.0) / (pi2 / 6.0 - 1.25) - 1.0).abs() < 1e-14);
        assert!((trigamma(30.25) + 1.0 / (29.25 * 29.25) - trigamma(29.25)).abs() < 1e-16);
        assert!(trigamma(0.0).is_nan() && trigamma(f64::NAN).is_nan());
    }
}
