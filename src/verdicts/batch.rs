//! The verdicts of one batch while its cuts are applied, as soon as their columns exist.
//!
//! Rows that fail a dropping cut leave the batch at once: later stages need not compute them and later cuts do not
//! judge them. Their counts are booked when they leave, so nothing is lost and nothing is counted twice.

use arrow::array::{BooleanArray, UInt32Array};
use arrow::buffer::BooleanBuffer;

use super::statistics::Verdict;
use super::{CutCounts, Judgement};

/// Failed and missing cuts of each row that is still in the batch.
#[derive(Debug, Clone)]
pub struct BatchVerdict {
    judged: u32,
    fails: Vec<u32>,
    missing: Vec<u32>,
}

impl BatchVerdict {
    /// A batch of `rows` rows that no cut has seen.
    pub fn new(rows: usize) -> Self {
        Self { judged: 0, fails: vec![0; rows], missing: vec![0; rows] }
    }

    /// Rows still in the batch.
    pub fn rows(&self) -> usize {
        self.fails.len()
    }

    /// Applies what cut `i` says of the rows still in the batch.
    pub fn apply(&mut self, i: usize, judgement: &Judgement) {
        debug_assert_eq!(judgement.keep.len(), self.rows());
        self.judged |= 1 << i;
        for (fails, keep) in self.fails.iter_mut().zip(judgement.keep.iter()) {
            *fails |= u32::from(!keep) << i;
        }
        for row in judgement.missing.set_indices() {
            self.missing[row] |= 1 << i;
        }
    }

    /// Applies cut `i` when row-group statistics have decided it for all rows.
    pub fn apply_to_all(&mut self, i: usize, verdict: Verdict) {
        self.judged |= 1 << i;
        if verdict != Verdict::AllKeep {
            self.fails.iter_mut().for_each(|f| *f |= 1 << i);
        }
        if verdict == Verdict::AllMissing {
            self.missing.iter_mut().for_each(|m| *m |= 1 << i);
        }
    }

    /// Removes the rows that fail one of the cuts in `dropping` and books them in `counts`. Returns which rows stay,
    /// for filtering the columns; `None` when all do.
    pub fn drop_failing(&mut self, dropping: u32, counts: &mut CutCounts) -> Option<BooleanBuffer> {
        let stays: BooleanBuffer = self.fails.iter().map(|f| f & dropping == 0).collect();
        if stays.count_set_bits() == self.rows() {
            return None;
        }
        for row in (!&stays).set_indices() {
            counts.book(self.judged, self.fails[row], self.missing[row]);
        }
        let keep = |masks: &[u32]| stays.set_indices().map(|row| masks[row]).collect::<Vec<u32>>();
        (self.fails, self.missing) = (keep(&self.fails), keep(&self.missing));
        Some(stays)
    }

    /// Books the rows that are left, and returns their columns `verdict` and `accepted`.
    pub fn finish(self, counts: &mut CutCounts) -> (UInt32Array, BooleanArray) {
        counts.book_rows(self.judged, &self.fails, &self.missing);
        let accepted: BooleanBuffer = self.fails.iter().map(|f| *f == 0).collect();
        (UInt32Array::from(self.fails), BooleanArray::new(accepted, None))
    }
}
