//! Honest parallax errors: sigma_calibrated^2 = (scale sigma)^2 + floor^2, all in mas.
//!
//! The form is that of Maiz Apellaniz et al. 2021, A&A 649, A13 (external from internal uncertainties). An error that
//! is missing, zero or negative says nothing about the parallax: the calibrated error is then missing.

use super::stage::Kernel;
use super::{Domain, Input, Output, Stage, Survey};
use crate::frame::Declared;
use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

/// `[uncertainty]`.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Settings {
    /// Factor on the quoted error.
    #[serde(default = "one")]
    pub scale: f64,
    /// Floor in mas, added in quadrature.
    #[serde(default)]
    #[schemars(range(min = 0.0))]
    pub floor_mas: f64,
}

fn one() -> f64 {
    1.0
}

impl Default for Settings {
    fn default() -> Self {
        Self { scale: 1.0, floor_mas: 0.0 }
    }
}

impl Settings {
    pub(super) fn check(&self) -> Vec<(String, String)> {
        if self.scale > 0.0 {
            return Vec::new();
        }
        vec![("uncertainty.scale".into(), format!("the scale must be above 0, not {}", self.scale))]
    }
}

pub(super) fn stages(survey: &Survey) -> Vec<Box<dyn Stage>> {
    let Settings { scale, floor_mas } = survey.sections.uncertainty;
    let floor_squared = floor_mas * floor_mas;
    vec![Box::new(Kernel {
        name: "uncertainty",
        revision: 1,
        inputs: vec![Input::catalogue(&survey.roles.parallax_error, "mas", Domain::Positive, "columns.parallax_error")],
        outputs: vec![Output {
            declared: Declared::float(
                "parallax_error_calibrated",
                "mas",
                "stat.error;pos.parallax.trig",
                "Standard error of the calibrated parallax",
                format!(
                    "sqrt(({scale} parallax_error)^2 + {floor_mas}^2) mas (form: Maiz Apellaniz et al. 2021, A&A 649, A13)"
                ),
            ),
            reads: vec![0],
            settings: format!("scale {scale:?} floor {floor_mas:?}"),
        }],
        kernel: move |inputs: &[&[f64]], outputs: &mut [&mut [f64]]| {
            for (out, error) in outputs[0].iter_mut().zip(inputs[0]) {
                let scaled = scale * error;
                *out = (scaled * scaled + floor_squared).sqrt();
            }
        },
    })]
}
