//! `tenparsec check PLAN`: reads the plan and the footers, writes nothing.

use super::Resources;
use crate::engine::check;
use crate::error::Result;
use crate::plan::Plan;
use clap::Args;
use std::path::PathBuf;

const EXAMPLES: &str = "\
Example:
  tenparsec check plan.toml && tenparsec build plan.toml";

#[derive(Debug, Args)]
#[command(after_help = EXAMPLES)]
pub(super) struct Options {
    /// The plan, a TOML file
    plan: PathBuf,
    #[command(flatten)]
    resources: Resources,
}

pub(super) fn run(options: &Options) -> Result<u8> {
    let plan = Plan::load(&options.plan)?;
    let output = options.resources.output.clone().unwrap_or_else(|| plan.output());
    let threads = options.resources.threads.map(usize::from);
    print!("{}", check::report(plan, &output, threads, options.resources.memory)?);
    Ok(0)
}
