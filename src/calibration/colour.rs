//! Colours: a difference of two bands, or a colour that the catalogue carries as a column, in mag.
//!
//! Error: the two photometric errors in quadrature (independent bands; common practice). Intrinsic colour: observed
//! minus the difference of the two extinctions. Where the plan names no error for a band or a colour the error is missing.

use super::stage::Kernel;
use super::{Domain, Input, Output, Stage, Survey, photometry::spectral_word};
use crate::frame::Declared;
use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

/// One entry of `[colours]`.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(untagged)]
pub enum Colour {
    /// Two bands: the first minus the second.
    Bands(#[schemars(length(min = 2, max = 2))] Vec<String>),
    /// A column of the catalogue.
    Column(ColourColumn),
}

/// A colour from a column.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct ColourColumn {
    /// Column of the colour, mag.
    #[schemars(length(min = 1))]
    pub column: String,
    /// Column of its standard error, mag.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    #[schemars(length(min = 1))]
    pub error: Option<String>,
    /// E(colour) / A_V, needed when extinction is removed.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    #[schemars(range(min = -10.0, max = 10.0))]
    pub extinction_ratio: Option<f64>,
}

impl Colour {
    pub(super) fn lacks_ratio(&self) -> bool {
        matches!(self, Self::Column(ColourColumn { extinction_ratio: None, .. }))
    }

    /// Faults of `colours.{name}`: key path and sentence.
    pub fn check(&self, name: &str, survey: &Survey) -> Vec<(String, String)> {
        let Self::Bands(pair) = self else { return Vec::new() };
        let key = format!("colours.{name}");
        let mut faults: Vec<_> = pair
            .iter()
            .filter(|band| !survey.bands.contains_key(*band))
            .map(|band| {
                let hint = crate::error::suggestion(band, survey.bands.keys().map(String::as_str));
                (key.clone(), format!("`{band}` is no band of this plan.{hint}"))
            })
            .collect();
        if pair.len() == 2 && pair[0] == pair[1] {
            faults.push((key, format!("the colour of `{}` with itself is 0; name two bands", pair[0])));
        }
        faults
    }
}

pub(super) fn stages(survey: &Survey) -> Vec<Box<dyn Stage>> {
    survey.colours.iter().map(|(name, colour)| stage(survey, name, colour)).collect()
}

fn stage(survey: &Survey, name: &str, colour: &Colour) -> Box<dyn Stage> {
    match colour {
        Colour::Bands(pair) => of_bands(survey, name, &pair[0], &pair[1]),
        Colour::Column(column) => of_column(survey, name, column),
    }
}

fn declared(name: &str, words: &str, methods: [String; 3]) -> [Declared; 3] {
    let [value, error, intrinsic] = methods;
    let label = name.replace('_', " - ");
    [
        Declared::float(
            format!("colour_{name}"),
            "mag",
            &format!("phot.color;{words}"),
            format!("Observed colour {label}"),
            value,
        ),
        Declared::float(
            format!("colour_{name}_error"),
            "mag",
            &format!("stat.error;phot.color;{words}"),
            format!("Standard error of the colour {label}"),
            error,
        ),
        Declared::float(
            format!("colour_{name}_intrinsic"),
            "mag",
            &format!("phot.color.reddFree;{words}"),
            format!("Colour {label} with extinction removed"),
            intrinsic,
        ),
    ]
}

