//! Draws places on the sky and distances of the stars that the survey sees.
//!
//! The wanted density of (direction, distance) is d^2 times the sum over components of space density times the number of
//! stars bright enough to be seen there. It is drawn by rejection under an envelope that is constant in each cell of a
//! lattice (longitude, sine of latitude, logarithm of distance): a cell comes from an alias table (Walker 1977, ACM
//! Trans. Math. Softw. 3, 253; built as in Vose 1991, IEEE Trans. Softw. Eng. 17, 972), the place is uniform in its
//! volume, and it is kept with the chance density over envelope (von Neumann 1951). So the drawn sky has no trace of cells.
//!
//! The survey has two programmes: a wide one, limited by magnitude alone, and a nearby one that goes deeper for stars within
//! 250 pc, without which a sky of modest size would hold hardly a white dwarf. Each has a lattice of its own.
//!
//! Units: pc, mag. Distances from 5 pc to the reach of the programme.

use super::galaxy::{COMPONENTS, densities, extinction};
use super::random::{Draws, mix};
use super::stars::{Star, Stars};
use super::survey::EXTINCTION_RATIOS;
use rayon::prelude::*;

// A finer lattice would hug the density more closely, but its tables would fall out of the cache of a core, which costs more.
const LONGITUDES: usize = 36;
const LATITUDES: usize = 60;
const DISTANCES: usize = 64;
/// The nearest distance, pc.
const NEAREST: f64 = 5.0;

/// Stars of apparent G brighter than this are too bright.
const BRIGHT_LIMIT: f64 = 5.0;
/// The faint limit is soft: each star meets a limit of its own, normal about the mean with this spread, cut at two spreads.
const SOFTNESS: f64 = 0.08;

/// One programme of the survey.
pub struct Programme {
    /// Mean faint limit, apparent G.
    faint_limit: f64,
    /// The farthest distance, pc.
    farthest: f64,
    /// Whether interest fades towards the farthest distance, as (1 - (d / farthest)^2)^2.
    fading: bool,
}

/// Magnitude-limited, the whole Galaxy.
pub const WIDE: Programme = Programme { faint_limit: 18.5, farthest: 1e5, fading: false };
/// Deeper, for the neighbourhood of the Sun.
pub const NEARBY: Programme = Programme { faint_limit: 20.3, farthest: 250.0, fading: true };

/// Density inside a cell may exceed that at the places where it is probed: a little where rises and falls meet, more in the
/// mid-plane and near the centre of the Galaxy.
const HEADROOM: (f64, f64) = (1.05, 1.20);

/// A star with its place.
pub struct Placed {
    /// Unit vector in galactic axes.
    pub direction: [f64; 3],
    /// Distance, pc.
    pub distance: f64,
    /// Distance modulus, mag.
    pub modulus: f64,
    /// Extinction in V, mag.
    pub a_v: f64,
    /// Magnitude, colours, population.
    pub star: Star,
}

/// The lattice with its alias table.
pub struct Lattice {
    programme: Programme,
    stars: Stars,
    /// Dust pattern at the corners of the cells: longitude, then latitude.
    pattern: Vec<f64>,
    /// Logarithm of the nearest distance, and width of a shell in it.
    nearest: f64,
    shell: f64,
    /// Above the wanted density per unit of (longitude, sine of latitude, logarithm of distance).
    envelope: Vec<f32>,
    /// Chance to keep the cell (in 2^-32), and the cell taken otherwise.
    alias: Vec<(u32, u32)>,
}

/// A cell to try, with its envelope.
pub struct Candidate {
    cell: u32,
    envelope: f32,
}

/// Nine stars of ten are found in the first three cells.
pub type Candidates = [Candidate; 3];

/// A place with what follows from it alone.
struct Place {
    sin_l: f64,
    cos_l: f64,
    sin_b: f64,
    distance: f64,
    modulus: f64,
    a_v: f64,
}

