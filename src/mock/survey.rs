//! What the invented survey "Lantern Ridge 2" measures of a star: noise, quoted errors, zero point, faults, gaps.
//!
//! All numbers are invented. What a user of the plan can find again: quoted parallax errors are too small (true scatter
//! is 1.05 times the quoted one with 0.010 mas added in quadrature), parallaxes are offset by a zero point near -0.02 mas
//! that depends on magnitude and ecliptic latitude, a few stars in a thousand are badly fitted (their `fit_quality` is well
//! above 1 and their scatter larger still), faint stars lack values, and a few values are NaN.
//!
//! Units: deg, mas, mag, pc.

use super::lattice::{Candidates, Lattice, NEARBY, Placed, WIDE};
use super::random::{Draws, identifier};
use super::stars::Star;
use crate::sky::{galactic_to_icrs, longitude_latitude, sin_ecliptic_latitude};

/// Extinction in G, B and R over that in V. Like the survey's bands they are close to V, B and R, for which Cardelli,
/// Clayton & Mathis 1989, ApJ 345, 245, Table 3 (R_V = 3.1) has these values (from memory, as far as they are theirs).
pub const EXTINCTION_RATIOS: [f64; 3] = [1.0, 1.337, 0.751];
/// True scatter of the parallaxes: factor on the quoted error, and floor (mas) in quadrature.
pub const ERROR_SCALE: f64 = 1.05;
pub const ERROR_FLOOR: f64 = 0.010;

/// Share of the stars that the nearby programme asked for.
const NEARBY_SHARE: f64 = 0.12;
/// Share of badly fitted stars.
const BAD_FITS: f64 = 0.004;
/// Share of values that are NaN, in each of the columns that have some.
const NOT_A_NUMBER: f64 = 1.5e-4;

/// Zero point (mas) at ecliptic latitude 0 by true apparent G: nodes, linear between, constant outside.
const ZERO_POINT: [(f64, f64); 6] =
    [(6.0, -0.008), (11.0, -0.014), (13.0, -0.032), (16.0, -0.024), (18.0, -0.020), (21.0, -0.015)];

/// Per band (G, B, R): photometric error (mag) of a bright star, and that from photon noise at magnitude 18.
const PHOTOMETRY: [(f64, f64); 3] = [(0.003, 0.010), (0.005, 0.016), (0.004, 0.012)];

/// One row of the catalogue; `None` is a missing value.
pub struct Row {
    pub source: i64,
    /// Index for [`field_name`].
    pub field: usize,
    pub ra: f64,
    pub dec: f64,
    pub parallax: Option<f64>,
    pub parallax_error: Option<f64>,
    /// G, B, R.
    pub magnitudes: [Option<f64>; 3],
    pub magnitude_errors: [Option<f64>; 3],
    pub a_v: Option<f64>,
    pub fit_quality: Option<f64>,
    pub visits: u16,
    pub truth: Truth,
}

/// What the survey does not know.
pub struct Truth {
    pub distance: f64,
    pub absmag_g: f64,
    pub a_v: f64,
    pub zero_point: f64,
    /// Index into [`super::stars::POPULATIONS`].
    pub population: u8,
}

/// Number of fields: twelve strips of right ascension in four equal belts of declination.
pub const FIELDS: usize = 48;

/// Name of a field.
pub fn field_name(field: usize) -> String {
    const FIRST: [&str; 8] = ["Alder", "Birch", "Cinder", "Dusk", "Ember", "Fern", "Gale", "Heron"];
    const SECOND: [&str; 6] = ["Brow", "Combe", "Fell", "Hollow", "Rise", "Tarn"];
    format!("{} {}", FIRST[field / 6 % 8], SECOND[field % 6])
}

/// Parallax zero point (mas) of a star of true apparent magnitude `g` at sine of ecliptic latitude `sin_beta`.
pub fn zero_point(g: f64, sin_beta: f64) -> f64 {
    let last = ZERO_POINT.len() - 1;
    let g = g.clamp(ZERO_POINT[0].0, ZERO_POINT[last].0);
    let i = ZERO_POINT[1..last].iter().take_while(|node| node.0 <= g).count();
    let ((g0, z0), (g1, z1)) = (ZERO_POINT[i], ZERO_POINT[i + 1]);
    let by_magnitude = z0 + (g - g0) / (g1 - g0) * (z1 - z0);
    by_magnitude + 0.005 * sin_beta + 0.009 * (sin_beta * sin_beta - 1.0 / 3.0)
}

/// The sky that the survey looks at.
pub struct Sky {
    wide: Lattice,
    nearby: Lattice,
}

impl Sky {
    /// Lays out both programmes.
    pub fn new() -> Self {
        Self { wide: Lattice::new(WIDE), nearby: Lattice::new(NEARBY) }
    }
}

/// A star about to be drawn.
pub struct Start<'a> {
    row: u64,
    draws: Draws,
    programme: &'a Lattice,
    candidates: Candidates,
}

