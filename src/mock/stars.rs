//! What the stars of the invented sky are: how many of each absolute magnitude, and their colours.
//!
//! Main sequence, giants (subgiants, red-giant branch, clump) and white dwarfs, in each of thin disc, thick disc and halo.
//! The numbers are invented and rounded; they keep the shape that any textbook shows (a luminosity function that rises to M
//! near 12, an old turn-off near M = 4 in thick disc and halo, a metal-poor halo that is bluer at one magnitude).
//!
//! Units: absolute magnitude in the survey's own G, colours in mag, densities in pc^-3 mag^-1 at the Sun.

use super::curve::Curve;
use super::galaxy::COMPONENTS;
use super::random::Draws;

const BRIGHTEST: f64 = -6.0;
const STEP: f64 = 0.05;
const BINS: usize = 480;

/// A kind of star.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Kind {
    MainSequence,
    Giant,
    WhiteDwarf,
}

const KINDS: [Kind; 3] = [Kind::MainSequence, Kind::Giant, Kind::WhiteDwarf];

/// What the truth column `population` says, by component and kind.
pub const POPULATIONS: [&str; 9] = [
    "thin disc, main sequence",
    "thin disc, giant",
    "thin disc, white dwarf",
    "thick disc, main sequence",
    "thick disc, giant",
    "thick disc, white dwarf",
    "halo, main sequence",
    "halo, giant",
    "halo, white dwarf",
];

/// A star without its place.
pub struct Star {
    /// Absolute magnitude in G.
    pub absmag: f64,
    /// Intrinsic colour B - R.
    pub b_r: f64,
    /// Intrinsic colour G - R.
    pub g_r: f64,
    /// Index into [`POPULATIONS`].
    pub population: u8,
}

/// Luminosity functions and loci as look-up tables.
pub struct Stars {
    /// Stars brighter than the i-th edge, per component.
    brighter: Vec<[f64; COMPONENTS]>,
    /// Per component and bin: chance that a star is a main-sequence star, and that it is that or a giant.
    kinds: [Vec<[f64; 2]>; COMPONENTS],
    /// Per bin: chance that a giant belongs to the clump.
    clump: Vec<f64>,
    main_sequence: Curve,
    giants: Curve,
    white_dwarfs: Curve,
}

/// Common logarithm of the number per pc^3 and mag of main-sequence stars of the thin disc.
const MAIN_SEQUENCE_NUMBER: [(f64, f64); 19] = [
    (-6.0, -9.0),
    (-4.0, -7.2),
    (-2.0, -5.6),
    (0.0, -4.25),
    (1.0, -3.72),
    (2.0, -3.28),
    (3.0, -2.93),
    (4.0, -2.65),
    (5.0, -2.5),
    (6.0, -2.46),
    (7.0, -2.48),
    (8.0, -2.4),
    (9.0, -2.28),
    (10.0, -2.12),
    (12.0, -1.92),
    (13.0, -1.95),
    (15.0, -2.15),
    (17.0, -2.3),
    (18.0, -2.5),
];

const GIANT_NUMBER: [(f64, f64); 10] = [
    (-6.0, -11.0),
    (-3.5, -7.0),
    (-2.5, -6.0),
    (-1.0, -4.95),
    (0.0, -4.5),
    (1.0, -4.15),
    (2.0, -3.85),
    (3.0, -3.5),
    (3.6, -3.45),
    (4.3, -5.5),
];

const WHITE_DWARF_NUMBER: [(f64, f64); 9] = [
    (9.0, -6.5),
    (9.8, -4.7),
    (11.0, -3.65),
    (12.0, -3.2),
    (13.0, -2.9),
    (14.0, -2.65),
    (15.0, -2.4),
    (15.8, -2.6),
    (16.6, -5.0),
];

/// Clump of core-helium-burning giants: magnitude, its spread, number per pc^3.
const CLUMP: (f64, f64, f64) = (0.75, 0.17, 1.5e-4);
/// Old turn-off: magnitude at which half of the main sequence is gone, sharpness.
const TURN_OFF: (f64, f64) = (3.85, 0.12);

/// Absolute magnitude to B - R.
const MAIN_SEQUENCE_COLOUR: [(f64, f64); 21] = [
    (-6.0, -0.50),
    (-4.0, -0.42),
    (-2.0, -0.30),
    (0.0, -0.07),
    (1.0, 0.09),
    (2.0, 0.30),
    (2.8, 0.50),
    (3.5, 0.70),
    (4.2, 0.89),
    (4.8, 1.03),
    (5.9, 1.34),
    (7.2, 1.80),
    (8.0, 2.07),
    (8.9, 2.30),
    (10.0, 2.50),
    (11.0, 2.64),
    (12.0, 2.78),
    (14.0, 3.10),
    (15.0, 3.31),
    (16.0, 3.55),
    (18.5, 4.30),
];

const GIANT_COLOUR: [(f64, f64); 11] = [
    (-6.0, 3.3),
    (-4.0, 2.95),
    (-3.0, 2.62),
    (-2.0, 2.30),
    (-1.0, 2.02),
    (0.0, 1.79),
    (1.0, 1.61),
    (2.0, 1.49),
    (3.0, 1.37),
    (3.6, 1.12),
    (4.3, 0.88),
];

const WHITE_DWARF_COLOUR: [(f64, f64); 9] = [
    (9.0, -0.56),
    (10.0, -0.48),
    (11.0, -0.28),
    (12.0, 0.02),
    (13.0, 0.38),
    (14.0, 0.78),
    (15.0, 1.15),
    (16.0, 1.48),
    (17.0, 1.75),
];

