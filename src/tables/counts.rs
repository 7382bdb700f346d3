//! Star counts in bins of one or two columns. Numbers of stars and nothing else: no completeness or volume correction,
//! so counts by absolute magnitude are no luminosity function.

use std::sync::Arc;

use arrow::array::{
    Array, ArrayRef, AsArray, BooleanArray, Float32Array, Float64Array, RecordBatch, StringArray, UInt64Array,
};
use arrow::datatypes::{DataType, Field, Float32Type, Float64Type, Schema};
use serde::{Deserialize, Serialize};

use super::{Bins, CUT_COUNTS, CutRow, MOST_CELLS, Names, Table, is_file_name, pack};
use crate::columnar::bridge::Handed;
use crate::error::{Error, Result, suggestion};
use crate::plan::tables::{Absolute, BinSettings, Rows, TablesSettings};

/// Name of the column that says whether a row fails no cut.
const ACCEPTED: &str = "accepted";

/// One table of counts.
#[derive(Debug, Clone)]
pub struct Counts {
    pub name: String,
    axes: Vec<Axis>,
    accepted_only: bool,
}

#[derive(Debug, Clone)]
struct Axis {
    column: String,
    /// What the edges are called in the table: `colour` gives `colour_from` and `colour_to`.
    quantity: &'static str,
    bins: Bins,
}

/// Counts of one table: cell of the first axis times the cells of the second, plus cell of the second.
#[derive(Debug, Clone, PartialEq)]
pub struct CountsTally {
    cells: Vec<u64>,
}

#[derive(Serialize, Deserialize)]
struct Packed {
    size: usize,
    counts: String,
}

impl Serialize for CountsTally {
    fn serialize<S: serde::Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        Packed { size: self.cells.len(), counts: pack::pack(&self.cells) }.serialize(serializer)
    }
}

impl<'de> Deserialize<'de> for CountsTally {
    fn deserialize<D: serde::Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        let Packed { size, counts } = Packed::deserialize(deserializer)?;
        let cells = if size > 4 * MOST_CELLS { None } else { pack::unpack(&counts, size) };
        cells.map(|cells| Self { cells }).ok_or_else(|| serde::de::Error::custom("damaged counts"))
    }
}

impl CountsTally {
    pub fn merge(&mut self, other: &CountsTally) -> Result<()> {
        if self.cells.len() != other.cells.len() {
            return Err(super::stranger());
        }
        self.cells.iter_mut().zip(&other.cells).for_each(|(mine, theirs)| *mine += theirs);
        Ok(())
    }
}

/// All tables of counts of a plan, each with its key path.
pub fn all(settings: &TablesSettings, names: &Names, schema: &Schema) -> Vec<(String, Result<Counts>)> {
    let mut found = Vec::new();
    for (i, one) in settings.colour_magnitude.iter().enumerate() {
        let key = format!("tables.colour_magnitude[{i}]");
        let axes = [
            axis(
                colour(&one.colour, one.intrinsic, names, schema),
                "colour",
                &one.colour_bins,
                &key,
                "colour",
                "colour_bins",
            ),
            axis(
                absolute(&one.band, one.absolute, names, schema),
                "absolute_magnitude",
                &one.magnitude_bins,
                &key,
                "band",
                "magnitude_bins",
            ),
        ];
        let name = given(&one.name, || {
            let direct = if one.absolute == Absolute::Direct { "_direct" } else { "" };
            let observed = if one.intrinsic { "" } else { "_observed" };
            format!("colour_magnitude_{}_{}{direct}{observed}{}", one.band, one.colour, all_rows(one.rows))
        });
        found.push((key.clone(), counts(name, axes.into(), one.rows, schema, &key)));
    }
    for (i, one) in settings.magnitude.iter().enumerate() {
        let key = format!("tables.magnitude[{i}]");
        let column = band(&one.band, names).map(|()| names.apparent[&one.band].clone());
        let axes = vec![axis(column.and_then(|c| usable(c, schema)), "magnitude", &one.bins, &key, "band", "bins")];
        let name = given(&one.name, || format!("magnitude_{}{}", one.band, all_rows(one.rows)));
        found.push((key.clone(), counts(name, axes, one.rows, schema, &key)));
    }
    for (i, one) in settings.absolute_magnitude.iter().enumerate() {
        let key = format!("tables.absolute_magnitude[{i}]");
        let column = absolute(&one.band, one.absolute, names, schema);
        let axes = vec![axis(column, "absolute_magnitude", &one.bins, &key, "band", "bins")];
        let name = given(&one.name, || {
            let direct = if one.absolute == Absolute::Direct { "_direct" } else { "" };
            format!("absolute_magnitude_{}{direct}{}", one.band, all_rows(one.rows))
        });
        found.push((key.clone(), counts(name, axes, one.rows, schema, &key)));
    }
    found
}