/// Opens the stream of row `row`.
pub fn start(sky: &Sky, seed: u64, row: u64) -> Start<'_> {
    let mut draws = Draws::of_row(seed, row);
    let programme = if draws.chance(NEARBY_SHARE) { &sky.nearby } else { &sky.wide };
    let candidates = programme.candidates(&mut draws);
    Start { row, draws, programme, candidates }
}

/// Draws the star and observes it.
pub fn observe(start: Start, seed: u64) -> Row {
    let Start { row, mut draws, programme, candidates } = start;
    let Placed { direction, distance, modulus, a_v, star } = programme.draw(candidates, &mut draws);
    let icrs = galactic_to_icrs(direction);
    let (ra, dec) = longitude_latitude(icrs);
    let sin_beta = sin_ecliptic_latitude(icrs);
    let Star { absmag, b_r, g_r, population } = star;
    let absmags = [absmag, absmag + b_r - g_r, absmag - g_r];
    let apparent: [f64; 3] = std::array::from_fn(|i| absmags[i] + modulus + EXTINCTION_RATIOS[i] * a_v);
    let zero_point = zero_point(apparent[0], sin_beta);

    let visits = libm::rint((40.0 + 75.0 * sin_beta * sin_beta + 11.0 * draws.normal()).max(6.0));
    let bad = draws.chance(BAD_FITS);
    let fit_quality =
        if bad { 1.1 + 1.3 * draws.exponential() } else { 0.985 + 0.045 * draws.normal() + 0.02 * draws.exponential() };
    let quoted = round4(parallax_error(apparent[0]) * (65.0 / visits).sqrt() * (0.92 + 0.16 * draws.uniform()));
    let honest = (ERROR_SCALE * ERROR_SCALE * quoted * quoted + ERROR_FLOOR * ERROR_FLOOR).sqrt();
    let scatter = if bad { honest * 2.5 * fit_quality } else { honest };
    let parallax = round4(1000.0 / distance + zero_point + scatter * draws.normal());

    // The chance to lack a value grows towards the limit of the survey: 0 for bright stars, 1 at its limit.
    let faint = ((apparent[0] - 14.0) / 4.5).clamp(0.0, 1.0);
    let faint = faint * faint * faint;
    let solved = !draws.chance(0.001 + 0.012 * faint);
    let mut magnitudes = [None; 3];
    let mut magnitude_errors = [None; 3];
    for band in 0..3 {
        let (floor, photon) = PHOTOMETRY[band];
        let noise = photon * libm::exp10(0.3 * (apparent[band] - 18.0));
        let error = round4((floor * floor + noise * noise).sqrt() * (0.95 + 0.10 * draws.uniform()));
        let magnitude = round4(apparent[band] + error * draws.normal());
        let (lacking, when_faint) = [(0.0002, 0.0005), (0.002, 0.03), (0.001, 0.012)][band];
        if !draws.chance(lacking + when_faint * faint) {
            magnitudes[band] = Some(magnitude);
            magnitude_errors[band] = Some(error);
        }
    }
    let foreground = round4((a_v * (1.0 + 0.12 * draws.normal()) + 0.03 * draws.normal()).max(0.0));
    let gap = draws.uniform();
    let mut row = Row {
        source: identifier(seed, row),
        field: field_of(ra, icrs[2]),
        ra: libm::rint(ra * 1e8) / 1e8,
        dec: libm::rint(dec * 1e8) / 1e8,
        parallax: solved.then_some(parallax),
        parallax_error: solved.then_some(quoted),
        magnitudes,
        magnitude_errors,
        a_v: (gap >= 0.006).then_some(foreground),
        fit_quality: solved.then_some(round4(fit_quality)),
        visits: visits as u16,
        truth: Truth { distance, absmag_g: absmag, a_v, zero_point, population },
    };
    spoil(&mut row, draws.uniform());
    row
}

/// Turns one value of a few rows into NaN.
fn spoil(row: &mut Row, u: f64) {
    let value = match (u / NOT_A_NUMBER) as u64 {
        0 => &mut row.parallax,
        1 => &mut row.parallax_error,
        2 => &mut row.magnitudes[0],
        3 => &mut row.magnitudes[1],
        4 => &mut row.a_v,
        _ => return,
    };
    *value = Some(f64::NAN);
}

/// Quoted parallax error (mas) of a star of apparent magnitude `g` with 65 visits.
fn parallax_error(g: f64) -> f64 {
    let photon = libm::exp10(0.2 * (g - 15.0));
    let background = 0.0026 * photon * photon;
    (0.018 * 0.018 + 0.024 * 0.024 * photon * photon + background * background).sqrt()
}

fn field_of(ra: f64, sin_dec: f64) -> usize {
    let strip = ((ra / 30.0) as usize).min(11);
    let belt = (((sin_dec + 1.0) * 2.0) as usize).min(3);
    belt * 12 + strip
}

/// Four decimals, finer than the noise of anything that is published so.
fn round4(x: f64) -> f64 {
    libm::rint(x * 1e4) / 1e4
}
