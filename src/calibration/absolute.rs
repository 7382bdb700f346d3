//! Direct absolute magnitude: M = m + 5 log10(parallax / mas) - 10 - A, in mag.
//!
//! It exists only for a positive calibrated parallax and is biased where the parallax is uncertain (Lutz & Kelker
//! 1973, PASP 85, 573; Luri et al. 2018, A&A 616, A9): the posterior quantiles beside it are the honest answer.

use super::stage::Kernel;
use super::{Input, Output, Stage, Survey, photometry::spectral_word};
use crate::frame::Declared;
use crate::numerics::magnitude;

pub(super) fn stages(survey: &Survey) -> Vec<Box<dyn Stage>> {
    if survey.bands.is_empty() {
        return Vec::new();
    }
    let mut inputs = vec![Input::computed("parallax_calibrated")];
    let mut outputs = Vec::new();
    for band in survey.bands.keys() {
        inputs.push(survey.magnitude(band));
        inputs.push(Input::computed(format!("extinction_{band}")));
        outputs.push(Output {
            declared: Declared::float(
                format!("absmag_{band}_direct"),
                "mag",
                &format!("phys.magAbs;{}", spectral_word(band)),
                format!(
                    "Absolute magnitude in band {band} from the inverted parallax; biased at low parallax_over_error"
                ),
                format!("{band} + 5 log10(parallax_calibrated) - 10 - extinction_{band}"),
            ),
            reads: vec![0, inputs.len() - 2, inputs.len() - 1],
            settings: String::new(),
        });
    }
    vec![Box::new(Kernel {
        name: "absolute_direct",
        revision: 1,
        inputs,
        outputs,
        kernel: |inputs: &[&[f64]], outputs: &mut [&mut [f64]]| {
            for i in 0..inputs[0].len() {
                let modulus = magnitude::modulus_from_parallax_mas(inputs[0][i]);
                for (band, out) in outputs.iter_mut().enumerate() {
                    out[i] = inputs[1 + 2 * band][i] - modulus - inputs[2 + 2 * band][i];
                }
            }
        },
    })]
}
