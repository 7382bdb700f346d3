//! SQL functions of one row, as closures over polars columns.
//!
//! Transcendental functions come from the `libm` crate, computed in f64 whatever the argument, so a cut that uses one
//! keeps the same stars on every machine. A result that is not finite is null: outside its domain a function has no
//! value.

use polars::prelude as pl;
use polars::prelude::{IntoColumn, NewChunkedArray, PolarsResult};

use crate::columnar::bridge::Handed;

type Integers = pl::Int64Chunked;

fn output(kind: Handed) -> impl Fn(&pl::Schema, &pl::Field) -> PolarsResult<pl::Field> + 'static + Send + Sync {
    move |_, field| Ok(pl::Field::new(field.name().clone(), kind.polars()))
}

fn output_many(kind: Handed) -> impl Fn(&pl::Schema, &[pl::Field]) -> PolarsResult<pl::Field> + 'static + Send + Sync {
    move |_, fields| Ok(pl::Field::new(fields.first().map(|f| f.name().clone()).unwrap_or_default(), kind.polars()))
}

/// f of a Float64 expression, null where the result is not finite.
pub fn real(argument: pl::Expr, f: fn(f64) -> f64) -> pl::Expr {
    argument.map(
        move |column| {
            let values = column.f64()?;
            let result = pl::Float64Chunked::from_iter_options(
                values.name().clone(),
                values.iter().map(|x| x.map(f).filter(|y| y.is_finite())),
            );
            Ok(result.into_column())
        },
        output(Handed::Float64),
    )
}

/// f of two Float64 expressions, null where the result is not finite.
pub fn real_of_two(a: pl::Expr, b: pl::Expr, f: fn(f64, f64) -> f64) -> pl::Expr {
    a.map_many(
        move |columns| {
            let (a, b) = (columns[0].f64()?, columns[1].f64()?);
            let result: pl::Float64Chunked =
                pl::arity::broadcast_binary_elementwise(a, b, |x: Option<f64>, y: Option<f64>| {
                    Some(f(x?, y?)).filter(|z| z.is_finite())
                });
            Ok(result.into_column())
        },
        &[b],
        output_many(Handed::Float64),
    )
}

/// f of two Int64 expressions, null where it is (overflow, division by zero).
pub fn integer_of_two(a: pl::Expr, b: pl::Expr, f: fn(i64, i64) -> Option<i64>) -> pl::Expr {
    a.map_many(
        move |columns| {
            let (a, b) = (columns[0].i64()?, columns[1].i64()?);
            let result: Integers =
                pl::arity::broadcast_binary_elementwise(a, b, |x: Option<i64>, y: Option<i64>| f(x?, y?));
            Ok(result.into_column())
        },
        &[b],
        output_many(Handed::Integer),
    )
}

/// f of an Int64 expression, null where it is.
pub fn integer(argument: pl::Expr, f: fn(i64) -> Option<i64>) -> pl::Expr {
    argument.map(
        move |column| {
            let values = column.i64()?;
            let result = Integers::from_iter_options(values.name().clone(), values.iter().map(|x| x.and_then(f)));
            Ok(result.into_column())
        },
        output(Handed::Integer),
    )
}

/// The expression, null where it is not finite; `kind` is one of the float types.
pub fn finite(argument: pl::Expr, kind: Handed) -> pl::Expr {
    argument.map(
        move |column| {
            Ok(match column.dtype() {
                pl::DataType::Float32 => {
                    let values = column.f32()?;
                    if all_finite(values.downcast_iter().map(|a| a.values().as_slice()), |x: f32| x.is_finite()) {
                        return Ok(column);
                    }
                    let result = pl::Float32Chunked::from_iter_options(
                        values.name().clone(),
                        values.iter().map(|x| x.filter(|x| x.is_finite())),
                    );
                    result.into_column()
                }
                _ => {
                    let values = column.f64()?;
                    if all_finite(values.downcast_iter().map(|a| a.values().as_slice()), |x: f64| x.is_finite()) {
                        return Ok(column);
                    }
                    let result = pl::Float64Chunked::from_iter_options(
                        values.name().clone(),
                        values.iter().map(|x| x.filter(|x| x.is_finite())),
                    );
                    result.into_column()
                }
            })
        },
        output(kind),
    )
}

fn all_finite<'a, T: Copy + 'a>(chunks: impl Iterator<Item = &'a [T]>, finite: fn(T) -> bool) -> bool {
    chunks.flatten().fold(true, |all, x| all & finite(*x))
}