/// What the wanted density is made of at one place.
struct Seen {
    /// Count of stars too bright to be seen, and of those and the seen ones, per component.
    too_bright: [f64; COMPONENTS],
    bright_enough: [f64; COMPONENTS],
    /// The wanted density.
    weights: [f64; COMPONENTS],
}

impl Lattice {
    /// Works out the envelope; takes about a tenth of a second.
    pub fn new(programme: Programme) -> Self {
        let nearest = libm::log(NEAREST);
        let shell = (libm::log(programme.farthest) - nearest) / DISTANCES as f64;
        let (stars, pattern) = (Stars::new(), dust_pattern());
        let mut lattice = Self { programme, stars, pattern, nearest, shell, envelope: Vec::new(), alias: Vec::new() };
        lattice.envelope = lattice.envelope_of_cells();
        lattice.alias = alias_table(&lattice.envelope);
        lattice
    }

    /// Draws the first cells to try, and reads their envelopes. Apart from [`Lattice::draw`], so that the slow memory reads of
    /// several stars can overlap.
    pub fn candidates(&self, draws: &mut Draws) -> Candidates {
        std::array::from_fn(|_| self.candidate(draws))
    }

    fn candidate(&self, draws: &mut Draws) -> Candidate {
        let cell = self.cell(draws);
        Candidate { cell: cell as u32, envelope: self.envelope[cell] }
    }

    /// Draws one star that the survey sees, the first tries being in the cells `candidates`.
    pub fn draw(&self, candidates: Candidates, draws: &mut Draws) -> Placed {
        let mut candidates = candidates.into_iter();
        loop {
            let Candidate { cell, envelope } = candidates.next().unwrap_or_else(|| self.candidate(draws));
            let (cell, envelope) = (cell as usize, f64::from(envelope));
            let threshold = draws.uniform();
            let (shell, column) = (cell % DISTANCES, cell / DISTANCES);
            let (i, j) = (column / LATITUDES, column % LATITUDES);
            let (u, v, w) = (draws.uniform(), draws.uniform(), draws.uniform());
            let place = self.place(i as f64 + u, j as f64 + v, shell as f64 + w);
            let limit = self.programme.faint_limit + SOFTNESS * draws.normal().clamp(-2.0, 2.0);
            let seen = self.seen(&place, limit);
            let Place { sin_l, cos_l, sin_b, distance, modulus, a_v } = place;
            let weights = seen.weights;
            let total: f64 = weights.iter().sum();
            if threshold * envelope >= total {
                continue;
            }
            let mut left = draws.uniform() * total;
            let mut component = 0;
            while component < COMPONENTS - 1 && left >= weights[component] {
                left -= weights[component];
                component += 1;
            }
            let (low, high) = (seen.too_bright[component], seen.bright_enough[component]);
            let star = self.stars.draw(component, low + draws.uniform() * (high - low), draws);
            let cos_b = (1.0 - sin_b * sin_b).max(0.0).sqrt();
            return Placed { direction: [cos_b * cos_l, cos_b * sin_l, sin_b], distance, modulus, a_v, star };
        }
    }

    fn cell(&self, draws: &mut Draws) -> usize {
        // High bits choose the entry, low bits whether to keep it.
        let bits = draws.bits();
        let entry = (((bits >> 32) * self.alias.len() as u64) >> 32) as usize;
        let (keep, other) = self.alias[entry];
        // Without a branch, which would be guessed wrongly half the time and hold up the reads behind it.
        let kept = usize::from((bits as u32) < keep);
        kept * entry + (1 - kept) * other as usize
    }

    /// The place at a position in units of cells.
    fn place(&self, longitude: f64, latitude: f64, shell: f64) -> Place {
        let (sin_l, cos_l) = libm::sincos(longitude * (2.0 * std::f64::consts::PI / LONGITUDES as f64));
        let sin_b = latitude * (2.0 / LATITUDES as f64) - 1.0;
        let log_distance = self.nearest + shell * self.shell;
        let distance = libm::exp(log_distance);
        let modulus = 5.0 * std::f64::consts::LOG10_E * log_distance - 5.0;
        let a_v = extinction(sin_b, distance) * self.pattern_at(longitude, latitude);
        Place { sin_l, cos_l, sin_b, distance, modulus, a_v }
    }

