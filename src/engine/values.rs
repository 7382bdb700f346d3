//! The edge between Arrow and the kernels: a column becomes `f64` with NaN for missing, and back.

use crate::calibration::Domain;
use crate::error::{Error, Result};
use arrow::array::{Array, ArrayRef, AsArray, PrimitiveArray};
use arrow::buffer::{BooleanBuffer, NullBuffer};
use arrow::datatypes::{
    ArrowPrimitiveType, DataType, Decimal32Type, Decimal64Type, Decimal128Type, Float16Type, Float32Type, Float64Type,
    Int8Type, Int16Type, Int32Type, Int64Type, UInt8Type, UInt16Type, UInt32Type, UInt64Type,
};
use serde::{Deserialize, Serialize};
use std::sync::Arc;

/// Values that an input could not use, by reason.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct Unusable {
    /// Null in the catalogue.
    pub null: u64,
    /// NaN or infinite.
    pub not_finite: u64,
    /// Finite but impossible, a negative error say.
    pub out_of_domain: u64,
}

impl Unusable {
    /// Sum over chunks.
    pub fn merge(&mut self, other: &Self) {
        self.null += other.null;
        self.not_finite += other.not_finite;
        self.out_of_domain += other.out_of_domain;
    }

    /// All reasons together.
    pub fn total(&self) -> u64 {
        self.null + self.not_finite + self.out_of_domain
    }
}

/// The values of a numeric column as the kernels take them; what cannot be used is NaN and counted in `unusable`.
///
/// # Errors
/// A column that holds no numbers; binding has refused those before.
pub fn to_numbers(array: &dyn Array, domain: Domain, unusable: &mut Unusable) -> Result<Vec<f64>> {
    let mut values = match array.data_type() {
        DataType::Float64 => plain::<Float64Type>(array, |x| x),
        DataType::Float32 => plain::<Float32Type>(array, f64::from),
        DataType::Float16 => plain::<Float16Type>(array, f64::from),
        DataType::Int8 => plain::<Int8Type>(array, f64::from),
        DataType::Int16 => plain::<Int16Type>(array, f64::from),
        DataType::Int32 => plain::<Int32Type>(array, f64::from),
        DataType::Int64 => plain::<Int64Type>(array, |x| x as f64),
        DataType::UInt8 => plain::<UInt8Type>(array, f64::from),
        DataType::UInt16 => plain::<UInt16Type>(array, f64::from),
        DataType::UInt32 => plain::<UInt32Type>(array, f64::from),
        DataType::UInt64 => plain::<UInt64Type>(array, |x| x as f64),
        DataType::Decimal32(_, scale) => scaled::<Decimal32Type>(array, *scale, f64::from),
        DataType::Decimal64(_, scale) => scaled::<Decimal64Type>(array, *scale, |x| x as f64),
        DataType::Decimal128(_, scale) => scaled::<Decimal128Type>(array, *scale, |x| x as f64),
        other => return Err(Error::failed(format!("{other} is no number; this is a defect of tenparsec."))),
    };
    let nulls = array.nulls().filter(|nulls| nulls.null_count() > 0);
    let fits = |x: f64| match domain {
        Domain::Any => true,
        Domain::NotNegative => x >= 0.0,
        Domain::Positive => x > 0.0,
    };
    if nulls.is_none() && values.iter().all(|x| x.is_finite() && fits(*x)) {
        return Ok(values);
    }
    for (row, value) in values.iter_mut().enumerate() {
        if nulls.is_some_and(|nulls| nulls.is_null(row)) {
            unusable.null += 1;
        } else if !value.is_finite() {
            unusable.not_finite += 1;
        } else if !fits(*value) {
            unusable.out_of_domain += 1;
        } else {
            continue;
        }
        *value = f64::NAN;
    }
    Ok(values)
}

fn plain<T: ArrowPrimitiveType>(array: &dyn Array, number: impl Fn(T::Native) -> f64) -> Vec<f64> {
    array.as_primitive::<T>().values().iter().map(|x| number(*x)).collect()
}

/// Decimals are divided by an exact power of ten, so that 1.1 becomes the double nearest to 1.1.
fn scaled<T: ArrowPrimitiveType>(array: &dyn Array, scale: i8, number: impl Fn(T::Native) -> f64) -> Vec<f64> {
    let power = (0..scale.unsigned_abs()).fold(1.0, |p, _| p * 10.0);
    let all = plain::<T>(array, number);
    all.into_iter().map(|x| if scale < 0 { x * power } else { x / power }).collect()
}

/// A computed column as it is published: 32 or 64 bits, null where it is not finite in that width.
pub fn to_array(values: &[f64], double: bool) -> ArrayRef {
    if double {
        return published::<Float64Type>(values.to_vec(), f64::is_finite);
    }
    published::<Float32Type>(values.iter().map(|x| *x as f32).collect(), f32::is_finite)
}

fn published<T: ArrowPrimitiveType>(values: Vec<T::Native>, finite: impl Fn(T::Native) -> bool) -> ArrayRef {
    // not short-circuiting, so that the loop vectorises; most columns of a chunk have nothing missing
    let nulls = if values.iter().fold(true, |all, x| all & finite(*x)) {
        None
    } else {
        Some(NullBuffer::new(BooleanBuffer::collect_bool(values.len(), |row| finite(values[row]))))
    };
    Arc::new(PrimitiveArray::<T>::new(values.into(), nulls))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_is_not_finite_in_its_width_is_null() {
        let values = [1.5, f64::NAN, f64::INFINITY, 1e300];
        let nulls = |double| (0..4).map(|row| to_array(&values, double).is_null(row)).collect::<Vec<_>>();
        assert_eq!(nulls(false), [false, true, true, true]);
        assert_eq!(nulls(true), [false, true, true, false]);
        assert_eq!(to_array(&values[..1], false).null_count(), 0);
    }
}
