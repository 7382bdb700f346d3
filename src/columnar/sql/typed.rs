//! Typed expressions: how numbers, text, booleans and NULL meet in comparisons and choices.

use polars::prelude as pl;
use polars::prelude::Literal;
use sqlparser::ast::{self, BinaryOperator as Op, Expr as Sql, Value};

use super::Kind;
use crate::columnar::bridge::Handed;
use crate::error::{Error, Result};

use Handed::{Boolean, Float32, Float64, Integer, Text, Unsigned};

/// A number as written.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Number {
    Whole(i128),
    Real(f64),
}

impl Number {
    pub(super) fn real(self) -> f64 {
        match self {
            Number::Whole(n) => n as f64,
            Number::Real(x) => x,
        }
    }
}

/// A typed polars expression.
#[derive(Debug, Clone)]
pub struct Typed {
    pub(super) expr: pl::Expr,
    /// Its type.
    pub kind: Kind,
    pub(super) number: Option<Number>,
}

impl Typed {
    pub(super) fn of(expr: pl::Expr, kind: Handed) -> Self {
        Self { expr, kind: Kind::Of(kind), number: None }
    }

    pub(super) fn null() -> Self {
        Self { expr: pl::lit(pl::NULL), kind: Kind::Null, number: None }
    }

    pub(super) fn literal(number: Number) -> Self {
        let kind = match number {
            Number::Whole(n) if i64::try_from(n).is_ok() => Integer,
            Number::Whole(n) if u64::try_from(n).is_ok() => Unsigned,
            _ => Float64,
        };
        Self { expr: number_as(number, kind), kind: Kind::Of(kind), number: Some(number) }
    }

    /// The expression in type `to`, which is its own or one that numbers can be turned into.
    pub fn into_expr(self, to: Handed) -> pl::Expr {
        match (self.number, self.kind) {
            (Some(number), _) if is_number(to) => number_as(number, to),
            (_, Kind::Of(kind)) if kind == to => self.expr,
            _ => self.expr.cast(to.polars()),
        }
    }
}

pub(super) fn number_as(number: Number, kind: Handed) -> pl::Expr {
    match (kind, number) {
        (Integer, Number::Whole(n)) => constant(n as i64),
        (Unsigned, Number::Whole(n)) => constant(n as u64),
        (Float32, number) => constant(number.real() as f32),
        (_, number) => constant(number.real()),
    }
}

/// A literal of exactly this type; a plain polars literal would adapt to its surroundings.
pub(super) fn constant<T>(value: T) -> pl::Expr
where
    pl::Scalar: From<T>,
{
    pl::Expr::Literal(pl::LiteralValue::Scalar(pl::Scalar::from(value)))
}

pub(super) fn is_number(kind: Handed) -> bool {
    !matches!(kind, Boolean | Text)
}

pub(super) fn negate_if(negated: bool, expr: pl::Expr) -> Typed {
    Typed::of(if negated { expr.not() } else { expr }, Boolean)
}

pub(super) fn quoted(sql: &Sql) -> Option<String> {
    match sql {
        Sql::Value(ast::ValueWithSpan { value: Value::SingleQuotedString(text), .. }) => Some(text.clone()),
        Sql::Nested(inner) => quoted(inner),
        _ => None,
    }
}

pub(super) fn literal(value: &Value) -> Result<Typed> {
    match value {
        Value::Number(text, _) => {
            let number = if text.contains(['.', 'e', 'E']) { None } else { text.parse::<i128>().ok() };
            if let Some(whole) = number {
                return Ok(Typed::literal(Number::Whole(whole)));
            }
            match text.parse::<f64>() {
                Ok(x) if x.is_finite() => Ok(Typed::literal(Number::Real(x))),
                _ => Err(Error::plan(format!("`{text}` is not a number that a 64-bit float can hold."))),
            }
        }
        Value::SingleQuotedString(text) => Ok(Typed::of(text.as_str().lit(), Text)),
        Value::Boolean(b) => Ok(Typed::of(b.lit(), Boolean)),
        Value::Null => Ok(Typed::null()),
        other => {
            Err(Error::plan(format!("The literal `{other}` is not supported; use numbers, 'text', TRUE, FALSE, NULL.")))
        }
    }
}

/// The integer that equals `number`, if one does.
pub(super) fn exact_integer(number: Number) -> Option<i64> {
    match number {
        Number::Whole(n) => i64::try_from(n).ok(),
        Number::Real(x) if x.fract() == 0.0 && x.abs() < 9.2e18 => Some(x as i64),
        Number::Real(_) => None,
    }
}

