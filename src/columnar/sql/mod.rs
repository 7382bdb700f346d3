//! SQL expressions over the columns of a batch: read, checked against a schema, turned into polars expressions, run.
//!
//! The grammar is that of the sqlparser crate; what an expression means is fixed here, in `translate` (operators),
//! `typed` (types) and `calls` (functions), rather than left to an engine's defaults, because conditions decide which stars a release
//! holds. In short:
//! - three-valued logic; a result that is not finite (1/0, `LN(-1)`, overflow) is null, never a large number;
//! - 64-bit integer arithmetic that overflows is null; `/` is real division;
//! - names match exactly, quoted or not; text compares byte by byte;
//! - a literal beside a Float32 column is rounded to Float32 first, so `x >= 0.1` keeps a stored 0.1;
//! - only operations that look at one row: no aggregates, no windows, no subqueries.
//!
//! Each expression is evaluated on its own and without polars' thread pool where its environment asks for one thread.

mod calls;
mod functions;
mod translate;
mod typed;

use std::collections::BTreeMap;
use std::sync::Arc;

use arrow::datatypes::Schema;
use arrow::record_batch::RecordBatch;
use polars::prelude as pl;
use polars::prelude::IntoLazy;
use sqlparser::ast;
use sqlparser::dialect::GenericDialect;
use sqlparser::parser::{Parser, ParserError};
use sqlparser::tokenizer::{Token, Tokenizer};

use super::bridge::{self, Handed};
use crate::error::{Error, Result, suggestion};

pub use calls::{arguments, is_aggregate};
pub use translate::translate;
pub use typed::Typed;

/// Longest SQL text that is read, in bytes; bounds the depth of what follows.
const LONGEST: usize = 64 * 1024;
/// Most words and signs in it, beside literals and commas: chains nest one level an operator, and trees are walked and
/// freed recursively, so this keeps the stack of any thread safe. Lists of values may be long.
const MOST_TOKENS: usize = 2000;

/// Type of an SQL expression.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Kind {
    /// A column type.
    Of(Handed),
    /// The literal NULL, which takes any type.
    Null,
}

impl Kind {
    /// The type in words, for messages.
    pub fn words(self) -> &'static str {
        match self {
            Kind::Of(Handed::Boolean) => "a boolean",
            Kind::Of(Handed::Integer) => "an integer",
            Kind::Of(Handed::Unsigned) => "an unsigned 64-bit integer",
            Kind::Of(Handed::Float32 | Handed::Float64) => "a number",
            Kind::Of(Handed::Text) => "text",
            Kind::Null => "NULL",
        }
    }
}

/// The names that an expression may use, with their types.
#[derive(Debug, Clone, Default)]
pub struct Scope {
    columns: BTreeMap<String, Result<Handed>>,
    /// What an expression's text stands for instead of being translated: name and type of a column that holds it.
    replaced: BTreeMap<String, (String, Handed)>,
    /// Table names that may stand before a column (`release.ruwe`).
    tables: Vec<String>,
    aggregates: Option<Arc<dyn Aggregates>>,
}

/// Where aggregates may stand: gives each the column that will hold its result.
pub trait Aggregates: std::fmt::Debug + Send + Sync {
    /// Name and type of the result column of `function`.
    ///
    /// # Errors
    /// An aggregate that cannot be computed.
    fn column(&self, function: &ast::Function) -> Result<(String, Handed)>;

    /// Type of a result column that [`Self::column`] has named.
    fn kind(&self, name: &str) -> Option<Handed>;
}

impl Scope {
    /// All columns of `schema`; those that SQL cannot use are known, and refused when named.
    pub fn of(schema: &Schema) -> Self {
        let columns =
            schema.fields().iter().map(|f| (f.name().clone(), Handed::of(f.data_type()))).collect::<BTreeMap<_, _>>();
        Self { columns, ..Self::default() }
    }

    /// Allows `table.column`.
    pub fn with_table(mut self, table: impl Into<String>) -> Self {
        self.tables.push(table.into());
        self
    }

    /// Lets the expression with this text (see [`text_of`]) stand for a column `name` of the frame.
    pub fn replace(&mut self, text: String, name: String, kind: Handed) {
        self.replaced.insert(text, (name, kind));
    }

    /// The scope of what follows grouping: columns of the table may not be named any more, `aggregates` may stand.
    pub fn grouped(&self, aggregates: Arc<dyn Aggregates>) -> Self {
        let gone = |known: &Result<Handed>| match known {
            Ok(_) => Err(Error::plan("is neither in GROUP BY nor inside an aggregate such as AVG(...)")),
            Err(why) => Err(why.clone()),
        };
        let columns = self.columns.iter().map(|(name, known)| (name.clone(), gone(known))).collect();
        Self { columns, aggregates: Some(aggregates), ..self.clone() }
    }

