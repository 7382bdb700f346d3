//! How many rows each cut has judged, failed and missed; sums that merge in any order.

use serde::{Deserialize, Serialize};

use super::Cuts;

/// Counts of one cut.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct CutCount {
    /// Rows that the cut has judged: those that no cut had dropped before.
    pub judged: u64,
    /// Judged rows that fail, those with a missing value included.
    pub fails: u64,
    /// Rows for which this is the first cut, in the order of the plan, that they fail.
    pub fails_first: u64,
    /// Rows that fail this cut and no other.
    pub fails_only: u64,
    /// Judged rows whose condition is null because a value is missing.
    pub missing: u64,
}

/// Counts of all cuts of a plan, and of the rows that they saw. Rows read are accepted, flagged or dropped:
/// `read = accepted + flagged + dropped`.
#[derive(Debug, Clone, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct CutCounts {
    /// Rows that came in.
    pub read: u64,
    /// Rows that fail no cut.
    pub accepted: u64,
    /// Rows that fail a dropping cut; not written.
    pub dropped: u64,
    /// One entry a cut, in the order of the plan.
    pub cuts: Vec<CutCount>,
    dropping: u32,
}

impl CutCounts {
    /// Zero counts for the cuts of a plan.
    pub fn new(cuts: &Cuts) -> Self {
        Self { cuts: vec![CutCount::default(); cuts.len()], dropping: cuts.dropping(), ..Self::default() }
    }

    /// Books one row: the cuts that judged it, those it fails, those whose condition was null (bit i is cut i).
    #[inline]
    pub fn book(&mut self, judged: u32, fails: u32, missing: u32) {
        self.book_many(1, judged, fails, missing);
    }

    /// Books `rows` rows of which the same is true: those of a row group that statistics have decided, say.
    pub fn book_many(&mut self, rows: u64, judged: u32, fails: u32, missing: u32) {
        self.read += rows;
        self.accepted += if fails == 0 { rows } else { 0 };
        self.dropped += if fails & self.dropping == 0 { 0 } else { rows };
        let first = fails & fails.wrapping_neg();
        let only = if fails == first { fails } else { 0 };
        for (i, cut) in self.cuts.iter_mut().enumerate() {
            let of = |mask: u32| u64::from(mask >> i & 1) * rows;
            cut.judged += of(judged);
            cut.fails += of(fails);
            cut.fails_first += of(first);
            cut.fails_only += of(only);
            cut.missing += of(missing);
        }
    }

    /// Books rows that the same cuts have judged; `fails` and `missing` have a mask a row.
    pub fn book_rows(&mut self, judged: u32, fails: &[u32], missing: &[u32]) {
        /// Up to this many cuts, rows are first counted by their pair of masks, which is far faster.
        const FEW: usize = 6;
        if self.cuts.len() > FEW {
            fails.iter().zip(missing).for_each(|(f, m)| self.book(judged, *f, *m));
            return;
        }
        let mut rows = [0_u64; 1 << (2 * FEW)];
        let low = (1 << FEW) - 1;
        fails.iter().zip(missing).for_each(|(f, m)| rows[((f & low) << FEW | m & low) as usize] += 1);
        for (pair, count) in rows.into_iter().enumerate().filter(|(_, count)| *count > 0) {
            self.book_many(count, judged, pair as u32 >> FEW, pair as u32 & low);
        }
    }

    /// Rows that are written with a mark: they fail a cut, but none that drops.
    pub fn flagged(&self) -> u64 {
        self.read.saturating_sub(self.accepted).saturating_sub(self.dropped)
    }

    /// Adds the counts of another part.
    pub fn merge(&mut self, other: &CutCounts) {
        self.read += other.read;
        self.accepted += other.accepted;
        self.dropped += other.dropped;
        if self.cuts.is_empty() {
            self.cuts = vec![CutCount::default(); other.cuts.len()];
            self.dropping = other.dropping;
        }
        for (mine, theirs) in self.cuts.iter_mut().zip(&other.cuts) {
            mine.judged += theirs.judged;
            mine.fails += theirs.fails;
            mine.fails_first += theirs.fails_first;
            mine.fails_only += theirs.fails_only;
            mine.missing += theirs.missing;
        }
    }
}
