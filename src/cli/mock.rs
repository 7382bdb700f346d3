//! `tenparsec mock --rows N OUT`: an invented catalogue with known truth.

use crate::engine::machine::{show_count, show_size, show_time};
use crate::engine::progress::{Progress, Voice};
use crate::error::{Error, Result};
use crate::mock;
use clap::Args;
use std::path::PathBuf;
use std::time::Instant;

const EXAMPLES: &str = "\
Examples:
  tenparsec mock --rows 1000000 sky
  tenparsec mock --rows 10000000 --no-truth --seed 7 --files 4 sky
  tenparsec build sky/plan.toml

The stars are invented. The same seed gives the same bytes on any machine.";

#[derive(Debug, Args)]
#[command(after_help = EXAMPLES)]
pub(super) struct Options {
    /// Folder for the catalogue and its plan
    out: PathBuf,
    /// Stars
    #[arg(long, value_name = "N", value_parser = clap::value_parser!(u64).range(1..=100_000_000_000))]
    rows: u64,
    /// Files
    #[arg(long, value_name = "K", default_value_t = 1, value_parser = clap::value_parser!(u32).range(1..=99_999))]
    files: u32,
    /// Seed of the random numbers
    #[arg(long, value_name = "S", default_value_t = 1)]
    seed: u64,
    /// Rows of a row group
    #[arg(long, value_name = "R", default_value_t = 250_000, value_parser = clap::value_parser!(u64).range(1..=10_000_000))]
    row_group_rows: u64,
    /// Leave out the columns that no survey could know
    #[arg(long)]
    no_truth: bool,
    /// Worker threads [default: the processors that this job may use]
    #[arg(long, value_name = "N", value_parser = clap::value_parser!(u16).range(1..=1024))]
    threads: Option<u16>,
}

pub(super) fn run(options: &Options, voice: Voice, colour: bool) -> Result<u8> {
    let start = Instant::now();
    let progress = Progress::new(voice, colour, options.rows, u64::from(options.files));
    let request = mock::Options {
        out: options.out.clone(),
        rows: options.rows,
        files: options.files as usize,
        seed: options.seed,
        row_group_rows: options.row_group_rows,
        truth: !options.no_truth,
    };
    let threads = options.threads.map_or_else(crate::engine::machine::threads, usize::from);
    rayon::ThreadPoolBuilder::new()
        .num_threads(threads)
        .build_global()
        .map_err(|e| Error::failed(format!("The worker threads cannot be started: {e}.")))?;
    let summary = progress.watch(|| mock::write(&request, &|rows| progress.set(rows)))?;
    if voice == Voice::Text {
        println!(
            "{} invented stars in {} ({}), {}",
            show_count(options.rows),
            options.out.display(),
            show_size(summary.bytes),
            show_time(start.elapsed().as_secs_f64())
        );
        println!("next: tenparsec build {}", summary.plan.display());
    }
    Ok(0)
}
