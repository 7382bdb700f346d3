//! The contract of a calibration stage.

use crate::frame::Declared;

/// Where an input comes from.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum From {
    /// A column of the catalogue, by its name there.
    Catalogue(String),
    /// A column that an earlier stage wrote.
    Computed(String),
}

/// Which finite values an input may have; others are counted and treated as missing.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Domain {
    /// Any finite number.
    Any,
    /// A standard error: not negative.
    NotNegative,
    /// A standard error that divides: above zero.
    Positive,
}

/// A column that a stage reads.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Input {
    /// Column.
    pub from: From,
    /// Unit that the kernel takes, as VOUnits text; empty for a pure number.
    pub unit: &'static str,
    /// Values outside count as missing.
    pub domain: Domain,
    /// Plan key that named the column, for messages.
    pub key: String,
}

impl Input {
    /// A catalogue column named by the plan key `key`.
    pub fn catalogue(column: &str, unit: &'static str, domain: Domain, key: impl Into<String>) -> Self {
        Self { from: From::Catalogue(column.to_owned()), unit, domain, key: key.into() }
    }

    /// A column of an earlier stage.
    pub fn computed(column: impl Into<String>) -> Self {
        Self { from: From::Computed(column.into()), unit: "", domain: Domain::Any, key: String::new() }
    }
}

/// A column that a stage writes.
#[derive(Debug, Clone, PartialEq)]
pub struct Output {
    /// Name, unit, UCD, meaning, method.
    pub declared: Declared,
    /// Which inputs (by index) its values depend on.
    pub reads: Vec<usize>,
    /// Every setting that its values depend on, in a form that changes when and only when they do.
    pub settings: String,
}

/// One calibration step.
pub trait Stage: Send + Sync {
    /// Name, part of the lineage.
    fn name(&self) -> &'static str;

    /// Raised whenever the same settings would give other numbers; part of the lineage.
    fn revision(&self) -> u32;

    /// Columns read.
    fn inputs(&self) -> &[Input];

    /// Columns written.
    fn outputs(&self) -> &[Output];

    /// Computes a chunk. `inputs[i]` and `outputs[o]` are as long as the chunk has rows; NaN is missing, every input is
    /// finite and in its domain or NaN, and an output that cannot be had is set to NaN.
    fn run(&self, inputs: &[&[f64]], outputs: &mut [&mut [f64]]);
}

/// A stage made of declarations and a kernel; all but the posterior are such.
pub(super) struct Kernel<F> {
    pub name: &'static str,
    pub revision: u32,
    pub inputs: Vec<Input>,
    pub outputs: Vec<Output>,
    pub kernel: F,
}

impl<F: Fn(&[&[f64]], &mut [&mut [f64]]) + Send + Sync> Stage for Kernel<F> {
    fn name(&self) -> &'static str {
        self.name
    }

    fn revision(&self) -> u32 {
        self.revision
    }

    fn inputs(&self) -> &[Input] {
        &self.inputs
    }

    fn outputs(&self) -> &[Output] {
        &self.outputs
    }

    fn run(&self, inputs: &[&[f64]], outputs: &mut [&mut [f64]]) {
        (self.kernel)(inputs, outputs);
    }
}
