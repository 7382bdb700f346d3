//! The posterior of the distance modulus: Gaussian parallax likelihood times a stated prior on the distance.
//!
//! For parallax w and error s (mas) and distance d (kpc): p(d) ~ prior(d) exp(-(w - 1/d)^2 / (2 s^2)), carried over to the
//! modulus mu = 5 log10(d / 10 pc) (Bailer-Jones 2015, PASP 127, 994; Luri et al. 2018, A&A 616, A9). Nothing is sampled:
//! quantiles, mean and standard deviation come from a trapezoidal sum over an interval
//! that is found first (`locate`), with closed-form local series (`local`, `integrate`).
//!
//! Accuracy: 1e-6 mag or better for parallax/error from -20 to 1e6, errors from 1e-4 to 1e2 mas and lengths from 0.02 to
//! 100 kpc (tests/reference/posterior_values.py). Beyond: errors are taken as at least 1e-9 and at most 1e9 mas and at
//! least 1e-7 of a positive parallax; results stay finite and ordered.
//! Missing input (NaN or infinite parallax or error, error not positive) gives NaN.
//!
//! Same bits everywhere: a row's result depends on the row and the prior alone. Rows are computed side by side in SIMD
//! lanes, but no lane ever looks at another.

use pulp::{Arch, WithSimd};

mod bands;
mod batch;
mod convolve;
mod integrate;
mod local;
mod locate;
mod mode;
pub mod prior;
pub mod shape;

use batch::{CHUNK, Task};
use locate::{Constants, PLAIN, WIDE};
pub use prior::{Prior, Refusal};
use shape::Shape;

/// 5 / ln 10: magnitudes of modulus for a unit of ln d.
pub const MAGNITUDES_PER_LN: f64 = 2.171_472_409_516_258_5;
/// Number of outputs for the modulus: p16, p50, p84, mode, mean, standard deviation (mag), prior share.
pub const MODULUS_OUTPUTS: usize = 7;
/// Number of outputs a band: absolute magnitude p16, p50, p84.
pub const BAND_OUTPUTS: usize = 3;
/// Quantile levels: Phi(-1), 1/2, Phi(1).
pub const LEVELS: [f64; 3] = [0.158_655_253_931_457_07, 0.5, 0.841_344_746_068_542_9];

/// Photometry in one band, a value a row.
#[derive(Debug, Clone, Copy)]
pub struct Photometry<'a> {
    /// Apparent magnitude less extinction, mag.
    pub apparent: &'a [f64],
    /// Its standard error, mag; 0 is allowed.
    pub error: &'a [f64],
}

/// Reusable scratch; one a thread.
#[derive(Debug, Default)]
pub struct Workspace {
    columns: Vec<f64>,
    order: Vec<u32>,
    class: Vec<u8>,
    nodes: Vec<f64>,
    slow: Vec<(u32, u32)>,
    narrow: bool,
}

impl Workspace {
    /// Empty scratch; grows on first use to about 1 MB.
    pub fn new() -> Self {
        Self::default()
    }

    /// Scratch that makes the kernel run without SIMD instructions: slower, same bits (tests compare the two).
    pub fn scalar() -> Self {
        Self { narrow: true, ..Self::default() }
    }
}

/// Checked priors of one kind, made ready once: a single one, or one a sky cell.
#[derive(Debug, Clone)]
pub struct Priors {
    shapes: Vec<Shape>,
    plain: Vec<Constants>,
    wide: Vec<Constants>,
    variance: Vec<f64>,
}

impl Priors {
    /// Prepares priors; they must be of one kind, at least one, and each within its bounds.
    pub fn new(priors: &[Prior]) -> Result<Self, Refusal> {
        let Some(first) = priors.first() else {
            return Err(("prior", "There is no prior; give at least one".into()));
        };
        for prior in priors {
            prior.check()?;
            if std::mem::discriminant(prior) != std::mem::discriminant(first) {
                return Err(("prior", "The priors of a table are of several kinds; use one kind".into()));
            }
        }
        Ok(Self::ready(priors))
    }

    fn ready(priors: &[Prior]) -> Self {
        let shapes: Vec<Shape> = priors.iter().map(Prior::shape).collect();
        let constants = |depth| shapes.iter().map(|shape| Constants::new(shape, depth)).collect();
        Self {
            plain: constants(PLAIN.depth),
            wide: constants(WIDE.depth),
            variance: priors.iter().map(Prior::modulus_variance).collect(),
            shapes,
        }
    }
}

/// Posterior summaries of `rows` stars.
///
/// `parallax` and `error` in mas and every band's columns are `rows` long; `out` holds [`MODULUS_OUTPUTS`] columns (modulus
/// p16, p50, p84, mode, mean, standard deviation in mag, prior share) and then [`BAND_OUTPUTS`] columns a band (absolute
/// magnitude p16, p50, p84), each `rows` long. The mode is the global maximum of the density **in distance**, expressed as
/// a modulus. The prior share is the posterior variance of the modulus over the prior's, at most 1.
pub fn summarise(
    prior: &Prior,
    parallax: &[f64],
    error: &[f64],
    bands: &[Photometry<'_>],
    out: &mut [&mut [f64]],
    scratch: &mut Workspace,
) {
    chunks(&Priors::ready(std::slice::from_ref(prior)), None, parallax, error, bands, out, scratch);
}

/// The same with a prior a row: row i takes number `which[i]` of `priors` (the sky cell it lies in, say). A number that
/// `priors` does not hold gives NaN.
pub fn summarise_each(
    priors: &Priors,
    which: &[u32],
    parallax: &[f64],
    error: &[f64],
    bands: &[Photometry<'_>],
    out: &mut [&mut [f64]],
    scratch: &mut Workspace,
) {
    chunks(priors, Some(which), parallax, error, bands, out, scratch);
}

fn chunks(
    priors: &Priors,
    which: Option<&[u32]>,
    parallax: &[f64],
    error: &[f64],
    bands: &[Photometry<'_>],
    out: &mut [&mut [f64]],
    scratch: &mut Workspace,
) {
    let rows = parallax.len();
    let mut start = 0;
    while start < rows {
        let end = rows.min(start + CHUNK);
        let task = Task { priors, which, start, end, parallax, error, bands, out, scratch };
        if task.scratch.narrow {
            task.with_simd(pulp::Scalar256b);
        } else {
            Arch::new().dispatch(task);
        }
        start = end;
    }
}
