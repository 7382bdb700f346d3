//! Where the posterior lives: the interval of x = ln(d / kpc) outside which its density is negligible, and how finely the
//! density must be sampled there.
//!
//! The log density is y(x) = power x - T - (s - U)^2 / 2 with U = 1/(d sigma) the true parallax and s the observed one,
//! both in units of the error, and T = (d/L)^alpha. First an interval that contains the significant part for certain
//! (bounds below), then scans of y alone (recurrences, no exponential a node) that shrink it.
//!
//! Bounds, with D the depth below the maximum that counts. The prior's own peak lies where alpha T = power, at x_p.
//! - If U(x_p) < s, all maxima lie between the parallax distance (U = s) and x_p; otherwise between x_p and wherever
//!   the far side of the prior balances the parallax (powers of d are compared term by term).
//! - To the left of a point where y rises, y has fallen by at least (U - U_0) P + (U - U_0)^2/2, P being the part of
//!   U_0 - s that the prior's decline does not balance.
//! - To the right of the last maximum y falls at least by T_0 (exp(alpha dx) - 1 - alpha dx).
//! - Where s is large, the parallax excludes U < s - sqrt(2 (D + G)), G being the most that the prior can gain.
//!
//! Sampling: let k^2 be the largest -y'' where y > max - K. With K = 12 and steps h <= 0.9/k the trapezoidal rule with end
//! corrections (module `local`) is good to about 1e-7 in the distribution function; measured over (s, sigma L), worst case. Rows with a valley between two significant maxima, or whose scan is too coarse to trust, are scanned again
//! with more depth, half the step and 96 nodes.

use pulp::Simd;

use super::batch::WIDEST;
use super::shape::{Decline, Shape};
use crate::numerics::lanes::Lanes;

/// How carefully to look.
pub(super) struct Care {
    /// Depth below the maximum (natural log) at which the density is negligible on the near side, whose tail may be a mere
    /// power law of the distance.
    pub depth: f64,
    /// The same on the far side, where the density falls faster than exponentially or ends.
    pub far_depth: f64,
    /// A second maximum on the far side counts down to here: it may be wide and distant.
    pub deep: f64,
    /// Depth to which the curvature is looked at.
    pub curved: f64,
    /// Step times sqrt(curvature).
    pub step: f64,
}

/// For rows with one well-behaved maximum.
pub(super) const PLAIN: Care = Care { depth: 20.0, far_depth: 19.0, deep: 31.0, curved: 12.0, step: 0.9 };
/// For all others.
pub(super) const WIDE: Care = Care { depth: 33.0, far_depth: 33.0, deep: 33.0, curved: 26.0, step: 0.5 };

/// The data of a bundle of stars.
#[derive(Clone, Copy)]
pub(super) struct Stars<S: Simd> {
    /// Observed parallax over its error.
    pub signal: Lanes<S>,
    /// ln(error / mas).
    pub ln_error: Lanes<S>,
}

/// The prior's constants in lanes.
#[derive(Clone, Copy)]
pub(super) struct Rule<S: Simd> {
    pub power: Lanes<S>,
    pub alpha: Lanes<S>,
    pub ln_alpha: Lanes<S>,
    pub ln_length: Lanes<S>,
    /// Where alpha T = power; the upper end if there is no decline.
    pub ln_peak: Lanes<S>,
    /// Depth D of the prior alone is reached this far beyond its peak.
    pub beyond: Lanes<S>,
    pub high: Lanes<S>,
}

/// The prior's constants as numbers, worked out once a call.
#[derive(Debug, Clone, Copy)]
pub(super) struct Constants {
    power: f64,
    alpha: f64,
    ln_alpha: f64,
    ln_length: f64,
    ln_peak: f64,
    beyond: f64,
    high: f64,
}

