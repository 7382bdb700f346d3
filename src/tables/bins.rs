//! Bins of equal width on one axis.
//!
//! Edges are from + i step. Where `from` and `step` are decimal fractions, as people write them, each edge is the
//! double nearest to the decimal number (an integer over a power of ten, one correctly rounded division), so that bins
//! of 0.05 have the edge 0.15 and not 0.15000000000000002. A value on an edge belongs to the bin above it. Values of a
//! Float32 column are compared with edges rounded to Float32: a stored 0.35 is on the edge 0.35, although the
//! nearest Float32 is a little below.
//!
//! Beside the bins there are three more cells: below the first, from the last edge up, and missing (null or not
//! finite), so that every row is in exactly one cell.

use crate::error::{Error, Result};
use crate::plan::tables::BinSettings;

/// Most bins on an axis, and most cells of a table.
pub const MOST_CELLS: usize = 4_000_000;

/// The cells of one axis: 0 is below, 1 ..= count the bins, count + 1 above, count + 2 missing.
#[derive(Debug, Clone)]
pub struct Bins {
    edges: Vec<f64>,
    narrow: Vec<f64>,
    per_unit: f64,
}

impl Bins {
    /// Checks the settings.
    ///
    /// # Errors
    /// Bounds that are not finite or not in order, a step that is not positive or does not divide the range, too many
    /// bins; each a sentence.
    pub fn new(settings: &BinSettings) -> Result<Self> {
        let BinSettings { from, to, step } = *settings;
        if ![from, to, step].iter().all(|x| x.is_finite()) {
            return Err(Error::plan("The bins need finite numbers for `from`, `to` and `step`."));
        }
        if from >= to {
            return Err(Error::plan(format!("The bins run from {from} to {to}; `from` must be below `to`.")));
        }
        if step <= 0.0 {
            return Err(Error::plan(format!("The bins have the step {step}; it must be above zero.")));
        }
        let steps = (to - from) / step;
        if steps > MOST_CELLS as f64 {
            return Err(Error::plan(format!(
                "The bins would be {steps:.0}; at most {MOST_CELLS} are possible. Use a larger `step`."
            )));
        }
        let count = steps.round();
        if count < 1.0 || (steps - count).abs() > 1e-6 {
            let nearest = edge(from, step, steps.floor().max(1.0) as i64);
            return Err(Error::plan(format!(
                "The range from {from} to {to} is {steps:.4} steps of {step}, not a whole number; `to` could be {nearest}."
            )));
        }
        let count = count as i64;
        let mut edges: Vec<f64> = (0..=count).map(|i| edge(from, step, i)).collect();
        if let Some(last) = edges.last_mut() {
            *last = to;
        }
        if edges.windows(2).any(|pair| pair[0] >= pair[1]) {
            return Err(Error::plan(format!("The step {step} is too small to tell edges near {from} apart.")));
        }
        let narrow = edges.iter().map(|e| f64::from(*e as f32)).collect();
        Ok(Self { edges, narrow, per_unit: 1.0 / step })
    }

    /// Number of bins.
    pub fn count(&self) -> usize {
        self.edges.len() - 1
    }

    /// Number of cells: the bins, and below, above, missing.
    pub fn cells(&self) -> usize {
        self.count() + 3
    }

    /// Cell of a value of a Float32 column.
    #[inline]
    pub fn cell_narrow(&self, x: f32) -> usize {
        if x.is_finite() { locate(&self.narrow, self.per_unit, f64::from(x)) } else { self.count() + 2 }
    }

    /// Cell of a value.
    #[inline]
    pub fn cell(&self, x: f64) -> usize {
        if x.is_finite() { locate(&self.edges, self.per_unit, x) } else { self.count() + 2 }
    }

    /// Cell of a missing value.
    pub fn missing(&self) -> usize {
        self.count() + 2
    }

    /// Lower and upper edge of a cell; open ends and the missing cell have `None`.
    pub fn edges_of(&self, cell: usize) -> (Option<f64>, Option<f64>) {
        if cell == self.missing() {
            return (None, None);
        }
        (cell.checked_sub(1).and_then(|i| self.edges.get(i)).copied(), self.edges.get(cell).copied())
    }
}

