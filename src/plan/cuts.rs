//! `[[cuts]]`: named keep-conditions. This file says how they are written; `verdicts` checks and evaluates them.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

/// One cut of the plan.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct CutSettings {
    /// Name of the cut, shown wherever its rows are counted; unique.
    pub name: String,
    /// SQL condition over catalogue and computed columns that a row must meet to be kept, `ruwe < 1.4` say. A
    /// condition that is null for a row (a missing value) is not met, and counted as missing.
    pub keep: String,
    /// What happens to rows that fail.
    #[serde(default)]
    pub effect: Effect,
}

/// What a cut does to the rows that fail it.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "lowercase")]
pub enum Effect {
    /// The row is written, with the cut's bit set in `verdict`.
    #[default]
    Flag,
    /// The row is not written.
    Drop,
}

impl Effect {
    /// The word in plans and tables.
    pub fn word(self) -> &'static str {
        match self {
            Effect::Flag => "flag",
            Effect::Drop => "drop",
        }
    }
}