    fn seen(&self, place: &Place, limit: f64) -> Seen {
        let d = place.distance;
        let share = d / self.programme.farthest;
        let fading = if self.programme.fading { (1.0 - share * share).max(0.0) } else { 1.0 };
        // Volume per unit of ln d is d^3.
        let volume = d * d * d * fading * fading;
        let densities = densities(place.cos_l, place.sin_b, d);
        // The extinction in G is that in V.
        let dimming = place.modulus + EXTINCTION_RATIOS[0] * place.a_v;
        let too_bright = self.stars.brighter(BRIGHT_LIMIT - dimming);
        let bright_enough = self.stars.brighter(limit - dimming);
        let weights = std::array::from_fn(|c| volume * densities[c] * (bright_enough[c] - too_bright[c]));
        Seen { too_bright, bright_enough, weights }
    }

    /// Dust pattern, bilinear between the corners of a column of cells.
    fn pattern_at(&self, longitude: f64, latitude: f64) -> f64 {
        let (i, j) = (longitude as usize, (latitude as usize).min(LATITUDES - 1));
        let (u, v) = (longitude - i as f64, latitude - j as f64);
        let at = |i: usize, j: usize| self.pattern[(i % LONGITUDES) * (LATITUDES + 1) + j];
        (1.0 - u) * ((1.0 - v) * at(i, j) + v * at(i, j + 1)) + u * ((1.0 - v) * at(i + 1, j) + v * at(i + 1, j + 1))
    }

    /// Per cell: sum over components of the largest density of seen stars, probed at the corners and half-way between them
    /// in latitude and distance, with headroom.
    fn envelope_of_cells(&self) -> Vec<f32> {
        const ROWS: usize = 2 * LATITUDES + 1;
        const DEPTH: usize = 2 * DISTANCES + 1;
        let limit = self.programme.faint_limit + 2.0 * SOFTNESS;
        let probe = |node: usize| {
            let (column, shell) = (node / DEPTH, node % DEPTH);
            let (i, j) = (column / ROWS, column % ROWS);
            self.seen(&self.place(i as f64, 0.5 * j as f64, 0.5 * shell as f64), limit).weights
        };
        let probes: Vec<[f64; COMPONENTS]> = (0..LONGITUDES * ROWS * DEPTH).into_par_iter().map(probe).collect();
        let of_cell = |cell: usize| {
            let (shell, column) = (cell % DISTANCES, cell / DISTANCES);
            let (i, j) = (column / LATITUDES, column % LATITUDES);
            let mut highest = [0.0f64; COMPONENTS];
            for side in 0..2 {
                for step in 0..9 {
                    let column = ((i + side) % LONGITUDES) * ROWS + 2 * j + step / 3;
                    for (high, at) in highest.iter_mut().zip(&probes[column * DEPTH + 2 * shell + step % 3]) {
                        *high = high.max(*at);
                    }
                }
            }
            let centre = (i + 2) % LONGITUDES < 4 && (LATITUDES / 2).abs_diff(j) < 6;
            // The mid-plane passes through the cells just south of latitude 0, as the Sun is above it.
            let plane = j + 1 == LATITUDES / 2;
            let headroom = if centre || plane { HEADROOM.1 } else { HEADROOM.0 };
            (headroom * highest.iter().sum::<f64>()) as f32
        };
        (0..LONGITUDES * LATITUDES * DISTANCES).into_par_iter().map(of_cell).collect()
    }
}

