//! The distance-modulus posterior of each star and what follows from it: distances and absolute magnitudes.
//!
//! Posterior: Gaussian likelihood of the calibrated parallax times the plan's prior on distance (Bailer-Jones 2015,
//! PASP 127, 994). Quantiles are taken at Phi(-1), 1/2 and Phi(1). Absolute magnitudes are the quantiles of
//! m - modulus - A with the photometric error convolved. A star without parallax or error has no posterior here; where
//! `prior_share` is near 1 the distance says little more than the prior did.

use super::{Input, Output, Stage, Survey, photometry::spectral_word};
use crate::frame::Declared;
use crate::numerics::magnitude;
use crate::posterior::{BAND_OUTPUTS, MODULUS_OUTPUTS, Photometry, Prior, Workspace, summarise};
use schemars::JsonSchema;
use serde::{Deserialize, Serialize};
use std::cell::RefCell;

/// `[distance]`.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(transparent)]
pub struct Settings(pub Prior);

impl Settings {
    /// The prior.
    pub fn prior(&self) -> &Prior {
        &self.0
    }

    pub(super) fn check(&self) -> Vec<(String, String)> {
        self.0.check().err().map(|(key, text)| (format!("distance.{key}"), text)).into_iter().collect()
    }
}

thread_local! {
    /// Half a megabyte that would otherwise be cleared for every chunk; no result depends on what it held.
    static SCRATCH: RefCell<Workspace> = RefCell::default();
}

struct Distance {
    prior: Prior,
    inputs: Vec<Input>,
    outputs: Vec<Output>,
    bands: Vec<BandInputs>,
}

/// Places of a band's columns among the inputs.
struct BandInputs {
    magnitude: usize,
    extinction: usize,
    error: Option<usize>,
}

pub(super) fn stages(survey: &Survey) -> Vec<Box<dyn Stage>> {
    let prior = survey.sections.distance.0.clone();
    let mut inputs = vec![Input::computed("parallax_calibrated"), Input::computed("parallax_error_calibrated")];
    let settings = format!("{prior:?}");
    let mut outputs: Vec<Output> = modulus_columns(&prior)
        .into_iter()
        .map(|declared| Output { declared, reads: vec![0, 1], settings: settings.clone() })
        .collect();
    let mut bands = Vec::new();
    for band in survey.bands.keys() {
        inputs.push(survey.magnitude(band));
        inputs.push(Input::computed(format!("extinction_{band}")));
        let (magnitude, extinction) = (inputs.len() - 2, inputs.len() - 1);
        let error = survey.magnitude_error(band).map(|input| {
            inputs.push(input);
            inputs.len() - 1
        });
        let reads: Vec<usize> = [0, 1, magnitude, extinction].into_iter().chain(error).collect();
        outputs.extend(absolute_columns(&prior, band, error.is_some()).into_iter().map(|declared| Output {
            declared,
            reads: reads.clone(),
            settings: settings.clone(),
        }));
        bands.push(BandInputs { magnitude, extinction, error });
    }
    vec![Box::new(Distance { prior, inputs, outputs, bands })]
}

