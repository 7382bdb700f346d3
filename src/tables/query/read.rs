//! Takes a query apart, or says why that cannot be done and what can.

use std::sync::{Arc, Mutex, PoisonError};

use arrow::datatypes::Schema;
use sqlparser::ast::{self, Expr as Sql};

use super::finish::{aggregate_name, key_name};
use super::{Aggregate, Function, Order, Query};
use crate::columnar::bridge::Handed;
use crate::columnar::sql::{self, Aggregates, Expression, Scope, text_of};
use crate::error::{Error, Result};
use crate::plan::tables::QuerySettings;
use crate::tables::RELEASE;

/// What can be asked, for the messages that refuse the rest.
const FORM: &str = "A query here has the form SELECT ... FROM release [WHERE ...] [GROUP BY ...] [HAVING ...] [ORDER BY ...] [LIMIT ...]";

impl Query {
    /// Reads and checks a query over the columns of `schema`.
    ///
    /// # Errors
    /// All faults found at once, each a sentence.
    pub fn new(settings: &QuerySettings, schema: &Schema) -> Result<Self> {
        let statement = sql::parse_statement(&settings.sql)?;
        let ast::Statement::Query(query) = statement else {
            return Err(Error::plan(format!("This is not a SELECT. {FORM}.")));
        };
        let (select, table) = plain_select(&query)?;
        let mut errors = Vec::new();
        let mut keep = |error: Error| errors.push(error);

        let row = Scope::of(schema).with_table(RELEASE).with_table(table);
        let condition = select.selection.as_ref().and_then(|e| boolean(e, &row, "WHERE").map_err(&mut keep).ok());

        let items = select.projection.iter().filter_map(|item| named(item).map_err(&mut keep).ok()).collect::<Vec<_>>();
        let mut keys = Vec::new();
        let collector = Arc::new(Collector { row: row.clone(), found: Mutex::default() });
        let mut grouped = row.grouped(collector.clone());
        let ast::GroupByExpr::Expressions(group_by, modifiers) = &select.group_by else {
            return Err(Error::plan("GROUP BY ALL is not supported; name the columns to group by."));
        };
        if !modifiers.is_empty() {
            keep(Error::plan("GROUP BY with a modifier is not supported; name the columns to group by."));
        }
        for key in group_by {
            let meant = match meant(key, &items, |name| row.has(name)) {
                Ok(meant) => meant,
                Err(error) => {
                    keep(error);
                    continue;
                }
            };
            match Expression::new(&meant, &row) {
                Ok(checked) if checked.columns().is_empty() => {
                    keep(Error::plan(format!(
                        "GROUP BY `{key}` names no column, so all rows are one group; leave it out."
                    )));
                }
                Ok(checked) => {
                    let bare = match &meant {
                        Sql::CompoundIdentifier(parts) => parts.last().map(|name| Sql::Identifier(name.clone())),
                        _ => None,
                    };
                    grouped.replace(text_of(bare.as_ref().unwrap_or(&meant)), key_name(keys.len()), checked.kind());
                    keys.push(checked);
                }
                Err(error) => keep(error),
            }
        }

        let mut selected: Vec<(String, Expression)> = Vec::new();
        for (name, expression) in &items {
            if selected.iter().any(|(other, _)| other == name) {
                keep(Error::plan(format!("Two columns would be called `{name}`; give one another name with AS.")));
            }
            match Expression::new(expression, &grouped) {
                Ok(checked) => selected.push((name.clone(), checked)),
                Err(error) => keep(error),
            }
        }
        let having = select.having.as_ref().and_then(|e| boolean(e, &grouped, "HAVING").map_err(&mut keep).ok());
        let order = order_by(&query, &items, &grouped, &mut keep);
        let (skip, limit) = limits(&query).unwrap_or_else(|error| {
            keep(error);
            (0, None)
        });
        let aggregates = collector.found.lock().unwrap_or_else(PoisonError::into_inner).clone();
        if errors.is_empty() && aggregates.is_empty() && keys.is_empty() {
            errors.push(Error::plan(format!(
                "The query selects single rows, which the release already holds; a table needs GROUP BY or an aggregate such as \
                 COUNT(*) or AVG(...). {FORM}."
            )));
        }
        if let Some(error) = Error::all(errors) {
            return Err(error);
        }
        let of_aggregates = aggregates.iter().flat_map(|a| [a.argument.as_ref(), a.filter.as_ref()]).flatten();
        let used = condition.iter().chain(&keys).chain(of_aggregates);
        let mut columns: Vec<String> = used.flat_map(|e| e.columns().to_vec()).collect();
        columns.sort();
        columns.dedup();
        let (name, sql) = (settings.name.clone(), settings.sql.clone());
        Ok(Self { name, sql, condition, keys, aggregates, selected, having, order, skip, limit, columns })
    }
}

