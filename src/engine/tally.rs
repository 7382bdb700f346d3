//! What is counted while rows stream by; sums over chunks, pieces and parts, in any order.

use super::values::Unusable;
use serde::{Deserialize, Serialize};

/// A posterior whose `prior_share` reaches this is called dominated by the prior: half of the prior's variance is left.
pub const PRIOR_DOMINATED: f64 = 0.5;

/// Counts of stars by what could be learnt about their distance.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct StarCounts {
    /// Rows with a posterior.
    pub posteriors: u64,
    /// Rows whose posterior is dominated by the prior; see [`PRIOR_DOMINATED`].
    pub prior_dominated: u64,
}

impl StarCounts {
    /// Adds a chunk from its `prior_share`.
    pub fn add(&mut self, prior_share: &[f64]) {
        self.posteriors += count(prior_share, |share| !share.is_nan());
        self.prior_dominated += count(prior_share, |share| share >= PRIOR_DOMINATED);
    }

    /// Adds the counts of other rows.
    pub fn merge(&mut self, other: &Self) {
        self.posteriors += other.posteriors;
        self.prior_dominated += other.prior_dominated;
    }
}

fn count(values: &[f64], is: impl Fn(f64) -> bool) -> u64 {
    values.iter().filter(|x| is(**x)).count() as u64
}

/// Adds lists of counts entry by entry.
pub fn merge_unusable(into: &mut [Unusable], from: &[Unusable]) {
    for (a, b) in into.iter_mut().zip(from) {
        a.merge(b);
    }
}
