//! Extinction of each band: A_band = (A_band / A_V) A_V, in mag.
//!
//! A_V comes from a column of the catalogue, the ratio of each band from the plan. Model `none` states that no
//! extinction is removed: A is 0 and the release says so. A missing A_V leaves the extinction, and all that depends
//! on it, missing. A negative A_V is taken as it stands: it is the noise of the map that it came from.

use super::stage::Kernel;
use super::{Domain, Input, Output, Stage, Survey};
use crate::frame::Declared;
use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

/// `[extinction]`.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(tag = "model", rename_all = "kebab-case")]
pub enum Settings {
    /// No extinction is removed.
    #[default]
    None,
    /// A_V of each star from a column.
    Column {
        /// Column of A_V, mag.
        #[schemars(length(min = 1))]
        column: String,
    },
}

impl Settings {
    /// Whether bands and colours need their ratios.
    pub(super) fn removes(&self) -> bool {
        !matches!(self, Self::None)
    }

    pub(super) fn check(&self, survey: &Survey) -> Vec<(String, String)> {
        if !self.removes() {
            return Vec::new();
        }
        let bands = survey.bands.iter().filter(|(_, band)| band.extinction_ratio.is_none()).map(|(name, _)| {
            let text = "the extinction model needs this band's `extinction_ratio` = A_band / A_V; give it, or set \
                        `extinction.model = \"none\"`";
            (format!("bands.{name}"), text.to_owned())
        });
        let colours = survey.colours.iter().filter(|(_, colour)| colour.lacks_ratio()).map(|(name, _)| {
            let text = "the extinction model needs this colour's `extinction_ratio` = E(colour) / A_V";
            (format!("colours.{name}"), text.to_owned())
        });
        bands.chain(colours).collect()
    }
}

pub(super) fn stages(survey: &Survey) -> Vec<Box<dyn Stage>> {
    if survey.bands.is_empty() {
        return Vec::new();
    }
    let column = match &survey.sections.extinction {
        Settings::None => None,
        Settings::Column { column } => Some(column.clone()),
    };
    let ratios: Vec<f64> = survey.bands.values().map(|band| band.extinction_ratio.unwrap_or(0.0)).collect();
    let outputs = survey.bands.keys().zip(&ratios).map(|(band, ratio)| {
        let word = super::photometry::spectral_word(band);
        let (description, method, settings, reads) = match &column {
            None => (
                format!("Extinction in band {band}: none was removed"),
                "0 (the plan's extinction model is none)".to_owned(),
                "none".to_owned(),
                vec![],
            ),
            Some(column) => (
                format!("Extinction in band {band}"),
                format!("{ratio} {column}: A_{band}/A_V from the plan times A_V from the catalogue"),
                format!("ratio {ratio:?}"),
                vec![0],
            ),
        };
        let ucd = format!("phys.absorption;{word}");
        let declared = Declared::float(format!("extinction_{band}"), "mag", &ucd, description, method);
        Output { declared, reads, settings }
    });
    let outputs = outputs.collect();
    let inputs = column.iter().map(|c| Input::catalogue(c, "mag", Domain::Any, "extinction.column")).collect();
    vec![Box::new(Kernel {
        name: "extinction",
        revision: 1,
        inputs,
        outputs,
        kernel: move |inputs: &[&[f64]], outputs: &mut [&mut [f64]]| {
            for (out, ratio) in outputs.iter_mut().zip(&ratios) {
                match inputs.first() {
                    None => out.fill(0.0),
                    Some(a_v) => out.iter_mut().zip(*a_v).for_each(|(out, a_v)| *out = ratio * a_v),
                }
            }
        },
    })]
}
