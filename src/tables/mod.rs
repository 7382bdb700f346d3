//! Tables of a release: star counts in bins, and SQL queries, in memory that does not grow with the rows.
//!
//! Every accumulator is a [`Tally`]: filled batch by batch, merged in any order, kept in the ledger, read once at the
//! end. Counts are integers, sums are exact ([`crate::numerics::exact_sum`]), groups come out sorted; so no bit of a table
//! depends on batch size, threads, or the order of parts. Rows that a cut drops are not in a release and not in its tables.

mod bins;
mod counts;
mod keys;
mod pack;
mod query;
mod write;

use std::collections::BTreeMap;

use arrow::array::RecordBatch;
use arrow::datatypes::Schema;
use serde::{Deserialize, Serialize};

use crate::columnar::bridge;
use crate::error::{Error, Result};
use crate::plan::tables::TablesSettings;

pub use bins::{Bins, MOST_CELLS};
pub use query::MOST_GROUPS;
pub use write::{csv, parquet};

/// Name that queries select from.
pub const RELEASE: &str = "release";
/// Name of the table that is always there.
pub const CUT_COUNTS: &str = "cut_counts";

/// What the names in table settings stand for.
#[derive(Debug, Clone, Default)]
pub struct Names {
    /// For each band, the column with its apparent magnitude.
    pub apparent: BTreeMap<String, String>,
    /// The colours of the plan.
    pub colours: Vec<String>,
}

/// A finished table.
#[derive(Debug, Clone)]
pub struct Table {
    /// Name, and file name without its ending.
    pub name: String,
    /// The rows.
    pub batch: RecordBatch,
    /// What a row is.
    pub description: String,
}

/// The counts of one cut as the table shows them.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct CutRow {
    /// Name of the cut.
    pub cut: String,
    /// `flag` or `drop`.
    pub effect: String,
    /// Its condition.
    pub keep: String,
    /// Rows judged.
    pub judged: u64,
    /// Rows that fail.
    pub fails: u64,
    /// Rows that fail it first, in the order of the plan.
    pub fails_first: u64,
    /// Rows that fail it alone.
    pub fails_only: u64,
    /// Rows that fail it for want of a value.
    pub missing: u64,
}

/// The checked tables of a plan.
#[derive(Debug, Clone)]
pub struct Tables {
    counts: Vec<counts::Counts>,
    queries: Vec<query::Query>,
}

/// What a part has added up for all tables.
#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct Tally {
    counts: Vec<counts::CountsTally>,
    queries: Vec<query::QueryTally>,
}

impl Tables {
    /// Checks the tables of a plan; `schema` has all columns of the release.
    ///
    /// # Errors
    /// All faults at once, each with its key path (`tables.query[0].sql`).
    pub fn new(settings: &TablesSettings, names: &Names, schema: &Schema) -> Result<Self> {
        let mut errors = Vec::new();
        let mut checked = Self { counts: Vec::new(), queries: Vec::new() };
        let mut taken = BTreeMap::from([(CUT_COUNTS.to_string(), "the table of cut counts".to_string())]);
        for (key, result) in counts::all(settings, names, schema) {
            match result {
                Ok(counts) => {
                    claim(&mut taken, &counts.name, &key, &mut errors);
                    checked.counts.push(counts);
                }
                Err(error) => errors.extend(each_at(error, &key)),
            }
        }
        for (i, one) in settings.query.iter().enumerate() {
            let key = format!("tables.query[{i}]");
            if is_file_name(&one.name) {
                claim(&mut taken, &one.name, &key, &mut errors);
            } else {
                let message = format!("The name `{}` becomes a file name; use letters, digits, `_` and `-`.", one.name);
                errors.push(Error::plan(message).at_key(format!("{key}.name")));
            }
            match query::Query::new(one, schema) {
                Ok(query) => checked.queries.push(query),
                Err(error) => errors.extend(each_at(error, &format!("{key}.sql"))),
            }
        }
        Error::all(errors).map_or(Ok(checked), Err)
    }

    /// Columns that the tables read, sorted.
    pub fn columns(&self) -> Vec<String> {
        let counted = self.counts.iter().flat_map(|c| c.columns());
        let queried = self.queries.iter().flat_map(|q| q.columns().iter().map(String::as_str));
        let mut columns: Vec<String> = counted.chain(queried).map(str::to_string).collect();
        columns.sort();
        columns.dedup();
        columns
    }

