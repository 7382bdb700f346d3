//! Draws places on the sky and distances of the stars that the survey sees.
//!
//! The wanted density of (direction, distance) is d^2 times the sum over components of space density times the number of
//! stars bright enough to be seen there. It is drawn by rejection under an envelope that is constant in each cell of a
//! lattice (longitude, sine of latitude, logarithm of distance): a cell comes from an alias table (Walker 1977, ACM
//! Trans. Math. Softw. 3, 253; built as in Vose 1991, IEEE Trans. Softw. Eng. 17, 972), the place is uniform in its
//! volume, and it is kept with the chance density over envelope (von Neumann 1951). So the drawn sky has no trace of cells.
//!
//! Units: pc, mag. Distances 5 pc to 100 kpc.

use super::galaxy::{COMPONENTS, densities, extinction};
use super::random::{Draws, mix};
use super::stars::{Star, Stars};

const LONGITUDES: usize = 72;
const LATITUDES: usize = 90;
const DISTANCES: usize = 72;
/// Common logarithm of the nearest and the farthest distance (pc).
const NEAREST: f64 = 0.7;
const FARTHEST: f64 = 5.0;

/// The survey sees stars of apparent G between the bright and the faint limit. The faint limit is soft: each star meets a
/// limit of its own, normal about the mean and cut at two standard deviations.
const BRIGHT_LIMIT: f64 = 5.0;
const FAINT_LIMIT: (f64, f64) = (19.8, 0.08);

/// Density inside a cell may exceed that at its corners, where the mid-plane or the centre lies within.
const HEADROOM: f64 = 1.12;

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
    stars: Stars,
    /// Dust pattern at the corners of the cells: longitude, then latitude.
    pattern: Vec<f64>,
    /// Cube of the distance at the cell edges.
    cubes: Vec<f64>,
    envelope: Vec<f64>,
    /// Chance to keep the cell, and the cell taken otherwise.
    alias: Vec<(f64, u32)>,
}

/// What the wanted density is made of at one place.
struct Seen {
    density: [f64; COMPONENTS],
    /// Count of stars too bright to be seen, and of those and the seen ones.
    too_bright: [f64; COMPONENTS],
    bright_enough: [f64; COMPONENTS],
}

impl Lattice {
    /// Works out the envelope; takes about a tenth of a second.
    pub fn new() -> Self {
        let edge = |i: usize| libm::exp10(NEAREST + (FARTHEST - NEAREST) * i as f64 / DISTANCES as f64);
        let cubes = (0..=DISTANCES).map(|i| edge(i) * edge(i) * edge(i)).collect();
        let mut lattice =
            Self { stars: Stars::new(), pattern: dust_pattern(), cubes, envelope: Vec::new(), alias: Vec::new() };
        lattice.envelope = lattice.envelope_of_cells();
        let weights: Vec<f64> = (0..lattice.envelope.len())
            .map(|cell| {
                let shell = cell % DISTANCES;
                lattice.envelope[cell] * (lattice.cubes[shell + 1] - lattice.cubes[shell])
            })
            .collect();
        lattice.alias = alias_table(&weights);
        lattice
    }