impl Constants {
    pub fn new(shape: &Shape, depth: f64) -> Self {
        let Decline { alpha, ln_length } = shape.decline.unwrap_or(Decline { alpha: 1.0, ln_length: 0.0 });
        let (ln_peak, beyond) = if shape.decline.is_some() {
            let peak = shape.power / alpha;
            ((ln_length + libm::log(peak) / alpha).min(shape.high), fall(depth / peak) / alpha)
        } else {
            (shape.high, 0.0)
        };
        let ln_alpha = libm::log(alpha);
        Self { power: shape.power, alpha, ln_alpha, ln_length, ln_peak, beyond, high: shape.high }
    }
}

impl<S: Simd> Rule<S> {
    /// A prior a lane.
    #[inline(always)]
    pub fn of_lanes(simd: S, constants: [&Constants; WIDEST]) -> Self {
        let field = |get: fn(&Constants) -> f64| Lanes::load(simd, &constants.map(get)[..S::F64_LANES]);
        Self {
            power: field(|c| c.power),
            alpha: field(|c| c.alpha),
            ln_alpha: field(|c| c.ln_alpha),
            ln_length: field(|c| c.ln_length),
            ln_peak: field(|c| c.ln_peak),
            beyond: field(|c| c.beyond),
            high: field(|c| c.high),
        }
    }

    /// The same prior for all stars.
    #[inline(always)]
    pub fn new(simd: S, constants: &Constants) -> Self {
        let splat = |value| Lanes::splat(simd, value);
        Self {
            power: splat(constants.power),
            alpha: splat(constants.alpha),
            ln_alpha: splat(constants.ln_alpha),
            ln_length: splat(constants.ln_length),
            ln_peak: splat(constants.ln_peak),
            beyond: splat(constants.beyond),
            high: splat(constants.high),
        }
    }
}

/// Solves e^z - 1 - z = goal for z > 0 from above.
fn fall(goal: f64) -> f64 {
    let mut z = libm::log1p(goal) + libm::sqrt(2.0 * goal).min(2.0);
    for _ in 0..60 {
        z -= (libm::expm1(z) - z - goal) / libm::expm1(z);
    }
    z * (1.0 + 1e-9)
}

/// The interval to sample and the largest step.
#[derive(Clone, Copy)]
pub(super) struct Located<S: Simd> {
    pub low: Lanes<S>,
    pub high: Lanes<S>,
    /// max of y, to which weights refer
    pub top: Lanes<S>,
    /// nodes needed, at least
    pub nodes: Lanes<S>,
    /// 1 where the row needs [`WIDE`] care
    pub doubtful: Lanes<S>,
}

