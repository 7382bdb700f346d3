//! Signal to noise of the parallax: calibrated value over calibrated error, a pure number of either sign.

use super::stage::Kernel;
use super::{Input, Output, Stage, Survey};
use crate::frame::Declared;

pub(super) fn stages(_survey: &Survey) -> Vec<Box<dyn Stage>> {
    vec![Box::new(Kernel {
        name: "significance",
        revision: 1,
        inputs: vec![Input::computed("parallax_calibrated"), Input::computed("parallax_error_calibrated")],
        outputs: vec![Output {
            declared: Declared::float(
                "parallax_over_error",
                "",
                "stat.snr;pos.parallax.trig",
                "Calibrated parallax over its calibrated error",
                "parallax_calibrated / parallax_error_calibrated",
            ),
            reads: vec![0, 1],
            settings: String::new(),
        }],
        kernel: |inputs: &[&[f64]], outputs: &mut [&mut [f64]]| {
            for ((out, parallax), error) in outputs[0].iter_mut().zip(inputs[0]).zip(inputs[1]) {
                *out = parallax / error;
            }
        },
    })]
}
