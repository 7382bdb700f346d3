//! Hands Arrow arrays to polars and takes them back, through the Arrow C data interface. The one file with `unsafe`.
//!
//! Measured need: conditions and queries run in polars, rows come from the Arrow Parquet reader. Through this interface
//! a million rows of ten float columns change hands in 0.01 ms (no copy of values; only strings are copied, into polars'
//! own layout); copying them value by value costs about 10 ms, more than evaluating a condition.
//!
//! Safety argument. (1) `ArrowArray` and `ArrowSchema` are `repr(C)` structs that the Arrow specification fixes
//! ("C data interface"); the two crates declare the same fields, so moving one into the other changes its Rust name
//! only, and `transmute` refuses to compile if the sizes differ. (2) Each struct owns its buffers through its
//! `release` callback. It is moved, never copied: the giving side forgets it, the taking side calls `release` once when
//! the last user of the buffers is gone. (3) Both sides treat imported buffers as immutable. (4) The data type that
//! describes an array travels with it in the same call, so an array is never read as another type.
//!
//! What polars sees, chosen so that SQL has few types and no surprises (the decisions are the table of [`Handed`]):
//! - every integer up to 64 signed bits is an `Int64`: `u32 - 5` cannot wrap below zero; `UInt64` stays unsigned;
//! - `Float16` is widened to `Float32`; decimals become `Float64` (nearest double);
//! - NaN and infinities become null, because polars orders NaN above all numbers (`NaN > 5` is true there) while here
//!   a value that is not finite is missing;
//! - dictionary arrays become their values; large and view strings become strings;
//! - dates, times, binary and nested columns are refused with a sentence.

use arrow::array::{Array, ArrayRef, AsArray, RecordBatch, RecordBatchOptions, make_array};
use arrow::datatypes::{DataType, Field, Float32Type, Float64Type, Schema};
use arrow::ffi::{FFI_ArrowArray, FFI_ArrowSchema, from_ffi, to_ffi};
use polars::prelude as pl;
use polars_arrow::ffi as plffi;
use std::mem::transmute;
use std::sync::Arc;

use crate::error::{Error, Result};

/// Type under which a column is handed over.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Handed {
    /// Boolean.
    Boolean,
    /// Signed 64-bit integer: all integers but `UInt64`.
    Integer,
    /// Unsigned 64-bit integer.
    Unsigned,
    /// 32-bit float.
    Float32,
    /// 64-bit float, and decimals.
    Float64,
    /// UTF-8 text.
    Text,
}

impl Handed {
    /// Type for an Arrow column, or the sentence that says why it cannot be used in SQL.
    pub fn of(data_type: &DataType) -> Result<Self> {
        Ok(match data_type {
            DataType::Boolean => Self::Boolean,
            DataType::Int8 | DataType::Int16 | DataType::Int32 | DataType::Int64 => Self::Integer,
            DataType::UInt8 | DataType::UInt16 | DataType::UInt32 => Self::Integer,
            DataType::UInt64 => Self::Unsigned,
            DataType::Float16 | DataType::Float32 => Self::Float32,
            DataType::Float64 => Self::Float64,
            DataType::Decimal32(..) | DataType::Decimal64(..) | DataType::Decimal128(..) | DataType::Decimal256(..) => {
                Self::Float64
            }
            DataType::Utf8 | DataType::LargeUtf8 | DataType::Utf8View => Self::Text,
            DataType::Dictionary(_, values) => Self::of(values)?,
            other => {
                return Err(Error::plan(format!(
                    "has the type {other}, which SQL conditions and queries cannot use; they take numbers, booleans and text"
                )));
            }
        })
    }

    /// Arrow type of the array that is handed over.
    pub fn arrow(self) -> DataType {
        match self {
            Self::Boolean => DataType::Boolean,
            Self::Integer => DataType::Int64,
            Self::Unsigned => DataType::UInt64,
            Self::Float32 => DataType::Float32,
            Self::Float64 => DataType::Float64,
            Self::Text => DataType::Utf8,
        }
    }

    /// Polars type of the series that arrives.
    pub fn polars(self) -> pl::DataType {
        match self {
            Self::Boolean => pl::DataType::Boolean,
            Self::Integer => pl::DataType::Int64,
            Self::Unsigned => pl::DataType::UInt64,
            Self::Float32 => pl::DataType::Float32,
            Self::Float64 => pl::DataType::Float64,
            Self::Text => pl::DataType::String,
        }
    }
}

