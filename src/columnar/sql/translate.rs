//! From the SQL syntax tree to a typed polars expression: what each operator means, and what is refused.
//!
//! All casts are explicit, so that no engine's coercion rules decide. Numbers meet as follows: a literal takes the type
//! of the column beside it; integers stay integers; anything beside a Float64, and an integer column beside a Float32
//! one, becomes Float64. Unsigned 64-bit columns compare with each other and with literals; to compute with them, cast.

use polars::prelude as pl;
use polars::prelude::Literal;
use sqlparser::ast::{self, BinaryOperator as Op, Expr as Sql, UnaryOperator};

use super::functions as f;
use super::typed::{
    Number, Typed, alike, common, compare, constant, exact_integer, is_number, literal, meet, negate_if, quoted,
};
use super::{Kind, Scope, text_of};
use crate::columnar::bridge::Handed;
use crate::error::{Error, Result};

use Handed::{Boolean, Float32, Float64, Integer, Text, Unsigned};

/// Deepest tree that is translated. The parser allows 50 brackets; chains of AND and OR count as one level.
const DEEPEST: usize = 100;

/// Translates `sql` over the names of `scope`.
///
/// # Errors
/// All faults found at once, each a sentence.
pub fn translate(sql: &Sql, scope: &Scope) -> Result<Typed> {
    Translator { scope, depth: 0 }.visit(sql)
}

/// Columns of the frame that `sql` reads, sorted and without repetition.
pub fn columns_of(sql: &Sql, scope: &Scope) -> Vec<String> {
    let translated = translate(sql, scope);
    let mut names: Vec<String> = translated.map(|t| leaves(&t.expr)).unwrap_or_default();
    names.sort();
    names.dedup();
    names
}

fn leaves(expr: &pl::Expr) -> Vec<String> {
    expr.into_iter()
        .filter_map(|e| match e {
            pl::Expr::Column(name) => Some(name.to_string()),
            _ => None,
        })
        .collect()
}

pub(super) struct Translator<'a> {
    pub(super) scope: &'a Scope,
    depth: usize,
}

/// Both results, or the faults of both.
pub(super) fn both<A, B>(a: Result<A>, b: Result<B>) -> Result<(A, B)> {
    match (a, b) {
        (Ok(a), Ok(b)) => Ok((a, b)),
        (Err(a), Err(b)) => Err(Error::all(vec![a, b]).expect("two errors are not none")),
        (Err(e), _) | (_, Err(e)) => Err(e),
    }
}

pub(super) fn all<T>(results: impl IntoIterator<Item = Result<T>>) -> Result<Vec<T>> {
    let (mut good, mut bad) = (Vec::new(), Vec::new());
    for result in results {
        match result {
            Ok(value) => good.push(value),
            Err(error) => bad.push(error),
        }
    }
    Error::all(bad).map_or(Ok(good), Err)
}

