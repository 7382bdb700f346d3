//! The aggregates: one store for each call, one entry a group; adding and merging commute, bit by bit.

use polars::prelude as pl;
use serde::{Deserialize, Serialize};

use super::{Aggregate, Function};
use crate::columnar::bridge::Handed;
use crate::error::{Error, Result};
use crate::numerics::exact_sum::{ExactSum, Moments};
use crate::tables::keys::Value;

/// Group of a row that is left out.
pub const NONE: u32 = u32::MAX;

/// The entries of one aggregate.
#[derive(Debug, Clone, Serialize, Deserialize)]
pub enum Store {
    /// Rows, or values that are not null.
    Counts(Vec<u64>),
    /// Number and sum of integers (booleans count 0 and 1).
    Integers(Vec<(u64, i128)>),
    /// Number and sum of floats.
    Reals(Vec<(u64, ExactSum)>),
    /// Number, sum and sum of squares.
    Moments(Vec<Moments>),
    /// Least value so far.
    Least(Vec<Option<Extreme>>),
    /// Greatest value so far.
    Greatest(Vec<Option<Extreme>>),
}

/// A value that is kept. Floats are kept as their bits: the ledger is text, and must not round.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize)]
pub enum Extreme {
    /// False before true.
    Boolean(bool),
    /// Signed.
    Integer(i64),
    /// Unsigned.
    Unsigned(u64),
    /// A float, as an integer that sorts like it.
    Real(i64),
    /// Text, by bytes.
    Text(String),
}

/// A finite float as an integer in the same order, and back; -0 becomes 0.
fn sortable(x: f64) -> i64 {
    let bits = (x + 0.0).to_bits() as i64;
    bits ^ ((bits >> 63) as u64 >> 1) as i64
}

fn unsorted(n: i64) -> f64 {
    f64::from_bits((n ^ ((n >> 63) as u64 >> 1) as i64) as u64)
}

impl Extreme {
    fn of(value: &Value) -> Option<Self> {
        Some(match value {
            Value::Null => return None,
            Value::Boolean(b) => Self::Boolean(*b),
            Value::Integer(n) => Self::Integer(*n),
            Value::Unsigned(n) => Self::Unsigned(*n),
            Value::Real(x) => Self::Real(sortable(*x)),
            Value::Text(text) => Self::Text((*text).to_string()),
        })
    }

    fn value(&self) -> Value<'_> {
        match self {
            Self::Boolean(b) => Value::Boolean(*b),
            Self::Integer(n) => Value::Integer(*n),
            Self::Unsigned(n) => Value::Unsigned(*n),
            Self::Real(n) => Value::Real(unsorted(*n)),
            Self::Text(text) => Value::Text(text),
        }
    }
}

fn fault() -> Error {
    Error::failed("An SQL expression gave another type than it should; this is a fault of the program.")
}

/// Calls `f` with each row's number and value.
pub fn each_value(column: &pl::Column, mut f: impl FnMut(usize, Value)) -> Result<()> {
    let series = column.as_materialized_series();
    macro_rules! each {
        ($values:expr, $make:expr) => {
            $values.map_err(|_| fault())?.iter().enumerate().for_each(|(row, x)| f(row, x.map_or(Value::Null, $make)))
        };
    }
    match series.dtype() {
        pl::DataType::Boolean => each!(series.bool(), Value::Boolean),
        pl::DataType::Int64 => each!(series.i64(), Value::Integer),
        pl::DataType::UInt64 => each!(series.u64(), Value::Unsigned),
        pl::DataType::Float32 => each!(series.f32(), |x| Value::Real(f64::from(x))),
        pl::DataType::Float64 => each!(series.f64(), Value::Real),
        pl::DataType::String => each!(series.str(), Value::Text),
        _ => return Err(fault()),
    }
    Ok(())
}

