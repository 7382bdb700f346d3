//! `[tables]`: what is counted and averaged over a release. This file says how tables are written in a plan; `tables`
//! checks them against the columns and computes them.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

/// All tables of a plan.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(default, deny_unknown_fields)]
pub struct TablesSettings {
    /// Star counts by colour and absolute magnitude.
    pub colour_magnitude: Vec<ColourMagnitudeSettings>,
    /// Star counts by apparent magnitude.
    pub magnitude: Vec<MagnitudeSettings>,
    /// Star counts by absolute magnitude.
    pub absolute_magnitude: Vec<AbsoluteMagnitudeSettings>,
    /// SQL queries over the columns of the release.
    pub query: Vec<QuerySettings>,
}

/// Bins of equal width: [from, from + step), [from + step, from + 2 step), ... up to `to`.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct BinSettings {
    /// Lower edge of the first bin, mag.
    pub from: f64,
    /// Upper edge of the last bin, mag; a whole number of steps above `from`.
    pub to: f64,
    /// Width of a bin, mag.
    pub step: f64,
}

/// Which absolute magnitude is counted.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "lowercase")]
pub enum Absolute {
    /// The median of the posterior, `absmag_B_p50`.
    #[default]
    Median,
    /// From the parallax by the formula, `absmag_B_direct`; missing unless the parallax is positive.
    Direct,
}

/// Which rows of the release are counted.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "lowercase")]
pub enum Rows {
    /// Rows that fail no cut.
    #[default]
    Accepted,
    /// All rows of the release.
    All,
}

fn yes() -> bool {
    true
}

/// `[[tables.colour_magnitude]]`
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct ColourMagnitudeSettings {
    /// Name of the table; from band and colour when left out.
    #[serde(default)]
    pub name: Option<String>,
    /// A colour of the plan.
    pub colour: String,
    /// A band of the plan.
    pub band: String,
    /// Bins of the colour.
    pub colour_bins: BinSettings,
    /// Bins of the absolute magnitude.
    pub magnitude_bins: BinSettings,
    /// Which absolute magnitude.
    #[serde(default)]
    pub absolute: Absolute,
    /// Which rows.
    #[serde(default)]
    pub rows: Rows,
    /// Whether extinction is removed from the colour.
    #[serde(default = "yes")]
    pub intrinsic: bool,
}

/// `[[tables.magnitude]]`
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct MagnitudeSettings {
    /// Name of the table; from the band when left out.
    #[serde(default)]
    pub name: Option<String>,
    /// A band of the plan.
    pub band: String,
    /// Bins of the apparent magnitude.
    pub bins: BinSettings,
    /// Which rows.
    #[serde(default)]
    pub rows: Rows,
}

/// `[[tables.absolute_magnitude]]`
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct AbsoluteMagnitudeSettings {
    /// Name of the table; from the band when left out.
    #[serde(default)]
    pub name: Option<String>,
    /// A band of the plan.
    pub band: String,
    /// Bins of the absolute magnitude.
    pub bins: BinSettings,
    /// Which absolute magnitude.
    #[serde(default)]
    pub absolute: Absolute,
    /// Which rows.
    #[serde(default)]
    pub rows: Rows,
}

/// `[[tables.query]]`
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct QuerySettings {
    /// Name of the table: letters, digits, `_` and `-`; unique.
    pub name: String,
    /// `SELECT ... FROM release [WHERE ...] [GROUP BY ...] [HAVING ...] [ORDER BY ...] [LIMIT ...]` with COUNT, SUM,
    /// AVG, MIN, MAX, STDDEV or VARIANCE.
    pub sql: String,
}