    /// Names of the tables, in the order of [`Self::finish`].
    pub fn names(&self) -> Vec<String> {
        let cut_counts = std::iter::once(CUT_COUNTS.to_string());
        let counts = self.counts.iter().map(|c| c.name.clone());
        cut_counts.chain(counts).chain(self.queries.iter().map(|q| q.name.clone())).collect()
    }

    /// An empty tally.
    pub fn start(&self) -> Tally {
        Tally {
            counts: self.counts.iter().map(counts::Counts::start).collect(),
            queries: self.queries.iter().map(query::Query::start).collect(),
        }
    }

    /// The finished tables: cut counts first, then in the order of the plan.
    ///
    /// # Errors
    /// A sum beyond 64 bits; a tally of other tables.
    pub fn finish(&self, tally: &Tally, cuts: &[CutRow]) -> Result<Vec<Table>> {
        tally.check(self)?;
        let mut tables = vec![counts::cut_counts(cuts)?];
        for (counts, tally) in self.counts.iter().zip(&tally.counts) {
            tables.push(counts.finish(tally)?);
        }
        for (query, tally) in self.queries.iter().zip(&tally.queries) {
            tables.push(query.finish(tally).map_err(|e| e.at_key(format!("tables.query.{}", query.name)))?);
        }
        Ok(tables)
    }
}

impl Tally {
    /// Adds the rows of a batch, as published, which must have [`Tables::columns`].
    ///
    /// # Errors
    /// A missing column; a fault of an evaluation; more groups than [`MOST_GROUPS`].
    pub fn add(&mut self, tables: &Tables, batch: &RecordBatch) -> Result<()> {
        self.check(tables)?;
        for (counts, tally) in tables.counts.iter().zip(&mut self.counts) {
            counts.add(tally, batch)?;
        }
        if self.queries.is_empty() {
            return Ok(());
        }
        // One hand-over serves all queries.
        let mut columns: Vec<&str> =
            tables.queries.iter().flat_map(|q| q.columns().iter().map(String::as_str)).collect();
        columns.sort_unstable();
        columns.dedup();
        let frame = bridge::frame(batch, &columns)?;
        for (query, tally) in tables.queries.iter().zip(&mut self.queries) {
            query.add(tally, &frame).map_err(|e| e.at_key(format!("tables.query.{}", query.name)))?;
        }
        Ok(())
    }

    /// Adds what another part has added up; the order does not matter.
    ///
    /// # Errors
    /// A tally of other tables; more groups than [`MOST_GROUPS`].
    pub fn merge(&mut self, other: &Tally) -> Result<()> {
        if self.counts.len() != other.counts.len() || self.queries.len() != other.queries.len() {
            return Err(stranger());
        }
        for (mine, theirs) in self.counts.iter_mut().zip(&other.counts) {
            mine.merge(theirs)?;
        }
        for (mine, theirs) in self.queries.iter_mut().zip(&other.queries) {
            mine.merge(theirs)?;
        }
        Ok(())
    }

    fn check(&self, tables: &Tables) -> Result<()> {
        let counts = self.counts.len() == tables.counts.len()
            && self.counts.iter().zip(&tables.counts).all(|(tally, counts)| counts.fits(tally));
        let queries = self.queries.len() == tables.queries.len()
            && self.queries.iter().zip(&tables.queries).all(|(tally, query)| query.fits(tally));
        if counts && queries { Ok(()) } else { Err(stranger()) }
    }
}

fn stranger() -> Error {
    Error::failed(
        "The counts of a finished part belong to other tables than the plan has; start the build anew with --overwrite.",
    )
}

fn each_at(error: Error, key: &str) -> Vec<Error> {
    error.each().map(|e| Error { others: Vec::new(), ..e.clone() }.at_key(key)).collect()
}

fn is_file_name(name: &str) -> bool {
    let plain = |c: char| c.is_ascii_alphanumeric() || c == '_' || c == '-';
    !name.is_empty() && name.len() <= 100 && !name.starts_with('-') && name.chars().all(plain)
}

/// Books a table name; on disk, names that differ in case only may be one.
fn claim(taken: &mut BTreeMap<String, String>, name: &str, key: &str, errors: &mut Vec<Error>) {
    if let Some(other) = taken.get(&name.to_lowercase()) {
        let message = format!("This table would be called `{name}`, as {other} is; give it another `name`.");
        errors.push(Error::plan(message).at_key(format!("{key}.name")));
    } else {
        taken.insert(name.to_lowercase(), key.to_string());
    }
}
