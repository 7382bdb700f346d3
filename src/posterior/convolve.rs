//! The convolution of any posterior with a Gaussian photometric error, by quadrature: the route that always holds.
//!
//! The distribution function of x + error is the integral of the density times Phi((y - x)/t), a trapezoidal sum whose
//! step resolves both; its quantiles are found by Newton's method kept between brackets. Where the prior ends sharply the
//! sum is corrected by the Euler-Maclaurin terms of the product (see `local`).
//! Phi from Mills' ratio R: Phi(-z) = phi(z) R(z), z >= 0; R(z) (z + 3) is a polynomial of degree 20 in (z - 3)/(z + 3)
//! (Chebyshev interpolation in 40-digit arithmetic, error 4e-14).

use pulp::Simd;

use super::LEVELS;
use super::integrate::Nodes;
use super::local::{self, ORDERS, Point, Scale};
use super::locate::{Rule, Stars};
use crate::numerics::lanes::Lanes;

const MILLS: [f64; 21] = [
    1.8275417922606063,
    -1.2767059470478284,
    0.5765689205577506,
    -0.11847083519634001,
    -0.02622651844545741,
    0.017477770143510683,
    0.00257579387462648,
    -0.002621509230254025,
    -0.0006431556829315187,
    0.0003870383555630928,
    0.00019763269341308958,
    -3.328853915390777e-05,
    -5.209154964473388e-05,
    -8.668917202416476e-06,
    9.56315105727414e-06,
    5.520717307707436e-06,
    -5.160158780679604e-07,
    -1.4611699507639582e-06,
    -2.765538409875983e-07,
    1.7491111960254748e-07,
    6.168356153374543e-08,
];
const INVERSE_ROOT_TWO_PI: f64 = 0.398_942_280_401_432_7;

/// Phi(v) and phi(v), absolute error below 1e-12.
#[inline(always)]
pub(super) fn normal<S: Simd>(v: Lanes<S>) -> (Lanes<S>, Lanes<S>) {
    let z = v.abs().min(v.like(40.0));
    let density = (z * z * -0.5).weight() * INVERSE_ROOT_TWO_PI;
    let inverse = 1.0 / (z + 3.0);
    let t = (z - 3.0) * inverse;
    let mut mills = t * MILLS[20] + MILLS[19];
    for n in (0..19).rev() {
        mills = mills * t + MILLS[n];
    }
    let tail = density * (mills * inverse);
    let below = v.below(v.like(0.0));
    (below.select(tail, 1.0 - tail), density)
}

/// Quantiles of x + Gaussian(0, sd) on the nodes of [low, high].
#[allow(clippy::too_many_arguments)] // the state of one bundle; a struct would be built and taken apart at one place
#[inline(always)]
pub(super) fn convolved<S: Simd, const DECLINE: bool, const LIMIT: bool>(
    stars: &Stars<S>,
    rule: &Rule<S>,
    low: Lanes<S>,
    high: Lanes<S>,
    top: Lanes<S>,
    sd: Lanes<S>,
    guess: [Lanes<S>; 3],
    nodes: Nodes<'_, S>,
) -> [Lanes<S>; 3] {
    let count = nodes.sum.len();
    let s = stars.signal;
    let simd = s.token();
    let zero = s.like(0.0);
    let (forward, backward) = (s.max(zero), s.min(zero));
    let h = (high - low) * (1.0 / (count - 1) as f64);
    let mut u = (-(low + stars.ln_error)).exp();
    let shrink = (-h).exp();
    let (mut t, mut grow) = (zero, zero);
    if DECLINE {
        t = (rule.alpha * (low - rule.ln_length)).exp();
        grow = (rule.alpha * h).exp();
    }
    let base = rule.power * low - top;
    let rise = rule.power * h;
    let mut sum = zero;
    let mut last = zero;
    let mut last_at = Point { u, t };
    for (j, slot) in nodes.sum.iter_mut().enumerate() {
        let r = forward - u;
        let mut y = base + rise * j as f64 - (r * r) * 0.5 + backward * u;
        if DECLINE {
            y = y - t;
        }
        last = y.weight();
        last_at = Point { u, t };
        sum = sum + last;
        *slot = last.vector();
        u = u * shrink;
        t = t * grow;
    }
    let mut edge = [zero; ORDERS];
    if LIMIT {
        let scale = Scale::new::<DECLINE>(s, rule.power, rule.alpha, h);
        edge = local::taylor(&scale.slopes::<DECLINE>(last_at));
        sum = sum - last * (1.0 - local::half_weight(&edge));
    }
    let per_sd = 1.0 / sd;
    let reach = sd * 9.0;
    let mut out = guess;
    for (y, level) in out.iter_mut().zip(LEVELS) {
        let goal = sum * level;
        let (mut left, mut right) = (low - reach, high + reach);
        *y = (*y).max(left).min(right);
        let mut active = zero + 1.0;
        for _ in 0..200 {
            let mut cdf = zero;
            let mut pdf = zero;
            let mut v = (*y - low) * per_sd;
            let dv = h * per_sd;
            let v0 = v;
            for (j, weight) in nodes.sum.iter().enumerate() {
                v = v0 - dv * j as f64;
                let (below, density) = normal(v);
                let weight = Lanes::of(simd, *weight);
                cdf = cdf + weight * below;
                pdf = pdf + weight * density;
            }
            if LIMIT {
                // Taylor coefficients of Phi((y - x)/sd) at the end, then of the product
                let (below, density) = normal(v);
                let mut b = [below; ORDERS];
                // d^n/dx^n Phi((y-x)/sd) = -phi He_{n-1}(v) / sd^n
                let (mut he0, mut he1) = (zero, zero + 1.0);
                let mut unit = zero - density;
                for (n, coefficient) in b.iter_mut().enumerate().skip(1) {
                    unit = unit * dv * (1.0 / n as f64);
                    *coefficient = unit * he1;
                    let he2 = v * he1 - he0 * (n as f64 - 1.0);
                    he0 = he1;
                    he1 = he2;
                }
                let mut product = [zero; ORDERS];
                for n in 0..ORDERS {
                    for i in 0..=n {
                        product[n] = product[n] + edge[i] * b[n - i];
                    }
                }
                let half = local::half_weight(&product) - 0.5 + product[0] * 0.5;
                cdf = cdf - last * (product[0] - half);
                pdf = pdf - last * density * (1.0 - local::half_weight(&edge));
            }
            let error = cdf - goal;
            let over = zero.below(error);
            right = over.select(right.min(*y), right);
            left = over.select(left, left.max(*y));
            let next = *y - error / (pdf * per_sd).max(zero + 1e-300);
            let inside = left.at_most(next).and(next.at_most(right));
            let next = inside.select(next, (left + right) * 0.5);
            let moved = (next - *y).abs();
            let running = zero.below(active);
            *y = running.select(next, *y);
            // Newton's error after a step is about its square over sd
            active = running.and((zero + 1e-7).below(moved)).select(active, zero);
            if !active.any_positive() {
                break;
            }
        }
    }
    out
}
