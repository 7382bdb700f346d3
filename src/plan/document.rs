//! The plan as it stands in TOML. The JSON Schema in `schemas/` and the checks of [`super::walk`] derive from these types.

use super::cuts::CutSettings;
use super::tables::TablesSettings;
use crate::calibration::{Band, Colour, Roles, Sections};
use schemars::JsonSchema;
use serde::{Deserialize, Serialize};
use std::collections::BTreeMap;

/// A plan: what to read, how to calibrate, what to write.
#[derive(Debug, Clone, Serialize, Deserialize, JsonSchema)]
#[schemars(title = "tenparsec plan")]
pub struct Document {
    /// What is read and where the release goes.
    pub release: Release,
    /// Columns of the catalogue by role.
    pub columns: Roles,
    /// Photometric bands by name.
    #[serde(default)]
    pub bands: BTreeMap<String, Band>,
    /// Colours by name: two bands, or a column of the catalogue.
    #[serde(default)]
    pub colours: BTreeMap<String, Colour>,
    /// Sections of the calibration stages.
    #[serde(flatten)]
    pub sections: Sections,
    /// Named keep-conditions; at most 32.
    #[serde(default)]
    #[schemars(length(max = 32))]
    pub cuts: Vec<CutSettings>,
    /// Summary tables.
    #[serde(default)]
    pub tables: TablesSettings,
}

/// `[release]`.
#[derive(Debug, Clone, Serialize, Deserialize, JsonSchema)]
pub struct Release {
    /// Title, shown in the summary and kept in the manifest.
    #[schemars(length(min = 1))]
    pub title: String,
    /// Files, folders or globs of Parquet files, relative to the plan.
    pub catalogue: Paths,
    /// Folder of the release, relative to the plan.
    #[serde(default = "default_output")]
    #[schemars(length(min = 1))]
    pub output: String,
    /// Width of the floats that are computed.
    #[serde(default)]
    pub precision: Precision,
    /// A part ends with the row group in which it reaches this many rows.
    #[serde(default = "default_rows_per_part")]
    #[schemars(range(min = 1, max = 1_000_000_000))]
    pub rows_per_part: u64,
}

fn default_output() -> String {
    "release".into()
}

fn default_rows_per_part() -> u64 {
    5_000_000
}

/// One path or several.
#[derive(Debug, Clone, Serialize, Deserialize, JsonSchema)]
#[serde(untagged)]
pub enum Paths {
    /// One file, folder or glob.
    One(#[schemars(length(min = 1))] String),
    /// Several.
    Many(#[schemars(length(min = 1))] Vec<String>),
}

impl Paths {
    /// All of them, in the order given.
    pub fn list(&self) -> Vec<String> {
        match self {
            Self::One(path) => vec![path.clone()],
            Self::Many(paths) => paths.clone(),
        }
    }
}

/// Width of the floats that are computed.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "lowercase")]
pub enum Precision {
    /// 32 bits: relative rounding of 6e-8, 1e-6 mag at a modulus of 15.
    #[default]
    Single,
    /// 64 bits.
    Double,
}
