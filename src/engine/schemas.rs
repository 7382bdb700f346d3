//! The files of `schemas/` that derive from types: plan, manifest, ledger, and the dictionary of computed columns.

use crate::calibration::stages;
use crate::plan::{self, Plan};
use crate::release::{LedgerEntry, LedgerHeader, Manifest};
use serde_json::{Value, json};
use std::path::Path;

/// A plan in which every kind of computed column appears once: band `B` by magnitude, `F` by flux, colour `C`.
const EVERY_COLUMN: &str = r#"
[release]
title = "every column"
catalogue = "none"
[columns]
id = "id"
parallax = "parallax"
parallax_error = "parallax_error"
[bands.B]
magnitude = "b"
magnitude_error = "b_error"
extinction_ratio = 1.0
[bands.F]
flux = "f"
flux_error = "f_error"
zero_point = 25.0
extinction_ratio = 1.0
[colours]
C = ["B", "F"]
[extinction]
model = "column"
column = "a_v"
[distance]
prior = "exponentially-decreasing-density"
length_kpc = 1.35
"#;

/// Names and texts of all derived schema files.
pub fn all() -> Vec<(&'static str, String)> {
    let ledger = json!({
        "$comment": "one JSON object a line: the first is `header`, the others are `entry`",
        "header": schemars::schema_for!(LedgerHeader).to_value(),
        "entry": schemars::schema_for!(LedgerEntry).to_value(),
    });
    vec![
        ("plan.schema.json", pretty(&plan::json_schema())),
        ("manifest.schema.json", pretty(&schemars::schema_for!(Manifest).to_value())),
        ("ledger.schema.json", pretty(&ledger)),
        ("columns.json", pretty(&columns())),
    ]
}

/// The dictionary of computed columns; B and F stand for a band by magnitude and by flux, C for a colour.
fn columns() -> Value {
    let plan =
        Plan::parse(Path::new("every-column.toml"), EVERY_COLUMN.to_owned()).expect("the plan above has no faults");
    let mut list: Vec<Value> = stages(&plan.survey)
        .iter()
        .flat_map(|stage| stage.outputs().iter())
        .map(|output| serde_json::to_value(&output.declared).expect("declarations are plain data"))
        .collect();
    list.extend(super::fields::verdict_declarations().iter().map(|d| serde_json::to_value(d).expect("plain data")));
    json!({
        "$comment": "columns that tenparsec computes, from the declarations of its stages; B is a band by magnitude, F one by flux, C a colour; the method texts show this example's numbers",
        "columns": list,
    })
}

fn pretty(value: &Value) -> String {
    let mut text = serde_json::to_string_pretty(value).expect("a JSON value has a text");
    text.push('\n');
    text
}