/// The type in which two numbers meet; `None` for an unsigned one beside a signed column.
pub(super) fn meet(a: &Typed, ka: Handed, b: &Typed, kb: Handed) -> Option<Handed> {
    let literal_meets = |literal: Number, kind: Handed| match (literal, kind) {
        (_, Float32 | Float64) => kind,
        (Number::Whole(n), Integer) if i64::try_from(n).is_ok() => Integer,
        (Number::Whole(n), Unsigned) if u64::try_from(n).is_ok() => Unsigned,
        _ => Float64,
    };
    match (a.number, b.number) {
        (Some(_), Some(_)) => Some(if (ka, kb) == (Integer, Integer) { Integer } else { Float64 }),
        (Some(a), None) => Some(literal_meets(a, kb)),
        (None, Some(b)) => Some(literal_meets(b, ka)),
        (None, None) if ka == kb => Some(ka),
        (None, None) if (ka == Unsigned && kb == Integer) || (ka == Integer && kb == Unsigned) => None,
        (None, None) => Some(Float64),
    }
}

pub(super) fn alike(a: Typed, b: Typed, whole: &Sql) -> Result<(pl::Expr, pl::Expr)> {
    alike_named(a, b, &whole.to_string())
}

/// Both sides of a comparison in one type.
pub(super) fn alike_named(a: Typed, b: Typed, whole: &str) -> Result<(pl::Expr, pl::Expr)> {
    let kind = match (a.kind, b.kind) {
        (Kind::Null, Kind::Null) => Boolean,
        (Kind::Of(kind), Kind::Null) | (Kind::Null, Kind::Of(kind)) => kind,
        (Kind::Of(ka), Kind::Of(kb)) if is_number(ka) && is_number(kb) => meet(&a, ka, &b, kb).ok_or_else(|| {
            Error::plan(format!(
                "`{whole}` compares an unsigned 64-bit column with a signed one; write CAST(... AS BIGINT) around the unsigned one."
            ))
        })?,
        (Kind::Of(ka), Kind::Of(kb)) if ka == kb => ka,
        (ka, kb) => {
            let hint = match (ka, kb) {
                (Kind::Of(Text), Kind::Of(_)) | (Kind::Of(_), Kind::Of(Text)) => {
                    " Numbers are written without quotes, text with single quotes."
                }
                _ => "",
            };
            return Err(Error::plan(format!("`{whole}` compares {} with {}.{hint}", ka.words(), kb.words())));
        }
    };
    Ok((a.into_expr(kind), b.into_expr(kind)))
}

pub(super) fn compare(a: Typed, op: &Op, b: Typed, whole: &Sql) -> Result<Typed> {
    let booleans = matches!((a.kind, b.kind), (Kind::Of(Boolean), _) | (_, Kind::Of(Boolean)));
    if booleans && !matches!(op, Op::Eq | Op::NotEq) {
        return Err(Error::plan(format!("`{whole}` orders booleans; use `=`, `<>`, AND, OR, NOT.")));
    }
    let (a, b) = alike(a, b, whole)?;
    let expr = match op {
        Op::Eq => a.eq(b),
        Op::NotEq => a.neq(b),
        Op::Lt => a.lt(b),
        Op::LtEq => a.lt_eq(b),
        Op::Gt => a.gt(b),
        _ => a.gt_eq(b),
    };
    Ok(Typed::of(expr, Boolean))
}

pub(super) fn common(values: &[Typed], whole: &Sql) -> Result<Handed> {
    common_named(values, &whole.to_string())
}

/// The one type that all values can take.
pub(super) fn common_named(values: &[Typed], whole: &str) -> Result<Handed> {
    let mut known: Option<Typed> = None;
    for value in values.iter().filter(|v| v.kind != Kind::Null) {
        known = Some(match known {
            None => value.clone(),
            Some(so_far) => {
                let (Kind::Of(ka), Kind::Of(kb)) = (so_far.kind, value.kind) else { return Ok(Float64) };
                let kind = if is_number(ka) && is_number(kb) {
                    meet(&so_far, ka, value, kb)
                } else {
                    (ka == kb).then_some(ka)
                };
                let kind = kind.ok_or_else(|| {
                    Error::plan(format!("`{whole}` mixes {} and {}.", so_far.kind.words(), value.kind.words()))
                })?;
                let literal = so_far.number.is_some() && value.number.is_some();
                Typed { number: if literal { value.number } else { None }, ..Typed::of(so_far.expr, kind) }
            }
        });
    }
    match known.map(|k| k.kind) {
        Some(Kind::Of(kind)) => Ok(kind),
        _ => Ok(Float64),
    }
}
