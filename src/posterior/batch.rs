//! A chunk of rows through the kernel: prepare, locate, sort into classes of equal node counts, integrate, hand out.
//!
//! Rows are laid side by side in lanes only with rows of the same class, so that the number of nodes a row gets is a matter
//! of that row alone; results go back to the row's place.

use pulp::{Simd, WithSimd};

use super::integrate::{Nodes, Summary, integrate};
use super::locate::{self, Constants, PLAIN, Rule, Stars, WIDE, locate};
use super::{BAND_OUTPUTS, MAGNITUDES_PER_LN, MODULUS_OUTPUTS, Photometry, Priors, Workspace, bands, convolve, mode};
use crate::numerics::lanes::Lanes;

/// Rows taken together; large enough that rows of one class fill the lanes, small enough to stay in the second cache.
pub(super) const CHUNK: usize = 2048;
/// Numbers of nodes; a row takes the smallest that suffices.
const CLASSES: [usize; 18] = [16, 18, 20, 22, 24, 28, 32, 40, 48, 64, 96, 128, 192, 256, 384, 512, 1024, 2048];
/// Classes up to this number of nodes try the expansion about a normal distribution.
const SHORTEST: usize = 28;
/// Class by the number of nodes needed.
const CLASS_OF: [u8; 2049] = {
    let mut table = [0; 2049];
    let mut c = 0;
    let mut n = 0;
    while n < table.len() {
        if n > CLASSES[c] {
            c += 1;
        }
        table[n] = c as u8;
        n += 1;
    }
    table
};

/// The smallest class with at least so many nodes; the largest one if none has, or for NaN.
fn class_of(needed: f64) -> u8 {
    if needed <= 2048.0 { CLASS_OF[needed.max(0.0).ceil() as usize] } else { (CLASSES.len() - 1) as u8 }
}

/// Widest lanes.
pub(super) const WIDEST: usize = 8;

/// Columns of a chunk in `Workspace::columns`.
#[derive(Clone, Copy)]
#[repr(usize)]
enum Column {
    Signal,
    LnError,
    Low,
    High,
    Top,
    Nodes,
    Doubtful,
    P16,
    P50,
    P84,
    Mode,
    Mean,
    Variance,
    Restless,
    /// Number of these; four columns a band follow: three convolved quantiles and the photometric error.
    Count,
}

/// One chunk.
pub(super) struct Task<'a, 'b, 'c> {
    pub priors: &'a Priors,
    /// The prior of each row; the first one for all if not given.
    pub which: Option<&'a [u32]>,
    pub start: usize,
    pub end: usize,
    pub parallax: &'a [f64],
    pub error: &'a [f64],
    pub bands: &'a [Photometry<'a>],
    pub out: &'a mut [&'c mut [f64]],
    pub scratch: &'b mut Workspace,
}

impl WithSimd for Task<'_, '_, '_> {
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(self, simd: S) {
        if S::F64_LANES == 1 {
            // 32-bit words of a lane cannot be addressed there
            return self.with_simd(pulp::Scalar256b);
        }
        // a shape has a decline or an end; one with both would need two more variants here
        match (self.priors.shapes[0].decline.is_some(), self.bands.is_empty()) {
            (true, true) => self.run::<S, true, false, false>(simd),
            (true, false) => self.run::<S, true, false, true>(simd),
            (false, true) => self.run::<S, false, true, false>(simd),
            (false, false) => self.run::<S, false, true, true>(simd),
        }
    }
}

fn valid(parallax: f64, error: f64) -> bool {
    parallax.is_finite() && error.is_finite() && error > 0.0
}