    /// Draws one star that the survey sees.
    pub fn draw(&self, draws: &mut Draws) -> Placed {
        loop {
            let (cell, threshold) = (self.cell(draws), draws.uniform());
            let (shell, column) = (cell % DISTANCES, cell / DISTANCES);
            let (i, j) = (column / LATITUDES, column % LATITUDES);
            let (u, v, w) = (draws.uniform(), draws.uniform(), draws.uniform());
            let longitude = (i as f64 + u) * (2.0 * std::f64::consts::PI / LONGITUDES as f64);
            let sin_b = (j as f64 + v) * (2.0 / LATITUDES as f64) - 1.0;
            let distance = libm::cbrt(self.cubes[shell] + w * (self.cubes[shell + 1] - self.cubes[shell]));
            let (sin_l, cos_l) = libm::sincos(longitude);
            let modulus = 5.0 * libm::log10(distance) - 5.0;
            let a_v = extinction(sin_b, distance) * self.pattern_at(i, j, u, v);
            let limit = FAINT_LIMIT.0 + FAINT_LIMIT.1 * draws.normal().clamp(-2.0, 2.0);
            let seen = self.seen(cos_l, sin_b, distance, modulus + a_v, limit);
            let weights = seen.weights();
            let total: f64 = weights.iter().sum();
            if threshold * self.envelope[cell] >= total {
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
        let cell = ((u128::from(draws.bits()) * self.alias.len() as u128) >> 64) as usize;
        let (keep, other) = self.alias[cell];
        if draws.uniform() < keep { cell } else { other as usize }
    }

    fn seen(&self, cos_l: f64, sin_b: f64, distance: f64, dimming: f64, limit: f64) -> Seen {
        Seen {
            density: densities(cos_l, sin_b, distance),
            too_bright: self.stars.brighter(BRIGHT_LIMIT - dimming),
            bright_enough: self.stars.brighter(limit - dimming),
        }
    }

    /// Dust pattern within a column of cells, bilinear between its corners.
    fn pattern_at(&self, i: usize, j: usize, u: f64, v: f64) -> f64 {
        let at = |i: usize, j: usize| self.pattern[(i % LONGITUDES) * (LATITUDES + 1) + j];
        (1.0 - u) * ((1.0 - v) * at(i, j) + v * at(i, j + 1)) + u * ((1.0 - v) * at(i + 1, j) + v * at(i + 1, j + 1))
    }

    /// Per cell: sum over components of (largest density at a corner) times (largest count at a corner).
    fn envelope_of_cells(&self) -> Vec<f64> {
        let limit = FAINT_LIMIT.0 + 2.0 * FAINT_LIMIT.1;
        let corner = |i: usize, j: usize, shell: usize| {
            let cos_l = libm::cos(i as f64 * (2.0 * std::f64::consts::PI / LONGITUDES as f64));
            let sin_b = j as f64 * (2.0 / LATITUDES as f64) - 1.0;
            let distance = libm::cbrt(self.cubes[shell]);
            let a_v = extinction(sin_b, distance) * self.pattern[(i % LONGITUDES) * (LATITUDES + 1) + j];
            let seen = self.seen(cos_l, sin_b, distance, 5.0 * libm::log10(distance) - 5.0 + a_v, limit);
            (seen.density, std::array::from_fn(|c| seen.bright_enough[c] - seen.too_bright[c]))
        };
        let corners: Vec<([f64; COMPONENTS], [f64; COMPONENTS])> = (0..LONGITUDES)
            .flat_map(|i| (0..=LATITUDES).flat_map(move |j| (0..=DISTANCES).map(move |shell| (i, j, shell))))
            .map(|(i, j, shell)| corner(i, j, shell))
            .collect();
        let index = |i: usize, j: usize, shell: usize| {
            ((i % LONGITUDES) * (LATITUDES + 1) + j) * (DISTANCES + 1) + shell
        };
        let mut envelope = Vec::with_capacity(LONGITUDES * LATITUDES * DISTANCES);
        for i in 0..LONGITUDES {
            for j in 0..LATITUDES {
                for shell in 0..DISTANCES {
                    let mut highest = ([0.0f64; COMPONENTS], [0.0f64; COMPONENTS]);
                    for corner in 0..8 {
                        let at = &corners[index(i + (corner & 1), j + (corner >> 1 & 1), shell + (corner >> 2))];
                        for c in 0..COMPONENTS {
                            highest.0[c] = highest.0[c].max(at.0[c]);
                            highest.1[c] = highest.1[c].max(at.1[c]);
                        }
                    }
                    envelope.push(HEADROOM * (0..COMPONENTS).map(|c| highest.0[c] * highest.1[c]).sum::<f64>());
                }
            }
        }
        envelope
    }
}

impl Seen {
    fn weights(&self) -> [f64; COMPONENTS] {
        std::array::from_fn(|c| self.density[c] * (self.bright_enough[c] - self.too_bright[c]))
    }
}

/// Positive pattern with a mean near 1 on the corners of the sky cells: smoothed noise, exponentiated. It is the same for
/// every seed, as there is one sky; the seed chooses the stars.
fn dust_pattern() -> Vec<f64> {
    let mut noise: Vec<f64> = (0..LONGITUDES * (LATITUDES + 1))
        .map(|i| (mix(0xD057 + i as u64) >> 12) as f64 / (1u64 << 52) as f64 - 0.5)
        .collect();
    // Repeated means over neighbours: clouds of about fifteen degrees.
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

fn alias_table(weights: &[f64]) -> Vec<(f64, u32)> {
    let scale = weights.len() as f64 / weights.iter().sum::<f64>();
    let mut table: Vec<(f64, u32)> = weights.iter().enumerate().map(|(i, w)| (w * scale, i as u32)).collect();
    let (mut small, mut large): (Vec<usize>, Vec<usize>) = (0..table.len()).partition(|&i| table[i].0 < 1.0);
    while let (Some(&few), Some(&many)) = (small.last(), large.last()) {
        small.pop();
        table[few].1 = many as u32;
        table[many].0 -= 1.0 - table[few].0;
        if table[many].0 < 1.0 {
            large.pop();
            small.push(many);
        }
    }
    // What rounding left over keeps its own cell.
    for i in small.into_iter().chain(large) {
        table[i].0 = 1.0;
    }
    table
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Each cell's share of the alias table is its share of the weights.
    #[test]
    fn alias_table_keeps_the_weights() {
        let weights = [3.0, 0.0, 1.0, 0.5, 7.25, 1e-9, 2.0];
        let table = alias_table(&weights);
        let mut share = vec![0.0; weights.len()];
        for (i, &(keep, other)) in table.iter().enumerate() {
            share[i] += keep / weights.len() as f64;
            share[other as usize] += (1.0 - keep) / weights.len() as f64;
        }
        for (share, weight) in share.iter().zip(weights) {
            assert!((share - weight / weights.iter().sum::<f64>()).abs() < 1e-15, "{share} {weight}");
        }
    }

    /// The density never rises above the envelope: else the rejection would bend the sky without a word.
    #[test]
    fn envelope_covers_the_density() {
        let lattice = Lattice::new();
        let mut draws = Draws::of_row(1, 1);
        let limit = FAINT_LIMIT.0 + 2.0 * FAINT_LIMIT.1;
        let (mut kept, n) = (0.0, 400_000);
        for _ in 0..n {
            let cell = lattice.cell(&mut draws);
            let (shell, column) = (cell % DISTANCES, cell / DISTANCES);
            let (i, j) = (column / LATITUDES, column % LATITUDES);
            let (u, v, w) = (draws.uniform(), draws.uniform(), draws.uniform());
            let cos_l = libm::cos((i as f64 + u) * (2.0 * std::f64::consts::PI / LONGITUDES as f64));
            let sin_b = (j as f64 + v) * (2.0 / LATITUDES as f64) - 1.0;
            let distance = libm::cbrt(lattice.cubes[shell] + w * (lattice.cubes[shell + 1] - lattice.cubes[shell]));
            let a_v = extinction(sin_b, distance) * lattice.pattern_at(i, j, u, v);
            let seen = lattice.seen(cos_l, sin_b, distance, 5.0 * libm::log10(distance) - 5.0 + a_v, limit);
            let total: f64 = seen.weights().iter().sum();
            assert!(total <= lattice.envelope[cell], "cell {i} {j} {shell}: {total} {}", lattice.envelope[cell]);
            kept += total / lattice.envelope[cell];
        }
        assert!(kept / f64::from(n) > 0.5, "{}", kept / f64::from(n));
    }
}
