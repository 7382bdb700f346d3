//! Runs the stages over one chunk of rows: which numbers are loaded from the catalogue, which are computed, in which order.

use super::values::{Unusable, to_array, to_numbers};
use crate::calibration::{Domain, From, Input, Stage};
use crate::error::Result;
use crate::frame::Declared;
use arrow::array::{ArrayRef, BooleanArray, RecordBatch};

/// The stages with the places of their columns worked out.
pub struct Pipeline {
    stages: Vec<Box<dyn Stage>>,
    steps: Vec<Step>,
    loads: Vec<Load>,
    outputs: Vec<Declared>,
    double: bool,
}

/// Places of a stage's inputs and outputs among the numbers of a chunk.
struct Step {
    inputs: Vec<usize>,
    outputs: std::ops::Range<usize>,
}

/// A catalogue column that is loaded as numbers.
#[derive(Debug, Clone)]
pub struct Load {
    /// Name in the catalogue.
    pub column: String,
    /// Values outside count as missing.
    pub domain: Domain,
    /// Plan key that named it first.
    pub key: String,
}

/// The numbers of one chunk: loaded columns, then computed ones.
pub struct Numbers {
    columns: Vec<Vec<f64>>,
    loads: usize,
    double: bool,
}

impl Pipeline {
    /// Lays out the columns of `stages`; `double` publishes floats in 64 bits.
    pub fn new(stages: Vec<Box<dyn Stage>>, double: bool) -> Self {
        let mut loads: Vec<Load> = Vec::new();
        for input in stages.iter().flat_map(|stage| stage.inputs()) {
            if let From::Catalogue(column) = &input.from
                && !loads.iter().any(|load| load.is(column, input.domain))
            {
                loads.push(Load { column: column.clone(), domain: input.domain, key: input.key.clone() });
            }
        }
        let mut outputs: Vec<Declared> = Vec::new();
        let mut steps = Vec::new();
        for stage in &stages {
            let place = |input: &Input| match &input.from {
                From::Catalogue(column) => loads.iter().position(|load| load.is(column, input.domain)),
                From::Computed(column) => {
                    outputs.iter().position(|declared| declared.name == *column).map(|at| loads.len() + at)
                }
            };
            let inputs =
                stage.inputs().iter().map(|input| place(input).expect("a stage reads what exists before it")).collect();
            let first = loads.len() + outputs.len();
            outputs.extend(stage.outputs().iter().map(|output| output.declared.clone()));
            steps.push(Step { inputs, outputs: first..loads.len() + outputs.len() });
        }
        Self { stages, steps, loads, outputs, double }
    }

    /// Stages in order.
    pub fn stages(&self) -> &[Box<dyn Stage>] {
        &self.stages
    }

    /// Catalogue columns that are loaded.
    pub fn loads(&self) -> &[Load] {
        &self.loads
    }

    /// Computed columns in order.
    pub fn outputs(&self) -> &[Declared] {
        &self.outputs
    }

    /// After how many stages the computed column exists; `None` for another name.
    pub fn ready_after(&self, column: &str) -> Option<usize> {
        let at = self.loads.len() + self.outputs.iter().position(|declared| declared.name == column)?;
        self.steps.iter().position(|step| step.outputs.contains(&at)).map(|step| step + 1)
    }

    /// Loads the numbers of a chunk; `unusable` has one entry per load.
    ///
    /// # Errors
    /// A column that holds no numbers.
    pub fn load(&self, batch: &RecordBatch, unusable: &mut [Unusable]) -> Result<Numbers> {
        let mut columns = Vec::with_capacity(self.loads.len() + self.outputs.len());
        for (load, unusable) in self.loads.iter().zip(unusable) {
            let array = batch.column_by_name(&load.column).expect("the reader was asked for every loaded column");
            columns.push(to_numbers(array, load.domain, unusable).map_err(|e| e.in_column(&load.column))?);
        }
        Ok(Numbers { columns, loads: self.loads.len(), double: self.double })
    }

    /// Runs stage number `stage` on the chunk.
    pub fn run(&self, stage: usize, numbers: &mut Numbers, rows: usize) {
        let step = &self.steps[stage];
        let mut made: Vec<Vec<f64>> = step.outputs.clone().map(|_| vec![0.0; rows]).collect();
        {
            let inputs: Vec<&[f64]> = step.inputs.iter().map(|at| numbers.columns[*at].as_slice()).collect();
            let mut outputs: Vec<&mut [f64]> = made.iter_mut().map(Vec::as_mut_slice).collect();
            self.stages[stage].run(&inputs, &mut outputs);
        }
        numbers.columns.extend(made);
    }
}

impl Load {
    fn is(&self, column: &str, domain: Domain) -> bool {
        self.column == column && self.domain == domain
    }
}

impl Numbers {
    /// A computed column as published, by its number among all computed columns.
    pub fn published(&self, output: usize) -> ArrayRef {
        to_array(&self.columns[self.loads + output], self.double)
    }

    /// A computed column.
    pub fn computed(&self, output: usize) -> &[f64] {
        &self.columns[self.loads + output]
    }

    /// Keeps the rows where `keep` is true.
    pub fn retain(&mut self, keep: &BooleanArray) {
        for column in &mut self.columns {
            let mut row = 0;
            column.retain(|_| {
                row += 1;
                keep.value(row - 1)
            });
        }
    }
}

impl std::fmt::Debug for Pipeline {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Pipeline").field("loads", &self.loads).field("outputs", &self.outputs.len()).finish()
    }
}