fn all_rows(rows: Rows) -> &'static str {
    if rows == Rows::All { "_all" } else { "" }
}

/// The name given, or one made up, of which signs that file names may not have become `_`.
fn given(name: &Option<String>, make: impl Fn() -> String) -> String {
    let plain = |c: char| if c.is_ascii_alphanumeric() || c == '_' || c == '-' { c } else { '_' };
    name.clone().unwrap_or_else(|| make().chars().map(plain).collect())
}

fn counts(name: String, axes: Vec<Result<Axis>>, rows: Rows, schema: &Schema, key: &str) -> Result<Counts> {
    let mut errors = Vec::new();
    if !is_file_name(&name) {
        let message = format!("The name `{name}` becomes a file name; use letters, digits, `_` and `-`.");
        errors.push(Error::plan(message).at_key(format!("{key}.name")));
    }
    let mut good = Vec::new();
    for axis in axes {
        match axis {
            Ok(axis) => good.push(axis),
            Err(error) => errors.push(error),
        }
    }
    let accepted_only = rows == Rows::Accepted;
    let boolean = schema.field_with_name(ACCEPTED).is_ok_and(|f| f.data_type() == &DataType::Boolean);
    if accepted_only && !boolean {
        errors.push(
            Error::plan("The rows have no boolean column `accepted`; use `rows = \"all\"`.")
                .at_key(format!("{key}.rows")),
        );
    }
    let cells = good.iter().fold(1_usize, |n, axis| n.saturating_mul(axis.bins.cells()));
    if cells > MOST_CELLS + 9 {
        errors.push(
            Error::plan(format!(
                "The table would have {cells} cells; at most {MOST_CELLS} are possible. Use larger steps."
            ))
            .at_key(key),
        );
    }
    Error::all(errors).map_or(Ok(Counts { name, axes: good, accepted_only }), Err)
}

fn axis(
    column: Result<String>,
    quantity: &'static str,
    bins: &BinSettings,
    key: &str,
    name_key: &str,
    bins_key: &str,
) -> Result<Axis> {
    let column = column.map_err(|e| e.at_key(format!("{key}.{name_key}")));
    let bins = Bins::new(bins).map_err(|e| e.at_key(format!("{key}.{bins_key}")));
    match (column, bins) {
        (Ok(column), Ok(bins)) => Ok(Axis { column, quantity, bins }),
        (column, bins) => {
            let errors = [column.err(), bins.err()].into_iter().flatten().collect();
            Err(Error::all(errors).unwrap_or_else(super::stranger))
        }
    }
}

fn band(band: &str, names: &Names) -> Result<()> {
    if names.apparent.contains_key(band) {
        return Ok(());
    }
    let hint = suggestion(band, names.apparent.keys().map(String::as_str));
    Err(Error::plan(format!("There is no band `{band}` under [bands].{hint}")))
}

fn absolute(name: &str, which: Absolute, names: &Names, schema: &Schema) -> Result<String> {
    band(name, names)?;
    usable(
        match which {
            Absolute::Median => format!("absmag_{name}_p50"),
            Absolute::Direct => format!("absmag_{name}_direct"),
        },
        schema,
    )
}

