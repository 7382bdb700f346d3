//! Bands: an apparent magnitude from the catalogue, or one made from a flux and a zero point.
//!
//! m = ZP - 2.5 log10(f), sigma_m = (2.5 / ln 10) sigma_f / f (first order; common practice). A flux that is missing,
//! zero or negative has no magnitude: the magnitude and its error are then missing. Magnitudes stay in the system
//! (Vega, AB) that the zero point belongs to.

use super::stage::Kernel;
use super::{Domain, Input, Output, Stage, Survey};
use crate::frame::Declared;
use crate::numerics::magnitude;
use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

/// `[bands.NAME]`: `magnitude`, or `flux` with `zero_point`.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Band {
    /// Column of apparent magnitudes, mag.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    #[schemars(length(min = 1))]
    pub magnitude: Option<String>,
    /// Column of their standard errors, mag. Without it the magnitudes count as exact.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    #[schemars(length(min = 1))]
    pub magnitude_error: Option<String>,
    /// Column of fluxes, in the unit that the zero point belongs to.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    #[schemars(length(min = 1))]
    pub flux: Option<String>,
    /// Column of their standard errors.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    #[schemars(length(min = 1))]
    pub flux_error: Option<String>,
    /// Magnitude of unit flux, mag.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub zero_point: Option<f64>,
    /// Magnitude system of the zero point; recorded, not converted.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub system: Option<System>,
    /// A_band / A_V, needed when extinction is removed.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    #[schemars(range(min = 0.0, max = 10.0))]
    pub extinction_ratio: Option<f64>,
}

/// Magnitude system.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
pub enum System {
    /// Zero magnitude is the spectrum of Vega.
    Vega,
    /// Zero magnitude is a flat spectrum of 3631 Jy.
    #[serde(rename = "AB")]
    Ab,
}

/// Where a band's magnitude comes from.
#[derive(Debug, Clone, PartialEq)]
pub enum Source {
    /// Catalogue magnitudes.
    Magnitude {
        /// Column.
        column: String,
        /// Column of errors.
        error: Option<String>,
    },
    /// Catalogue fluxes.
    Flux {
        /// Column.
        column: String,
        /// Column of errors.
        error: Option<String>,
        /// Magnitude of unit flux.
        zero_point: f64,
    },
}

impl Band {
    /// The source, once [`Band::check`] found no fault.
    pub fn source(&self) -> Source {
        match (&self.magnitude, &self.flux) {
            (Some(column), _) => Source::Magnitude { column: column.clone(), error: self.magnitude_error.clone() },
            (None, flux) => Source::Flux {
                column: flux.clone().unwrap_or_default(),
                error: self.flux_error.clone(),
                zero_point: self.zero_point.unwrap_or(f64::NAN),
            },
        }
    }

    /// Faults of the section `bands.{name}`: key path and sentence.
    pub fn check(&self, name: &str) -> Vec<(String, String)> {
        let at = |key: &str, text: &str| (format!("bands.{name}{key}"), text.to_owned());
        let mut faults = Vec::new();
        match (&self.magnitude, &self.flux) {
            (Some(_), Some(_)) => faults.push(at("", "a band has `magnitude` or `flux`, not both; remove one")),
            (None, None) => faults.push(at("", "a band needs `magnitude`, or `flux` with `zero_point`")),
            (None, Some(_)) if self.zero_point.is_none() => {
                faults.push(at("", "a band given by `flux` needs `zero_point`, the magnitude of unit flux"));
            }
            _ => {}
        }
        if self.magnitude_error.is_some() && self.magnitude.is_none() {
            faults.push(at(".magnitude_error", "belongs to `magnitude`; a band given by `flux` takes `flux_error`"));
        }
        let stray = [(".flux_error", self.flux_error.is_some()), (".zero_point", self.zero_point.is_some())];
        if self.magnitude.is_some() && self.flux.is_none() {
            faults.extend(
                stray.into_iter().filter(|s| s.1).map(|(key, _)| at(key, "is used only with `flux`; remove it")),
            );
        }
        faults
    }

    /// A flux column may have any linear unit: the zero point belongs to it.
    const FLUX_UNIT: &'static str = crate::frame::unit::ANY;
}

/// Word of the UCD that says which part of the spectrum a band of this name is; the optical as a whole when unknown.
pub(super) fn spectral_word(band: &str) -> &'static str {
    match band.to_ascii_lowercase().as_str() {
        "u" => "em.opt.U",
        "b" | "bt" => "em.opt.B",
        "v" | "vt" => "em.opt.V",
        "r" => "em.opt.R",
        "i" => "em.opt.I",
        "j" => "em.IR.J",
        "h" => "em.IR.H",
        "k" | "ks" => "em.IR.K",
        _ => "em.opt",
    }
}

pub(super) fn stages(survey: &Survey) -> Vec<Box<dyn Stage>> {
    survey.bands.iter().filter_map(|(name, band)| flux_stage(name, band)).collect()
}

fn flux_stage(name: &str, band: &Band) -> Option<Box<dyn Stage>> {
    let Source::Flux { column, error, zero_point } = band.source() else { return None };
    let word = spectral_word(name);
    let system = match band.system {
        Some(System::Vega) => " (Vega)",
        Some(System::Ab) => " (AB)",
        None => "",
    };
    let settings = format!("zero point {zero_point:?}{system}");
    let mut inputs = vec![Input::catalogue(&column, Band::FLUX_UNIT, Domain::Any, format!("bands.{name}.flux"))];
    let mut outputs = vec![Output {
        declared: Declared::float(
            format!("magnitude_{name}"),
            "mag",
            &format!("phot.mag;{word}"),
            format!("Apparent magnitude in band {name}{system} from its flux"),
            format!("{zero_point} - 2.5 log10({column}); common practice"),
        ),
        reads: vec![0],
        settings: settings.clone(),
    }];
    if let Some(error) = error {
        let key = format!("bands.{name}.flux_error");
        inputs.push(Input::catalogue(&error, Band::FLUX_UNIT, Domain::NotNegative, key));
        outputs.push(Output {
            declared: Declared::float(
                format!("magnitude_{name}_error"),
                "mag",
                &format!("stat.error;phot.mag;{word}"),
                format!("Standard error of the apparent magnitude in band {name}"),
                format!("(2.5 / ln 10) {error} / {column}; first order, common practice"),
            ),
            reads: vec![0, 1],
            settings,
        });
    }
    Some(Box::new(Kernel {
        name: "flux_to_magnitude",
        revision: 1,
        inputs,
        outputs,
        kernel: move |inputs: &[&[f64]], outputs: &mut [&mut [f64]]| {
            for (out, flux) in outputs[0].iter_mut().zip(inputs[0]) {
                *out = magnitude::magnitude_from_flux(*flux, zero_point);
            }
            if let (Some(out), Some(errors)) = (outputs.get_mut(1), inputs.get(1)) {
                for ((out, flux), error) in out.iter_mut().zip(inputs[0]).zip(*errors) {
                    *out = magnitude::magnitude_error_from_flux(*flux, *error);
                }
            }
        },
    }))
}
