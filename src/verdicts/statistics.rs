//! What row-group statistics prove about a cut before a single value is decoded.
//!
//! Method: abstract interpretation. Each part of a condition gets the set of truth values (true, false, null) that
//! some row of the row group might give it, from the least and greatest value and the null count of each column; AND,
//! OR and NOT combine the sets by the tables of three-valued logic. The set may be too large, never too small, so a
//! set of one element is a proof. Anything not understood gives all three.
//!
//! Caution. Float minima and maxima are never used: NaN, which is missing here, is outside them, and writers disagree
//! about it. Minima and maxima in the deprecated fields are not used either (their order is undefined for unsigned
//! numbers and text). Truncated text bounds are bounds still, and nothing here takes them for values.

use parquet::basic::{ConvertedType, LogicalType, Type as Physical};
use parquet::file::metadata::{ColumnChunkMetaData, RowGroupMetaData};
use parquet::file::statistics::Statistics;
use sqlparser::ast::{BinaryOperator as Op, Expr, UnaryOperator, Value};
use std::cmp::Ordering;

/// What is proved for every row of a row group.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Verdict {
    /// The condition is true.
    AllKeep,
    /// The condition is false (and not null).
    AllFail,
    /// The condition is null: every row fails, and counts as missing.
    AllMissing,
}

/// What the statistics of `row_group` prove about `condition` (of [`super::Cuts::condition`]); `None` when the rows must
/// be read.
pub fn decide(condition: &Expr, row_group: &RowGroupMetaData) -> Option<Verdict> {
    if row_group.num_rows() <= 0 {
        return None;
    }
    match truth(condition, row_group, 0).0 {
        TRUE => Some(Verdict::AllKeep),
        FALSE => Some(Verdict::AllFail),
        NULL => Some(Verdict::AllMissing),
        _ => None,
    }
}

const TRUE: u8 = 1;
const FALSE: u8 = 2;
const NULL: u8 = 4;
const EACH: [u8; 3] = [TRUE, FALSE, NULL];

/// Truth values that a row may give.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
struct Set(u8);

impl Set {
    const ANY: Set = Set(TRUE | FALSE | NULL);

    fn has(self, value: u8) -> bool {
        self.0 & value != 0
    }

    fn map(self, f: impl Fn(u8) -> u8) -> Set {
        Set(EACH.into_iter().filter(|v| self.has(*v)).fold(0, |set, v| set | f(v)))
    }

    fn not(self) -> Set {
        self.map(|v| match v {
            TRUE => FALSE,
            FALSE => TRUE,
            _ => NULL,
        })
    }

    fn with(self, other: Set, f: impl Fn(u8, u8) -> u8) -> Set {
        self.map(|a| other.map(|b| f(a, b)).0)
    }

    fn and(self, other: Set) -> Set {
        self.with(other, |a, b| match (a, b) {
            (FALSE, _) | (_, FALSE) => FALSE,
            (TRUE, TRUE) => TRUE,
            _ => NULL,
        })
    }

    fn or(self, other: Set) -> Set {
        self.not().and(other.not()).not()
    }
}

/// Least and greatest of the values that are not null.
#[derive(Debug, Clone, PartialEq)]
enum Bounds {
    Integer(i128, i128),
    Unsigned(i128, i128),
    Real(f64, f64),
    Boolean(bool, bool),
    Text(Vec<u8>, Vec<u8>),
    Unknown,
}

/// A side of a comparison.
enum Side {
    Column { bounds: Bounds, may_be_null: bool, may_be_value: bool },
    Whole(i128),
    Real(f64),
    Boolean(bool),
    Text(String),
    Null,
}

fn truth(condition: &Expr, group: &RowGroupMetaData, depth: usize) -> Set {
    if depth > 200 {
        return Set::ANY;
    }
    let sub = |e: &Expr| truth(e, group, depth + 1);
    match condition {
        Expr::Nested(e) => sub(e),
        Expr::UnaryOp { op: UnaryOperator::Not, expr } => sub(expr).not(),
        Expr::BinaryOp { left, op: Op::And, right } => sub(left).and(sub(right)),
        Expr::BinaryOp { left, op: Op::Or, right } => sub(left).or(sub(right)),
        Expr::BinaryOp { left, op, right } => compared(left, op, right, group),
        Expr::Between { expr, negated, low, high } => {
            let set = compared(expr, &Op::GtEq, low, group).and(compared(expr, &Op::LtEq, high, group));
            if *negated { set.not() } else { set }
        }
        Expr::InList { expr, list, negated } => {
            let set = list.iter().fold(Set(FALSE), |set, item| set.or(compared(expr, &Op::Eq, item, group)));
            if *negated { set.not() } else { set }
        }
        Expr::IsNull(e) => nullness(e, group, depth),
        Expr::IsNotNull(e) => nullness(e, group, depth).not(),
        Expr::IsTrue(e) => sub(e).map(|v| if v == TRUE { TRUE } else { FALSE }),
        Expr::IsNotTrue(e) => sub(e).map(|v| if v == TRUE { FALSE } else { TRUE }),
        Expr::IsFalse(e) => sub(e).map(|v| if v == FALSE { TRUE } else { FALSE }),
        Expr::IsNotFalse(e) => sub(e).map(|v| if v == FALSE { FALSE } else { TRUE }),
        Expr::Identifier(_) | Expr::Value(_) => match side(condition, group) {
            Some(column @ Side::Column { .. }) => compare(&column, &Op::Eq, &Side::Boolean(true)),
            Some(Side::Boolean(b)) => Set(if b { TRUE } else { FALSE }),
            Some(Side::Null) => Set(NULL),
            _ => Set::ANY,
        },
        _ => Set::ANY,
    }
}