/// Positive pattern with a mean near 1 on the corners of the sky cells: smoothed noise, exponentiated. It is the same for
/// every seed, as there is one sky; the seed chooses the stars.
fn dust_pattern() -> Vec<f64> {
    let mut noise: Vec<f64> = (0..LONGITUDES * (LATITUDES + 1))
        .map(|i| (mix(0xD057 + i as u64) >> 12) as f64 / (1u64 << 52) as f64 - 0.5)
        .collect();
    // Repeated means over neighbours: clouds of some twenty degrees.
    for _ in 0..6 {
        let old = noise.clone();
        for i in 0..LONGITUDES {
            for j in 0..=LATITUDES {
                let at = |i: usize, j: usize| old[(i % LONGITUDES) * (LATITUDES + 1) + j];
                let (south, north) = (j.saturating_sub(1), (j + 1).min(LATITUDES));
                let around = at(i + LONGITUDES - 1, j) + at(i + 1, j) + at(i, south) + at(i, north);
                noise[i * (LATITUDES + 1) + j] = 0.2 * (at(i, j) + around);
            }
        }
    }
    let power = noise.iter().map(|x| x * x).sum::<f64>() / noise.len() as f64;
    noise.iter().map(|x| libm::exp(0.35 * x / power.sqrt() - 0.06)).collect()
}

fn alias_table(weights: &[f32]) -> Vec<(u32, u32)> {
    let scale = weights.len() as f64 / weights.iter().map(|&w| f64::from(w)).sum::<f64>();
    let mut share: Vec<f64> = weights.iter().map(|&w| f64::from(w) * scale).collect();
    let mut other: Vec<u32> = (0..weights.len() as u32).collect();
    let (mut small, mut large): (Vec<usize>, Vec<usize>) = (0..share.len()).partition(|&i| share[i] < 1.0);
    while let (Some(&few), Some(&many)) = (small.last(), large.last()) {
        small.pop();
        other[few] = many as u32;
        share[many] -= 1.0 - share[few];
        if share[many] < 1.0 {
            large.pop();
            small.push(many);
        }
    }
    // A cell that is left over keeps itself: its share is 1 but for rounding, and `other` is still the cell itself.
    share.iter().zip(other).map(|(share, other)| ((share * 4_294_967_296.0) as u32, other)).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Each cell's share of the alias table is its share of the weights.
    #[test]
    fn alias_table_keeps_the_weights() {
        let weights = [3.0f32, 0.0, 1.0, 0.5, 7.25, 1e-9, 2.0];
        let table = alias_table(&weights);
        let mut share = vec![0.0; weights.len()];
        for (i, &(keep, other)) in table.iter().enumerate() {
            let keep = f64::from(keep) / 4_294_967_296.0;
            share[i] += keep / weights.len() as f64;
            share[other as usize] += (1.0 - keep) / weights.len() as f64;
        }
        let total: f64 = weights.iter().map(|&w| f64::from(w)).sum();
        for (share, weight) in share.iter().zip(weights) {
            assert!((share - f64::from(weight) / total).abs() < 1e-9, "{share} {weight}");
        }
    }

    /// The density never rises above the envelope: else the rejection would bend the sky without a word.
    #[test]
    fn envelope_covers_the_density() {
        for lattice in [Lattice::new(WIDE), Lattice::new(NEARBY)] {
            let mut draws = Draws::of_row(1, 1);
            let limit = lattice.programme.faint_limit + 2.0 * SOFTNESS;
            let (mut kept, n) = (0.0, 1_000_000);
            for _ in 0..n {
                let cell = lattice.cell(&mut draws);
                let (shell, column) = (cell % DISTANCES, cell / DISTANCES);
                let (i, j) = (column / LATITUDES, column % LATITUDES);
                let (u, v, w) = (draws.uniform(), draws.uniform(), draws.uniform());
                let place = lattice.place(i as f64 + u, j as f64 + v, shell as f64 + w);
                let total: f64 = lattice.seen(&place, limit).weights.iter().sum();
                let envelope = f64::from(lattice.envelope[cell]);
                assert!(total <= envelope, "cell {i} {j} {shell}: {total} {envelope}");
                kept += total / envelope;
            }
            assert!(kept / f64::from(n) > 0.55, "{}", kept / f64::from(n));
        }
    }
}
