//! Binds the inputs of the stages to columns of the catalogue: each must exist, be a number and have the right unit.

use crate::calibration::{From, Input, Roles, Stage};
use crate::columnar::source;
use crate::error::{Error, Result, suggestion};
use crate::frame::unit;
use arrow::datatypes::{DataType, Field, Schema};

/// Checks every catalogue column that the plan names outside of SQL.
///
/// # Errors
/// All faults at once, each with its plan key.
pub fn check(roles: &Roles, stages: &[Box<dyn Stage>], schema: &Schema) -> Result<()> {
    let mut faults: Vec<Error> = Vec::new();
    if let Some(field) = find(&roles.id, "columns.id", schema, &mut faults)
        && !is_identifier(field.data_type())
    {
        let text = format!("The id must be a column of integers or of text, `{}` is {}.", roles.id, field.data_type());
        faults.push(Error::plan(text).at_key("`columns.id`"));
    }
    for (column, key) in [(&roles.ra, "columns.ra"), (&roles.dec, "columns.dec")] {
        if let Some(column) = column {
            numeric(column, "deg", key, schema, &mut faults);
        }
    }
    let mut seen: Vec<&Input> = Vec::new();
    for input in stages.iter().flat_map(|stage| stage.inputs()) {
        if let From::Catalogue(column) = &input.from
            && !seen.iter().any(|s| s.from == input.from && s.key == input.key)
        {
            seen.push(input);
            numeric(column, input.unit, &input.key, schema, &mut faults);
        }
    }
    match Error::all(faults) {
        Some(error) => Err(error),
        None => Ok(()),
    }
}

fn find<'a>(column: &str, key: &str, schema: &'a Schema, faults: &mut Vec<Error>) -> Option<&'a Field> {
    let found = schema.fields().iter().find(|field| field.name() == column);
    if found.is_none() {
        let hint = suggestion(column, schema.fields().iter().map(|field| field.name().as_str()));
        faults.push(Error::plan(format!("The catalogue has no column `{column}`.{hint}")).at_key(format!("`{key}`")));
    }
    found.map(AsRef::as_ref)
}

fn numeric(column: &str, needed: &str, key: &str, schema: &Schema, faults: &mut Vec<Error>) {
    let Some(field) = find(column, key, schema, faults) else { return };
    let mut fault = |text: String| faults.push(Error::plan(text).at_key(format!("`{key}`")));
    if !is_number(field.data_type()) {
        fault(format!("A column of numbers is needed here, `{column}` is {}.", field.data_type()));
    }
    if let Some(stated) = source::unit(field).filter(|stated| !unit::agrees(needed, stated)) {
        let needed = if needed.is_empty() { "a pure number" } else { needed };
        fault(format!(
            "`{column}` is in `{stated}` by its metadata, {needed} is needed; convert the column, nothing is converted here."
        ));
    }
}

fn is_number(kind: &DataType) -> bool {
    kind.is_integer()
        || kind.is_floating()
        || matches!(kind, DataType::Decimal32(..) | DataType::Decimal64(..) | DataType::Decimal128(..))
}

fn is_identifier(kind: &DataType) -> bool {
    kind.is_integer() || matches!(kind, DataType::Utf8 | DataType::LargeUtf8 | DataType::Utf8View)
}
