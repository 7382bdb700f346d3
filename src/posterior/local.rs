//! The posterior near one node: Taylor coefficients, end correction of the trapezoidal rule, inversion of the integral.
//!
//! In units of the step h, with f the density, a_n = f^(n) h^n / (n! f) at the node follow from the derivatives of the log
//! density, which are all known in closed form: y^(n) = power [n = 1] - alpha^n T + (-1)^n s U - (-2)^n U^2 / 2.
//! Euler-Maclaurin (Abramowitz & Stegun 1964, 25.4.7): the integral up to node k is h (f_0 + ... + f_{k-1} + f_k/2)
//! - h f_k (a_1/12 - a_3/120 + a_5/252 - a_7/240); what is left is of order 2 (h k/2 pi)^10 with k^2 the curvature.

use pulp::Simd;

use crate::numerics::lanes::Lanes;

/// Orders kept.
pub(super) const ORDERS: usize = 8;

/// What the derivatives of the log density are made of, at one node.
#[derive(Clone, Copy)]
pub(super) struct Point<S: Simd> {
    /// 1/(d sigma)
    pub u: Lanes<S>,
    /// (d/L)^alpha, 0 without decline
    pub t: Lanes<S>,
}

/// Row constants: powers of the step over factorials, so that derivatives come out in units of the step.
#[derive(Clone, Copy)]
pub(super) struct Scale<S: Simd> {
    signal: Lanes<S>,
    power: Lanes<S>,
    /// h^n / (n-1)! at n - 1
    step: [Lanes<S>; ORDERS - 1],
    /// (alpha h)^n / (n-1)! at n - 1
    decline: [Lanes<S>; ORDERS - 1],
}

impl<S: Simd> Scale<S> {
    #[inline(always)]
    pub fn new<const DECLINE: bool>(signal: Lanes<S>, power: Lanes<S>, alpha: Lanes<S>, step: Lanes<S>) -> Self {
        let mut scale = Self { signal, power: power * step, step: [step; ORDERS - 1], decline: [step; ORDERS - 1] };
        for n in 1..ORDERS - 1 {
            scale.step[n] = scale.step[n - 1] * step * (1.0 / n as f64);
        }
        if DECLINE {
            let a = alpha * step;
            scale.decline[0] = a;
            for n in 1..ORDERS - 1 {
                scale.decline[n] = scale.decline[n - 1] * a * (1.0 / n as f64);
            }
        }
        scale
    }

    /// h^n y^(n) / (n-1)! for n = 1..=7 at index n - 1.
    #[inline(always)]
    pub fn slopes<const DECLINE: bool>(&self, at: Point<S>) -> [Lanes<S>; ORDERS - 1] {
        let su = self.signal * at.u;
        let uu = at.u * at.u;
        let mut out = [su; ORDERS - 1];
        for n in 1..ORDERS {
            // -(-2)^n / 2
            let weight = if n % 2 == 1 { (1u32 << (n - 1)) as f64 } else { -((1u32 << (n - 1)) as f64) };
            let parallax = if n % 2 == 1 { uu * weight - su } else { uu * weight + su };
            let mut value = parallax * self.step[n - 1];
            if DECLINE {
                value = value - at.t * self.decline[n - 1];
            }
            out[n - 1] = value;
        }
        out[0] = out[0] + self.power;
        out
    }
}

/// a_0 ..= a_7 from the slopes: (n+1) a_{n+1} = sum_i slope_{i+1} a_{n-i}.
#[inline(always)]
pub(super) fn taylor<S: Simd>(slopes: &[Lanes<S>; ORDERS - 1]) -> [Lanes<S>; ORDERS] {
    let mut a = [slopes[0].like(1.0); ORDERS];
    a[1] = slopes[0];
    for n in 1..ORDERS - 1 {
        let mut sum = slopes[n] + slopes[0] * a[n];
        for i in 1..n {
            sum = sum + slopes[i] * a[n - i];
        }
        a[n + 1] = sum * (1.0 / (n + 1) as f64);
    }
    a
}

/// Half the node's own weight less the Euler-Maclaurin terms: the integral up to the node is
/// h (sum of the weights before it + f times this).
#[inline(always)]
pub(super) fn half_weight<S: Simd>(a: &[Lanes<S>; ORDERS]) -> Lanes<S> {
    0.5 - a[1] * (1.0 / 12.0) + a[3] * (1.0 / 120.0) - a[5] * (1.0 / 252.0) + a[7] * (1.0 / 240.0)
}

/// Solves sum_n a_n delta^(n+1) / (n+1) = goal for |delta| up to about 1/2.
#[inline(always)]
pub(super) fn invert<S: Simd>(a: &[Lanes<S>; ORDERS], goal: Lanes<S>) -> Lanes<S> {
    let half = a[1] * 0.5;
    let third = a[2] * (1.0 / 3.0);
    // reversion of the series up to the third power
    let start = goal * (1.0 - goal * (half - goal * (2.0 * half * half - third)));
    let mut delta = start.clamp(-1.0, 1.0);
    for _ in 0..2 {
        let mut integral = a[7] * (1.0 / 8.0);
        let mut density = a[7];
        for n in (0..7).rev() {
            integral = integral * delta + a[n] * (1.0 / (n + 1) as f64);
            density = density * delta + a[n];
        }
        let step = (integral * delta - goal) / density.max(density.like(0.05));
        delta = (delta - step).clamp(-1.0, 1.0);
    }
    delta
}
