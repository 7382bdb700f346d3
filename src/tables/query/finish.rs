//! From the groups of a query to its table.

use std::sync::Arc;

use arrow::array::{ArrayRef, BooleanArray, RecordBatch, UInt32Array};
use arrow::compute::{SortColumn, SortOptions, filter_record_batch, lexsort_to_indices, take_record_batch};
use arrow::datatypes::{Field, Schema};
use polars::prelude as pl;

use super::accumulate::truths;
use super::{Query, QueryTally, keys};
use crate::columnar::bridge::{self, Handed};
use crate::columnar::sql::Expression;
use crate::error::{Error, Result};
use crate::tables::Table;
use crate::tables::keys::Value;

/// Name of the column that holds key `i` in the frame of groups.
pub fn key_name(i: usize) -> String {
    format!("key {i}")
}

/// Name of the column that holds the result of aggregate `i`.
pub fn aggregate_name(i: usize) -> String {
    format!("aggregate {i}")
}

impl Query {
    /// The table, from all rows added up.
    ///
    /// # Errors
    /// A sum of integers beyond 64 bits; a fault of an evaluation.
    pub fn finish(&self, tally: &QueryTally) -> Result<Table> {
        let groups = self.groups(tally)?;
        let evaluate = |e: &Expression| bridge::array(e.evaluate_on(&groups)?.as_materialized_series());
        let selected = self.selected.iter().map(|(_, e)| evaluate(e)).collect::<Result<Vec<ArrayRef>>>()?;
        let fields: Vec<Field> = self
            .selected
            .iter()
            .zip(&selected)
            .map(|((name, _), a)| Field::new(name, a.data_type().clone(), true))
            .collect();
        let failed = |e: arrow::error::ArrowError| Error::failed(e.to_string());
        let mut batch = RecordBatch::try_new(Arc::new(Schema::new(fields)), selected).map_err(failed)?;

        // The row number as the last sort key keeps the order of the group keys where ORDER BY leaves it open.
        let number = UInt32Array::from_iter_values(0..groups.height() as u32);
        let mut sort = Vec::with_capacity(self.order.len() + 1);
        for order in &self.order {
            let options = SortOptions { descending: order.descending, nulls_first: order.nulls_first };
            sort.push(SortColumn { values: evaluate(&order.by)?, options: Some(options) });
        }
        sort.push(SortColumn { values: Arc::new(number), options: None });
        let sorted = lexsort_to_indices(&sort, None).map_err(failed)?;
        batch = take_record_batch(&batch, &sorted).map_err(failed)?;
        if let Some(having) = &self.having {
            let kept = truths(&having.evaluate_on(&groups)?)?;
            let kept: BooleanArray = sorted.values().iter().map(|row| Some(kept[*row as usize])).collect();
            batch = filter_record_batch(&batch, &kept).map_err(failed)?;
        }
        let skip = self.skip.min(batch.num_rows());
        let rows = self.limit.unwrap_or(usize::MAX).min(batch.num_rows() - skip);
        Ok(Table { name: self.name.clone(), batch: batch.slice(skip, rows), description: self.sql.clone() })
    }

    /// One row a group, in the order of the keys: the keys and the results of the aggregates.
    fn groups(&self, tally: &QueryTally) -> Result<pl::DataFrame> {
        let order = tally.sorted();
        let mut keys: Vec<Builder> = self.keys.iter().map(|k| Builder::new(k.kind())).collect();
        let mut text = String::new();
        for (key, _) in &order {
            let mut rest = *key;
            for builder in &mut keys {
                builder.push(keys::read(&mut rest, builder.kind(), &mut text).ok_or_else(crate::tables::stranger)?);
            }
        }
        let keys = keys.into_iter().enumerate().map(|(i, b)| b.finish(&key_name(i)));
        let mut columns: Vec<pl::Column> = keys.collect();
        for (i, (aggregate, store)) in self.aggregates.iter().zip(&tally.stores).enumerate() {
            let mut builder = Builder::new(aggregate.kind());
            store.pick(order.iter().map(|(_, group)| *group)).results(aggregate, |value| builder.push(value))?;
            columns.push(builder.finish(&aggregate_name(i)));
        }
        pl::DataFrame::new(order.len(), columns).map_err(|e| Error::failed(e.to_string()))
    }
}

/// A polars column that grows by values.
enum Builder {
    Boolean(Vec<Option<bool>>),
    Integer(Vec<Option<i64>>),
    Unsigned(Vec<Option<u64>>),
    Float32(Vec<Option<f32>>),
    Float64(Vec<Option<f64>>),
    Text(Vec<Option<String>>),
}

impl Builder {
    fn new(kind: Handed) -> Self {
        match kind {
            Handed::Boolean => Self::Boolean(Vec::new()),
            Handed::Integer => Self::Integer(Vec::new()),
            Handed::Unsigned => Self::Unsigned(Vec::new()),
            Handed::Float32 => Self::Float32(Vec::new()),
            Handed::Float64 => Self::Float64(Vec::new()),
            Handed::Text => Self::Text(Vec::new()),
        }
    }

    fn kind(&self) -> Handed {
        match self {
            Self::Boolean(_) => Handed::Boolean,
            Self::Integer(_) => Handed::Integer,
            Self::Unsigned(_) => Handed::Unsigned,
            Self::Float32(_) => Handed::Float32,
            Self::Float64(_) => Handed::Float64,
            Self::Text(_) => Handed::Text,
        }
    }

    /// Appends a value of the builder's type; any other is null.
    fn push(&mut self, value: Value) {
        match (self, value) {
            (Self::Boolean(v), Value::Boolean(b)) => v.push(Some(b)),
            (Self::Integer(v), Value::Integer(n)) => v.push(Some(n)),
            (Self::Unsigned(v), Value::Unsigned(n)) => v.push(Some(n)),
            (Self::Float32(v), Value::Real(x)) => v.push(Some(x as f32)),
            (Self::Float64(v), Value::Real(x)) => v.push(Some(x)),
            (Self::Text(v), Value::Text(text)) => v.push(Some(text.to_string())),
            (Self::Boolean(v), _) => v.push(None),
            (Self::Integer(v), _) => v.push(None),
            (Self::Unsigned(v), _) => v.push(None),
            (Self::Float32(v), _) => v.push(None),
            (Self::Float64(v), _) => v.push(None),
            (Self::Text(v), _) => v.push(None),
        }
    }

    fn finish(self, name: &str) -> pl::Column {
        use pl::NamedFrom;
        let name: pl::PlSmallStr = name.into();
        pl::Column::from(match self {
            Self::Boolean(v) => pl::Series::new(name, v),
            Self::Integer(v) => pl::Series::new(name, v),
            Self::Unsigned(v) => pl::Series::new(name, v),
            Self::Float32(v) => pl::Series::new(name, v),
            Self::Float64(v) => pl::Series::new(name, v),
            Self::Text(v) => pl::Series::new(name, v),
        })
    }
}