impl Task<'_, '_, '_> {
    #[expect(clippy::needless_range_loop, reason = "one index walks several columns")]
    #[inline(always)]
    fn run<S: Simd, const DECLINE: bool, const LIMIT: bool, const BANDS: bool>(self, simd: S) {
        let rows = self.end - self.start;
        let padded = rows.next_multiple_of(WIDEST);
        let width = S::F64_LANES;
        let Workspace { columns, order, class, nodes, slow, .. } = self.scratch;
        columns.resize(CHUNK * (Column::Count as usize + 4 * self.bands.len()), 0.0);
        let mut columns: Vec<&mut [f64]> = columns.chunks_exact_mut(CHUNK).collect();
        let (priors, which, parallax, error) = (self.priors, self.which, self.parallax, self.error);
        let first = self.start;
        let prior_of = |i: usize| match which {
            Some(which) => (which[first + i.min(rows - 1)] as usize).min(priors.shapes.len() - 1),
            None => 0,
        };
        let has_data = |row: usize| {
            let named = which.is_none_or(|which| (which[row] as usize) < priors.shapes.len());
            named && valid(parallax[row], error[row])
        };
        let rule_of = |constants: &[Constants], common: Rule<S>, group: &[u32]| {
            if which.is_none() {
                return common;
            }
            let lanes = std::array::from_fn(|k| &constants[prior_of(group[k.min(group.len() - 1)] as usize)]);
            Rule::of_lanes(simd, lanes)
        };
        for i in 0..padded {
            let row = self.start + i.min(rows - 1);
            let (mut w, mut s) = (parallax[row], error[row]);
            if !has_data(row) {
                (w, s) = (1.0, 1.0);
            }
            s = s.clamp(1e-9, 1e9).max(w * 1e-7);
            columns[Column::Signal as usize][i] = (w / s).max(-1e9);
            columns[Column::LnError as usize][i] = s;
        }
        let plain = Rule::new(simd, &priors.plain[0]);
        for i in (0..padded).step_by(width) {
            let at = i..i + width;
            let ln_error = Lanes::load(simd, &columns[Column::LnError as usize][at.clone()]).ln();
            ln_error.store(&mut columns[Column::LnError as usize][at.clone()]);
            let signal = Lanes::load(simd, &columns[Column::Signal as usize][at.clone()]);
            let stars = Stars { signal, ln_error };
            let mut group = [0; WIDEST];
            for (lane, row) in group.iter_mut().enumerate() {
                *row = (i + lane) as u32;
            }
            let rule = rule_of(&priors.plain, plain, &group[..width]);
            let found = locate::<S, 16, DECLINE, LIMIT>(&stars, &rule, &PLAIN);
            found.low.store(&mut columns[Column::Low as usize][at.clone()]);
            found.high.store(&mut columns[Column::High as usize][at.clone()]);
            found.top.store(&mut columns[Column::Top as usize][at.clone()]);
            found.nodes.store(&mut columns[Column::Nodes as usize][at.clone()]);
            found.doubtful.store(&mut columns[Column::Doubtful as usize][at]);
        }
        order.clear();
        order.extend((0..rows as u32).filter(|&i| columns[Column::Doubtful as usize][i as usize] > 0.0));
        let wide = Rule::new(simd, &priors.wide[0]);
        for group in order.chunks(width) {
            let stars = Stars {
                signal: gather(simd, columns[Column::Signal as usize], group),
                ln_error: gather(simd, columns[Column::LnError as usize], group),
            };
            let rule = rule_of(&priors.wide, wide, group);
            let found = simd.vectorize(Careful::<S, DECLINE, LIMIT> { stars, rule });
            for (column, lanes) in [
                (Column::Low, found.low),
                (Column::High, found.high),
                (Column::Top, found.top),
                (Column::Nodes, found.nodes),
            ] {
                scatter(lanes, columns[column as usize], group);
            }
        }

        // rows of a class side by side
        class.resize(CHUNK, 0);
        let mut sizes = [0usize; CLASSES.len()];
        for i in 0..rows {
            let needed = columns[Column::Nodes as usize][i];
            class[i] = class_of(needed);
            sizes[class[i] as usize] += 1;
        }
        let mut starts = [0usize; CLASSES.len()];
        for c in 1..CLASSES.len() {
            starts[c] = starts[c - 1] + sizes[c - 1];
        }
        order.resize(rows, 0);
        let mut next = starts;
        for i in 0..rows {
            let c = class[i] as usize;
            order[next[c]] = i as u32;
            next[c] += 1;
        }
        nodes.resize(CLASSES[CLASSES.len() - 1] * WIDEST * 3, 0.0);
        slow.clear();
        for c in 0..CLASSES.len() {
            let count = CLASSES[c];
            for group in order[starts[c]..next[c]].chunks(width) {
                let [low, high, top, signal, ln_error] = gather_all(
                    simd,
                    [Column::Low, Column::High, Column::Top, Column::Signal, Column::LnError],
                    &columns,
                    group,
                );
                let stars = Stars { signal, ln_error };
                let (sum, rest) = S::as_mut_simd_f64s(nodes).0.split_at_mut(count);
                let (u, rest) = rest.split_at_mut(count);
                let buffers = Nodes { sum, u, t: &mut rest[..count] };
                let rule = rule_of(&priors.plain, plain, group);
                let summary = if count <= SHORTEST {
                    integrate::<S, DECLINE, LIMIT, BANDS, true>(&stars, &rule, low, high, top, buffers)
                } else {
                    integrate::<S, DECLINE, LIMIT, BANDS, false>(&stars, &rule, low, high, top, buffers)
                };
                scatter(summary.quantiles[0], columns[Column::P16 as usize], group);
                scatter(summary.quantiles[1], columns[Column::P50 as usize], group);
                scatter(summary.quantiles[2], columns[Column::P84 as usize], group);
                scatter(summary.mode, columns[Column::Mode as usize], group);
                scatter(summary.mean, columns[Column::Mean as usize], group);
                scatter(summary.variance, columns[Column::Variance as usize], group);
                scatter(summary.restless, columns[Column::Restless as usize], group);
                if !BANDS {
                    continue;
                }
                for (index, band) in self.bands.iter().enumerate() {
                    let mut sd = [0.0; WIDEST];
                    for lane in 0..width {
                        let error = band.error[self.start + group[lane.min(group.len() - 1)] as usize];
                        sd[lane] = if known_error(error) { error / MAGNITUDES_PER_LN } else { 0.0 };
                    }
                    let sd = Lanes::load(simd, &sd[..width]);
                    let (values, failed) = if count <= SHORTEST {
                        quick_bands::<S, true>(&summary, sd)
                    } else {
                        quick_bands::<S, false>(&summary, sd)
                    };
                    let place = Column::Count as usize + 4 * index;
                    scatter(values[0], columns[place], group);
                    scatter(values[1], columns[place + 1], group);
                    scatter(values[2], columns[place + 2], group);
                    if failed.any_positive() {
                        scatter(sd, columns[place + 3], group);
                        let mut flags = [0.0; WIDEST];
                        failed.store(&mut flags[..width]);
                        slow.extend(group.iter().zip(flags).filter(|x| x.1 > 0.0).map(|x| (index as u32, *x.0)));
                    }
                }
            }
        }

        for i in 0..rows {
            if columns[Column::Restless as usize][i] > 0.0 {
                let [signal, ln_error, low, high] = [Column::Signal, Column::LnError, Column::Low, Column::High]
                    .map(|column| columns[column as usize][i]);
                columns[Column::Mode as usize][i] =
                    mode::search(&priors.shapes[prior_of(i)], signal, ln_error, low, high);
            }
            let row = self.start + i;
            let known = has_data(row);
            let value = |column: Column| if known { columns[column as usize][i] } else { f64::NAN };
            let modulus = |x: f64| MAGNITUDES_PER_LN * x + 10.0;
            let variance = MAGNITUDES_PER_LN * MAGNITUDES_PER_LN * value(Column::Variance).max(0.0);
            let results = [
                modulus(value(Column::P16)),
                modulus(value(Column::P50)),
                modulus(value(Column::P84)),
                modulus(value(Column::Mode)),
                modulus(value(Column::Mean)),
                if known { variance.sqrt() } else { f64::NAN },
                if known { (variance / priors.variance[prior_of(i)]).min(1.0) } else { f64::NAN },
            ];
            for (column, result) in self.out.iter_mut().zip(results) {
                column[row] = result;
            }
        }
        if !BANDS {
            return;
        }
        for (index, band) in self.bands.iter().enumerate() {
            let place = Column::Count as usize + 4 * index;
            order.clear();
            order.extend(slow.iter().filter(|x| x.0 == index as u32).map(|x| x.1));
            // nodes must resolve the photometric error too; rows of a class side by side
            for &i in order.iter() {
                let i = i as usize;
                let range = columns[Column::High as usize][i] - columns[Column::Low as usize][i];
                let sd = columns[place + 3][i];
                let needed = columns[Column::Nodes as usize][i].max(range / (0.8 * sd) + 2.0);
                class[i] = class_of(needed);
            }
            order.sort_by_key(|&i| class[i as usize]);
            for same in order.chunk_by(|&a, &b| class[a as usize] == class[b as usize]) {
                let count = CLASSES[class[same[0] as usize] as usize];
                for group in same.chunks(width) {
                    let column = |k: usize| gather(simd, columns[k], group);
                    let stars =
                        Stars { signal: column(Column::Signal as usize), ln_error: column(Column::LnError as usize) };
                    let (sum, rest) = S::as_mut_simd_f64s(nodes).0.split_at_mut(count);
                    let (u, rest) = rest.split_at_mut(count);
                    let buffers = Nodes { sum, u, t: &mut rest[..count] };
                    let [low, high, top] = [Column::Low, Column::High, Column::Top].map(|c| column(c as usize));
                    let sd = column(place + 3);
                    let guess: [Lanes<S>; 3] = std::array::from_fn(|k| column(place + k));
                    let rule = rule_of(&priors.plain, plain, group);
                    let task = Thorough::<S, DECLINE, LIMIT> { stars, rule, low, high, top, sd, guess, nodes: buffers };
                    for (k, lanes) in simd.vectorize(task).into_iter().enumerate() {
                        scatter(lanes, columns[place + k], group);
                    }
                }
            }
            let out = &mut self.out[MODULUS_OUTPUTS + index * BAND_OUTPUTS..][..BAND_OUTPUTS];
            for i in 0..rows {
                let row = self.start + i;
                let apparent = band.apparent[row];
                let known = has_data(row) && apparent.is_finite() && known_error(band.error[row]);
                for (level, column) in out.iter_mut().enumerate() {
                    // a large modulus is a bright absolute magnitude: levels swap
                    let modulus = MAGNITUDES_PER_LN * columns[place + 2 - level][i] + 10.0;
                    column[row] = if known { apparent - modulus } else { f64::NAN };
                }
            }
        }
    }
}

