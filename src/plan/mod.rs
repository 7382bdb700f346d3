//! The plan: TOML to a checked [`Plan`], all faults at once; its JSON Schema; the lineage that follows from it.

pub mod cuts;
mod document;
pub mod draft;
pub mod lineage;
pub mod tables;
mod walk;

pub use document::{Document, Paths, Precision, Release};

use crate::calibration::Survey;
use crate::error::{Error, Result};
use serde_json::Value;
use std::path::{Path, PathBuf};
use toml::de::DeTable;

/// A plan without faults that can be seen in it alone; its columns are bound when the catalogue is opened.
#[derive(Debug, Clone)]
pub struct Plan {
    /// Path as given.
    pub path: PathBuf,
    /// Text as read.
    pub text: String,
    /// Typed content.
    pub document: Document,
    /// What the calibration stages see of it.
    pub survey: Survey,
}

impl Plan {
    /// Reads and checks a plan file.
    ///
    /// # Errors
    /// All faults together: unreadable file, TOML syntax, unknown or missing keys, wrong types, numbers out of bounds,
    /// contradictions. Each names the key path and the line.
    pub fn load(path: &Path) -> Result<Self> {
        let text = std::fs::read_to_string(path).map_err(|e| match e.kind() {
            std::io::ErrorKind::NotFound => Error::plan("no such plan; give the path of a TOML file").in_file(path),
            std::io::ErrorKind::InvalidData => Error::plan("the plan is not UTF-8 text").in_file(path),
            _ => Error::plan(format!("the plan cannot be read: {e}")).in_file(path),
        })?;
        Self::parse(path, text)
    }

    /// Checks the text of a plan; `path` is only for messages and for the paths relative to it.
    ///
    /// # Errors
    /// As [`Plan::load`].
    pub fn parse(path: &Path, text: String) -> Result<Self> {
        let faults = |list: Vec<Error>| Error::all(list.into_iter().map(|e| e.in_file(path)).collect());
        let (table, syntax) = DeTable::parse_recoverable(&text);
        let syntax = syntax.into_iter().map(|e| {
            let line = walk::line_of(&text, e.span().map_or(0, |s| s.start));
            Error::plan(format!("this is not valid TOML: {}", e.message())).at_key(format!("line {line}"))
        });
        if let Some(error) = faults(syntax.collect()) {
            return Err(error);
        }
        if let Some(error) = faults(walk::faults(&text, table.get_ref(), &json_schema())) {
            return Err(error);
        }
        let document: Document =
            toml::from_str(&text).map_err(|e| Error::plan(e.message().to_owned()).in_file(path))?;
        let survey = Survey {
            roles: document.columns.clone(),
            bands: document.bands.clone(),
            colours: document.colours.clone(),
            sections: document.sections.clone(),
        };
        let plan = Self { path: path.to_owned(), text, document, survey };
        match faults(plan.contradictions()) {
            Some(error) => Err(error),
            None => Ok(plan),
        }
    }

    /// Folder that relative paths of the plan start from.
    pub fn folder(&self) -> &Path {
        match self.path.parent() {
            Some(parent) if !parent.as_os_str().is_empty() => parent,
            _ => Path::new("."),
        }
    }

    /// Folder of the release, unless the command line names another.
    pub fn output(&self) -> PathBuf {
        self.folder().join(&self.document.release.output)
    }

    /// BLAKE3 of the plan's text, hexadecimal.
    pub fn hash(&self) -> String {
        blake3::hash(self.text.as_bytes()).to_hex().to_string()
    }

    /// What only several keys together can get wrong.
    fn contradictions(&self) -> Vec<Error> {
        let survey = &self.survey;
        let mut pairs: Vec<(String, String)> = Vec::new();
        pairs.extend(name_faults("bands", survey.bands.keys()));
        pairs.extend(name_faults("colours", survey.colours.keys()));
        pairs.extend(survey.bands.iter().flat_map(|(name, band)| band.check(name)));
        pairs.extend(survey.colours.iter().flat_map(|(name, colour)| colour.check(name, survey)));
        pairs.extend(survey.sections.check(survey));
        pairs.into_iter().map(|(key, text)| Error::plan(text).at_key(format!("`{key}`"))).collect()
    }
}

/// Names of bands and colours become parts of column names.
fn name_faults<'a>(section: &str, names: impl Iterator<Item = &'a String>) -> Vec<(String, String)> {
    let is_name = |name: &str| {
        name.starts_with(|c: char| c.is_ascii_alphabetic())
            && name.chars().all(|c| c.is_ascii_alphanumeric() || c == '_')
    };
    let mut seen: Vec<&str> = Vec::new();
    let mut faults = Vec::new();
    for name in names {
        let key = format!("{section}.{name}");
        if !is_name(name) {
            let text = "the name becomes part of column names: letters, digits and _ only, a letter first";
            faults.push((key.clone(), text.to_owned()));
        }
        if let Some(twin) = seen.iter().find(|s| s.eq_ignore_ascii_case(name)) {
            let text = format!("differs from `{twin}` only in case; their columns would be mixed up. Rename one");
            faults.push((key, text));
        }
        seen.push(name);
    }
    faults
}

/// JSON Schema of the plan, derived from its types; `schemas/plan.schema.json` is this value.
pub fn json_schema() -> Value {
    let mut schema = schemars::schema_for!(Document).to_value();
    close(&mut schema);
    schema
}

/// Says of every object with named properties that it has no others; schemars cannot say so of flattened types.
fn close(schema: &mut Value) {
    match schema {
        Value::Object(map) => {
            if map.contains_key("properties") && !map.contains_key("additionalProperties") {
                map.insert("additionalProperties".into(), Value::Bool(false));
            }
            map.values_mut().for_each(close);
        }
        Value::Array(list) => list.iter_mut().for_each(close),
        _ => {}
    }
}
