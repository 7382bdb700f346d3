//! Arrow fields of the computed columns of a part, with their lineage, and the columns of the verdicts.

use crate::frame::{Declared, Type};
use crate::plan::cuts::CutSettings;
use crate::plan::lineage::{Recipes, lineage};
use crate::release::computed_field;
use arrow::datatypes::FieldRef;
use std::sync::Arc;

/// Declarations of `verdict` and `accepted`.
pub fn verdict_declarations() -> [Declared; 2] {
    [
        Declared {
            name: "verdict".into(),
            kind: Type::UInt32,
            unit: String::new(),
            ucd: "meta.code.qual".into(),
            description: "Bit i is set when the star fails cut i; the cuts stand in the field metadata".into(),
            method: "keep-conditions of the plan, three-valued: a condition on a missing value is failed".into(),
        },
        Declared {
            name: "accepted".into(),
            kind: Type::Boolean,
            unit: String::new(),
            ucd: "meta.code.qual".into(),
            description: "The star fails no cut".into(),
            method: "verdict = 0".into(),
        },
    ]
}

/// Recipes of all computed columns, verdicts included; `reads[i]` are the columns that cut i names.
pub fn recipes(stages: &[Box<dyn crate::calibration::Stage>], cuts: &[CutSettings], reads: &[Vec<String>]) -> Recipes {
    let mut recipes = Recipes::of_stages(stages);
    let mut words = Vec::new();
    for cut in cuts {
        words.extend([cut.name.clone(), cut.keep.clone(), cut.effect.word().to_owned()]);
    }
    let mut columns: Vec<String> = Vec::new();
    for column in reads.iter().flatten() {
        if !columns.contains(column) {
            columns.push(column.clone());
        }
    }
    for declared in verdict_declarations() {
        recipes.add(&declared.name, &words, &columns);
    }
    recipes
}

/// Fields of the computed columns in the parts made from the file with fingerprint `source`.
pub fn computed_fields(
    declared: &[Declared],
    double: bool,
    recipes: &Recipes,
    cuts: &[CutSettings],
    source: &str,
) -> Vec<FieldRef> {
    let cut_list = cuts.iter().enumerate().map(|(bit, cut)| format!("{bit} {}: {}", cut.name, cut.keep));
    let cut_list = cut_list.collect::<Vec<_>>().join("\n");
    declared
        .iter()
        .map(|column| {
            let stored = stored(column.kind, double);
            let line = lineage(&recipes.get(&column.name), stored, source);
            let mut extra = vec![("lineage", line.as_str())];
            if column.name == "verdict" {
                extra.push(("cuts", &cut_list));
            }
            Arc::new(computed_field(column, double, &extra))
        })
        .collect()
}

/// Name of the stored type, for manifest and lineage.
pub fn stored(kind: Type, double: bool) -> &'static str {
    match kind {
        Type::Float if double => "float64",
        Type::Float => "float32",
        Type::UInt32 => "uint32",
        Type::Boolean => "boolean",
    }
}