/// Interval that holds everything significant, and the point at which the near maximum may hide.
#[inline(always)]
fn bracket<S: Simd, const DECLINE: bool>(
    stars: &Stars<S>,
    rule: &Rule<S>,
    depth: f64,
) -> (Lanes<S>, Lanes<S>, Lanes<S>) {
    let s = stars.signal;
    let ls = stars.ln_error;
    let zero = s.like(0.0);
    let peak = rule.ln_peak;
    let u_peak = (-(peak + ls)).rough_exp();
    let ln_s = s.abs().max(s.like(1e-300)).ln();
    let near = u_peak.below(s);
    // distance of the parallax itself, -ln w
    let direct = -(ln_s + ls);
    let (start, end) = if DECLINE {
        let a = rule.alpha;
        let base = a * rule.ln_length - rule.ln_alpha;
        let first = (base - 2.0 * ls) / (a + 2.0);
        let second = (base + ln_s - ls) / (a + 1.0);
        let down = peak.max(first).max(second);
        let half = first - std::f64::consts::LN_2 / (a + 2.0);
        let up = peak.max(half.min(direct - std::f64::consts::LN_2));
        let positive = zero.below(s);
        let far_start = positive.select(up, down);
        let far_end = positive.select(
            direct.min(peak.max(first) + std::f64::consts::LN_2 / a),
            down + 1.0986122886681098 / a, // ln 3
        );
        (near.select(direct, far_start), near.select(peak, far_end))
    } else {
        (near.select(direct, peak), peak)
    };
    let u = (-(start + ls)).rough_exp();
    let mut t_start = zero;
    let mut push = zero;
    if DECLINE {
        t_start = (rule.alpha * (start - rule.ln_length)).rough_exp();
        push = (rule.alpha * t_start - rule.power).max(zero) / u;
    }
    let pull = near.select(zero, (u - s - push).max(zero));
    let du = (2.0 * depth) / (pull + (pull * pull + 2.0 * depth).sqrt());
    let mut low = start - (1.0 + du / u).rough_ln();
    if DECLINE {
        // left of the prior's peak its power law alone falls by the depth
        let by_power = peak - (depth + rule.power / rule.alpha) / rule.power;
        low = near.select(low, low.max(by_power));
    } else {
        low = near.select(low, low.max(peak - depth / rule.power));
    }
    let mut high = end;
    if DECLINE {
        let reach = (2.0 * depth / t_start.max(s.like(1e-30))).sqrt() / rule.alpha;
        high = end + near.select(rule.beyond, rule.beyond.min(reach));
    }
    // what the prior can gain beyond the parallax distance
    let gain = rule.power * (peak - start) + t_start - if DECLINE { rule.power / rule.alpha } else { zero };
    let clear = (2.0 * (depth + near.select(gain.max(zero), zero))).sqrt();
    let excluded = clear.below(s * 0.98);
    let cut = direct - (1.0 - excluded.select(clear / s, zero)).rough_ln();
    high = excluded.select(high.min(cut), high).min(rule.high);
    (low, high, start)
}

/// One look at y on `M` equidistant nodes.
struct Scan<S: Simd> {
    top: Lanes<S>,
    /// fractional index of the crossings of top - depth
    first: Lanes<S>,
    last: Lanes<S>,
    first_node: Lanes<S>,
    last_node: Lanes<S>,
    deep_last: Lanes<S>,
    curvature: Lanes<S>,
    valley: Lanes<S>,
}

#[inline(always)]
fn scan<S: Simd, const M: usize, const DECLINE: bool, const LIMIT: bool>(
    stars: &Stars<S>,
    rule: &Rule<S>,
    care: &Care,
    low: Lanes<S>,
    step: Lanes<S>,
) -> Scan<S> {
    let s = stars.signal;
    let zero = s.like(0.0);
    let forward = s.max(zero);
    let backward = s.min(zero);
    let mut u = (-(low + stars.ln_error)).exp();
    let shrink = (-step).rough_exp();
    let mut t = zero;
    let mut grow = zero;
    if DECLINE {
        t = (rule.alpha * (low - rule.ln_length)).rough_exp();
        grow = (rule.alpha * step).rough_exp();
    }
    let base = rule.power * low;
    let rise = rule.power * step;
    let mut y = [zero; M];
    let mut bend = [zero; M];
    let mut top = s.like(f64::NEG_INFINITY);
    let alpha2 = rule.alpha * rule.alpha;
    for j in 0..M {
        let r = forward - u;
        let mut value = base + rise * j as f64 - (r * r) * 0.5 + backward * u;
        let mut curve = u * (u + u - s);
        if DECLINE {
            value = value - t;
            curve = curve + alpha2 * t;
            t = t * grow;
        }
        if LIMIT {
            let x = low + step * j as f64;
            value = (rule.high + 1e-13 * rule.high.abs() + 1e-13).below(x).select(s.like(-1e300), value);
        }
        u = u * shrink;
        y[j] = value;
        bend[j] = curve;
        top = top.max(value);
    }
    let floor = top - care.depth;
    let deep = top - care.deep;
    let far_floor = top - care.far_depth;
    let curved = top - care.curved;
    let mut scan = Scan {
        top,
        first: zero,
        last: zero,
        first_node: zero,
        last_node: zero,
        deep_last: zero,
        curvature: zero,
        valley: s.like(M as f64),
    };
    let (mut left_in, mut left_out, mut right_in, mut right_out) = (zero, zero, zero, zero);
    for j in (0..M).rev() {
        let inside = floor.below(y[j]);
        let index = s.like(j as f64);
        scan.first_node = inside.select(index, scan.first_node);
        left_in = inside.select(y[j], left_in);
        left_out = inside.select(if j == 0 { zero } else { y[j - 1] }, left_out);
        scan.curvature = curved.below(y[j]).select(scan.curvature.max(bend[j]), scan.curvature);
        if 0 < j && j + 1 < M {
            let dip = y[j].below(y[j - 1]).and(y[j].below(y[j + 1]));
            scan.valley = dip.select(index, scan.valley);
        }
    }
    for j in 0..M {
        let inside = far_floor.below(y[j]);
        scan.last_node = inside.select(s.like(j as f64), scan.last_node);
        scan.deep_last = deep.below(y[j]).select(s.like(j as f64), scan.deep_last);
        right_in = inside.select(y[j], right_in);
        right_out = inside.select(if j + 1 == M { zero } else { y[j + 1] }, right_out);
    }
    // crossings of the chords; at the ends of the scan there is no chord
    let left = ((left_in - floor) / (left_in - left_out)).clamp(0.0, 1.0);
    let right = ((right_in - far_floor) / (right_in - right_out)).clamp(0.0, 1.0);
    scan.first = (scan.first_node - left).max(zero);
    scan.last = s.like((M - 1) as f64 - 0.5).below(scan.last_node).select(scan.last_node, scan.last_node + right);
    scan
}

