//! The plan that goes with the mock, with comments for someone who sees a plan for the first time.

/// Text of the plan; `catalogue` is the path or pattern of the Parquet files, relative to the plan.
pub fn plan_text(catalogue: &str) -> String {
    PLAN.replace("@CATALOGUE@", catalogue)
}

const PLAN: &str = include_str!("plan.toml");
