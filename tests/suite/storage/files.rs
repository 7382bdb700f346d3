//! Makes Parquet files of many shapes and reads them back without the code under test.

use std::fs::File;
use std::path::{Path, PathBuf};
use std::sync::Arc;

use arrow::array::*;
use arrow::compute::{cast, concat_batches};
use arrow::datatypes::*;
use parquet::arrow::ArrowWriter;
use parquet::arrow::arrow_reader::{ArrowReaderOptions, ParquetRecordBatchReaderBuilder};
use parquet::file::properties::WriterProperties;
use tenparsec::columnar::source::SourceFile;

/// Every third value is null, but for `offset` which never is.
fn valid(i: usize) -> bool {
    !i.is_multiple_of(3)
}

fn nullable<T: Array + From<Vec<Option<V>>>, V>(rows: usize, value: impl Fn(usize) -> V) -> T {
    T::from((0..rows).map(|i| valid(i).then(|| value(i))).collect::<Vec<_>>())
}

/// One column of each type that a catalogue may have, nulls included, values not repeating with a short period.
pub fn many_types(rows: usize) -> RecordBatch {
    let mixed = |i: usize| (i as u64).wrapping_mul(0x9E37_79B9_7F4A_7C15) >> 11;
    let floats: Float64Array =
        nullable(rows, |i| (mixed(i) as f64).sqrt() * if i.is_multiple_of(2) { 1.0 } else { -1.0 });
    let singles: Float32Array = nullable(rows, |i| match i % 50 {
        1 => f32::NAN,
        2 => f32::INFINITY,
        4 => -0.0,
        _ => mixed(i) as f32 * 1e-9,
    });
    let text: StringArray = nullable(rows, |i| format!("star {}", mixed(i) % 1000));
    let whole: Int64Array = nullable(rows, |i| mixed(i) as i64 - (1 << 40));
    let decimals: Decimal128Array = nullable(rows, |i| i128::from(mixed(i) % 1_000_000));
    let list = {
        let mut builder = ListBuilder::new(Float32Builder::new());
        for i in 0..rows {
            match i % 4 {
                0 => builder.append_null(),
                n => {
                    for k in 1..n {
                        builder.values().append_option((i + k).is_multiple_of(2).then_some((i * k) as f32));
                    }
                    builder.append(true);
                }
            }
        }
        Arc::new(builder.finish()) as ArrayRef
    };
    let structure = Arc::new(StructArray::new(
        Fields::from(vec![Field::new("x", DataType::Float64, true), Field::new("name", DataType::Utf8, true)]),
        vec![Arc::new(floats.clone()), Arc::new(text.clone())],
        Some((0..rows).map(|i| i % 7 != 0).collect::<Vec<_>>().into()),
    )) as ArrayRef;
    let map = {
        let mut builder = MapBuilder::new(None, StringBuilder::new(), Int32Builder::new());
        for i in 0..rows {
            for k in 0..i % 3 {
                builder.keys().append_value(format!("k{k}"));
                builder.values().append_option(valid(i + k).then_some(i as i32));
            }
            builder.append(i % 5 != 0).unwrap();
        }
        Arc::new(builder.finish()) as ArrayRef
    };
    let small = |kind: DataType| cast(&nullable::<Int32Array, i32>(rows, |i| (mixed(i) % 100) as i32), &kind).unwrap();
    let wide = |kind: DataType| cast(&whole, &kind).unwrap();
    let columns: Vec<(&str, ArrayRef, bool)> = vec![
        ("source", Arc::new(Int64Array::from_iter_values((0..rows as i64).map(|i| i * 3 + 7))), false),
        ("i8", small(DataType::Int8), true),
        ("i16", small(DataType::Int16), true),
        ("i32", small(DataType::Int32), true),
        ("i64", Arc::new(whole.clone()), true),
        ("u8", small(DataType::UInt8), true),
        ("u16", small(DataType::UInt16), true),
        ("u32", Arc::new(nullable::<UInt32Array, u32>(rows, |i| u32::MAX - i as u32)), true),
        ("u64", Arc::new(nullable::<UInt64Array, u64>(rows, |i| u64::MAX - mixed(i))), true),
        ("f16", cast(&singles, &DataType::Float16).unwrap(), true),
        ("f32", Arc::new(singles), true),
        ("f64", Arc::new(floats), true),
        ("dec9", Arc::new(decimals.clone().with_precision_and_scale(9, 2).unwrap()), true),
        ("dec18", Arc::new(decimals.clone().with_precision_and_scale(18, 3).unwrap()), true),
        ("dec30", Arc::new(decimals.with_precision_and_scale(30, 5).unwrap()), true),
        ("flag", Arc::new(nullable::<BooleanArray, bool>(rows, |i| mixed(i) % 5 < 2)), true),
        ("text", Arc::new(text.clone()), true),
        ("large", cast(&text, &DataType::LargeUtf8).unwrap(), true),
        (
            "dictionary",
            cast(&text, &DataType::Dictionary(Box::new(DataType::Int32), Box::new(DataType::Utf8))).unwrap(),
            true,
        ),
        ("bytes", cast(&text, &DataType::Binary).unwrap(), true),
        ("ms", wide(DataType::Timestamp(TimeUnit::Millisecond, None)), true),
        ("us", wide(DataType::Timestamp(TimeUnit::Microsecond, Some("Europe/Berlin".into()))), true),
        ("ns", wide(DataType::Timestamp(TimeUnit::Nanosecond, Some("UTC".into()))), true),
        ("day", small(DataType::Date32), true),
        ("list", list, true),
        ("structure", structure, true),
        ("map", map, true),
    ];
    let fields: Vec<Field> =
        columns.iter().map(|(name, array, null)| Field::new(*name, array.data_type().clone(), *null)).collect();
    let schema = Arc::new(Schema::new(fields));
    RecordBatch::try_new(schema, columns.into_iter().map(|(_, array, _)| array).collect()).unwrap()
}

