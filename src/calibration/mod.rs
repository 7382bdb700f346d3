//! PURE. The calibration stages: what a stage is, the sections of the plan that steer them, and their order.
//!
//! A stage reads named columns, writes named columns and declares both, so that plan parsing, column binding, output
//! schema, lineage and provenance text all follow from the declarations. To add one: a file here with its `Settings`
//! and its `stages` function, and its line in the `stage_list!` below.

mod absolute;
mod colour;
mod distance;
mod extinction;
mod photometry;
mod significance;
mod stage;
mod survey;
mod uncertainty;
mod zero_point;

pub use colour::Colour;
pub use photometry::{Band, Source as BandSource};
pub use stage::{Domain, From, Input, Output, Stage};
pub use survey::{Roles, Survey};

/// Makes the plan sections and the ordered list of stages from one list.
macro_rules! stage_list {
    ($( $(#[$note:meta])* $stage:ident $( = $section:ident )? ; )*) => {
        stage_list!(@sections [] $( $(#[$note])* $stage $( = $section )? ; )*);

        /// All stages of a survey, in the order in which they run.
        pub fn stages(survey: &Survey) -> Vec<Box<dyn Stage>> {
            let mut list: Vec<Box<dyn Stage>> = Vec::new();
            $( list.extend($stage::stages(survey)); )*
            list
        }
    };
    (@sections [$($done:tt)*]) => {
        /// The sections of the plan that steer stages, one a stage.
        #[derive(Debug, Clone, serde::Serialize, serde::Deserialize, schemars::JsonSchema)]
        pub struct Sections { $($done)* }
    };
    (@sections [$($done:tt)*] $(#[$note:meta])* $stage:ident = required ; $($rest:tt)*) => {
        stage_list!(@sections [$($done)* $(#[$note])* pub $stage: $stage::Settings,] $($rest)*);
    };
    (@sections [$($done:tt)*] $(#[$note:meta])* $stage:ident = optional ; $($rest:tt)*) => {
        stage_list!(@sections [$($done)* $(#[$note])* #[serde(default)] pub $stage: $stage::Settings,] $($rest)*);
    };
    (@sections [$($done:tt)*] $(#[$note:meta])* $stage:ident ; $($rest:tt)*) => {
        stage_list!(@sections [$($done)*] $($rest)*);
    };
}

stage_list! {
    /// Parallax zero point, subtracted from every parallax.
    zero_point = optional;
    /// Makes the quoted parallax errors honest.
    uncertainty = optional;
    significance;
    photometry;
    /// Extinction of each band.
    extinction = optional;
    colour;
    /// The prior of the distance posterior.
    distance = required;
    absolute;
}

impl Sections {
    /// Checks that no single number can: pairs of a key path and a sentence.
    pub fn check(&self, survey: &Survey) -> Vec<(String, String)> {
        let mut faults = Vec::new();
        faults.extend(self.zero_point.check());
        faults.extend(self.uncertainty.check());
        faults.extend(self.extinction.check(survey));
        faults.extend(self.distance.check());
        faults
    }
}