/// Finds the interval and the number of nodes with `M` nodes a scan.
#[inline(always)]
pub(super) fn locate<S: Simd, const M: usize, const DECLINE: bool, const LIMIT: bool>(
    stars: &Stars<S>,
    rule: &Rule<S>,
    care: &Care,
) -> Located<S> {
    let s = stars.signal;
    let zero = s.like(0.0);
    let one = s.like(1.0);
    let intervals = (M - 1) as f64;
    let (low, high, start) = bracket::<S, DECLINE>(stars, rule, care.depth);
    // a node sits on the point at which a narrow maximum may hide
    let step = (high - low) / (intervals - 1.0);
    let shift = ((start - low) / step).floor() + 1.0;
    let low = start - shift * step;
    let coarse = scan::<S, M, DECLINE, LIMIT>(stars, rule, care, low, step);
    let fine_low = low + (coarse.first_node - 1.0).max(zero) * step;
    let fine_high = (low + (coarse.last_node + 1.0).min(s.like(intervals)) * step).min(rule.high);
    let fine_step = (fine_high - fine_low) / intervals;
    let fine = scan::<S, M, DECLINE, LIMIT>(stars, rule, care, fine_low, fine_step);
    let at_high = s.like(intervals - 0.5).below(fine.last_node);
    let mut located_high = fine_low + fine.last * fine_step;
    let located_low = fine_low + fine.first * fine_step;
    let mut scale = fine.curvature.max(zero).sqrt();
    if LIMIT {
        located_high = at_high.select(fine_high, located_high);
        // a density cut while it rises steeply has the slope as its scale
        let u = (-(located_high + stars.ln_error)).exp();
        let mut slope = rule.power + u * (u - s);
        if DECLINE {
            slope = slope - rule.alpha * (rule.alpha * (located_high - rule.ln_length)).exp();
        }
        scale = at_high.select(scale.max(slope.abs()), scale);
    }
    let top = coarse.top.max(fine.top);
    let nodes = (located_high - located_low) * scale / care.step + 2.0;
    let dip = coarse.first_node.below(coarse.valley).and(coarse.valley.below(coarse.deep_last));
    let dip = dip.or(fine.first_node.below(fine.valley).and(fine.valley.below(fine.deep_last)));
    let unresolved = s.like(2.5).below(fine_step * scale);
    let doubtful = dip.or(unresolved).select(one, zero);
    Located { low: located_low, high: located_high, top, nodes, doubtful }
}
