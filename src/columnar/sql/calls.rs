//! Calls of functions by name, and which names are functions over many rows.

use polars::prelude as pl;
use sqlparser::ast::{self, BinaryOperator as Op, Expr as Sql};

use super::Kind;
use super::functions as f;
use super::translate::{Translator, all, both};
use super::typed::{Typed, alike_named, common_named, quoted};
use crate::columnar::bridge::Handed;
use crate::error::{Error, Result, suggestion};

use Handed::{Boolean, Float64, Integer, Text, Unsigned};

impl Translator<'_> {
    pub(super) fn function(&mut self, function: &ast::Function) -> Result<Typed> {
        let name = function.name.to_string().to_lowercase();
        if function.over.is_some() {
            return Err(Error::plan(format!(
                "`{function}` is a window function; an expression here sees one row at a time."
            )));
        }
        if is_aggregate(&name) {
            if let Some(aggregates) = &self.scope.aggregates {
                return aggregates.column(function).map(|(name, kind)| Typed::of(pl::col(name), kind));
            }
            return Err(Error::plan(format!(
                "`{function}` is an aggregate over many rows, which cannot stand here; an expression here sees one row at a time."
            )));
        }
        let arguments = arguments(function)?;
        let one = |arguments: &[&Sql]| match arguments {
            [x] => Ok((*x).clone()),
            other => Err(wrong_count(&name, "one argument", other.len())),
        };
        let two = |arguments: &[&Sql]| match arguments {
            [x, y] => Ok(((*x).clone(), (*y).clone())),
            other => Err(wrong_count(&name, "two arguments", other.len())),
        };
        let real: Option<fn(f64) -> f64> = match name.as_str() {
            "sqrt" => Some(f64::sqrt),
            "cbrt" => Some(libm::cbrt),
            "exp" => Some(libm::exp),
            "ln" => Some(libm::log),
            "log10" => Some(libm::log10),
            "log2" => Some(libm::log2),
            "sin" => Some(libm::sin),
            "cos" => Some(libm::cos),
            "tan" => Some(libm::tan),
            "asin" => Some(libm::asin),
            "acos" => Some(libm::acos),
            "atan" => Some(libm::atan),
            "degrees" => Some(f64::to_degrees),
            "radians" => Some(f64::to_radians),
            _ => None,
        };
        if let Some(f) = real {
            return Ok(Typed::of(f::real(self.real(&one(&arguments)?)?, f), Float64));
        }
        match name.as_str() {
            "abs" => {
                let argument = one(&arguments)?;
                let (typed, kind) = self.number(&argument)?;
                match kind {
                    Integer => Ok(Typed::of(f::integer(typed.into_expr(Integer), i64::checked_abs), Integer)),
                    Unsigned => Ok(typed),
                    _ => self.rounded(&argument, f64::abs),
                }
            }
            "ceil" | "ceiling" => self.rounded(&one(&arguments)?, libm::ceil),
            "floor" => self.rounded(&one(&arguments)?, libm::floor),
            "trunc" => self.rounded(&one(&arguments)?, libm::trunc),
            "round" => self.rounded(&one(&arguments)?, libm::round),
            "sign" => self.rounded(&one(&arguments)?, |x| if x == 0.0 { 0.0 } else { 1.0_f64.copysign(x) }),
            "power" | "pow" | "atan2" | "mod" => {
                let (x, y) = two(&arguments)?;
                if name == "mod" {
                    return self.arithmetic(&x, &Op::Modulo, &y);
                }
                let f = if name == "atan2" { libm::atan2 } else { libm::pow };
                let (x, y) = both(self.real(&x), self.real(&y))?;
                Ok(Typed::of(f::real_of_two(x, y, f), Float64))
            }
            "coalesce" => {
                let values = all(arguments.iter().map(|a| self.visit(a)))?;
                let kind = common_named(&values, &function.to_string())?;
                let values = values.into_iter().map(|v| v.into_expr(kind));
                let expr = values
                    .rev()
                    .reduce(|rest, value| pl::when(value.clone().is_not_null()).then(value).otherwise(rest));
                expr.map(|e| Typed::of(e, kind)).ok_or_else(|| wrong_count(&name, "an argument", 0))
            }
            "nullif" => {
                let (x, y) = two(&arguments)?;
                let (x, y) = both(self.visit(&x), self.visit(&y))?;
                let Kind::Of(kind) = x.kind else { return Ok(Typed::null()) };
                let value = x.clone().into_expr(kind);
                let (a, b) = alike_named(x, y, &function.to_string())?;
                let same = a.eq(b).fill_null(pl::lit(false));
                Ok(Typed::of(pl::when(same.not()).then(value).otherwise(pl::lit(pl::NULL).cast(kind.polars())), kind))
            }
            "lower" => Ok(Typed::of(f::change_text(self.text(&one(&arguments)?)?, str::to_lowercase), Text)),
            "upper" => Ok(Typed::of(f::change_text(self.text(&one(&arguments)?)?, str::to_uppercase), Text)),
            "length" | "char_length" => Ok(Typed::of(f::length(self.text(&one(&arguments)?)?), Integer)),
            "substr" => match arguments.as_slice() {
                [x, from] => self.substring(x, Some(from), None),
                [x, from, count] => self.substring(x, Some(from), Some(count)),
                other => Err(wrong_count(&name, "two or three arguments", other.len())),
            },
            "starts_with" | "ends_with" => {
                let (x, y) = two(&arguments)?;
                let Some(part) = quoted(&y) else {
                    return Err(Error::plan(format!("`{function}` needs its second argument in single quotes.")));
                };
                let starts = name == "starts_with";
                let test = move |x: &str| if starts { x.starts_with(&part) } else { x.ends_with(&part) };
                Ok(Typed::of(f::test_text(self.text(&x)?, test), Boolean))
            }
            "log" => Err(Error::plan("`LOG` means different things in different places; write LN or LOG10.")),
            "isnan" | "is_nan" | "isfinite" | "isinf" => Err(Error::plan(format!(
                "`{function}` is not needed: a value that is not finite is missing here. Write `x IS NULL` or `x IS NOT NULL`."
            ))),
            _ => Err(Error::plan(format!("There is no function `{name}`.{}", suggestion(&name, FUNCTIONS)))),
        }
    }
}