fn modulus_columns(prior: &Prior) -> Vec<Declared> {
    let method = format!("posterior under {} ({})", prior.describe(), prior.citation());
    let modulus = |name: &str, ucd: &str, text: &str| Declared::float(name, "mag", ucd, text, method.clone());
    let distance = |name: &str, ucd: &str, text: &str| {
        Declared::float(name, "pc", ucd, text, format!("10^(modulus / 5 + 1); {method}"))
    };
    vec![
        modulus("modulus_p16", "stat.percentile;phot.mag.distMod", "Distance modulus, posterior quantile at Phi(-1)"),
        modulus("modulus_p50", "phot.mag.distMod;stat.median", "Distance modulus, posterior median"),
        modulus("modulus_p84", "stat.percentile;phot.mag.distMod", "Distance modulus, posterior quantile at Phi(1)"),
        modulus(
            "modulus_mode",
            "phot.mag.distMod;stat.fit",
            "Distance modulus at the highest posterior density per unit distance",
        ),
        modulus("modulus_mean", "phot.mag.distMod;stat.mean", "Distance modulus, posterior mean"),
        modulus("modulus_sd", "stat.stdev;phot.mag.distMod", "Distance modulus, posterior standard deviation"),
        distance("distance_p16", "stat.percentile;pos.distance", "Distance, posterior quantile at Phi(-1)"),
        distance("distance_p50", "pos.distance;stat.median", "Distance, posterior median"),
        distance("distance_p84", "stat.percentile;pos.distance", "Distance, posterior quantile at Phi(1)"),
        Declared::float(
            "prior_share",
            "",
            "stat.variance;phot.mag.distMod;arith.ratio",
            "Posterior over prior variance of the modulus, capped at 1: 0 data-dominated, 1 prior-dominated",
            method.clone(),
        ),
    ]
}

fn absolute_columns(prior: &Prior, band: &str, has_error: bool) -> Vec<Declared> {
    let word = spectral_word(band);
    let photometry = if has_error { "photometric error convolved" } else { "magnitudes taken as exact" };
    let method = format!("{band} - modulus - extinction_{band}, {photometry}; prior {}", prior.describe());
    [("p16", "posterior quantile at Phi(-1)"), ("p50", "posterior median"), ("p84", "posterior quantile at Phi(1)")]
        .into_iter()
        .map(|(level, text)| {
            let ucd = match level {
                "p50" => format!("phys.magAbs;{word};stat.median"),
                _ => format!("stat.percentile;phys.magAbs;{word}"),
            };
            Declared::float(
                format!("absmag_{band}_{level}"),
                "mag",
                &ucd,
                format!("Absolute magnitude in band {band}, {text}"),
                method.clone(),
            )
        })
        .collect()
}

impl Stage for Distance {
    fn name(&self) -> &'static str {
        "distance"
    }

    fn revision(&self) -> u32 {
        1
    }

    fn inputs(&self) -> &[Input] {
        &self.inputs
    }

    fn outputs(&self) -> &[Output] {
        &self.outputs
    }

    fn run(&self, inputs: &[&[f64]], outputs: &mut [&mut [f64]]) {
        let rows = inputs[0].len();
        let exact = if self.bands.iter().any(|band| band.error.is_none()) { vec![0.0; rows] } else { Vec::new() };
        let apparent: Vec<Vec<f64>> = self
            .bands
            .iter()
            .map(|band| inputs[band.magnitude].iter().zip(inputs[band.extinction]).map(|(m, a)| m - a).collect())
            .collect();
        let photometry: Vec<Photometry<'_>> = self
            .bands
            .iter()
            .zip(&apparent)
            .map(|(band, apparent)| Photometry { apparent, error: band.error.map_or(&exact[..], |at| inputs[at]) })
            .collect();

        // the kernel's outputs are the modulus columns and the bands; distances and prior_share stand between
        let (modulus, rest) = outputs.split_at_mut(MODULUS_OUTPUTS - 1);
        let (distance, rest) = rest.split_at_mut(3);
        let (share, bands) = rest.split_at_mut(1);
        debug_assert_eq!(bands.len(), BAND_OUTPUTS * self.bands.len());
        let mut targets: Vec<&mut [f64]> =
            modulus.iter_mut().chain(share).chain(bands).map(|column| &mut **column).collect();
        SCRATCH.with_borrow_mut(|scratch| {
            summarise(&self.prior, inputs[0], inputs[1], &photometry, &mut targets, scratch);
        });
        for (out, modulus) in distance.iter_mut().zip(&*modulus) {
            for (out, modulus) in out.iter_mut().zip(modulus.iter()) {
                *out = magnitude::parsec_from_modulus(*modulus);
            }
        }
    }
}
