//! What the stages know of a survey: its columns by role, its bands and its colours.

use super::{Band, BandSource, Colour, Sections};
use schemars::JsonSchema;
use serde::{Deserialize, Serialize};
use std::collections::BTreeMap;

/// Catalogue columns by role.
#[derive(Debug, Clone, Default, Serialize, Deserialize, JsonSchema)]
pub struct Roles {
    /// Identifier of the star: an integer or text column without nulls.
    #[schemars(length(min = 1))]
    pub id: String,
    /// Right ascension, deg, ICRS.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    #[schemars(length(min = 1))]
    pub ra: Option<String>,
    /// Declination, deg, ICRS.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    #[schemars(length(min = 1))]
    pub dec: Option<String>,
    /// Parallax as catalogued, mas.
    #[schemars(length(min = 1))]
    pub parallax: String,
    /// Standard error of the parallax, mas.
    #[schemars(length(min = 1))]
    pub parallax_error: String,
}

/// All that the stages need, from the checked plan.
#[derive(Debug, Clone)]
pub struct Survey {
    /// Columns by role.
    pub roles: Roles,
    /// Bands in the order of their names.
    pub bands: BTreeMap<String, Band>,
    /// Colours in the order of their names.
    pub colours: BTreeMap<String, Colour>,
    /// Settings of the stages.
    pub sections: Sections,
}

impl Survey {
    /// Input that holds the apparent magnitude of a band.
    pub(super) fn magnitude(&self, band: &str) -> super::Input {
        match &self.bands[band].source() {
            BandSource::Magnitude { column, .. } => {
                super::Input::catalogue(column, "mag", super::Domain::Any, format!("bands.{band}.magnitude"))
            }
            BandSource::Flux { .. } => super::Input::computed(format!("magnitude_{band}")),
        }
    }

    /// Input that holds the standard error of a band's magnitude; `None` when the plan names none.
    pub(super) fn magnitude_error(&self, band: &str) -> Option<super::Input> {
        match &self.bands[band].source() {
            BandSource::Magnitude { error, .. } => error.as_ref().map(|column| {
                super::Input::catalogue(
                    column,
                    "mag",
                    super::Domain::NotNegative,
                    format!("bands.{band}.magnitude_error"),
                )
            }),
            BandSource::Flux { error, .. } => {
                error.as_ref().map(|_| super::Input::computed(format!("magnitude_{band}_error")))
            }
        }
    }

    /// Name of the column, catalogue or computed, that holds the apparent magnitude of a band.
    pub fn magnitude_column(&self, band: &str) -> String {
        match self.magnitude(band).from {
            super::From::Catalogue(name) | super::From::Computed(name) => name,
        }
    }
}
