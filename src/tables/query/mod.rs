//! SQL queries over the release, answered in memory that grows with the groups of the answer, not with the rows.
//!
//! A query is taken apart once (`read`): what stands in WHERE, in GROUP BY and inside aggregates looks at one row, and
//! polars evaluates it batch by batch; the aggregates are ours (`accumulate`), exact and mergeable; what is left, the
//! selected expressions with HAVING, ORDER BY and LIMIT, runs on one row a group at the end (`finish`). A query that
//! cannot be taken apart so is refused when the plan is read.
//!
//! Rows come out in the order of ORDER BY, and where that leaves it open, in the order of the group keys, nulls last.

mod accumulate;
mod finish;
mod read;

use std::collections::HashMap;

use polars::prelude as pl;
use serde::{Deserialize, Serialize};

use super::keys;
use super::pack::{hex, unhex};
use crate::columnar::bridge::Handed;
use crate::columnar::sql::Expression;
use crate::error::{Error, Result};
use accumulate::Store;

/// Most groups that a query may have; each takes some 100 bytes an aggregate.
pub const MOST_GROUPS: usize = 1_000_000;

/// A query, taken apart.
#[derive(Debug, Clone)]
pub struct Query {
    /// Name of the table.
    pub name: String,
    sql: String,
    condition: Option<Expression>,
    keys: Vec<Expression>,
    aggregates: Vec<Aggregate>,
    selected: Vec<(String, Expression)>,
    having: Option<Expression>,
    order: Vec<Order>,
    skip: usize,
    limit: Option<usize>,
    columns: Vec<String>,
}

/// An item of ORDER BY.
#[derive(Debug, Clone)]
struct Order {
    by: Expression,
    descending: bool,
    nulls_first: bool,
}

/// A call such as `AVG(modulus_p50)`.
#[derive(Debug, Clone)]
struct Aggregate {
    /// The call as text, by which equal calls are known.
    text: String,
    function: Function,
    /// Its argument; none for COUNT(*).
    argument: Option<Expression>,
    /// The condition of FILTER (WHERE ...).
    filter: Option<Expression>,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Function {
    Count,
    Sum,
    Mean,
    Min,
    Max,
    /// Variance, or its root; `less` is 1 for the sample, 0 for the population.
    Variance {
        less: u64,
        root: bool,
    },
}

impl Aggregate {
    fn argument_kind(&self) -> Handed {
        self.argument.as_ref().map_or(Handed::Integer, Expression::kind)
    }

    /// Type of the result.
    fn kind(&self) -> Handed {
        match (self.function, self.argument_kind()) {
            (Function::Count, _) => Handed::Integer,
            (Function::Sum, Handed::Boolean | Handed::Integer | Handed::Unsigned) => Handed::Integer,
            (Function::Sum | Function::Mean | Function::Variance { .. }, _) => Handed::Float64,
            (Function::Min | Function::Max, kind) => kind,
        }
    }
}

/// What a query has added up: group `i` has key `keys[i]` and entry `i` of each store.
#[derive(Debug, Clone, Serialize, Deserialize)]
#[serde(try_from = "Written", into = "Written")]
pub struct QueryTally {
    groups: HashMap<Vec<u8>, u32>,
    stores: Vec<Store>,
}

/// The form in the ledger: groups in the order of their keys.
#[derive(Clone, Serialize, Deserialize)]
struct Written {
    keys: Vec<String>,
    stores: Vec<Store>,
}

impl From<QueryTally> for Written {
    fn from(tally: QueryTally) -> Self {
        let order = tally.sorted();
        let stores = tally.stores.iter().map(|s| s.pick(order.iter().map(|(_, group)| *group))).collect();
        Self { keys: order.iter().map(|(key, _)| hex(key)).collect(), stores }
    }
}

impl TryFrom<Written> for QueryTally {
    type Error = String;

    fn try_from(written: Written) -> Result<Self, String> {
        let damaged = || "damaged groups".to_string();
        let mut groups = HashMap::with_capacity(written.keys.len());
        for (i, key) in written.keys.iter().enumerate() {
            groups.insert(unhex(key).ok_or_else(damaged)?, i as u32);
        }
        let size = written.keys.len();
        if groups.len() != size || size > MOST_GROUPS || written.stores.iter().any(|s| s.len() != size) {
            return Err(damaged());
        }
        Ok(Self { groups, stores: written.stores })
    }
}

impl QueryTally {
    /// Keys in their order, with the group of each.
    fn sorted(&self) -> Vec<(&[u8], u32)> {
        let mut order: Vec<(&[u8], u32)> = self.groups.iter().map(|(key, group)| (key.as_slice(), *group)).collect();
        order.sort_unstable();
        order
    }