fn of_bands(survey: &Survey, name: &str, blue: &str, red: &str) -> Box<dyn Stage> {
    let mut inputs = vec![
        survey.magnitude(blue),
        survey.magnitude(red),
        Input::computed(format!("extinction_{blue}")),
        Input::computed(format!("extinction_{red}")),
    ];
    let errors = survey.magnitude_error(blue).zip(survey.magnitude_error(red));
    let has_errors = errors.is_some();
    inputs.extend(errors.into_iter().flat_map(|(b, r)| [b, r]));
    let error_method = if has_errors {
        format!("errors of {blue} and {red} in quadrature")
    } else {
        "missing: the plan names no magnitude error for one of the bands".to_owned()
    };
    let methods = [format!("{blue} - {red}"), error_method, format!("({blue} - A_{blue}) - ({red} - A_{red})")];
    let mut words = format!("{};{}", spectral_word(blue), spectral_word(red));
    if spectral_word(blue) == spectral_word(red) {
        words = spectral_word(blue).to_owned();
    }
    let [value, error, intrinsic] = declared(name, &words, methods);
    let error_reads = if has_errors { vec![4, 5] } else { vec![] };
    let outputs = vec![
        Output { declared: value, reads: vec![0, 1], settings: String::new() },
        Output { declared: error, reads: error_reads, settings: String::new() },
        Output { declared: intrinsic, reads: vec![0, 1, 2, 3], settings: String::new() },
    ];
    Box::new(Kernel {
        name: "colour",
        revision: 1,
        inputs,
        outputs,
        kernel: |inputs: &[&[f64]], outputs: &mut [&mut [f64]]| {
            let [value, error, intrinsic] = outputs else { unreachable!("three outputs are declared") };
            for i in 0..value.len() {
                value[i] = inputs[0][i] - inputs[1][i];
                intrinsic[i] = value[i] - (inputs[2][i] - inputs[3][i]);
            }
            match inputs.get(4..6) {
                None => error.fill(f64::NAN),
                Some(errors) => {
                    for (i, out) in error.iter_mut().enumerate() {
                        *out = (errors[0][i] * errors[0][i] + errors[1][i] * errors[1][i]).sqrt();
                    }
                }
            }
        },
    })
}

fn of_column(survey: &Survey, name: &str, colour: &ColourColumn) -> Box<dyn Stage> {
    let mut inputs = vec![Input::catalogue(&colour.column, "mag", Domain::Any, format!("colours.{name}.column"))];
    let error_at = colour.error.as_ref().map(|error| {
        inputs.push(Input::catalogue(error, "mag", Domain::NotNegative, format!("colours.{name}.error")));
        inputs.len() - 1
    });
    let ratio = colour.extinction_ratio.unwrap_or(0.0);
    let a_v_at = match &survey.sections.extinction {
        super::extinction::Settings::Column { column } => {
            inputs.push(Input::catalogue(column, "mag", Domain::Any, "extinction.column"));
            Some(inputs.len() - 1)
        }
        super::extinction::Settings::None => None,
    };
    let error_method = if error_at.is_some() { "from the catalogue" } else { "missing: the plan names no error" };
    let intrinsic_method = match a_v_at {
        Some(_) => format!("{} - {ratio} A_V", colour.column),
        None => format!("{} (no extinction was removed)", colour.column),
    };
    let methods = ["from the catalogue".to_owned(), error_method.to_owned(), intrinsic_method];
    let [value, error, intrinsic] = declared(name, "em.opt", methods);
    let intrinsic_reads = std::iter::once(0).chain(a_v_at).collect();
    let outputs = vec![
        Output { declared: value, reads: vec![0], settings: String::new() },
        Output { declared: error, reads: error_at.into_iter().collect(), settings: String::new() },
        Output { declared: intrinsic, reads: intrinsic_reads, settings: format!("ratio {ratio:?}") },
    ];
    Box::new(Kernel {
        name: "colour_column",
        revision: 1,
        inputs,
        outputs,
        kernel: move |inputs: &[&[f64]], outputs: &mut [&mut [f64]]| {
            outputs[0].copy_from_slice(inputs[0]);
            match error_at {
                None => outputs[1].fill(f64::NAN),
                Some(at) => outputs[1].copy_from_slice(inputs[at]),
            }
            match a_v_at {
                None => outputs[2].copy_from_slice(inputs[0]),
                Some(at) => {
                    for ((out, colour), a_v) in outputs[2].iter_mut().zip(inputs[0]).zip(inputs[at]) {
                        *out = colour - ratio * a_v;
                    }
                }
            }
        },
    })
}