/// The one SELECT of a query without anything that needs more than one pass, and the name of its table.
fn plain_select(query: &ast::Query) -> Result<(&ast::Select, String)> {
    let refuse = |what: &str| Err(Error::plan(format!("{what} cannot be answered while rows stream by. {FORM}.")));
    if query.with.is_some() {
        return refuse("WITH");
    }
    if query.fetch.is_some() || !query.locks.is_empty() || query.for_clause.is_some() || query.settings.is_some() {
        return refuse("A clause after the SELECT other than ORDER BY, LIMIT and OFFSET");
    }
    if query.format_clause.is_some() || !query.pipe_operators.is_empty() {
        return refuse("A clause after the SELECT other than ORDER BY, LIMIT and OFFSET");
    }
    let select = match query.body.as_ref() {
        ast::SetExpr::Select(select) => select,
        ast::SetExpr::SetOperation { op, .. } => return refuse(&op.to_string()),
        _ => return refuse("Something other than one SELECT"),
    };
    if select.distinct.is_some() {
        return Err(Error::plan("SELECT DISTINCT is not supported; GROUP BY the same columns instead."));
    }
    if select.top.is_some() {
        return Err(Error::plan("TOP is not supported; use ORDER BY with LIMIT."));
    }
    if select.qualify.is_some() || !select.named_window.is_empty() {
        return refuse("A window");
    }
    let odd = select.into.is_some()
        || select.prewhere.is_some()
        || select.exclude.is_some()
        || select.value_table_mode.is_some()
        || select.select_modifiers.is_some()
        || !select.lateral_views.is_empty()
        || !select.connect_by.is_empty()
        || !select.cluster_by.is_empty()
        || !select.distribute_by.is_empty()
        || !select.sort_by.is_empty();
    if odd {
        return refuse("A clause of this SELECT");
    }
    let [from] = select.from.as_slice() else {
        let what = if select.from.is_empty() { "A SELECT without FROM" } else { "More than one table" };
        return refuse(what);
    };
    if !from.joins.is_empty() {
        return refuse("A join");
    }
    let ast::TableFactor::Table { name, alias, args: None, sample: None, .. } = &from.relation else {
        return refuse("A subquery or function in FROM");
    };
    let plain = name.to_string();
    if plain.trim_matches('"') != RELEASE {
        return Err(Error::plan(format!("There is no table `{plain}`; the one table is `{RELEASE}`.")));
    }
    Ok((select, alias.as_ref().map_or_else(|| RELEASE.to_string(), |a| a.name.value.clone())))
}

/// A condition in `clause`.
fn boolean(expression: &Sql, scope: &Scope, clause: &str) -> Result<Expression> {
    let checked = Expression::new(expression, scope)?;
    if checked.kind() != Handed::Boolean {
        return Err(Error::plan(format!(
            "`{expression}` after {clause} is not a condition; compare it with something."
        )));
    }
    Ok(checked)
}

/// Name and expression of a selected column.
fn named(item: &ast::SelectItem) -> Result<(String, Sql)> {
    match item {
        ast::SelectItem::ExprWithAlias { expr, alias } => Ok((alias.value.clone(), expr.clone())),
        ast::SelectItem::UnnamedExpr(expr) => Ok((
            match expr {
                Sql::Identifier(name) => name.value.clone(),
                Sql::CompoundIdentifier(parts) => parts.last().map_or_else(String::new, |part| part.value.clone()),
                other => other.to_string(),
            },
            expr.clone(),
        )),
        other => Err(Error::plan(format!(
            "`{other}` selects whole rows; name the columns of GROUP BY and aggregates such as COUNT(*)."
        ))),
    }
}

/// What an item of GROUP BY or ORDER BY means: a place among the selected columns, the name of one, or itself.
fn meant(item: &Sql, items: &[(String, Sql)], is_column: impl Fn(&str) -> bool) -> Result<Sql> {
    match item {
        Sql::Value(ast::ValueWithSpan { value: ast::Value::Number(text, _), .. }) => {
            let place = text.parse::<usize>().ok().and_then(|n| n.checked_sub(1)).and_then(|i| items.get(i));
            place.map(|(_, expression)| expression.clone()).ok_or_else(|| {
                Error::plan(format!("There is no selected column {text}; the query selects {}.", items.len()))
            })
        }
        Sql::Identifier(name) if !is_column(&name.value) => {
            let same = items.iter().find(|(alias, _)| *alias == name.value);
            Ok(same.map_or_else(|| item.clone(), |(_, expression)| expression.clone()))
        }
        other => Ok(other.clone()),
    }
}

fn order_by(query: &ast::Query, items: &[(String, Sql)], scope: &Scope, keep: &mut impl FnMut(Error)) -> Vec<Order> {
    let Some(clause) = &query.order_by else { return Vec::new() };
    let ast::OrderByKind::Expressions(list) = &clause.kind else {
        keep(Error::plan("ORDER BY ALL is not supported; name the columns to order by."));
        return Vec::new();
    };
    let mut order = Vec::new();
    for item in list {
        // Unlike in GROUP BY, a selected name comes first here.
        let checked = meant(&item.expr, items, |_| false).and_then(|meant| Expression::new(&meant, scope));
        let descending = item.options.asc == Some(false);
        match checked {
            Ok(by) => order.push(Order { by, descending, nulls_first: item.options.nulls_first.unwrap_or(descending) }),
            Err(error) => keep(error),
        }
    }
    order
}