    fn group(&mut self, key: &[u8]) -> Result<u32> {
        if let Some(group) = self.groups.get(key) {
            return Ok(*group);
        }
        if self.groups.len() >= MOST_GROUPS {
            return Err(Error::failed(format!(
                "The query has more than {MOST_GROUPS} groups, which would fill the memory; group by something coarser."
            )));
        }
        let group = self.groups.len() as u32;
        self.groups.insert(key.to_vec(), group);
        self.stores.iter_mut().for_each(Store::grow);
        Ok(group)
    }

    /// Adds the groups of another tally of the same query.
    pub fn merge(&mut self, other: &QueryTally) -> Result<()> {
        if self.stores.len() != other.stores.len() {
            return Err(super::stranger());
        }
        let mut to = vec![0_u32; other.groups.len()];
        for (key, group) in &other.groups {
            to[*group as usize] = self.group(key)?;
        }
        for (mine, theirs) in self.stores.iter_mut().zip(&other.stores) {
            mine.merge(theirs, &to).ok_or_else(super::stranger)?;
        }
        Ok(())
    }
}

impl Query {
    /// Columns of the release that the query reads, sorted.
    pub fn columns(&self) -> &[String] {
        &self.columns
    }

    /// An empty tally. Without GROUP BY there is one group from the start, so the answer always has its one row.
    pub fn start(&self) -> QueryTally {
        let stores = self.aggregates.iter().map(Store::new).collect();
        let mut tally = QueryTally { groups: HashMap::new(), stores };
        if self.keys.is_empty() {
            tally.groups.insert(Vec::new(), 0);
            tally.stores.iter_mut().for_each(Store::grow);
        }
        tally
    }

    /// True if the tally is one of this query's form.
    pub fn fits(&self, tally: &QueryTally) -> bool {
        tally.stores.len() == self.aggregates.len()
            && tally.stores.iter().zip(&self.aggregates).all(|(store, aggregate)| store.fits(aggregate))
            && (!self.keys.is_empty() || tally.groups.len() == 1)
    }

    /// Adds the rows of a frame that has [`Self::columns`].
    pub fn add(&self, tally: &mut QueryTally, frame: &pl::DataFrame) -> Result<()> {
        let rows = frame.height();
        let wanted = match &self.condition {
            None => None,
            Some(condition) => Some(accumulate::truths(&condition.evaluate_on(frame)?)?),
        };
        let groups = self.groups_of_rows(tally, frame, wanted.as_deref())?;
        debug_assert_eq!(groups.len(), rows);
        for (aggregate, store) in self.aggregates.iter().zip(&mut tally.stores) {
            let filter = match &aggregate.filter {
                None => None,
                Some(filter) => Some(accumulate::truths(&filter.evaluate_on(frame)?)?),
            };
            let argument = match &aggregate.argument {
                None => None,
                Some(argument) => Some(argument.evaluate_on(frame)?),
            };
            store.add(aggregate, &groups, filter.as_deref(), argument.as_ref())?;
        }
        Ok(())
    }

    /// The group of each row; [`accumulate::NONE`] for rows that WHERE leaves out.
    fn groups_of_rows(
        &self,
        tally: &mut QueryTally,
        frame: &pl::DataFrame,
        wanted: Option<&[bool]>,
    ) -> Result<Vec<u32>> {
        let rows = frame.height();
        let is_wanted = |row: usize| wanted.is_none_or(|w| w[row]);
        if self.keys.is_empty() {
            return Ok((0..rows).map(|row| if is_wanted(row) { 0 } else { accumulate::NONE }).collect());
        }
        // The bytes of each key column one after another, with the end of each row's: nothing is allocated by the row.
        let mut columns: Vec<(Vec<u8>, Vec<usize>)> = Vec::with_capacity(self.keys.len());
        for key in &self.keys {
            let (mut bytes, mut ends) = (Vec::with_capacity(9 * rows), Vec::with_capacity(rows));
            accumulate::each_value(&key.evaluate_on(frame)?, |row, value| {
                if is_wanted(row) {
                    keys::write(&mut bytes, &value);
                }
                ends.push(bytes.len());
            })?;
            columns.push((bytes, ends));
        }
        // Neighbours are often of one group: the last answer saves most look-ups.
        let mut last: Option<u32> = None;
        let (mut key, mut before) = (Vec::new(), Vec::new());
        let mut groups = Vec::with_capacity(rows);
        for row in 0..rows {
            if !is_wanted(row) {
                groups.push(accumulate::NONE);
                continue;
            }
            key.clear();
            for (bytes, ends) in &columns {
                let start = if row == 0 { 0 } else { ends[row - 1] };
                key.extend_from_slice(&bytes[start..ends[row]]);
            }
            let group = match last {
                Some(group) if key == before => group,
                _ => tally.group(&key)?,
            };
            last = Some(group);
            std::mem::swap(&mut key, &mut before);
            groups.push(group);
        }
        Ok(groups)
    }
}