/// Functions of one row.
const FUNCTIONS: [&str; 35] = [
    "abs",
    "acos",
    "asin",
    "atan",
    "atan2",
    "cbrt",
    "ceil",
    "char_length",
    "coalesce",
    "cos",
    "degrees",
    "ends_with",
    "exp",
    "floor",
    "length",
    "ln",
    "log10",
    "log2",
    "lower",
    "mod",
    "nullif",
    "power",
    "radians",
    "round",
    "sign",
    "sin",
    "sqrt",
    "starts_with",
    "substr",
    "substring",
    "tan",
    "trim",
    "trunc",
    "upper",
    "ceiling",
];

/// True for the name of a function over many rows, whether a query can compute it or not.
pub fn is_aggregate(name: &str) -> bool {
    const NAMES: [&str; 36] = [
        "count",
        "sum",
        "avg",
        "mean",
        "min",
        "max",
        "stddev",
        "stddev_samp",
        "stddev_pop",
        "variance",
        "var_samp",
        "var_pop",
        "stdev",
        "stdev_samp",
        "var",
        "median",
        "mode",
        "quantile",
        "quantile_cont",
        "quantile_disc",
        "percentile_cont",
        "percentile_disc",
        "first",
        "last",
        "any_value",
        "array_agg",
        "string_agg",
        "group_concat",
        "corr",
        "covar_pop",
        "covar_samp",
        "bit_and",
        "bit_or",
        "bit_xor",
        "every",
        "total",
    ];
    NAMES.contains(&name)
}

fn wrong_count(name: &str, needs: &str, got: usize) -> Error {
    Error::plan(format!("The function `{name}` takes {needs}, not {got}."))
}

/// The plain arguments of a function.
pub fn arguments(function: &ast::Function) -> Result<Vec<&Sql>> {
    use ast::{FunctionArg, FunctionArgExpr, FunctionArguments};
    let odd =
        || Error::plan(format!("`{function}` is written in a way that is not supported; use `name(argument, ...)`."));
    let list = match &function.args {
        FunctionArguments::List(list) if list.duplicate_treatment.is_none() && list.clauses.is_empty() => &list.args,
        _ => return Err(odd()),
    };
    let plain = function.filter.is_none() && function.within_group.is_empty() && function.null_treatment.is_none();
    if !plain || !matches!(function.parameters, FunctionArguments::None) {
        return Err(odd());
    }
    list.iter()
        .map(|argument| match argument {
            FunctionArg::Unnamed(FunctionArgExpr::Expr(expr)) => Ok(expr),
            _ => Err(odd()),
        })
        .collect()
}