/// Per component: shift in magnitude of the main sequence against the thin disc's at one colour (positive is fainter,
/// metal-poor) and its spread; shift in B - R of the giants and its spread.
const METALS: [(f64, f64, f64, f64); COMPONENTS] =
    [(0.0, 0.16, 0.0, 0.07), (0.28, 0.18, -0.07, 0.08), (0.90, 0.28, -0.34, 0.09)];

/// Share of main-sequence stars that are unresolved pairs.
const PAIRS: f64 = 0.35;

impl Stars {
    /// Lays out the tables.
    pub fn new() -> Self {
        let numbers = [&MAIN_SEQUENCE_NUMBER[..], &GIANT_NUMBER[..], &WHITE_DWARF_NUMBER[..]]
            .map(|nodes| (nodes[0].0, nodes[nodes.len() - 1].0, Curve::through(nodes, STEP)));
        let mut brighter = vec![[0.0; COMPONENTS]; BINS + 1];
        let mut kinds = [const { Vec::new() }; COMPONENTS];
        let mut clump = Vec::with_capacity(BINS);
        for bin in 0..BINS {
            let m = BRIGHTEST + (bin as f64 + 0.5) * STEP;
            let number = |kind: Kind| {
                let (from, to, curve) = &numbers[kind as usize];
                if m < *from || m > *to { 0.0 } else { libm::exp10(curve.at(m)) }
            };
            let u = (m - CLUMP.0) / CLUMP.1;
            let in_clump = CLUMP.2 / (CLUMP.1 * (2.0 * std::f64::consts::PI).sqrt()) * libm::exp(-0.5 * u * u);
            let giants = number(Kind::Giant) + in_clump;
            clump.push(if giants > 0.0 { in_clump / giants } else { 0.0 });
            let old = 1.0 / (1.0 + libm::exp((TURN_OFF.0 - m) / TURN_OFF.1));
            for component in 0..COMPONENTS {
                let dwarfs = number(Kind::MainSequence) * if component == 0 { 1.0 } else { old };
                let all = dwarfs + giants + number(Kind::WhiteDwarf);
                kinds[component].push([dwarfs / all, (dwarfs + giants) / all]);
                brighter[bin + 1][component] = brighter[bin][component] + all * STEP;
            }
        }
        Self {
            brighter,
            kinds,
            clump,
            main_sequence: Curve::through(&MAIN_SEQUENCE_COLOUR, STEP),
            giants: Curve::through(&GIANT_COLOUR, STEP),
            white_dwarfs: Curve::through(&WHITE_DWARF_COLOUR, STEP),
        }
    }

    /// Stars per pc^3 brighter than `absmag` at unit density, per component.
    pub fn brighter(&self, absmag: f64) -> [f64; COMPONENTS] {
        let position = ((absmag - BRIGHTEST) / STEP).clamp(0.0, BINS as f64);
        let i = (position as usize).min(BINS - 1);
        let t = position - i as f64;
        let (a, b) = (&self.brighter[i], &self.brighter[i + 1]);
        std::array::from_fn(|c| a[c] + t * (b[c] - a[c]))
    }

    /// Draws the star of one component at which the count of brighter stars is `count`.
    pub fn draw(&self, component: usize, count: f64, draws: &mut Draws) -> Star {
        let bin = self.brighter.partition_point(|edge| edge[component] <= count).clamp(1, BINS) - 1;
        let (low, high) = (self.brighter[bin][component], self.brighter[bin + 1][component]);
        let within = if high > low { ((count - low) / (high - low)).clamp(0.0, 1.0) } else { 0.5 };
        let absmag = BRIGHTEST + (bin as f64 + within) * STEP;
        let u = draws.uniform();
        let [dwarf, dwarf_or_giant] = self.kinds[component][bin];
        let kind = if u < dwarf {
            Kind::MainSequence
        } else if u < dwarf_or_giant {
            Kind::Giant
        } else {
            Kind::WhiteDwarf
        };
        let b_r = self.colour(component, kind, bin, absmag, draws);
        // One relation between the two colours for all kinds; its bend is that of cool dwarfs.
        let g_r = 0.30 * b_r + 0.045 * b_r * b_r + 0.008 * draws.normal();
        Star { absmag, b_r, g_r, population: (component * KINDS.len() + kind as usize) as u8 }
    }

    fn colour(&self, component: usize, kind: Kind, bin: usize, absmag: f64, draws: &mut Draws) -> f64 {
        let (shift, spread, giant_shift, giant_spread) = METALS[component];
        match kind {
            Kind::MainSequence => {
                // The pair shines brighter by its companion, whose light goes with the fifth power of the mass ratio.
                let brighter = if draws.chance(PAIRS) {
                    let q = draws.uniform();
                    2.5 * std::f64::consts::LOG10_E * libm::log1p(q * q * q * q * q)
                } else {
                    0.0
                };
                // Hot stars differ by age and rotation more than by metals: the sequence widens upwards.
                let spread = spread + 0.05 * (4.0 - absmag).clamp(0.0, 4.0);
                self.main_sequence.at(absmag + brighter - shift - spread * draws.normal())
            }
            Kind::Giant if draws.chance(self.clump[bin]) => match component {
                // The halo's clump is a horizontal branch that reaches far to the blue.
                2 => -0.10 + 1.25 * draws.uniform(),
                _ => 1.56 + giant_shift + 0.05 * draws.normal(),
            },
            Kind::Giant => self.giants.at(absmag) + giant_shift + giant_spread * draws.normal(),
            Kind::WhiteDwarf => self.white_dwarfs.at(absmag) + 0.045 * draws.normal(),
        }
    }
}
