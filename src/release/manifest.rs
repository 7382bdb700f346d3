//! `manifest.json`: what the release holds, where it came from, and the hashes that prove it.
//!
//! Keys appear in the order of the structures below, and nothing in it depends on time, host or speed, so that equal
//! releases have equal manifests. Its JSON Schema derives from these types.

use std::path::Path;

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use super::whole::write_whole;
use crate::columnar::guard::io_reason;
use crate::error::{Error, Result};

/// Says that a JSON file is a manifest of ours.
pub(super) const FORMAT: &str = "tenparsec release";
const REVISION: u32 = 1;
/// Name of the manifest in the release.
pub(super) const FILE: &str = "manifest.json";

/// The whole manifest.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Manifest {
    /// Always "tenparsec release".
    pub format: String,
    /// Revision of this format, now 1.
    pub revision: u32,
    /// Version of the program that wrote the release.
    pub tenparsec_version: String,
    /// Title of the release, from the plan.
    pub title: String,
    /// BLAKE3 of the plan as run.
    pub plan_blake3: String,
    /// Rows of the catalogue.
    pub rows_in: u64,
    /// Rows in all parts.
    pub rows_written: u64,
    /// Rows left out by cuts that drop.
    pub rows_dropped: u64,
    /// Part files in catalogue order.
    pub parts: Vec<PartRecord>,
    /// Columns of the parts in order.
    pub columns: Vec<ColumnRecord>,
    /// Files of the catalogue in order.
    pub inputs: Vec<InputRecord>,
    /// Counts by cut.
    pub cuts: serde_json::Value,
    /// Table files.
    pub tables: Vec<FileRecord>,
    /// What a user of the release should know, in sentences.
    pub notes: Vec<String>,
}

/// A finished part.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct PartRecord {
    /// Path in the release, `catalogue/part-00000.parquet` say.
    pub file: String,
    /// Rows written.
    pub rows: u64,
    /// Length in bytes.
    pub bytes: u64,
    /// BLAKE3 of all bytes.
    pub blake3: String,
    /// Input file, as in `inputs`.
    pub input: String,
    /// Fingerprint of the input file.
    pub input_fingerprint: String,
    /// First row read, counted in the input file.
    pub first_row: u64,
    /// Rows read.
    pub rows_in: u64,
}

/// A column of the release.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct ColumnRecord {
    /// Name.
    pub name: String,
    /// Stored type.
    #[serde(rename = "type")]
    pub kind: String,
    /// Unit as VOUnits text; empty for a pure number.
    pub unit: String,
    /// UCD1+ words; empty when unknown.
    pub ucd: String,
    /// One sentence; empty when unknown.
    pub description: String,
    /// The method with its citation; empty for a column of the catalogue.
    pub method: String,
    /// Where it comes from.
    pub origin: Origin,
    /// Lineage: fingerprint of all that determined a computed column, or of nothing (empty) for a catalogue column.
    pub recipe: String,
}

/// Where a column comes from.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "lowercase")]
pub enum Origin {
    /// Passed through from the input.
    Catalogue,
    /// Computed by a stage.
    Computed,
}

/// An input file.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct InputRecord {
    /// Path relative to the plan where possible.
    pub file: String,
    /// Length in bytes.
    pub bytes: u64,
    /// Rows.
    pub rows: u64,
    /// BLAKE3 over length and footer: names layout and statistics, not each data byte.
    pub fingerprint: String,
}

/// Another file of the release.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct FileRecord {
    /// Path in the release.
    pub file: String,
    /// Rows.
    pub rows: u64,
    /// Length in bytes.
    pub bytes: u64,
    /// BLAKE3 of all bytes.
    pub blake3: String,
}

impl Manifest {
    /// An empty manifest with format, revision and version filled in.
    pub fn new(title: impl Into<String>, plan_blake3: impl Into<String>) -> Self {
        Self {
            format: FORMAT.into(),
            revision: REVISION,
            tenparsec_version: env!("CARGO_PKG_VERSION").into(),
            title: title.into(),
            plan_blake3: plan_blake3.into(),
            rows_in: 0,
            rows_written: 0,
            rows_dropped: 0,
            parts: vec![],
            columns: vec![],
            inputs: vec![],
            cuts: serde_json::Value::Null,
            tables: vec![],
            notes: vec![],
        }
    }

    /// The text of the file: pretty JSON with a final newline.
    pub fn to_json(&self) -> Result<String> {
        let mut text = serde_json::to_string_pretty(self)
            .map_err(|error| Error::failed(format!("The manifest cannot be written as JSON: {error}.")))?;
        text.push('\n');
        Ok(text)
    }

    /// Writes `manifest.json` in the release folder, whole or not at all.
    pub fn write(&self, release: &Path) -> Result<()> {
        write_whole(&release.join(FILE), self.to_json()?.as_bytes())
    }

    /// Reads `manifest.json` of a release folder. Errors: missing, no manifest of ours, written by a later revision.
    pub fn read(release: &Path) -> Result<Self> {
        Self::read_file(&release.join(FILE))
    }

    pub(super) fn read_file(path: &Path) -> Result<Self> {
        let fail = |text: String| Error::failed(text).in_file(path);
        let text = std::fs::read_to_string(path)
            .map_err(|error| fail(format!("The manifest cannot be read: {}.", io_reason(&error))))?;
        /// Only what decides whether the rest may be read.
        #[derive(Deserialize)]
        struct Head {
            format: String,
            revision: u32,
        }
        let head: Head = serde_json::from_str(&text)
            .map_err(|error| fail(format!("This is not the manifest of a tenparsec release: {error}.")))?;
        if head.format != FORMAT {
            return Err(fail(format!(
                "This is not the manifest of a tenparsec release: its format is `{}`.",
                head.format
            )));
        }
        if head.revision > REVISION {
            return Err(fail(format!(
                "The manifest has revision {}, this program knows up to {REVISION}: use a newer tenparsec.",
                head.revision
            )));
        }
        serde_json::from_str(&text).map_err(|error| fail(format!("The manifest is damaged: {error}.")))
    }
}
