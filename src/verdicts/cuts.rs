//! The cuts of a plan, checked against all columns that a release will have, and evaluated on batches.

use arrow::array::{Array, AsArray, RecordBatch};
use arrow::buffer::BooleanBuffer;
use arrow::datatypes::Schema;
use sqlparser::ast;

use crate::columnar::bridge;
use crate::columnar::sql::{Expression, Scope};
use crate::error::{Error, Result};
use crate::plan::cuts::{CutSettings, Effect};

/// Most cuts a plan may have: a verdict is a 32-bit mask.
pub const MOST: usize = 32;

/// The checked cuts of a plan.
#[derive(Debug, Clone)]
pub struct Cuts {
    cuts: Vec<Cut>,
}

#[derive(Debug, Clone)]
struct Cut {
    settings: CutSettings,
    condition: Expression,
    read: ast::Expr,
}

/// What a condition says of each row of a batch: bit i of `keep` and `missing` is row i.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Judgement {
    /// The condition is true.
    pub keep: BooleanBuffer,
    /// The condition is null; such a row fails too.
    pub missing: BooleanBuffer,
}

impl Judgement {
    /// The condition is false or null.
    pub fn fail(&self) -> BooleanBuffer {
        !&self.keep
    }
}

impl Cuts {
    /// Checks the cuts of a plan; `schema` has all catalogue and computed columns.
    ///
    /// # Errors
    /// All faults at once, each with its key path (`cuts[2].keep`).
    pub fn new(settings: &[CutSettings], schema: &Schema) -> Result<Self> {
        let scope = Scope::of(schema);
        let mut errors = Vec::new();
        if settings.len() > MOST {
            let message =
                format!("There are {} cuts; a verdict has room for {MOST}. Join some with AND.", settings.len());
            errors.push(Error::plan(message).at_key("cuts"));
        }
        let mut cuts = Vec::with_capacity(settings.len());
        for (i, one) in settings.iter().enumerate() {
            if one.name.trim().is_empty() {
                errors.push(
                    Error::plan("A cut needs a name, which its counts are shown under.")
                        .at_key(format!("cuts[{i}].name")),
                );
            }
            if let Some(first) = settings[..i].iter().position(|other| other.name == one.name) {
                let message = format!("The name `{}` is already that of cuts[{first}]; names must differ.", one.name);
                errors.push(Error::plan(message).at_key(format!("cuts[{i}].name")));
            }
            match Expression::condition(&one.keep, &scope) {
                Ok((condition, read)) => cuts.push(Cut { settings: one.clone(), condition, read }),
                Err(error) => errors.extend(
                    error.each().map(|e| Error { others: Vec::new(), ..e.clone() }.at_key(format!("cuts[{i}].keep"))),
                ),
            }
        }
        Error::all(errors).map_or(Ok(Self { cuts }), Err)
    }

    /// Number of cuts.
    pub fn len(&self) -> usize {
        self.cuts.len()
    }

    /// True for a plan without cuts.
    pub fn is_empty(&self) -> bool {
        self.cuts.is_empty()
    }

    /// Settings of cut `i`.
    pub fn settings(&self, i: usize) -> &CutSettings {
        &self.cuts[i].settings
    }

    /// Columns that the condition of cut `i` names, sorted.
    pub fn columns(&self, i: usize) -> &[String] {
        self.cuts[i].condition.columns()
    }

    /// The condition of cut `i` as read, for [`super::statistics::decide`].
    pub fn condition(&self, i: usize) -> &ast::Expr {
        &self.cuts[i].read
    }

    /// Mask of the cuts whose effect is `drop`.
    pub fn dropping(&self) -> u32 {
        self.cuts.iter().enumerate().filter(|(_, c)| c.settings.effect == Effect::Drop).fold(0, |m, (i, _)| m | 1 << i)
    }

    /// Judges each row of `batch`, which must have the columns of cut `i`.
    ///
    /// # Errors
    /// A missing column or a fault of the evaluation.
    pub fn evaluate(&self, i: usize, batch: &RecordBatch) -> Result<Judgement> {
        let at = |e: Error| e.at_key(format!("cuts[{i}].keep"));
        let value = self.cuts[i].condition.evaluate(batch).map_err(at)?;
        let array = bridge::array(value.as_materialized_series()).map_err(at)?;
        let truth = array
            .as_boolean_opt()
            .ok_or_else(|| at(Error::failed("The condition did not give booleans; this is a fault of the program.")))?;
        let rows = truth.len();
        Ok(match truth.nulls().filter(|n| n.null_count() > 0) {
            None => Judgement { keep: truth.values().clone(), missing: BooleanBuffer::new_unset(rows) },
            Some(nulls) => Judgement { keep: truth.values() & nulls.inner(), missing: !nulls.inner() },
        })
    }
}