/// Values of an IN list, sorted, for a binary search.
#[derive(Debug, Clone)]
pub enum List {
    /// For an Int64 expression.
    Integers(Vec<i64>),
    /// For a Float64 expression.
    Reals(Vec<f64>),
    /// For a text expression.
    Texts(Vec<String>),
}

/// Whether the value is in `list`; a value that is not is null instead of false when the list held a NULL.
pub fn is_in(argument: pl::Expr, list: List, with_null: bool) -> pl::Expr {
    let absent = if with_null { None } else { Some(false) };
    let say = move |found: bool| if found { Some(true) } else { absent };
    argument.map(
        move |column| {
            let name = column.name().clone();
            let found: Vec<Option<bool>> = match &list {
                List::Integers(l) => {
                    column.i64()?.iter().map(|x| x.and_then(|x| say(l.binary_search(&x).is_ok()))).collect()
                }
                List::Reals(l) => column
                    .f64()?
                    .iter()
                    // + 0.0 makes -0.0 equal to 0.0, as `=` has it.
                    .map(|x| x.and_then(|x| say(l.binary_search_by(|y| y.total_cmp(&(x + 0.0))).is_ok())))
                    .collect(),
                List::Texts(l) => column
                    .str()?
                    .iter()
                    .map(|x| x.and_then(|x| say(l.binary_search_by(|y| y.as_str().cmp(x)).is_ok())))
                    .collect(),
            };
            Ok(pl::BooleanChunked::from_iter_options(name, found.into_iter()).into_column())
        },
        output(Handed::Boolean),
    )
}

/// A boolean of a text.
pub fn test_text(argument: pl::Expr, f: impl Fn(&str) -> bool + Send + Sync + 'static) -> pl::Expr {
    argument.map(
        move |column| {
            let values = column.str()?;
            let result = pl::BooleanChunked::from_iter_options(values.name().clone(), values.iter().map(|x| x.map(&f)));
            Ok(result.into_column())
        },
        output(Handed::Boolean),
    )
}

/// A text of a text.
pub fn change_text(argument: pl::Expr, f: impl Fn(&str) -> String + Send + Sync + 'static) -> pl::Expr {
    argument.map(
        move |column| {
            let values = column.str()?;
            let result = pl::StringChunked::from_iter_options(values.name().clone(), values.iter().map(|x| x.map(&f)));
            Ok(result.into_column())
        },
        output(Handed::Text),
    )
}

/// Number of characters of a text.
pub fn length(argument: pl::Expr) -> pl::Expr {
    argument.map(
        move |column| {
            let values = column.str()?;
            let lengths = values.iter().map(|x| x.map(|x| x.chars().count() as i64));
            Ok(Integers::from_iter_options(values.name().clone(), lengths).into_column())
        },
        output(Handed::Integer),
    )
}

/// One text after another.
pub fn join_texts(a: pl::Expr, b: pl::Expr) -> pl::Expr {
    a.map_many(
        move |columns| {
            let (a, b) = (columns[0].str()?, columns[1].str()?);
            let rows = if a.len() == 1 { b.len() } else { a.len() };
            let at = |c: &pl::StringChunked, i: usize| c.get(if c.len() == 1 { 0 } else { i }).map(str::to_string);
            let joined = (0..rows).map(|i| Some(at(a, i)? + &at(b, i)?));
            Ok(pl::StringChunked::from_iter_options(a.name().clone(), joined).into_column())
        },
        &[b],
        output_many(Handed::Text),
    )
}

/// SQL LIKE: `%` stands for any text, `_` for one character.
pub fn like(text: &str, pattern: &[char]) -> bool {
    let text: Vec<char> = text.chars().collect();
    let (mut t, mut p) = (0, 0);
    // Where the last `%` was, and how much text it has taken so far.
    let mut star: Option<(usize, usize)> = None;
    while t < text.len() {
        match pattern.get(p) {
            Some('%') => {
                star = Some((p, t));
                p += 1;
            }
            Some(c) if *c == '_' || *c == text[t] => {
                t += 1;
                p += 1;
            }
            _ => match star {
                Some((at, taken)) => {
                    star = Some((at, taken + 1));
                    t = taken + 1;
                    p = at + 1;
                }
                None => return false,
            },
        }
    }
    pattern[p..].iter().all(|c| *c == '%')
}
