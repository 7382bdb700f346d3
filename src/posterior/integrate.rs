//! One bundle of stars on equidistant nodes: quantiles, mean, variance and mode of x = ln(d / kpc).
//!
//! Purpose: given the interval from `locate`, a single pass over the nodes sums the density (trapezoidal rule, whose error
//! falls geometrically with the number of nodes because the density is analytic and vanishes at both ends), its first two
//! moments, and finds the node of the highest density in distance. Quantiles then follow from the cumulative sums and the
//! closed-form Taylor series at the nearest node (`local`), the mode by Newton's method on the same series.
//!
//! The sums run in node order in every lane, so results depend on nothing but the row itself.

use pulp::Simd;

use super::LEVELS;
use super::local::{self, Point, Scale};
use super::locate::{Rule, Stars};
use crate::numerics::lanes::Lanes;

/// Scratch for the cumulative sums and the two recurrences.
pub(super) struct Nodes<'a, S: Simd> {
    pub sum: &'a mut [S::f64s],
    pub u: &'a mut [S::f64s],
    pub t: &'a mut [S::f64s],
}

/// Results in x.
#[derive(Clone, Copy)]
pub(super) struct Summary<S: Simd> {
    pub quantiles: [Lanes<S>; 3],
    pub mode: Lanes<S>,
    pub mean: Lanes<S>,
    pub variance: Lanes<S>,
    /// 1 where the mode did not settle
    pub restless: Lanes<S>,
}

#[inline(always)]
pub(super) fn integrate<S: Simd, const DECLINE: bool, const LIMIT: bool>(
    stars: &Stars<S>,
    rule: &Rule<S>,
    low: Lanes<S>,
    high: Lanes<S>,
    top: Lanes<S>,
    nodes: Nodes<'_, S>,
) -> Summary<S> {
    let count = nodes.sum.len();
    let s = stars.signal;
    let simd_zero = s.like(0.0);
    let forward = s.max(simd_zero);
    let backward = s.min(simd_zero);
    let middle = (count - 1) as f64 / 2.0;
    let h = (high - low) * (1.0 / (count - 1) as f64);
    let mut u = (-(low + stars.ln_error)).exp();
    let shrink = (-h).exp();
    let mut t = simd_zero;
    let mut grow = simd_zero;
    if DECLINE {
        t = (rule.alpha * (low - rule.ln_length)).exp();
        grow = (rule.alpha * h).exp();
    }
    let base = rule.power * low - top;
    let rise = rule.power * h;

    let mut sum = simd_zero;
    let mut first = simd_zero;
    let mut second = simd_zero;
    let mut best = s.like(f64::NEG_INFINITY);
    let mut best_node = simd_zero;
    let mut best_u = u;
    let mut best_t = t;
    let mut last = simd_zero;
    let mut last_at = Point { u, t };
    let buffers = nodes.sum.iter_mut().zip(nodes.u.iter_mut()).zip(nodes.t.iter_mut());
    for (j, ((sum_slot, u_slot), t_slot)) in buffers.enumerate() {
        let index = j as f64;
        let r = forward - u;
        let mut y = base + rise * index - (r * r) * 0.5 + backward * u;
        if DECLINE {
            y = y - t;
        }
        let weight = y.weight();
        sum = sum + weight;
        let arm = weight * (index - middle);
        first = first + arm;
        second = second + arm * (index - middle);
        *sum_slot = sum.vector();
        *u_slot = u.vector();
        *t_slot = t.vector();
        let in_distance = y - h * index;
        let better = best.below(in_distance);
        best = better.select(in_distance, best);
        best_node = better.select(s.like(index), best_node);
        best_u = better.select(u, best_u);
        best_t = better.select(t, best_t);
        last = weight;
        last_at = Point { u, t };
        u = u * shrink;
        if DECLINE {
            t = t * grow;
        }
    }

    let scale = Scale::new::<DECLINE>(s, rule.power, rule.alpha, h);
    if LIMIT {
        // the trapezoidal rule ends here at a finite density: Euler-Maclaurin for f, p f and p^2 f, p the node index from the middle
        let a = local::taylor(&scale.slopes::<DECLINE>(last_at));
        let f = local::half_weight(&a);
        let pf = -(1.0 / 12.0) + a[2] * (6.0 / 720.0) - a[4] * (120.0 / 30240.0) + a[6] * (5040.0 / 1209600.0);
        let ppf = a[1] * (6.0 / 720.0) - a[3] * (120.0 / 30240.0) + a[5] * (5040.0 / 1209600.0);
        let p = s.like(middle);
        sum = sum - last * (1.0 - f);
        first = first - last * (p * (1.0 - f) - pf);
        second = second - last * (p * p * (1.0 - f) - 2.0 * p * pf - ppf);
    }
    let shift = first / sum;
    let variance = (second / sum - shift * shift) * h * h;
    let mean = low + (shift + middle) * h;

    let mut quantiles = [mean; 3];
    for (level, quantile) in LEVELS.iter().zip(quantiles.iter_mut()) {
        let goal = sum * *level;
        let mut before = simd_zero;
        let mut node = simd_zero;
        let mut at_u = Lanes::of(s.token(), nodes.u[0]);
        let mut at_t = Lanes::of(s.token(), nodes.t[0]);
        let mut upto = Lanes::of(s.token(), nodes.sum[0]);
        for j in 0..count - 1 {
            let reached = Lanes::of(s.token(), nodes.sum[j]);
            let short = reached.below(goal);
            before = short.select(reached, before);
            node = short.select(s.like((j + 1) as f64), node);
            upto = short.select(Lanes::of(s.token(), nodes.sum[j + 1]), upto);
            at_u = short.select(Lanes::of(s.token(), nodes.u[j + 1]), at_u);
            if DECLINE {
                at_t = short.select(Lanes::of(s.token(), nodes.t[j + 1]), at_t);
            }
        }
        let a = local::taylor(&scale.slopes::<DECLINE>(Point { u: at_u, t: at_t }));
        let weight = (upto - before).max(s.like(1e-300));
        let delta = local::invert(&a, (goal - before) / weight - local::half_weight(&a));
        *quantile = low + (node + delta) * h;
        if LIMIT {
            *quantile = (*quantile).min(high);
        }
    }

    // mode of the density in distance: slope of log density in x less 1
    let mut slopes = scale.slopes::<DECLINE>(Point { u: best_u, t: best_t });
    slopes[0] = slopes[0] - h;
    let mut delta = simd_zero;
    let mut moved = simd_zero;
    for _ in 0..4 {
        let mut value = slopes[6];
        let mut bend = slopes[6] * 6.0;
        for n in (0..6).rev() {
            value = value * delta + slopes[n];
            if n > 0 {
                bend = bend * delta + slopes[n] * n as f64;
            }
        }
        let next = (delta - value / bend.min(s.like(-1e-12))).clamp(-1.0, 1.0);
        let next = if LIMIT { next.min(s.like(2.0 * middle) - best_node) } else { next };
        moved = (next - delta).abs();
        delta = next;
    }
    let mode = low + (best_node + delta) * h;
    let restless = s.like(1e-8).below(moved * h).select(s.like(1.0), simd_zero);
    Summary { quantiles, mode, mean, variance, restless }
}