    /// Type of a column of the frame that expressions run on.
    fn frame_kind(&self, name: &str) -> Result<Handed> {
        let replaced = self.replaced.values().find(|(column, _)| column == name).map(|(_, kind)| *kind);
        let aggregate = || self.aggregates.as_ref().and_then(|a| a.kind(name));
        replaced.or_else(aggregate).map_or_else(|| self.kind(name), Ok)
    }

    /// True if a column of this name exists.
    pub fn has(&self, name: &str) -> bool {
        self.columns.contains_key(name)
    }

    /// Names of the columns that SQL can use.
    fn usable(&self) -> impl Iterator<Item = &str> {
        self.columns.iter().filter(|(_, kind)| kind.is_ok()).map(|(name, _)| name.as_str())
    }

    fn kind(&self, name: &str) -> Result<Handed> {
        match self.columns.get(name) {
            Some(Ok(kind)) => Ok(*kind),
            Some(Err(why)) => Err(Error::plan(format!("Column `{name}` {}.", why.message))),
            None => {
                let same = self.usable().find(|known| known.eq_ignore_ascii_case(name));
                let hint = match same {
                    Some(known) => format!(" Did you mean `{known}`? Names match by case."),
                    None => suggestion(name, self.usable()),
                };
                let quotes = if name.starts_with(|c: char| c.is_ascii_digit()) || hint.is_empty() {
                    " Column names with signs or spaces need double quotes, text needs single ones."
                } else {
                    ""
                };
                Err(Error::plan(format!("There is no column `{name}`.{hint}{quotes}")))
            }
        }
    }
}

/// Reads one expression.
///
/// # Errors
/// A sentence with line and column where the text stops being an SQL expression.
pub fn parse(text: &str) -> Result<ast::Expr> {
    if text.trim().is_empty() {
        return Err(Error::plan("The SQL expression is empty; write a condition such as `parallax_over_error > 5`."));
    }
    check_length(text)?;
    let mut parser = Parser::new(&GenericDialect {}).try_with_sql(text).map_err(syntax)?;
    let expression = parser.parse_expr().map_err(syntax)?;
    let next = parser.peek_token();
    if next.token != Token::EOF {
        let position = format!("line {}, column {}", next.span.start.line, next.span.start.column);
        return Err(Error::plan(format!(
            "The SQL expression ends before `{}` ({position}); one expression is expected, without clauses or semicolons.",
            next.token
        )));
    }
    Ok(expression)
}

/// Reads one statement.
///
/// # Errors
/// A sentence with line and column where the text stops being SQL, or when it is not exactly one statement.
pub fn parse_statement(text: &str) -> Result<ast::Statement> {
    check_length(text)?;
    let mut statements = Parser::parse_sql(&GenericDialect {}, text).map_err(syntax)?;
    match (statements.pop(), statements.len()) {
        (Some(statement), 0) => Ok(statement),
        (None, _) => Err(Error::plan("The SQL query is empty.")),
        (Some(_), more) => Err(Error::plan(format!("One SQL query is expected, {} are given.", more + 1))),
    }
}

fn check_length(text: &str) -> Result<()> {
    if text.len() > LONGEST {
        return Err(Error::plan(format!("The SQL text has {} bytes; at most {LONGEST} are read.", text.len())));
    }
    let tokens = Tokenizer::new(&GenericDialect {}, text).tokenize().map_err(|e| syntax(e.into()))?;
    let plain = |t: &&Token| {
        !matches!(t, Token::Whitespace(_) | Token::Comma | Token::Number(..) | Token::SingleQuotedString(_))
    };
    let count = tokens.iter().filter(plain).count();
    if count > MOST_TOKENS {
        return Err(Error::plan(format!(
            "The SQL text is too long: {count} words and signs, of which at most {MOST_TOKENS} are read. Lists of values in \
             IN (...) do not count."
        )));
    }
    Ok(())
}

/// The parser's message as a sentence of ours: what it found, what it expected, where.
fn syntax(error: ParserError) -> Error {
    let raw = match error {
        ParserError::TokenizerError(message) | ParserError::ParserError(message) => message,
        ParserError::RecursionLimitExceeded => {
            return Error::plan("The SQL text is nested too deeply; write it with fewer brackets.");
        }
    };
    let (what, place) = match raw.rsplit_once(" at Line: ") {
        Some((what, place)) => (what, format!(" (line {})", place.replace(", Column: ", ", column "))),
        None => (raw.as_str(), String::new()),
    };
    let what = match what.strip_prefix("Expected: ").and_then(|w| w.split_once(", found: ")) {
        Some((expected, "EOF")) => format!("it ends where {expected} is expected"),
        Some((expected, found)) => format!("`{found}` stands where {expected} is expected"),
        None => what.to_string(),
    };
    Error::plan(format!("The SQL text cannot be read: {what}{place}."))
}