/// Which rows a condition is true for; null is not true.
pub fn truths(column: &pl::Column) -> Result<Vec<bool>> {
    let values = column.as_materialized_series();
    Ok(values.bool().map_err(|_| fault())?.iter().map(|x| x == Some(true)).collect())
}

impl Store {
    /// An empty store for an aggregate.
    pub fn new(aggregate: &Aggregate) -> Self {
        let whole = matches!(aggregate.argument_kind(), Handed::Boolean | Handed::Integer | Handed::Unsigned);
        match aggregate.function {
            Function::Count => Self::Counts(Vec::new()),
            Function::Sum | Function::Mean if whole => Self::Integers(Vec::new()),
            Function::Sum | Function::Mean => Self::Reals(Vec::new()),
            Function::Min => Self::Least(Vec::new()),
            Function::Max => Self::Greatest(Vec::new()),
            Function::Variance { .. } => Self::Moments(Vec::new()),
        }
    }

    /// True if this is a store for `aggregate`.
    pub fn fits(&self, aggregate: &Aggregate) -> bool {
        std::mem::discriminant(self) == std::mem::discriminant(&Self::new(aggregate))
    }

    /// Number of entries.
    pub fn len(&self) -> usize {
        match self {
            Self::Counts(v) => v.len(),
            Self::Integers(v) => v.len(),
            Self::Reals(v) => v.len(),
            Self::Moments(v) => v.len(),
            Self::Least(v) | Self::Greatest(v) => v.len(),
        }
    }

    /// Makes an entry for one more group.
    pub fn grow(&mut self) {
        match self {
            Self::Counts(v) => v.push(0),
            Self::Integers(v) => v.push((0, 0)),
            Self::Reals(v) => v.push(Default::default()),
            Self::Moments(v) => v.push(Moments::default()),
            Self::Least(v) | Self::Greatest(v) => v.push(None),
        }
    }

    /// The entries of the given groups, in their order.
    pub fn pick(&self, groups: impl Iterator<Item = u32>) -> Self {
        let groups = groups.map(|g| g as usize);
        match self {
            Self::Counts(v) => Self::Counts(groups.map(|g| v[g]).collect()),
            Self::Integers(v) => Self::Integers(groups.map(|g| v[g]).collect()),
            Self::Reals(v) => Self::Reals(groups.map(|g| v[g].clone()).collect()),
            Self::Moments(v) => Self::Moments(groups.map(|g| v[g].clone()).collect()),
            Self::Least(v) => Self::Least(groups.map(|g| v[g].clone()).collect()),
            Self::Greatest(v) => Self::Greatest(groups.map(|g| v[g].clone()).collect()),
        }
    }

    /// Adds a batch: row `i` belongs to `groups[i]`, has the i-th value of `argument`, and counts if `filter[i]`.
    pub fn add(
        &mut self,
        aggregate: &Aggregate,
        groups: &[u32],
        filter: Option<&[bool]>,
        argument: Option<&pl::Column>,
    ) -> Result<()> {
        let group_of = |row: usize| {
            let counts = groups[row] != NONE && filter.is_none_or(|f| f[row]);
            counts.then_some(groups[row] as usize)
        };
        let Some(argument) = argument else {
            let Self::Counts(counts) = self else { return Err(fault()) };
            (0..groups.len()).filter_map(group_of).for_each(|group| counts[group] += 1);
            return Ok(());
        };
        if argument.len() != groups.len() {
            return Err(fault());
        }
        let greatest = aggregate.function == Function::Max;
        each_value(argument, |row, value| {
            let Some(group) = group_of(row) else { return };
            if value == Value::Null {
                return;
            }
            match self {
                Self::Counts(v) => v[group] += 1,
                Self::Integers(v) => {
                    v[group].0 += 1;
                    v[group].1 += integer(&value);
                }
                Self::Reals(v) => {
                    v[group].0 += 1;
                    v[group].1.add(real(&value));
                }
                Self::Moments(v) => v[group].add(real(&value)),
                Self::Least(v) | Self::Greatest(v) => keep(&mut v[group], Extreme::of(&value), greatest),
            }
        })
    }

