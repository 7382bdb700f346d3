//! One bundle of stars on equidistant nodes: quantiles, mean, variance and mode of x = ln(d / kpc).
//!
//! Purpose: given the interval from `locate`, a single pass over the nodes sums the density (trapezoidal rule, whose error
//! falls geometrically with the number of nodes because the density is analytic and vanishes at both ends), its first two
//! moments, and finds the node of the highest density in distance. Quantiles then follow from the cumulative sums and the
//! closed-form Taylor series at the nearest node (`local`), the mode by Newton's method on the same series.
//!
//! The sums run in node order in every lane, so results depend on nothing but the row itself.

use pulp::Simd;

use super::batch::WIDEST;
use super::local::{self, Point, Scale};
use super::locate::{Rule, Stars};
use super::{LEVELS, bands};
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
    /// The upper end where the prior cuts a significant density, far away elsewhere.
    pub edge: Lanes<S>,
    /// Heat series of each quantile, in x (only with `BANDS`).
    pub heat: [[Lanes<S>; 4]; 3],
    /// Cumulants 2 to 8 of x (only with `BANDS`).
    pub cumulants: [Lanes<S>; 7],
}

#[inline(always)]
pub(super) fn integrate<S: Simd, const DECLINE: bool, const LIMIT: bool, const BANDS: bool>(
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
    let mut sums = [simd_zero; 9];
    let mut best = s.like(f64::NEG_INFINITY);
    let mut best_node = simd_zero;
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
        let mut arm = weight * (index - middle);
        sums[1] = sums[1] + arm;
        for moment in &mut sums[2..if BANDS { 9 } else { 3 }] {
            arm = arm * (index - middle);
            *moment = *moment + arm;
        }
        *sum_slot = sum.vector();
        *u_slot = u.vector();
        *t_slot = t.vector();
        let in_distance = y - h * index;
        let better = best.below(in_distance);
        best = better.select(in_distance, best);
        best_node = better.select(s.like(index), best_node);
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
        sums[1] = sums[1] - last * (p * (1.0 - f) - pf);
        sums[2] = sums[2] - last * (p * p * (1.0 - f) - 2.0 * p * pf - ppf);
    }
    let shift = sums[1] / sum;
    let variance = (sums[2] / sum - shift * shift) * h * h;
    let mean = low + (shift + middle) * h;

    let goals = LEVELS.map(|level| sum * level);
    // first node whose cumulative sum reaches the goal: the nearest node to the quantile
    let mut found = [simd_zero; 3];
    let simd = s.token();
    for (j, reached) in nodes.sum[..count - 1].iter().enumerate() {
        let reached = Lanes::of(simd, *reached);
        let next = s.like((j + 1) as f64);
        for (goal, node) in goals.iter().zip(found.iter_mut()) {
            *node = reached.below(*goal).select(next, *node);
        }
    }
    let mut quantiles = [mean; 3];
    let mut heat = [[simd_zero; 4]; 3];
    for level in 0..3 {
        let node = found[level];
        let before = simd_zero.below(node).select(pick(nodes.sum, (node - 1.0).max(simd_zero)), simd_zero);
        let weight = (pick(nodes.sum, node) - before).max(s.like(1e-300));
        let at = Point { u: pick(nodes.u, node), t: if DECLINE { pick(nodes.t, node) } else { simd_zero } };
        let a = local::taylor(&scale.slopes::<DECLINE>(at));
        let delta = local::invert(&a, (goals[level] - before) / weight - local::half_weight(&a));
        quantiles[level] = low + (node + delta) * h;
        if LIMIT {
            quantiles[level] = quantiles[level].min(high);
        }
        if BANDS {
            let offset = delta * h;
            let u = at.u * (-offset).rough_exp();
            let t = if DECLINE { at.t * (rule.alpha * offset).rough_exp() } else { simd_zero };
            heat[level] = bands::heat_series(&local::taylor(&scale.slopes::<DECLINE>(Point { u, t })), h);
        }
    }

    // mode of the density in distance: slope of log density in x less 1
    let mut slopes = scale.slopes::<DECLINE>(Point {
        u: pick(nodes.u, best_node),
        t: if DECLINE { pick(nodes.t, best_node) } else { simd_zero },
    });
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
    let far = s.like(1e9);
    let edge = if LIMIT { s.like(1e-9).below(last).select(high, far) } else { far };
    let mut cumulants = [simd_zero; 7];
    if BANDS {
        sums[0] = sum;
        cumulants = bands::cumulants(&sums, h);
    }
    Summary { quantiles, mode, mean, variance, restless, edge, heat, cumulants }
}

/// Element `index` of each lane.
#[inline(always)]
fn pick<S: Simd>(from: &[S::f64s], index: Lanes<S>) -> Lanes<S> {
    let mut places = [0.0; WIDEST];
    index.store(&mut places[..S::F64_LANES]);
    let flat: &[f64] = pulp::bytemuck::cast_slice(from);
    let mut values = [0.0; WIDEST];
    for lane in 0..S::F64_LANES {
        values[lane] = flat.get(places[lane] as usize * S::F64_LANES + lane).copied().unwrap_or(0.0);
    }
    Lanes::load(index.token(), &values[..S::F64_LANES])
}