/// One column for polars, in its type of [`Handed`].
///
/// # Errors
/// A type that cannot be handed over; a cast or import that fails.
pub fn series(name: &str, array: &ArrayRef) -> Result<pl::Series> {
    let target = Handed::of(array.data_type()).map_err(|e| e.in_column(name))?;
    let plain = if array.data_type() == &target.arrow() {
        Arc::clone(array)
    } else {
        arrow::compute::cast(array, &target.arrow()).map_err(|e| Error::failed(e.to_string()).in_column(name))?
    };
    let plain = match target {
        Handed::Float32 => finite_or_null::<Float32Type>(plain, |x| x.is_finite()),
        Handed::Float64 => finite_or_null::<Float64Type>(plain, |x| x.is_finite()),
        _ => plain,
    };
    let failed = |message: String| Error::failed(message).in_column(name);
    let (array, schema) = to_ffi(&plain.to_data()).map_err(|e| failed(e.to_string()))?;
    // SAFETY: points 1 to 4 of the file's header; `array` and `schema` are moved and describe each other.
    let imported = unsafe {
        let array = transmute::<FFI_ArrowArray, plffi::ArrowArray>(array);
        let schema = transmute::<FFI_ArrowSchema, plffi::ArrowSchema>(schema);
        plffi::import_field_from_c(&schema).and_then(|field| plffi::import_array_from_c(array, field.dtype))
    };
    imported.and_then(|array| pl::Series::from_arrow(name.into(), array)).map_err(|e| failed(e.to_string()))
}

/// The named columns of a batch for polars, in the order of `columns`.
///
/// # Errors
/// A column that the batch lacks or that cannot be handed over (see [`series`]).
pub fn frame<S: AsRef<str>>(batch: &RecordBatch, columns: &[S]) -> Result<pl::DataFrame> {
    let mut handed = Vec::with_capacity(columns.len());
    for name in columns {
        let name = name.as_ref();
        let array = batch.column_by_name(name).ok_or_else(|| {
            Error::failed("is named by SQL, but the rows that arrived do not have it").in_column(name)
        })?;
        handed.push(pl::Column::from(series(name, array)?));
    }
    pl::DataFrame::new(batch.num_rows(), handed).map_err(|e| Error::failed(e.to_string()))
}

/// One polars series as an Arrow array; text arrives as `Utf8`.
///
/// # Errors
/// An import that fails (a type that Arrow cannot read).
pub fn array(series: &pl::Series) -> Result<ArrayRef> {
    let failed = |message: String| Error::failed(message).in_column(series.name().as_str());
    let series = series.rechunk();
    let exported = series.to_arrow(0, pl::CompatLevel::oldest());
    let field = polars_arrow::datatypes::Field::new(series.name().clone(), exported.dtype().clone(), true);
    // SAFETY: points 1 to 4 of the file's header; `array` is moved, `schema` describes it and outlives the call.
    let data = unsafe {
        let schema = transmute::<plffi::ArrowSchema, FFI_ArrowSchema>(plffi::export_field_to_c(&field));
        let array = transmute::<plffi::ArrowArray, FFI_ArrowArray>(plffi::export_array_to_c(exported));
        from_ffi(array, &schema)
    };
    let array = make_array(data.map_err(|e| failed(e.to_string()))?);
    if array.data_type() == &DataType::LargeUtf8 {
        return arrow::compute::cast(&array, &DataType::Utf8).map_err(|e| failed(e.to_string()));
    }
    Ok(array)
}

/// A polars frame as an Arrow batch; every field may be null.
///
/// # Errors
/// As [`array()`].
pub fn batch(frame: &pl::DataFrame) -> Result<RecordBatch> {
    let arrays =
        frame.columns().iter().map(|c| array(c.as_materialized_series())).collect::<Result<Vec<ArrayRef>>>()?;
    let fields: Vec<Field> = frame
        .columns()
        .iter()
        .zip(&arrays)
        .map(|(c, a)| Field::new(c.name().as_str(), a.data_type().clone(), true))
        .collect();
    let options = RecordBatchOptions::new().with_row_count(Some(frame.height()));
    RecordBatch::try_new_with_options(Arc::new(Schema::new(fields)), arrays, &options)
        .map_err(|e| Error::failed(e.to_string()))
}

/// Asks polars to work on the thread that calls it, by `POLARS_MAX_THREADS=1` in the environment: its pool would
/// otherwise run beside the engine's workers on the same cores. Results never depend on it. A value that the user has
/// set stays. To be called first thing in `main`; returns false (and does nothing) when other threads already run or
/// when that cannot be told.
pub fn keep_polars_on_the_calling_thread() -> bool {
    const NAME: &str = "POLARS_MAX_THREADS";
    if std::env::var_os(NAME).is_some() {
        return true;
    }
    let alone = std::fs::read_dir("/proc/self/task").is_ok_and(|tasks| tasks.count() == 1);
    if alone {
        // SAFETY: changing the environment is unsound only while another thread may read it, and this process has
        // exactly one thread (counted above), which is here.
        unsafe { std::env::set_var(NAME, "1") };
    }
    alone
}