fn colour(name: &str, intrinsic: bool, names: &Names, schema: &Schema) -> Result<String> {
    if !names.colours.iter().any(|c| c == name) {
        let hint = suggestion(name, names.colours.iter().map(String::as_str));
        return Err(Error::plan(format!("There is no colour `{name}` under [colours].{hint}")));
    }
    usable(format!("colour_{name}{}", if intrinsic { "_intrinsic" } else { "" }), schema)
}

/// The column, if the release has it as numbers.
fn usable(column: String, schema: &Schema) -> Result<String> {
    let Ok(field) = schema.field_with_name(&column) else {
        return Err(Error::plan(format!("The table needs the column `{column}`, which this plan does not compute.")));
    };
    match Handed::of(field.data_type()) {
        Ok(Handed::Text | Handed::Boolean) | Err(_) => {
            Err(Error::plan(format!("The column `{column}` is {}, but a table counts numbers.", field.data_type())))
        }
        Ok(_) => Ok(column),
    }
}

/// Values of one axis in a batch.
enum Values<'a> {
    Narrow(&'a Float32Array),
    Wide(Float64Array),
}

impl Counts {
    pub fn columns(&self) -> impl Iterator<Item = &str> {
        let accepted = self.accepted_only.then_some(ACCEPTED);
        self.axes.iter().map(|a| a.column.as_str()).chain(accepted)
    }

    pub fn start(&self) -> CountsTally {
        CountsTally { cells: vec![0; self.size()] }
    }

    pub fn fits(&self, tally: &CountsTally) -> bool {
        tally.cells.len() == self.size()
    }

    fn size(&self) -> usize {
        self.axes.iter().map(|a| a.bins.cells()).product()
    }

    pub fn add(&self, tally: &mut CountsTally, batch: &RecordBatch) -> Result<()> {
        let accepted = match self.accepted_only {
            true => Some(accepted(batch)?),
            false => None,
        };
        let values = self.axes.iter().map(|a| values(batch, &a.column)).collect::<Result<Vec<_>>>()?;
        let mut cells = Cells { of_row: vec![0_u32; batch.num_rows()] };
        for (axis, values) in self.axes.iter().zip(&values) {
            match values {
                Values::Narrow(array) => cells.refine(axis, array.values(), *array, |x| axis.bins.cell_narrow(x)),
                Values::Wide(array) => cells.refine(axis, array.values(), array, |x| axis.bins.cell(x)),
            }
        }
        match accepted {
            None => cells.of_row.iter().for_each(|cell| tally.cells[*cell as usize] += 1),
            Some(accepted) => {
                for row in accepted.values().set_indices() {
                    tally.cells[cells.of_row[row] as usize] += u64::from(accepted.is_valid(row));
                }
            }
        }
        Ok(())
    }

    pub fn finish(&self, tally: &CountsTally) -> Result<Table> {
        let grid = self.axes.len() > 1;
        // A grid leaves out its empty cells; a single axis shows them.
        let shown: Vec<usize> = (0..tally.cells.len()).filter(|i| !grid || tally.cells[*i] > 0).collect();
        let mut fields = Vec::new();
        let mut arrays: Vec<ArrayRef> = Vec::new();
        let mut stride = tally.cells.len();
        for axis in &self.axes {
            let cells = axis.bins.cells();
            stride /= cells;
            let edges: Vec<_> = shown.iter().map(|i| axis.bins.edges_of(i / stride % cells)).collect();
            for (end, values) in [
                ("from", edges.iter().map(|e| e.0).collect::<Float64Array>()),
                ("to", edges.iter().map(|e| e.1).collect::<Float64Array>()),
            ] {
                fields.push(Field::new(format!("{}_{end}", axis.quantity), DataType::Float64, true));
                arrays.push(Arc::new(values));
            }
        }
        fields.push(Field::new("stars", DataType::UInt64, false));
        arrays.push(Arc::new(shown.iter().map(|i| tally.cells[*i]).collect::<UInt64Array>()));
        let by: Vec<&str> = self.axes.iter().map(|a| a.column.as_str()).collect();
        let rows = if self.accepted_only { "accepted rows" } else { "all rows of the release" };
        let empty = if grid { " Cells without a star are left out." } else { "" };
        let description = format!(
            "Number of stars by {}, {rows}. A value on an edge belongs to the bin above it. A row without lower edge counts \
             what is below the bins, one without upper edge what is above, one without either what is missing.{empty} Counts \
             only: nothing is corrected for completeness or volume.",
            by.join(" and ")
        );
        table(self.name.clone(), fields, arrays, description)
    }
}

