//! Tables as Parquet and CSV: the same bytes for the same table.
//!
//! CSV: comma, header line, line feed, quotes only where needed; null is empty; a float is the shortest decimal that
//! reads back as the same float, so no digit is lost and none invented. Parquet: one row group a million rows, zstd, the
//! description under the footer key `description`.

use arrow::array::{Array, AsArray, RecordBatch};
use arrow::datatypes::{DataType, Float32Type, Float64Type, Int64Type, UInt32Type, UInt64Type};
use parquet::arrow::ArrowWriter;
use parquet::basic::{Compression, ZstdLevel};
use parquet::file::metadata::KeyValue;
use parquet::file::properties::WriterProperties;

use super::Table;
use crate::error::{Error, Result};

/// The table as a Parquet file.
///
/// # Errors
/// A fault of the encoder.
pub fn parquet(table: &Table) -> Result<Vec<u8>> {
    let failed =
        |e: parquet::errors::ParquetError| Error::failed(format!("The table `{}` cannot be encoded: {e}", table.name));
    let properties = WriterProperties::builder()
        .set_compression(Compression::ZSTD(ZstdLevel::try_new(3).map_err(failed)?))
        .set_created_by(concat!("tenparsec ", env!("CARGO_PKG_VERSION")).to_string())
        .set_key_value_metadata(Some(vec![KeyValue::new("description".to_string(), table.description.clone())]))
        .build();
    let mut bytes = Vec::new();
    let mut writer = ArrowWriter::try_new(&mut bytes, table.batch.schema(), Some(properties)).map_err(failed)?;
    writer.write(&table.batch).map_err(failed)?;
    writer.close().map_err(failed)?;
    Ok(bytes)
}

/// The table as CSV text.
///
/// # Errors
/// A column of a type that tables do not have.
pub fn csv(table: &Table) -> Result<Vec<u8>> {
    let failed = |e: csv::Error| Error::failed(format!("The table `{}` cannot be written as CSV: {e}", table.name));
    let mut writer = csv::WriterBuilder::new().from_writer(Vec::new());
    let schema = table.batch.schema();
    writer.write_record(schema.fields().iter().map(|f| f.name())).map_err(failed)?;
    let columns = columns(&table.batch)?;
    for row in 0..table.batch.num_rows() {
        writer.write_record(columns.iter().map(|cell| cell(row))).map_err(failed)?;
    }
    writer.into_inner().map_err(|e| Error::failed(e.to_string()))
}

type Cell<'a> = Box<dyn Fn(usize) -> String + 'a>;

fn columns(batch: &RecordBatch) -> Result<Vec<Cell<'_>>> {
    let schema = batch.schema();
    let mut cells: Vec<Cell> = Vec::new();
    for (field, array) in schema.fields().iter().zip(batch.columns()) {
        let value: Cell = match array.data_type() {
            DataType::Utf8 => Box::new(move |i| array.as_string::<i32>().value(i).to_string()),
            DataType::Boolean => Box::new(move |i| array.as_boolean().value(i).to_string()),
            DataType::Int64 => Box::new(move |i| array.as_primitive::<Int64Type>().value(i).to_string()),
            DataType::UInt32 => Box::new(move |i| array.as_primitive::<UInt32Type>().value(i).to_string()),
            DataType::UInt64 => Box::new(move |i| array.as_primitive::<UInt64Type>().value(i).to_string()),
            DataType::Float32 => Box::new(move |i| short(array.as_primitive::<Float32Type>().value(i))),
            DataType::Float64 => Box::new(move |i| short(array.as_primitive::<Float64Type>().value(i))),
            other => {
                return Err(Error::failed(format!("A table has a column of type {other}.")).in_column(field.name()));
            }
        };
        cells.push(Box::new(move |i| if array.is_null(i) { String::new() } else { value(i) }));
    }
    Ok(cells)
}

/// Shortest decimal that reads back as the same float, with an exponent for the very large and small.
fn short<T: std::fmt::Display + std::fmt::LowerExp + Copy + Into<f64>>(x: T) -> String {
    let size = x.into().abs();
    if size != 0.0 && !(1e-5..1e16).contains(&size) { format!("{x:e}") } else { format!("{x}") }
}