/// The array with null for each value that is not finite; the same array when all are.
fn finite_or_null<T: arrow::array::ArrowPrimitiveType>(array: ArrayRef, finite: fn(T::Native) -> bool) -> ArrayRef {
    let values = array.as_primitive::<T>();
    // Not short-circuiting, so that the loop vectorises: all are finite in most batches.
    if values.values().iter().fold(true, |all, x| all & finite(*x)) {
        return array;
    }
    Arc::new(values.iter().map(|x| x.filter(|x| finite(*x))).collect::<arrow::array::PrimitiveArray<T>>())
}

#[cfg(test)]
mod tests {
    use super::*;
    use arrow::array::*;
    use arrow::buffer::NullBuffer;
    use arrow::datatypes::*;
    use polars::prelude::AnyValue;

    /// Hands over, and takes back as Arrow.
    fn there_and_back(given: impl Array + 'static) -> ArrayRef {
        let given: ArrayRef = Arc::new(given);
        let kind = Handed::of(given.data_type()).unwrap();
        let series = series("x", &given).unwrap();
        assert_eq!(series.dtype(), &kind.polars());
        assert_eq!(series.len(), given.len());
        let back = array(&series).unwrap();
        assert_eq!(back.data_type(), &kind.arrow());
        back
    }

    #[test]
    fn integers_become_signed_64_bit() {
        let expected: ArrayRef = Arc::new(Int64Array::from(vec![Some(1), None, Some(7)]));
        let one = [Some(1_u8), None, Some(7)];
        assert_eq!(&there_and_back(UInt8Array::from(one.to_vec())), &expected);
        assert_eq!(&there_and_back(Int8Array::from_iter(one.map(|x| x.map(|x| x as i8)))), &expected);
        assert_eq!(&there_and_back(UInt16Array::from_iter(one.map(|x| x.map(u16::from)))), &expected);
        assert_eq!(&there_and_back(Int16Array::from_iter(one.map(|x| x.map(i16::from)))), &expected);
        assert_eq!(&there_and_back(UInt32Array::from_iter(one.map(|x| x.map(u32::from)))), &expected);
        assert_eq!(&there_and_back(Int32Array::from_iter(one.map(|x| x.map(i32::from)))), &expected);
        assert_eq!(&there_and_back(Int64Array::from_iter(one.map(|x| x.map(i64::from)))), &expected);
        let wide: ArrayRef = Arc::new(UInt64Array::from(vec![Some(u64::MAX), None]));
        assert_eq!(&there_and_back(UInt64Array::from(vec![Some(u64::MAX), None])), &wide);
    }

    #[test]
    fn floats_that_are_not_finite_become_null() {
        let expected: ArrayRef = Arc::new(Float64Array::from(vec![Some(1.5), None, None, None, None, Some(-0.0)]));
        let given = [Some(1.5), None, Some(f64::NAN), Some(f64::INFINITY), Some(f64::NEG_INFINITY), Some(-0.0)];
        assert_eq!(&there_and_back(Float64Array::from(given.to_vec())), &expected);
        let narrow: ArrayRef = Arc::new(Float32Array::from(vec![Some(1.5), None, None, None, None, Some(-0.0)]));
        assert_eq!(&there_and_back(Float32Array::from_iter(given.map(|x| x.map(|x| x as f32)))), &narrow);
        let half = Float16Array::from_iter(given.map(|x| x.map(half_of)));
        assert_eq!(&there_and_back(half), &narrow);
        // A NaN under a null stays a null, and values around it survive.
        let hidden = Float64Array::new(vec![f64::NAN, 2.0].into(), Some(NullBuffer::from(vec![false, true])));
        let expected: ArrayRef = Arc::new(Float64Array::from(vec![None, Some(2.0)]));
        assert_eq!(&there_and_back(hidden), &expected);
    }

    fn half_of(x: f64) -> <Float16Type as ArrowPrimitiveType>::Native {
        <Float16Type as ArrowPrimitiveType>::Native::from_f64(x)
    }

    #[test]
    fn decimals_become_doubles() {
        let expected: ArrayRef = Arc::new(Float64Array::from(vec![Some(1.25), None, Some(-0.01)]));
        let small = Decimal128Array::from(vec![Some(125), None, Some(-1)]).with_precision_and_scale(9, 2).unwrap();
        assert_eq!(&there_and_back(small), &expected);
        let big = Decimal256Array::from(vec![Some(i256::from_i128(125)), None, Some(i256::from_i128(-1))]);
        assert_eq!(&there_and_back(big.with_precision_and_scale(50, 2).unwrap()), &expected);
    }