/// The cell of each row, refined axis by axis.
struct Cells {
    of_row: Vec<u32>,
}

impl Cells {
    #[inline]
    fn refine<T: Copy>(&mut self, axis: &Axis, values: &[T], array: &dyn Array, cell: impl Fn(T) -> usize) {
        let cells = axis.bins.cells() as u32;
        let missing = axis.bins.missing() as u32;
        match array.nulls().filter(|n| n.null_count() > 0) {
            None => {
                for (of_row, x) in self.of_row.iter_mut().zip(values) {
                    *of_row = *of_row * cells + cell(*x) as u32;
                }
            }
            Some(nulls) => {
                for ((of_row, x), valid) in self.of_row.iter_mut().zip(values).zip(nulls.inner()) {
                    *of_row = *of_row * cells + if valid { cell(*x) as u32 } else { missing };
                }
            }
        }
    }
}

fn accepted(batch: &RecordBatch) -> Result<&BooleanArray> {
    let array = batch.column_by_name(ACCEPTED).and_then(|a| a.as_boolean_opt());
    array.ok_or_else(|| Error::failed("The rows that arrived have no boolean column `accepted`."))
}

fn values<'a>(batch: &'a RecordBatch, column: &str) -> Result<Values<'a>> {
    let failed = |message: &str| Error::failed(message).in_column(column);
    let array =
        batch.column_by_name(column).ok_or_else(|| failed("is counted, but the rows that arrived do not have it"))?;
    if let Some(narrow) = array.as_primitive_opt::<Float32Type>() {
        return Ok(Values::Narrow(narrow));
    }
    let wide = arrow::compute::cast(array, &DataType::Float64).map_err(|e| failed(&e.to_string()))?;
    Ok(Values::Wide(wide.as_primitive::<Float64Type>().clone()))
}

/// The table of cut counts.
pub fn cut_counts(cuts: &[CutRow]) -> Result<Table> {
    let text = |name: &str| Field::new(name, DataType::Utf8, false);
    let number = |name: &str| Field::new(name, DataType::UInt64, false);
    let texts = |f: fn(&CutRow) -> &str| Arc::new(cuts.iter().map(|c| Some(f(c))).collect::<StringArray>()) as ArrayRef;
    let numbers = |f: fn(&CutRow) -> u64| Arc::new(cuts.iter().map(f).collect::<UInt64Array>()) as ArrayRef;
    let fields = vec![
        text("cut"),
        text("effect"),
        text("keep"),
        number("judged"),
        number("fails"),
        number("fails_first"),
        number("fails_only"),
        number("missing"),
    ];
    let arrays = vec![
        texts(|c| &c.cut),
        texts(|c| &c.effect),
        texts(|c| &c.keep),
        numbers(|c| c.judged),
        numbers(|c| c.fails),
        numbers(|c| c.fails_first),
        numbers(|c| c.fails_only),
        numbers(|c| c.missing),
    ];
    let description = "For each cut in the order of the plan: rows judged (those that no cut had dropped before), rows that \
                       fail it, that fail it first, that fail it alone, and that fail it because a value is missing.";
    table(CUT_COUNTS.to_string(), fields, arrays, description.to_string())
}

fn table(name: String, fields: Vec<Field>, arrays: Vec<ArrayRef>, description: String) -> Result<Table> {
    let batch =
        RecordBatch::try_new(Arc::new(Schema::new(fields)), arrays).map_err(|e| Error::failed(e.to_string()))?;
    Ok(Table { name, batch, description })
}