/// Rows to skip, and rows to give at most.
fn limits(query: &ast::Query) -> Result<(usize, Option<usize>)> {
    let count = |e: &Sql| match e {
        Sql::Value(ast::ValueWithSpan { value: ast::Value::Number(text, _), .. }) => text.parse::<usize>().ok(),
        _ => None,
    };
    let count =
        |e: &Sql| count(e).ok_or_else(|| Error::plan(format!("LIMIT and OFFSET take a whole number, not `{e}`.")));
    match &query.limit_clause {
        None => Ok((0, None)),
        Some(ast::LimitClause::LimitOffset { limit, offset, limit_by }) if limit_by.is_empty() => {
            let skip = offset.as_ref().map(|o| count(&o.value)).transpose()?.unwrap_or(0);
            Ok((skip, limit.as_ref().map(count).transpose()?))
        }
        Some(ast::LimitClause::OffsetCommaLimit { offset, limit }) => Ok((count(offset)?, Some(count(limit)?))),
        Some(_) => Err(Error::plan("LIMIT BY is not supported; use LIMIT with a number.")),
    }
}

/// Gathers the aggregates of a query as they are met.
#[derive(Debug)]
struct Collector {
    row: Scope,
    found: Mutex<Vec<Aggregate>>,
}

impl Aggregates for Collector {
    fn column(&self, function: &ast::Function) -> Result<(String, Handed)> {
        let aggregate = aggregate(function, &self.row)?;
        let mut found = self.found.lock().unwrap_or_else(PoisonError::into_inner);
        let place = found.iter().position(|known| known.text == aggregate.text).unwrap_or_else(|| {
            found.push(aggregate);
            found.len() - 1
        });
        Ok((aggregate_name(place), found[place].kind()))
    }

    fn kind(&self, name: &str) -> Option<Handed> {
        let found = self.found.lock().unwrap_or_else(PoisonError::into_inner);
        found.iter().enumerate().find(|(i, _)| aggregate_name(*i) == name).map(|(_, aggregate)| aggregate.kind())
    }
}

fn aggregate(call: &ast::Function, row: &Scope) -> Result<Aggregate> {
    let name = call.name.to_string().to_lowercase();
    let function = match name.as_str() {
        "count" => Function::Count,
        "sum" => Function::Sum,
        "avg" | "mean" => Function::Mean,
        "min" => Function::Min,
        "max" => Function::Max,
        "stddev" | "stddev_samp" => Function::Variance { less: 1, root: true },
        "stddev_pop" => Function::Variance { less: 0, root: true },
        "variance" | "var_samp" => Function::Variance { less: 1, root: false },
        "var_pop" => Function::Variance { less: 0, root: false },
        "median" | "quantile" | "quantile_cont" | "quantile_disc" | "percentile_cont" | "percentile_disc" | "mode" => {
            return Err(Error::plan(format!(
                "`{call}` needs all values at once and cannot be added up part by part; use AVG with STDDEV, or count in bins \
                 with GROUP BY FLOOR(x / 0.1)."
            )));
        }
        _ => {
            return Err(Error::plan(format!(
                "`{call}` is not among the aggregates of a table: COUNT, SUM, AVG, MIN, MAX, STDDEV_SAMP, STDDEV_POP, VAR_SAMP, \
                 VAR_POP."
            )));
        }
    };
    let text = text_of(&Sql::Function(call.clone()));
    let mut plain = call.clone();
    let filter = plain.filter.take().map(|e| boolean(&e, row, "FILTER (WHERE")).transpose()?;
    if let ast::FunctionArguments::List(list) = &call.args {
        if list.duplicate_treatment == Some(ast::DuplicateTreatment::Distinct) {
            return Err(Error::plan(format!(
                "`{call}` must remember every value it has seen; GROUP BY the column and count the rows of that table instead."
            )));
        }
        let star = [ast::FunctionArg::Unnamed(ast::FunctionArgExpr::Wildcard)];
        if function == Function::Count && list.args == star && list.clauses.is_empty() {
            return Ok(Aggregate { text, function, argument: None, filter });
        }
    }
    let arguments = sql::arguments(&plain)?;
    let [argument] = arguments.as_slice() else {
        return Err(Error::plan(format!("`{call}` takes one argument, not {}.", arguments.len())));
    };
    let argument = Expression::new(argument, row)?;
    let fits = match function {
        Function::Count | Function::Min | Function::Max => true,
        Function::Sum | Function::Mean => argument.kind() != Handed::Text,
        Function::Variance { .. } => !matches!(argument.kind(), Handed::Text | Handed::Boolean),
    };
    if !fits {
        return Err(Error::plan(format!("`{call}` needs numbers.")));
    }
    Ok(Aggregate { text, function, argument: Some(argument), filter })
}