/// Photometric errors that can be: from 0 to 1000 mag.
fn known_error(error: f64) -> bool {
    (0.0..=1e3).contains(&error)
}

/// Convolved quantiles by the fast routes, and 1 where neither holds and a guess is given instead.
#[expect(clippy::needless_range_loop, reason = "one index walks several arrays")]
#[inline(always)]
fn quick_bands<S: Simd, const SHORT: bool>(summary: &Summary<S>, sd: Lanes<S>) -> ([Lanes<S>; 3], Lanes<S>) {
    let zero = sd.like(0.0);
    let one = sd.like(1.0);
    let variance = sd * sd;
    let mut values = summary.quantiles;
    let mut expansion_good = zero;
    if SHORT {
        let mut cumulants = summary.cumulants;
        cumulants[0] = cumulants[0] + variance;
        (values, expansion_good) = bands::cornish_fisher(summary.mean, &cumulants);
        expansion_good = sd.like(1e8).below(summary.edge).select(expansion_good, zero);
        let normal = zero.below(summary.normal).and(zero.below(expansion_good));
        if !normal.select(zero, one).any_positive() {
            return (values, zero);
        }
    }
    let expanded = zero.below(expansion_good);
    let normal = zero.below(summary.normal).and(expanded);
    let own = summary.variance.max(zero);
    let widened = (own + variance).sqrt() - own.sqrt();
    let mut slow = zero;
    for level in 0..3 {
        let quantile = summary.quantiles[level];
        let (by_heat, heat_good) = bands::heat(quantile, &summary.heat[level], variance);
        // an end of the prior five standard deviations away shifts the quantile by less than 1e-7 of them
        let clear = (quantile + sd * 5.0).below(summary.edge);
        let heated = zero.below(heat_good).and(clear).or(sd.at_most(zero));
        let guess = quantile + widened * (level as f64 - 1.0);
        // where the posterior itself is near normal, the expansion always comes first, whatever its neighbours are
        let value = heated.select(by_heat, expanded.select(values[level], guess));
        values[level] = normal.select(values[level], value);
        slow = normal.or(heated).or(expanded).select(slow, one);
    }
    (values, slow)
}