    /// Adds the entries of another store; its group `i` is `to[i]` here. `None` if it is of another form.
    pub fn merge(&mut self, other: &Store, to: &[u32]) -> Option<()> {
        let at = |i: usize| to[i] as usize;
        match (&mut *self, other) {
            (Self::Counts(a), Self::Counts(b)) => b.iter().enumerate().for_each(|(i, n)| a[at(i)] += n),
            (Self::Integers(a), Self::Integers(b)) => b.iter().enumerate().for_each(|(i, (count, sum))| {
                a[at(i)].0 += count;
                a[at(i)].1 += sum;
            }),
            (Self::Reals(a), Self::Reals(b)) => b.iter().enumerate().for_each(|(i, (count, sum))| {
                a[at(i)].0 += count;
                a[at(i)].1.merge(sum);
            }),
            (Self::Moments(a), Self::Moments(b)) => b.iter().enumerate().for_each(|(i, m)| a[at(i)].merge(m)),
            (Self::Least(a), Self::Least(b)) => {
                b.iter().enumerate().for_each(|(i, x)| keep(&mut a[at(i)], x.clone(), false));
            }
            (Self::Greatest(a), Self::Greatest(b)) => {
                b.iter().enumerate().for_each(|(i, x)| keep(&mut a[at(i)], x.clone(), true));
            }
            _ => return None,
        }
        Some(())
    }

    /// Calls `f` with the result for each group.
    ///
    /// # Errors
    /// A sum of integers beyond 64 bits.
    pub fn results(&self, aggregate: &Aggregate, mut f: impl FnMut(Value)) -> Result<()> {
        let mean = aggregate.function == Function::Mean;
        let finite = |x: f64| if x.is_finite() { Value::Real(x) } else { Value::Null };
        match self {
            Self::Counts(v) => v.iter().for_each(|n| f(Value::Integer(*n as i64))),
            Self::Integers(v) => {
                for (count, sum) in v {
                    if *count == 0 {
                        f(Value::Null);
                    } else if mean {
                        f(finite(*sum as f64 / *count as f64));
                    } else {
                        let sum = i64::try_from(*sum).map_err(|_| {
                            Error::failed(format!(
                                "{} is beyond 64 bits; write SUM(CAST(... AS DOUBLE)) instead.",
                                aggregate.text
                            ))
                        })?;
                        f(Value::Integer(sum));
                    }
                }
            }
            Self::Reals(v) => v.iter().for_each(|(count, sum)| {
                f(match (*count, mean) {
                    (0, _) => Value::Null,
                    (n, true) => finite(sum.value() / n as f64),
                    (_, false) => finite(sum.value()),
                });
            }),
            Self::Moments(v) => {
                let Function::Variance { less, root } = aggregate.function else { return Err(fault()) };
                v.iter().for_each(|m| {
                    let variance = m.variance(less).map(|x| if root { x.sqrt() } else { x });
                    f(variance.map_or(Value::Null, finite));
                });
            }
            Self::Least(v) | Self::Greatest(v) => {
                v.iter().for_each(|x| f(x.as_ref().map_or(Value::Null, Extreme::value)));
            }
        }
        Ok(())
    }
}

fn keep(kept: &mut Option<Extreme>, new: Option<Extreme>, greatest: bool) {
    let Some(new) = new else { return };
    let better = kept.as_ref().is_none_or(|old| if greatest { new > *old } else { new < *old });
    if better {
        *kept = Some(new);
    }
}

fn integer(value: &Value) -> i128 {
    match value {
        Value::Boolean(b) => i128::from(*b),
        Value::Integer(n) => i128::from(*n),
        Value::Unsigned(n) => i128::from(*n),
        _ => 0,
    }
}

fn real(value: &Value) -> f64 {
    match value {
        Value::Real(x) => *x,
        other => integer(other) as f64,
    }
}
