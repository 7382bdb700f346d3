//! `tenparsec build PLAN`.

use super::Resources;
use crate::engine::build::{self, Request};
use crate::engine::progress::{Voice, json_line};
use crate::error::Result;
use crate::plan::Plan;
use clap::Args;
use std::path::PathBuf;

const EXAMPLES: &str = "\
Examples:
  tenparsec build plan.toml
  tenparsec build plan.toml --output /scratch/release-3 --threads 8 --memory 4GiB
  tenparsec build plan.toml --overwrite --log json 2> build.jsonl";

#[derive(Debug, Args)]
#[command(after_help = EXAMPLES)]
pub(super) struct Options {
    /// The plan, a TOML file
    plan: PathBuf,
    #[command(flatten)]
    resources: Resources,
    /// Replace the release that stands in the output folder
    #[arg(long)]
    overwrite: bool,
}

pub(super) fn run(options: &Options, voice: Voice, colour: bool) -> Result<u8> {
    let plan = Plan::load(&options.plan)?;
    let request = Request {
        output: options.resources.output.clone().unwrap_or_else(|| plan.output()),
        threads: options.resources.threads.map(usize::from),
        memory: options.resources.memory,
        overwrite: options.overwrite,
        voice,
        colour,
    };
    let summary = build::run(plan, &request)?;
    match voice {
        Voice::Text => print!("{summary}"),
        Voice::Json => {
            for note in &summary.notes {
                json_line("warning", "note", &[("text", note.clone().into())]);
            }
            json_line("info", "done", &summary.figures);
        }
        Voice::Quiet => {}
    }
    Ok(0)
}