/// A plain catalogue: id, two floats with unit and UCD, text.
pub fn plain(rows: usize, first: i64) -> RecordBatch {
    let note = |unit: &str, ucd: &str| {
        [("unit", unit), ("ucd", ucd)]
            .map(|(k, v)| (k.to_owned(), v.to_owned()))
            .into_iter()
            .collect::<std::collections::HashMap<_, _>>()
    };
    let schema = Arc::new(Schema::new(vec![
        Field::new("source", DataType::Int64, false),
        Field::new("parallax", DataType::Float64, true).with_metadata(note("mas", "pos.parallax")),
        Field::new("g_mag", DataType::Float32, true).with_metadata(note("mag", "phot.mag")),
        Field::new("field", DataType::Utf8, true),
    ]));
    let ids = first..first + rows as i64;
    let columns: Vec<ArrayRef> = vec![
        Arc::new(Int64Array::from_iter_values(ids.clone())),
        Arc::new(ids.clone().map(|i| (i % 5 != 0).then_some(i as f64 * 0.01)).collect::<Float64Array>()),
        Arc::new(ids.clone().map(|i| (i % 11 != 0).then_some((i % 977) as f32 * 0.02)).collect::<Float32Array>()),
        Arc::new(ids.map(|i| Some(format!("field {}", i % 13))).collect::<StringArray>()),
    ];
    RecordBatch::try_new(schema, columns).unwrap()
}

/// Writes `batch` with row groups of `group` rows.
pub fn write(path: &Path, batch: &RecordBatch, group: usize, properties: WriterProperties) -> PathBuf {
    let properties = properties.into_builder().set_max_row_group_row_count(Some(group)).build();
    let mut writer = ArrowWriter::try_new(File::create(path).unwrap(), batch.schema(), Some(properties)).unwrap();
    writer.write(batch).unwrap();
    writer.close().unwrap();
    path.to_path_buf()
}

/// The whole file by the parquet crate's own reader, with Parquet's own types.
pub fn read_all(path: &Path) -> RecordBatch {
    let options = ArrowReaderOptions::new().with_skip_arrow_metadata(true);
    let reader = ParquetRecordBatchReaderBuilder::try_new_with_options(File::open(path).unwrap(), options).unwrap();
    let schema = reader.schema().clone();
    let batches: Vec<RecordBatch> = reader.build().unwrap().map(Result::unwrap).collect();
    concat_batches(&schema, &batches).unwrap()
}

/// Opens a file under its own file name.
pub fn open(path: &Path) -> Arc<SourceFile> {
    Arc::new(SourceFile::open(path, path.file_name().unwrap().to_string_lossy()).unwrap())
}

/// Compares columns by name, value by value; float columns bit by bit, since NaN differs from itself.
pub fn assert_columns(found: &RecordBatch, wanted: &RecordBatch, what: &str) {
    assert_eq!(found.num_rows(), wanted.num_rows(), "{what}: rows");
    for (i, field) in wanted.schema().fields().iter().enumerate() {
        let (a, b) = (found.column_by_name(field.name()).unwrap(), wanted.column(i));
        assert_eq!(a.data_type(), b.data_type(), "{what}: type of {}", field.name());
        let same = match float_bits(a).zip(float_bits(b)) {
            Some((a, b)) => a == b,
            None => a == b,
        };
        assert!(same, "{what}: column {} differs", field.name());
    }
}

/// The bits of a float column's values; `None` for other types.
fn float_bits(array: &ArrayRef) -> Option<Vec<Option<u64>>> {
    let bits: Vec<Option<u64>> = match array.data_type() {
        DataType::Float16 => {
            array.as_primitive::<Float16Type>().iter().map(|v| v.map(|v| u64::from(v.to_bits()))).collect()
        }
        DataType::Float32 => {
            array.as_primitive::<Float32Type>().iter().map(|v| v.map(|v| u64::from(v.to_bits()))).collect()
        }
        DataType::Float64 => array.as_primitive::<Float64Type>().iter().map(|v| v.map(f64::to_bits)).collect(),
        _ => return None,
    };
    Some(bits)
}
