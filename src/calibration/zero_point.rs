//! Parallax zero point: calibrated parallax = parallax - zero point, both in mas.
//!
//! A negative zero point means that the catalogue's parallaxes are too small, so they grow. Missing parallaxes stay
//! missing. Definition as in Lindegren et al. 2021, A&A 649, A4, Sect. 1.

use super::stage::Kernel;
use super::{Domain, Input, Output, Stage, Survey};
use crate::frame::Declared;
use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

/// `[zero_point]`.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(tag = "model", rename_all = "kebab-case")]
pub enum Settings {
    /// One offset for all stars.
    Constant {
        /// Zero point in mas, subtracted from every parallax.
        offset_mas: f64,
    },
}

impl Default for Settings {
    fn default() -> Self {
        Self::Constant { offset_mas: 0.0 }
    }
}

impl Settings {
    pub(super) fn check(&self) -> Vec<(String, String)> {
        let Self::Constant { offset_mas } = self;
        if offset_mas.abs() > 10.0 {
            let text = format!("a zero point of {offset_mas} mas is beyond anything measured; the unit is mas");
            return vec![("zero_point.offset_mas".into(), text)];
        }
        Vec::new()
    }
}

pub(super) fn stages(survey: &Survey) -> Vec<Box<dyn Stage>> {
    let Settings::Constant { offset_mas } = survey.sections.zero_point;
    let method = "parallax - zero_point; constant zero point (definition: Lindegren et al. 2021, A&A 649, A4)";
    let settings = format!("constant {offset_mas:?}");
    vec![Box::new(Kernel {
        name: "zero_point",
        revision: 1,
        inputs: vec![Input::catalogue(&survey.roles.parallax, "mas", Domain::Any, "columns.parallax")],
        outputs: vec![
            Output {
                declared: Declared::float(
                    "zero_point",
                    "mas",
                    "arith.zp;pos.parallax.trig",
                    "Parallax zero point that was subtracted",
                    method,
                ),
                reads: vec![],
                settings: settings.clone(),
            },
            Output {
                declared: Declared::float(
                    "parallax_calibrated",
                    "mas",
                    "pos.parallax.trig;meta.modelled",
                    "Parallax after subtraction of the zero point",
                    method,
                ),
                reads: vec![0],
                settings,
            },
        ],
        kernel: move |inputs: &[&[f64]], outputs: &mut [&mut [f64]]| {
            let [zero_point, calibrated] = outputs else { unreachable!("two outputs are declared") };
            zero_point.fill(offset_mas);
            for (out, parallax) in calibrated.iter_mut().zip(inputs[0]) {
                *out = parallax - offset_mas;
            }
        },
    })]
}
