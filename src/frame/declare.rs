//! The declaration of one column that tenparsec computes.

use serde::{Deserialize, Serialize};

/// Type of a column as stored.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Type {
    /// 32-bit float, or 64-bit when the plan asks for double precision; NaN is stored as null.
    Float,
    /// Unsigned 32-bit integer, never null.
    UInt32,
    /// Boolean, never null.
    Boolean,
}

/// A computed column: what the field metadata, the manifest and the columns dictionary say of it.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
pub struct Declared {
    /// Name in the release.
    pub name: String,
    /// Stored type.
    #[serde(rename = "type")]
    pub kind: Type,
    /// Unit as VOUnits text; empty for a pure number.
    pub unit: String,
    /// UCD1+ words, quantity first.
    pub ucd: String,
    /// One sentence.
    pub description: String,
    /// The method with its citation.
    pub method: String,
}

impl Declared {
    /// A float column.
    pub fn float(
        name: impl Into<String>,
        unit: &str,
        ucd: &str,
        description: impl Into<String>,
        method: impl Into<String>,
    ) -> Self {
        Self {
            name: name.into(),
            kind: Type::Float,
            unit: unit.into(),
            ucd: ucd.into(),
            description: description.into(),
            method: method.into(),
        }
    }
}