/// The convolution by quadrature; kept out of the main loop's code.
struct Thorough<'a, S: Simd, const DECLINE: bool, const LIMIT: bool> {
    stars: Stars<S>,
    rule: Rule<S>,
    low: Lanes<S>,
    high: Lanes<S>,
    top: Lanes<S>,
    sd: Lanes<S>,
    guess: [Lanes<S>; 3],
    nodes: Nodes<'a, S>,
}

impl<S: Simd, const DECLINE: bool, const LIMIT: bool> WithSimd for Thorough<'_, S, DECLINE, LIMIT> {
    type Output = [Lanes<S>; 3];

    #[inline(always)]
    fn with_simd<T: Simd>(self, _: T) -> Self::Output {
        let Self { stars, rule, low, high, top, sd, guess, nodes } = self;
        convolve::convolved::<S, DECLINE, LIMIT>(&stars, &rule, low, high, top, sd, guess, nodes)
    }
}

/// A second, careful look; kept out of the main loop's code.
struct Careful<S: Simd, const DECLINE: bool, const LIMIT: bool> {
    stars: Stars<S>,
    rule: Rule<S>,
}

impl<S: Simd, const DECLINE: bool, const LIMIT: bool> WithSimd for Careful<S, DECLINE, LIMIT> {
    type Output = locate::Located<S>;