/// Text of an expression that is the same for different spacing, case of function names and needless quotes.
pub fn text_of(expression: &ast::Expr) -> String {
    let text = match expression {
        ast::Expr::Nested(inner) => return text_of(inner),
        ast::Expr::Function(f) => {
            let whole = f.to_string();
            let name = f.name.to_string();
            format!("{}{}", name.to_lowercase(), &whole[name.len()..])
        }
        other => other.to_string(),
    };
    let mut pieces = text.split('"');
    let mut plain = pieces.next().unwrap_or_default().to_string();
    while let Some(quoted) = pieces.next() {
        let simple = quoted.starts_with(|c: char| c.is_ascii_alphabetic() || c == '_')
            && quoted.chars().all(|c| c.is_ascii_alphanumeric() || c == '_');
        match (simple, pieces.next()) {
            (true, Some(rest)) => plain.extend([quoted, rest]),
            (_, Some(rest)) => plain.extend(["\"", quoted, "\"", rest]),
            (_, None) => plain.extend(["\"", quoted]),
        }
    }
    plain
}

/// A checked expression, ready to run on batches.
#[derive(Debug, Clone)]
pub struct Expression {
    expression: pl::Expr,
    kind: Handed,
    columns: Vec<String>,
}

impl Expression {
    /// Checks `expression` against the names of `scope`.
    ///
    /// # Errors
    /// All faults found at once, each a sentence.
    pub fn new(expression: &ast::Expr, scope: &Scope) -> Result<Self> {
        let translated = translate(expression, scope)?;
        let Kind::Of(kind) = translated.kind else {
            return Err(Error::plan("The expression is always NULL."));
        };
        let checked =
            Self { expression: translated.into_expr(kind), kind, columns: translate::columns_of(expression, scope) };
        checked.try_on_nothing(scope)?;
        Ok(checked)
    }

    /// The condition in `text`: an expression that is boolean and names at least one column.
    ///
    /// # Errors
    /// All faults found at once, each a sentence.
    pub fn condition(text: &str, scope: &Scope) -> Result<(Self, ast::Expr)> {
        let read = parse(text)?;
        let checked = Self::new(&read, scope)?;
        if checked.kind != Handed::Boolean {
            return Err(Error::plan(format!(
                "`{read}` is {}, not a condition; compare it with something, as in `{read} > 5`.",
                Kind::Of(checked.kind).words()
            )));
        }
        if checked.columns.is_empty() {
            return Err(Error::plan(format!("`{read}` names no column, so it says the same of every row.")));
        }
        Ok((checked, read))
    }

    /// Type of the result.
    pub fn kind(&self) -> Handed {
        self.kind
    }

    /// The polars expression.
    pub fn polars(&self) -> &pl::Expr {
        &self.expression
    }

    /// Columns that the expression names, sorted.
    pub fn columns(&self) -> &[String] {
        &self.columns
    }

    /// The value for each row of `batch`, which must have [`Self::columns`].
    ///
    /// # Errors
    /// A column that is missing or has another type than the schema said; a fault within polars.
    pub fn evaluate(&self, batch: &RecordBatch) -> Result<pl::Column> {
        self.evaluate_on(&bridge::frame(batch, &self.columns)?)
    }

    /// The value for each row of a frame that has [`Self::columns`].
    ///
    /// # Errors
    /// As [`Self::evaluate`].
    pub fn evaluate_on(&self, frame: &pl::DataFrame) -> Result<pl::Column> {
        let rows = frame.height();
        if let pl::Expr::Column(name) = &self.expression {
            return frame.column(name).cloned().map_err(|e| Error::failed(plain(&e)));
        }
        let lazy = frame.clone().lazy().select_seq([self.expression.clone().alias("value")]);
        let result = lazy.without_optimizations().collect().map_err(|e| Error::failed(plain(&e)))?;
        let value =
            result.columns().first().cloned().ok_or_else(|| Error::failed("An SQL expression gave nothing."))?;
        if value.dtype() != &self.kind.polars() {
            return Err(Error::failed(format!(
                "An SQL expression gave {} instead of {}; this is a fault of the program.",
                value.dtype(),
                self.kind.polars()
            )));
        }
        match value.len() {
            n if n == rows => Ok(value),
            1 => Ok(value.new_from_index(0, rows)),
            n => Err(Error::failed(format!("An SQL expression gave {n} values for {rows} rows."))),
        }
    }

    /// Runs on an empty frame, so that a fault shows when the plan is read and not in the night.
    fn try_on_nothing(&self, scope: &Scope) -> Result<()> {
        let columns = self.columns.iter().map(|name| {
            let kind = scope.frame_kind(name)?;
            Ok(pl::Column::from(pl::Series::new_empty(name.as_str().into(), &kind.polars())))
        });
        let frame = pl::DataFrame::new(0, columns.collect::<Result<Vec<_>>>()?);
        let frame = frame.map_err(|e| Error::plan(plain(&e)))?;
        self.evaluate_on(&frame).map(|_| ()).map_err(|e| Error::plan(e.message))
    }
}

/// A polars message without the plan that it appends.
pub fn plain(error: &pl::PolarsError) -> String {
    let text = error.to_string();
    let end = text.find("Resolved plan").unwrap_or(text.len());
    text[..end].trim().to_string()
}