/// Truth of `e IS NULL`.
fn nullness(e: &Expr, group: &RowGroupMetaData, depth: usize) -> Set {
    match side(e, group) {
        Some(Side::Column { may_be_null, may_be_value, .. }) => {
            Set(if may_be_null { TRUE } else { 0 } | if may_be_value { FALSE } else { 0 })
        }
        Some(Side::Null) => Set(TRUE),
        Some(_) => Set(FALSE),
        None => truth(e, group, depth + 1).map(|v| if v == NULL { TRUE } else { FALSE }),
    }
}

fn compared(left: &Expr, op: &Op, right: &Expr, group: &RowGroupMetaData) -> Set {
    match (side(left, group), side(right, group)) {
        (Some(column @ Side::Column { .. }), Some(literal)) => compare(&column, op, &literal),
        (Some(literal), Some(column @ Side::Column { .. })) => match op {
            Op::Lt => compare(&column, &Op::Gt, &literal),
            Op::LtEq => compare(&column, &Op::GtEq, &literal),
            Op::Gt => compare(&column, &Op::Lt, &literal),
            Op::GtEq => compare(&column, &Op::LtEq, &literal),
            op => compare(&column, op, &literal),
        },
        _ => Set::ANY,
    }
}

/// Truth values of `column op literal`.
fn compare(column: &Side, op: &Op, literal: &Side) -> Set {
    let Side::Column { bounds, may_be_null, may_be_value } = column else { return Set::ANY };
    if matches!(literal, Side::Null) {
        return Set(NULL);
    }
    if !may_be_value {
        return Set(NULL);
    }
    // How the least and the greatest value stand to the literal, compared as the condition itself would be: whole
    // numbers as integers where the literal fits the column's type, as doubles otherwise (rounding keeps the order).
    let orders = match (bounds, literal) {
        (Bounds::Integer(lo, hi), Side::Whole(n)) if i64::try_from(*n).is_ok() => Some((lo.cmp(n), hi.cmp(n))),
        (Bounds::Unsigned(lo, hi), Side::Whole(n)) if u64::try_from(*n).is_ok() => Some((lo.cmp(n), hi.cmp(n))),
        (Bounds::Integer(lo, hi) | Bounds::Unsigned(lo, hi), Side::Whole(n)) => {
            reals(*lo as f64, *hi as f64, *n as f64)
        }
        (Bounds::Integer(lo, hi) | Bounds::Unsigned(lo, hi), Side::Real(x)) => reals(*lo as f64, *hi as f64, *x),
        (Bounds::Real(lo, hi), Side::Real(x)) => reals(*lo, *hi, *x),
        (Bounds::Real(lo, hi), Side::Whole(n)) => reals(*lo, *hi, *n as f64),
        (Bounds::Boolean(lo, hi), Side::Boolean(b)) => Some((lo.cmp(b), hi.cmp(b))),
        (Bounds::Text(lo, hi), Side::Text(t)) => {
            Some((lo.as_slice().cmp(t.as_bytes()), hi.as_slice().cmp(t.as_bytes())))
        }
        _ => None,
    };
    let values = match orders {
        None => Set(TRUE | FALSE),
        Some((lo, hi)) => {
            let may = |order: Ordering| lo <= order && order <= hi;
            let (less, equal, more) = (may(Ordering::Less), may(Ordering::Equal), may(Ordering::Greater));
            let set = |t: bool, f: bool| Set(if t { TRUE } else { 0 } | if f { FALSE } else { 0 });
            match op {
                Op::Eq => set(equal, less || more),
                Op::NotEq => set(less || more, equal),
                Op::Lt => set(less, equal || more),
                Op::LtEq => set(less || equal, more),
                Op::Gt => set(more, less || equal),
                Op::GtEq => set(equal || more, less),
                _ => return Set::ANY,
            }
        }
    };
    Set(values.0 | if *may_be_null { NULL } else { 0 })
}

fn reals(lo: f64, hi: f64, x: f64) -> Option<(Ordering, Ordering)> {
    Some((lo.partial_cmp(&x)?, hi.partial_cmp(&x)?))
}