    #[test]
    fn text_and_booleans_survive() {
        let text = [Some("alpha"), None, Some(""), Some("a longer text than fits in a view \u{3b1}")];
        let expected: ArrayRef = Arc::new(StringArray::from(text.to_vec()));
        assert_eq!(&there_and_back(StringArray::from(text.to_vec())), &expected);
        assert_eq!(&there_and_back(LargeStringArray::from(text.to_vec())), &expected);
        assert_eq!(&there_and_back(StringViewArray::from(text.to_vec())), &expected);
        let dictionary: DictionaryArray<Int8Type> = text.into_iter().collect();
        assert_eq!(&there_and_back(dictionary), &expected);
        let truth: ArrayRef = Arc::new(BooleanArray::from(vec![Some(true), None, Some(false)]));
        assert_eq!(&there_and_back(BooleanArray::from(vec![Some(true), None, Some(false)])), &truth);
    }

    #[test]
    fn a_dictionary_of_numbers_becomes_its_values() {
        let keys = Int8Array::from(vec![Some(1), None, Some(0)]);
        let dictionary = DictionaryArray::new(keys, Arc::new(Int32Array::from(vec![10, 20])));
        let expected: ArrayRef = Arc::new(Int64Array::from(vec![Some(20), None, Some(10)]));
        assert_eq!(&there_and_back(dictionary), &expected);
    }

    #[test]
    fn slices_and_nothing_survive() {
        let long: Vec<Option<i64>> = (0..100).map(|i| (i % 3 != 0).then_some(i)).collect();
        let slice: ArrayRef = Arc::new(Int64Array::from(long[13..77].to_vec()));
        assert_eq!(&there_and_back(Int64Array::from(long).slice(13, 64)), &slice);
        let truth: Vec<Option<bool>> = (0..100).map(|i| (i % 7 != 0).then_some(i % 2 == 0)).collect();
        let slice: ArrayRef = Arc::new(BooleanArray::from(truth[13..77].to_vec()));
        assert_eq!(&there_and_back(BooleanArray::from(truth).slice(13, 64)), &slice);
        let texts: Vec<String> = (0..50).map(|i| format!("text {i}")).collect();
        let slice: ArrayRef = Arc::new(StringArray::from(texts[5..9].to_vec()));
        assert_eq!(&there_and_back(StringArray::from(texts).slice(5, 4)), &slice);
        assert_eq!(there_and_back(Int64Array::from(Vec::<i64>::new())).len(), 0);
        assert_eq!(there_and_back(StringArray::from(Vec::<&str>::new())).len(), 0);
        assert_eq!(there_and_back(BooleanArray::from(Vec::<bool>::new())).len(), 0);
    }

    #[test]
    fn values_outlive_the_giver() {
        let series = {
            let given: ArrayRef = Arc::new(Int64Array::from((0..1000).collect::<Vec<i64>>()));
            series("x", &given).unwrap()
        };
        assert_eq!(series.get(999).unwrap(), AnyValue::Int64(999));
        let back = array(&series).unwrap();
        drop(series);
        assert_eq!(back.as_primitive::<Int64Type>().value(999), 999);
    }

    #[test]
    fn what_sql_cannot_use_is_refused() {
        for data_type in [
            DataType::Date32,
            DataType::Timestamp(TimeUnit::Microsecond, None),
            DataType::Time64(TimeUnit::Nanosecond),
            DataType::Duration(TimeUnit::Second),
            DataType::Binary,
            DataType::FixedSizeBinary(4),
            DataType::Null,
            DataType::new_list(DataType::Int8, true),
            DataType::Struct(Fields::empty()),
            DataType::Dictionary(Box::new(DataType::Int8), Box::new(DataType::Date32)),
        ] {
            let message = series("x", &new_empty_array(&data_type)).unwrap_err();
            assert!(message.message.contains("cannot use"), "{data_type}: {message}");
            assert_eq!(message.place.column.as_deref(), Some("x"));
        }
    }

    #[test]
    fn a_frame_has_the_columns_asked_for() {
        let rows = RecordBatch::try_from_iter([
            ("a", Arc::new(Int64Array::from(vec![1, 2])) as ArrayRef),
            ("b", Arc::new(Float32Array::from(vec![1.0, f32::NAN]))),
        ])
        .unwrap();
        let frame = frame(&rows, &["b"]).unwrap();
        assert_eq!((frame.height(), frame.width()), (2, 1));
        let back = batch(&frame).unwrap();
        assert_eq!(back.column(0).null_count(), 1);
        assert_eq!(super::frame(&rows, &[] as &[&str]).unwrap().height(), 2);
        assert_eq!(super::frame(&rows, &["c"]).unwrap_err().place.column.as_deref(), Some("c"));
    }
}