impl Translator<'_> {
    pub(super) fn visit(&mut self, sql: &Sql) -> Result<Typed> {
        if self.depth >= DEEPEST {
            return Err(Error::plan("The SQL expression is too long a chain; split it into several."));
        }
        self.depth += 1;
        let result = self.visit_here(sql);
        self.depth -= 1;
        result
    }

    fn visit_here(&mut self, sql: &Sql) -> Result<Typed> {
        if !self.scope.replaced.is_empty()
            && let Some((name, kind)) = self.scope.replaced.get(&text_of(sql))
        {
            return Ok(Typed::of(pl::col(name.as_str()), *kind));
        }
        match sql {
            Sql::Identifier(name) => self.column(&name.value),
            Sql::CompoundIdentifier(parts) => match parts.as_slice() {
                [table, name] if self.scope.tables.contains(&table.value) => self.visit(&Sql::Identifier(name.clone())),
                _ => Err(Error::plan(format!(
                    "`{sql}` is read as a column of another table; a name with a dot needs double quotes."
                ))),
            },
            Sql::Nested(inner) => self.visit(inner),
            Sql::Value(value) => literal(&value.value),
            Sql::UnaryOp { op, expr } => self.unary(*op, expr),
            Sql::BinaryOp { left, op, right } => self.binary(left, op, right, sql),
            Sql::Between { expr, negated, low, high } => {
                let (value, (low, high)) = both(self.visit(expr), both(self.visit(low), self.visit(high)))?;
                let above = compare(value.clone(), &Op::GtEq, low, sql)?;
                let below = compare(value, &Op::LtEq, high, sql)?;
                Ok(negate_if(*negated, above.expr.and(below.expr)))
            }
            Sql::InList { expr, list, negated } => self.in_list(expr, list, *negated, sql),
            Sql::IsNull(e) | Sql::IsUnknown(e) => Ok(Typed::of(self.visit(e)?.expr.is_null(), Boolean)),
            Sql::IsNotNull(e) | Sql::IsNotUnknown(e) => Ok(Typed::of(self.visit(e)?.expr.is_not_null(), Boolean)),
            Sql::IsTrue(e) => Ok(Typed::of(self.truth(e)?.fill_null(pl::lit(false)), Boolean)),
            Sql::IsNotTrue(e) => Ok(Typed::of(self.truth(e)?.fill_null(pl::lit(false)).not(), Boolean)),
            Sql::IsFalse(e) => Ok(Typed::of(self.truth(e)?.fill_null(pl::lit(true)).not(), Boolean)),
            Sql::IsNotFalse(e) => Ok(Typed::of(self.truth(e)?.fill_null(pl::lit(true)), Boolean)),
            Sql::IsDistinctFrom(a, b) => self.distinct(a, b, true, sql),
            Sql::IsNotDistinctFrom(a, b) => self.distinct(a, b, false, sql),
            Sql::Like { negated, any: false, expr, pattern, escape_char: None } => {
                self.like(*negated, expr, pattern, false)
            }
            Sql::ILike { negated, any: false, expr, pattern, escape_char: None } => {
                self.like(*negated, expr, pattern, true)
            }
            Sql::Case { operand, conditions, else_result, .. } => {
                self.case(operand.as_deref(), conditions, else_result.as_deref(), sql)
            }
            Sql::Cast { expr, data_type, format: None, .. } => self.cast(expr, data_type),
            Sql::Ceil { expr, .. } => self.rounded(expr, libm::ceil),
            Sql::Floor { expr, .. } => self.rounded(expr, libm::floor),
            Sql::Substring { expr, substring_from, substring_for, .. } => {
                self.substring(expr, substring_from.as_deref(), substring_for.as_deref())
            }
            Sql::Trim { expr, trim_where: None, trim_what: None, trim_characters: None } => {
                Ok(Typed::of(f::change_text(self.text(expr)?, |x| x.trim_matches(' ').to_string()), Text))
            }
            Sql::Function(function) => self.function(function),
            Sql::Subquery(_) | Sql::InSubquery { .. } | Sql::Exists { .. } => Err(Error::plan(format!(
                "`{sql}` is a subquery; an expression here sees one row at a time. Write the values out."
            ))),
            Sql::AnyOp { .. } | Sql::AllOp { .. } => {
                Err(Error::plan(format!("`{sql}` is not supported; write `x IN (...)` or several comparisons.")))
            }
            other => Err(Error::plan(format!(
                "`{other}` is not supported here; use comparisons, AND, OR, NOT, IN, BETWEEN, LIKE, IS NULL, CASE, CAST, \
                 arithmetic and functions of one row."
            ))),
        }
    }

    fn column(&self, name: &str) -> Result<Typed> {
        Ok(Typed::of(pl::col(name), self.scope.kind(name)?))
    }

    /// A boolean operand.
    fn truth(&mut self, sql: &Sql) -> Result<pl::Expr> {
        let typed = self.visit(sql)?;
        match typed.kind {
            Kind::Of(Boolean) | Kind::Null => Ok(typed.into_expr(Boolean)),
            kind => Err(Error::plan(format!(
                "`{sql}` is {}, but a condition is needed there; compare it with something, as in `{sql} > 5`.",
                kind.words()
            ))),
        }
    }

    /// A text operand.
    pub(super) fn text(&mut self, sql: &Sql) -> Result<pl::Expr> {
        let typed = self.visit(sql)?;
        match typed.kind {
            Kind::Of(Text) | Kind::Null => Ok(typed.into_expr(Text)),
            kind => Err(Error::plan(format!("`{sql}` is {}, but text is needed there.", kind.words()))),
        }
    }

    /// A numeric operand and its type.
    pub(super) fn number(&mut self, sql: &Sql) -> Result<(Typed, Handed)> {
        let typed = self.visit(sql)?;
        match typed.kind {
            Kind::Of(kind) if is_number(kind) => Ok((typed, kind)),
            Kind::Null => Ok((Typed::of(typed.into_expr(Float64), Float64), Float64)),
            kind => Err(Error::plan(format!("`{sql}` is {}, but a number is needed there.", kind.words()))),
        }
    }

    pub(super) fn real(&mut self, sql: &Sql) -> Result<pl::Expr> {
        Ok(self.number(sql)?.0.into_expr(Float64))
    }

    fn unary(&mut self, op: UnaryOperator, operand: &Sql) -> Result<Typed> {
        match op {
            UnaryOperator::Not => Ok(Typed::of(self.truth(operand)?.not(), Boolean)),
            UnaryOperator::Plus => Ok(self.number(operand)?.0),
            UnaryOperator::Minus => {
                let (typed, kind) = self.number(operand)?;
                match (typed.number, kind) {
                    (Some(Number::Whole(n)), _) => Ok(Typed::literal(Number::Whole(-n))),
                    (Some(Number::Real(x)), _) => Ok(Typed::literal(Number::Real(-x))),
                    (None, Integer) => Ok(Typed::of(f::integer(typed.expr, i64::checked_neg), Integer)),
                    (None, Unsigned) => Err(unsigned(operand)),
                    (None, Float32) => Ok(Typed::of(typed.expr * constant(-1.0_f32), Float32)),
                    (None, _) => Ok(Typed::of(typed.expr * constant(-1.0_f64), Float64)),
                }
            }
            other => Err(Error::plan(format!("The operator `{other}` is not supported."))),
        }
    }

    fn binary(&mut self, left: &Sql, op: &Op, right: &Sql, whole: &Sql) -> Result<Typed> {
        match op {
            Op::And | Op::Or => {
                let chain = chain(whole, op);
                let terms = all(chain.into_iter().map(|term| self.truth(term)))?;
                Ok(Typed::of(balanced(terms, *op == Op::And), Boolean))
            }
            Op::Xor => {
                let (a, b) = both(self.truth(left), self.truth(right))?;
                Ok(Typed::of(a.neq(b), Boolean))
            }
            Op::Eq | Op::NotEq | Op::Lt | Op::LtEq | Op::Gt | Op::GtEq => {
                let (a, b) = both(self.visit(left), self.visit(right))?;
                compare(a, op, b, whole)
            }
            Op::Plus | Op::Minus | Op::Multiply | Op::Divide | Op::Modulo => self.arithmetic(left, op, right),
            Op::BitwiseAnd | Op::BitwiseOr => {
                let ((a, ka), (b, kb)) = both(self.number(left), self.number(right))?;
                if (ka, kb) != (Integer, Integer) {
                    return Err(Error::plan(format!("`{whole}` needs integers on both sides.")));
                }
                let f = if *op == Op::BitwiseAnd { |x: i64, y: i64| Some(x & y) } else { |x: i64, y: i64| Some(x | y) };
                Ok(Typed::of(f::integer_of_two(a.into_expr(Integer), b.into_expr(Integer), f), Integer))
            }
            Op::StringConcat => {
                let (a, b) = both(self.text(left), self.text(right))?;
                Ok(Typed::of(f::join_texts(a, b), Text))
            }
            Op::PGExp | Op::BitwiseXor => {
                Err(Error::plan(format!("`{op}` in `{whole}` is not supported; write a power as `POWER(x, y)`.")))
            }
            other => Err(Error::plan(format!("The operator `{other}` in `{whole}` is not supported."))),
        }
    }

    pub(super) fn arithmetic(&mut self, left: &Sql, op: &Op, right: &Sql) -> Result<Typed> {
        let ((a, ka), (b, kb)) = both(self.number(left), self.number(right))?;
        let kind = meet(&a, ka, &b, kb);
        if *op == Op::Divide {
            let kind = if kind == Some(Float32) { Float32 } else { Float64 };
            return Ok(Typed::of(f::finite(a.into_expr(kind) / b.into_expr(kind), kind), kind));
        }
        match kind {
            Some(Integer) => {
                let f: fn(i64, i64) -> Option<i64> = match op {
                    Op::Plus => i64::checked_add,
                    Op::Minus => i64::checked_sub,
                    Op::Multiply => i64::checked_mul,
                    _ => i64::checked_rem,
                };
                Ok(Typed::of(f::integer_of_two(a.into_expr(Integer), b.into_expr(Integer), f), Integer))
            }
            Some(kind @ (Float32 | Float64)) if *op != Op::Modulo => {
                let (a, b) = (a.into_expr(kind), b.into_expr(kind));
                let result = match op {
                    Op::Plus => a + b,
                    Op::Minus => a - b,
                    _ => a * b,
                };
                Ok(Typed::of(f::finite(result, kind), kind))
            }
            Some(Float32 | Float64) => {
                Ok(Typed::of(f::real_of_two(a.into_expr(Float64), b.into_expr(Float64), libm::fmod), Float64))
            }
            _ => Err(unsigned(if ka == Unsigned { left } else { right })),
        }
    }

    fn distinct(&mut self, a: &Sql, b: &Sql, distinct: bool, whole: &Sql) -> Result<Typed> {
        let (a, b) = both(self.visit(a), self.visit(b))?;
        let (a, b) = alike(a, b, whole)?;
        Ok(Typed::of(if distinct { a.neq_missing(b) } else { a.eq_missing(b) }, Boolean))
    }

    fn in_list(&mut self, value: &Sql, list: &[Sql], negated: bool, whole: &Sql) -> Result<Typed> {
        let (value, items) = both(self.visit(value), all(list.iter().map(|item| self.visit(item))))?;
        let with_null = items.iter().any(|i| i.kind == Kind::Null);
        let numbers: Vec<Number> = items.iter().filter_map(|i| i.number).collect();
        let texts: Vec<String> = list.iter().filter_map(quoted).collect();
        let given = items.iter().filter(|i| i.kind != Kind::Null).count();
        let found = match value.kind {
            Kind::Of(Integer) if numbers.len() == given => {
                // A list entry beyond 64 bits, or with a fraction, equals no integer.
                let mut list: Vec<i64> = numbers.iter().filter_map(|n| exact_integer(*n)).collect();
                list.sort_unstable();
                f::is_in(value.into_expr(Integer), f::List::Integers(list), with_null)
            }
            Kind::Of(kind @ (Float32 | Float64)) if numbers.len() == given => {
                let narrow = |x: f64| if kind == Float32 { f64::from(x as f32) } else { x };
                let mut list: Vec<f64> = numbers.iter().map(|n| narrow(n.real()) + 0.0).collect();
                list.sort_by(f64::total_cmp);
                f::is_in(value.into_expr(Float64), f::List::Reals(list), with_null)
            }
            Kind::Of(Text) if texts.len() == given => {
                let mut list = texts;
                list.sort();
                f::is_in(value.into_expr(Text), f::List::Texts(list), with_null)
            }
            _ => {
                let tests = all(items.into_iter().map(|item| compare(value.clone(), &Op::Eq, item, whole)))?;
                tests.into_iter().map(|t| t.expr).reduce(|a, b| a.or(b)).unwrap_or_else(|| false.lit())
            }
        };
        Ok(negate_if(negated, found))
    }

    fn like(&mut self, negated: bool, value: &Sql, pattern: &Sql, any_case: bool) -> Result<Typed> {
        let Some(pattern) = quoted(pattern) else {
            return Err(Error::plan(format!("LIKE needs a pattern in single quotes instead of `{pattern}`.")));
        };
        let pattern: Vec<char> = if any_case { pattern.to_lowercase() } else { pattern }.chars().collect();
        let value = self.text(value)?;
        let test = move |x: &str| if any_case { f::like(&x.to_lowercase(), &pattern) } else { f::like(x, &pattern) };
        Ok(negate_if(negated, f::test_text(value, test)))
    }

    fn case(&mut self, on: Option<&Sql>, arms: &[ast::CaseWhen], other: Option<&Sql>, whole: &Sql) -> Result<Typed> {
        let conditions = all(arms.iter().map(|arm| match on {
            None => self.truth(&arm.condition),
            Some(on) => {
                let (on, value) = both(self.visit(on), self.visit(&arm.condition))?;
                Ok(compare(on, &Op::Eq, value, whole)?.expr)
            }
        }));
        let results = all(arms.iter().map(|arm| &arm.result).chain(other).map(|r| self.visit(r)));
        let (conditions, mut results) = both(conditions, results)?;
        if other.is_none() {
            results.push(Typed::null());
        }
        let kind = common(&results, whole)?;
        let mut results = results.into_iter().map(|r| r.into_expr(kind)).rev();
        let last = results.next().unwrap_or_else(|| pl::lit(pl::NULL));
        let expr = conditions
            .into_iter()
            .rev()
            .zip(results)
            .fold(last, |rest, (condition, result)| pl::when(condition).then(result).otherwise(rest));
        Ok(Typed::of(expr, kind))
    }

    fn cast(&mut self, value: &Sql, to: &ast::DataType) -> Result<Typed> {
        use ast::DataType as T;
        let to = match to {
            T::Int(_) | T::Integer(_) | T::BigInt(_) | T::Int64 | T::Int8(_) | T::SmallInt(_) | T::Int4(_) => Integer,
            T::BigIntUnsigned(_) | T::UBigInt | T::UInt64 => Unsigned,
            T::Real | T::Float4 | T::Float32 => Float32,
            T::Double(_) | T::DoublePrecision | T::Float(_) | T::Float8 | T::Float64 => Float64,
            T::Boolean | T::Bool => Boolean,
            T::Text | T::Varchar(_) | T::String(_) | T::Char(_) => Text,
            other => {
                return Err(Error::plan(format!(
                    "CAST to {other} is not supported; use BIGINT, DOUBLE, REAL, BOOLEAN or VARCHAR."
                )));
            }
        };
        let typed = self.visit(value)?;
        if to == Text && matches!(typed.kind, Kind::Of(Float32 | Float64)) {
            return Err(Error::plan(format!("`{value}` is a number with digits of its own; it is not cast to text.")));
        }
        // A value that does not fit becomes null: a lost night for one odd row would serve nobody, and nulls are counted.
        let expr = typed.into_expr(to);
        Ok(Typed::of(if matches!(to, Float32 | Float64) { f::finite(expr, to) } else { expr }, to))
    }

    /// FLOOR and its like: integers stay, floats keep their type.
    pub(super) fn rounded(&mut self, argument: &Sql, f: fn(f64) -> f64) -> Result<Typed> {
        let (typed, kind) = self.number(argument)?;
        Ok(match kind {
            Float32 | Float64 => {
                let result = f::real(typed.into_expr(Float64), f);
                Typed::of(if kind == Float32 { result.cast(Float32.polars()) } else { result }, kind)
            }
            _ => typed,
        })
    }

    pub(super) fn substring(&mut self, value: &Sql, from: Option<&Sql>, count: Option<&Sql>) -> Result<Typed> {
        let whole = |typed: Option<Result<Typed>>| match typed.transpose()?.map(|t| t.number) {
            None => Ok(None),
            Some(Some(Number::Whole(n))) => Ok(Some(n)),
            _ => Err(Error::plan("SUBSTRING takes whole numbers written out as its start and length.")),
        };
        let from = whole(from.map(|s| self.visit(s)))?.unwrap_or(1);
        let count = whole(count.map(|s| self.visit(s)))?;
        if count.is_some_and(|n| n < 0) {
            return Err(Error::plan("SUBSTRING cannot have a negative length."));
        }
        // Places count from 1, and a start below 1 uses up length, as SQL has it.
        let end = count.map(|n| (from + n - 1).max(0) as usize);
        let skip = (from - 1).max(0) as usize;
        let cut = move |x: &str| {
            let take = end.map_or(usize::MAX, |e| e.saturating_sub(skip));
            x.chars().skip(skip).take(take).collect::<String>()
        };
        Ok(Typed::of(f::change_text(self.text(value)?, cut), Text))
    }
}