/// The cell of a finite `x`: a guess by division, put right by the edges themselves.
#[inline]
fn locate(edges: &[f64], per_unit: f64, x: f64) -> usize {
    let count = edges.len() - 1;
    if x < edges[0] {
        return 0;
    }
    if x >= edges[count] {
        return count + 1;
    }
    let mut i = (((x - edges[0]) * per_unit) as usize).min(count - 1);
    while x < edges[i] {
        i -= 1;
    }
    while x >= edges[i + 1] {
        i += 1;
    }
    i + 1
}

/// from + i step, as the decimal numbers meant where they are.
fn edge(from: f64, step: f64, i: i64) -> f64 {
    for digits in 0..=12 {
        let unit = 10_f64.powi(digits);
        let (a, b) = ((from * unit).round(), (step * unit).round());
        if a / unit == from && b / unit == step {
            let sum = a + b * i as f64;
            if sum.abs().max((b * i as f64).abs()) < 9e15 {
                return sum / unit;
            }
        }
    }
    from + i as f64 * step
}

#[cfg(test)]
mod tests {
    use super::*;

    fn bins(from: f64, to: f64, step: f64) -> Result<Bins> {
        Bins::new(&BinSettings { from, to, step })
    }

    #[test]
    fn edges_are_the_decimal_numbers() {
        let b = bins(-1.0, 5.0, 0.05).unwrap();
        assert_eq!(b.count(), 120);
        // Each edge is what a person would write: two digits, read back.
        for (i, e) in b.edges.iter().enumerate() {
            let written = format!("{:.2}", (i as i64 * 5 - 100) as f64 / 100.0);
            assert_eq!(*e, written.parse::<f64>().unwrap());
        }
    }

    #[test]
    fn every_value_is_in_one_cell() {
        let b = bins(0.0, 0.4, 0.1).unwrap();
        assert_eq!(b.cells(), 7);
        let cases =
            [(-1e-300, 0), (0.0, 1), (-0.0, 1), (0.1, 2), (0.1_f64.next_down(), 1), (0.3, 4), (0.4, 5), (9.0, 5)];
        for (x, cell) in cases {
            assert_eq!(b.cell(x), cell, "{x}");
        }
        for x in [f64::NAN, f64::INFINITY, f64::NEG_INFINITY] {
            assert_eq!(b.cell(x), 6);
        }
        assert_eq!(b.edges_of(0), (None, Some(0.0)));
        assert_eq!(b.edges_of(4), (Some(0.3), Some(0.4)));
        assert_eq!(b.edges_of(5), (Some(0.4), None));
        assert_eq!(b.edges_of(6), (None, None));
    }

    #[test]
    fn a_single_precision_value_on_an_edge_goes_up() {
        let b = bins(0.0, 1.0, 0.05).unwrap();
        // 0.35 in Float32 is 0.3499999940395355 (below), 0.1 is 0.10000000149 (above).
        for (x, cell) in [(0.35_f32, 8), (0.35_f32.next_down(), 7), (0.1, 3), (0.1_f32.next_down(), 2)] {
            assert_eq!(b.cell_narrow(x), cell, "{x}");
        }
    }

    #[test]
    fn wrong_bins_are_refused() {
        for (from, to, step) in [
            (f64::NAN, 1.0, 0.1),
            (0.0, f64::NAN, 0.1),
            (0.0, 1.0, f64::NAN),
            (0.0, f64::INFINITY, 0.1),
            (1.0, 1.0, 0.1),
            (1.0, 0.0, 0.1),
            (0.0, 1.0, 0.0),
            (0.0, 1.0, -0.1),
            (0.0, 1.0, 0.3),
            (0.0, 1.0, 2.0),
            (0.0, 1.0, 1e-9),
            (1e18, 1e18 + 1024.0, 1.0),
        ] {
            assert!(bins(from, to, step).is_err(), "{from} {to} {step}");
        }
        let message = bins(0.0, 1.0, 0.3).unwrap_err().message;
        assert!(message.contains("`to` could be 0.9"), "{message}");
    }
}
