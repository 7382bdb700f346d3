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
    /// 1 where the Cornish-Fisher expansion holds (only with `SHORT`)
    pub normal: Lanes<S>,
    /// Heat series of each quantile, in x (only with `BANDS`, and not if `normal` in all lanes).
    pub heat: [[Lanes<S>; 4]; 3],
    /// Cumulants 2 to 8 of x (only with `SHORT`).
    pub cumulants: [Lanes<S>; 7],
}

/// Sums on the nodes. `SHORT`: few nodes, so the density may be close enough to normal for its cumulants to give the
/// quantiles.
#[inline(always)]
pub(super) fn integrate<S: Simd, const DECLINE: bool, const LIMIT: bool, const BANDS: bool, const SHORT: bool>(
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
        for moment in &mut sums[2..if SHORT { 9 } else { 3 }] {
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

    let simd = s.token();
    let far = s.like(1e9);
    let edge = if LIMIT { s.like(1e-9).below(last).select(high, far) } else { far };
    let mut quantiles = [mean; 3];
    let mut heat = [[simd_zero; 4]; 3];
    let mut cumulants = [simd_zero; 7];
    let mut normal = simd_zero;
    if SHORT {
        sums[0] = sum;
        cumulants = bands::cumulants(&sums, h);
        (quantiles, normal) = bands::cornish_fisher(mean, &cumulants);
        if LIMIT {
            normal = s.like(1e8).below(edge).select(normal, simd_zero);
        }
    }
    let is_normal = simd_zero.below(normal);
    if !SHORT || is_normal.select(simd_zero, simd_zero + 1.0).any_positive() {
        let goals = [sum * LEVELS[0], sum * LEVELS[1], sum * LEVELS[2]];
        // first node whose cumulative sum reaches the goal: the nearest node to the quantile
        let mut found = [simd_zero; 3];
        for (j, reached) in nodes.sum[..count - 1].iter().enumerate() {
            let reached = Lanes::of(simd, *reached);
            let next = s.like((j + 1) as f64);
            for (goal, node) in goals.iter().zip(found.iter_mut()) {
                *node = reached.below(*goal).select(next, *node);
            }
        }
        let [n0, n1, n2] = found;
        let (m0, m1, m2) = (n0 - 1.0, n1 - 1.0, n2 - 1.0);
        let (sum, u, t) = (&*nodes.sum, &*nodes.u, if DECLINE { &*nodes.t } else { &*nodes.u });
        let picked =
            pick([sum, sum, sum, sum, sum, sum, u, u, u, t, t, t], [m0, m1, m2, n0, n1, n2, n0, n1, n2, n0, n1, n2]);
        for level in 0..3 {
            let node = found[level];
            let before = simd_zero.below(node).select(picked[level], simd_zero);
            let weight = (picked[3 + level] - before).max(s.like(1e-300));
            let at = Point { u: picked[6 + level], t: if DECLINE { picked[9 + level] } else { simd_zero } };
            let a = local::taylor(&scale.slopes::<DECLINE>(at));
            let delta = local::invert(&a, (goals[level] - before) / weight - local::half_weight(&a));
            let mut quantile = low + (node + delta) * h;
            if LIMIT {
                quantile = quantile.min(high);
            }
            quantiles[level] = if SHORT { is_normal.select(quantiles[level], quantile) } else { quantile };
            if BANDS {
                let offset = delta * h;
                let u = at.u * (-offset).rough_exp();
                let t = if DECLINE { at.t * (rule.alpha * offset).rough_exp() } else { simd_zero };
                heat[level] = bands::heat_series(&local::taylor(&scale.slopes::<DECLINE>(Point { u, t })), h);
            }
        }
    }

    // mode of the density in distance: slope of log density in x less 1
    let [u, t] = pick([&*nodes.u, if DECLINE { &*nodes.t } else { &*nodes.u }], [best_node, best_node]);
    let mut slopes = scale.slopes::<DECLINE>(Point { u, t: if DECLINE { t } else { simd_zero } });
    slopes[0] = slopes[0] - h;
    let mut delta = simd_zero;
    let mut moved = simd_zero;
    for _ in 0..5 {
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
    Summary { quantiles, mode, mean, variance, restless, edge, normal, heat, cumulants }
}

/// Elements `index[k]` of `from[k]`, lane by lane. All are written to memory before the first is read back as a vector:
/// reading earlier would wait for the narrow writes each time.
#[inline(always)]
fn pick<S: Simd, const K: usize>(from: [&[S::f64s]; K], index: [Lanes<S>; K]) -> [Lanes<S>; K] {
    let width = S::F64_LANES;
    let mut places = [[0.0; WIDEST]; K];
    let mut values = [[0.0; WIDEST]; K];
    for k in 0..K {
        index[k].store(&mut places[k][..width]);
    }
    for k in 0..K {
        let flat: &[f64] = pulp::bytemuck::cast_slice(from[k]);
        for lane in 0..width {
            values[k][lane] = flat.get(places[k][lane] as usize * width + lane).copied().unwrap_or(0.0);
        }
    }
    let mut out = index;
    for k in 0..K {
        out[k] = Lanes::load(index[k].token(), &values[k][..width]);
    }
    out
}