fn unsigned(sql: &Sql) -> Error {
    Error::plan(format!(
        "`{sql}` is an unsigned 64-bit integer, which arithmetic and comparison with signed columns would garble; \
         write CAST({sql} AS BIGINT) or CAST({sql} AS DOUBLE)."
    ))
}

/// The terms of a chain of one operator, which the parser nests to the left.
fn chain<'a>(mut sql: &'a Sql, op: &Op) -> Vec<&'a Sql> {
    let mut terms = Vec::new();
    while let Sql::BinaryOp { left, op: this, right } = sql
        && this == op
    {
        terms.push(right.as_ref());
        sql = left;
    }
    terms.push(sql);
    terms.reverse();
    terms
}

/// AND or OR of all terms as a balanced tree: as deep as the logarithm of their number.
fn balanced(mut terms: Vec<pl::Expr>, and: bool) -> pl::Expr {
    while terms.len() > 1 {
        let mut pairs = Vec::with_capacity(terms.len().div_ceil(2));
        let mut rest = terms.into_iter();
        while let Some(a) = rest.next() {
            pairs.push(match rest.next() {
                Some(b) if and => a.and(b),
                Some(b) => a.or(b),
                None => a,
            });
        }
        terms = pairs;
    }
    terms.pop().unwrap_or_else(|| and.lit())
}