fn side(e: &Expr, group: &RowGroupMetaData) -> Option<Side> {
    match e {
        Expr::Nested(e) => side(e, group),
        Expr::Identifier(name) => column(&name.value, group),
        Expr::UnaryOp { op: UnaryOperator::Minus, expr } => match side(expr, group)? {
            Side::Whole(n) => Some(Side::Whole(-n)),
            Side::Real(x) => Some(Side::Real(-x)),
            _ => None,
        },
        Expr::Value(value) => match &value.value {
            Value::Number(text, _) if text.contains(['.', 'e', 'E']) => text.parse().ok().map(Side::Real),
            Value::Number(text, _) => text.parse().ok().map(Side::Whole),
            Value::SingleQuotedString(text) => Some(Side::Text(text.clone())),
            Value::Boolean(b) => Some(Side::Boolean(*b)),
            Value::Null => Some(Side::Null),
            _ => None,
        },
        _ => None,
    }
}

/// A flat column of the file; `None` for one that the file does not have (a computed one).
fn column(name: &str, group: &RowGroupMetaData) -> Option<Side> {
    let chunk = group.columns().iter().find(|c| c.column_path().parts() == [name])?;
    let description = chunk.column_descr();
    if description.max_rep_level() > 0 {
        return None;
    }
    let rows = group.num_rows() as u64;
    let float = matches!(description.physical_type(), Physical::FLOAT | Physical::DOUBLE)
        || description.logical_type_ref() == Some(&LogicalType::Float16);
    let nulls = if description.max_def_level() == 0 {
        Some(0)
    } else {
        chunk.statistics().and_then(Statistics::null_count_opt)
    };
    // NaN is missing here, and no null count includes it.
    let may_be_null = float || nulls != Some(0);
    let may_be_value = nulls.is_none_or(|n| n < rows);
    let bounds = if float { Bounds::Unknown } else { bounds(chunk).unwrap_or(Bounds::Unknown) };
    Some(Side::Column { bounds, may_be_null, may_be_value })
}

fn bounds(chunk: &ColumnChunkMetaData) -> Option<Bounds> {
    let statistics = chunk.statistics().filter(|s| !s.is_min_max_deprecated())?;
    let description = chunk.column_descr();
    let (logical, converted) = (description.logical_type_ref(), description.converted_type());
    let decimal = matches!(logical, Some(LogicalType::Decimal(_))) || converted == ConvertedType::DECIMAL;
    let unsigned = match logical {
        Some(LogicalType::Integer(integer)) => !integer.is_signed,
        _ => matches!(
            converted,
            ConvertedType::UINT_8 | ConvertedType::UINT_16 | ConvertedType::UINT_32 | ConvertedType::UINT_64
        ),
    };
    let plain = matches!(logical, None | Some(LogicalType::Integer(_)));
    let ordered = |lo: i128, hi: i128, make: fn(i128, i128) -> Bounds| (lo <= hi).then(|| make(lo, hi));
    // Widened by two places, because the cast to a double rounds.
    let scaled = |lo: i128, hi: i128| {
        let unit = 10_f64.powi(description.type_scale());
        let (lo, hi) = (lo as f64 / unit, hi as f64 / unit);
        (lo <= hi).then(|| Bounds::Real(lo.next_down().next_down(), hi.next_up().next_up()))
    };
    match statistics {
        Statistics::Boolean(s) => {
            let (lo, hi) = (*s.min_opt()?, *s.max_opt()?);
            (lo <= hi).then_some(Bounds::Boolean(lo, hi))
        }
        Statistics::Int32(s) => {
            let (lo, hi) = (*s.min_opt()?, *s.max_opt()?);
            match (decimal, unsigned) {
                (true, _) => scaled(lo.into(), hi.into()),
                (_, true) => ordered((lo as u32).into(), (hi as u32).into(), Bounds::Integer),
                _ if plain => ordered(lo.into(), hi.into(), Bounds::Integer),
                _ => None,
            }
        }
        Statistics::Int64(s) => {
            let (lo, hi) = (*s.min_opt()?, *s.max_opt()?);
            match (decimal, unsigned) {
                (true, _) => scaled(lo.into(), hi.into()),
                (_, true) => ordered((lo as u64).into(), (hi as u64).into(), Bounds::Unsigned),
                _ if plain => ordered(lo.into(), hi.into(), Bounds::Integer),
                _ => None,
            }
        }
        Statistics::ByteArray(s) if decimal => {
            scaled(big_endian(s.min_opt()?.data())?, big_endian(s.max_opt()?.data())?)
        }
        Statistics::FixedLenByteArray(s) if decimal => {
            scaled(big_endian(s.min_opt()?.data())?, big_endian(s.max_opt()?.data())?)
        }
        Statistics::ByteArray(s) if logical == Some(&LogicalType::String) || converted == ConvertedType::UTF8 => {
            let (lo, hi) = (s.min_opt()?.data().to_vec(), s.max_opt()?.data().to_vec());
            (lo <= hi).then_some(Bounds::Text(lo, hi))
        }
        _ => None,
    }
}

/// A signed big-endian integer of up to 16 bytes.
fn big_endian(bytes: &[u8]) -> Option<i128> {
    let first = *bytes.first()?;
    if bytes.len() > 16 {
        return None;
    }
    let sign = if first & 0x80 == 0 { 0 } else { -1 };
    Some(bytes.iter().fold(sign, |n, byte| n << 8 | i128::from(*byte)))
}