    #[inline(always)]
    fn with_simd<T: Simd>(self, _: T) -> Self::Output {
        locate::<S, 96, DECLINE, LIMIT>(&self.stars, &self.rule, &WIDE)
    }
}

/// The same for several columns; all are written to memory before the first is read back as a vector.
#[inline(always)]
fn gather_all<S: Simd, const K: usize>(
    simd: S,
    from: [Column; K],
    columns: &[&mut [f64]],
    rows: &[u32],
) -> [Lanes<S>; K] {
    let mut buffers = [[0.0; WIDEST]; K];
    for (buffer, column) in buffers.iter_mut().zip(from) {
        let column = &*columns[column as usize];
        for lane in 0..S::F64_LANES {
            buffer[lane] = column[rows[lane.min(rows.len() - 1)] as usize];
        }
    }
    let mut out = [Lanes::splat(simd, 0.0); K];
    for (lanes, buffer) in out.iter_mut().zip(&buffers) {
        *lanes = Lanes::load(simd, &buffer[..S::F64_LANES]);
    }
    out
}

/// One column's values for a group of rows; missing lanes repeat the last row.
#[inline(always)]
fn gather<S: Simd>(simd: S, from: &[f64], rows: &[u32]) -> Lanes<S> {
    let mut buffer = [0.0; WIDEST];
    for lane in 0..S::F64_LANES {
        buffer[lane] = from[rows[lane.min(rows.len() - 1)] as usize];
    }
    Lanes::load(simd, &buffer[..S::F64_LANES])
}

#[inline(always)]
fn scatter<S: Simd>(lanes: Lanes<S>, to: &mut [f64], rows: &[u32]) {
    let mut buffer = [0.0; WIDEST];
    lanes.store(&mut buffer[..S::F64_LANES]);
    for (row, value) in rows.iter().zip(buffer) {
        to[*row as usize] = value;
    }
}
