//! A mock catalogue: the invented survey "Lantern Ridge 2", of any size, with the truth beside the measurements.
//!
//! The sky has two discs and a halo (`galaxy`), main sequence, giants and white dwarfs (`stars`), of which the survey
//! sees those within its limits of magnitude (`lattice`) and measures them with faults that a plan can mend and some
//! that it cannot (`survey`). Every row is a function of the seed and the row number, so the same seed gives the same
//! bytes for any number of threads, and the same stars for any number of files or size of row groups.

mod columns;
mod curve;
mod galaxy;
mod lattice;
mod plan;
mod random;
mod stars;
mod survey;
mod writer;

use std::fs;
use std::path::PathBuf;

pub use plan::plan_text;
pub use survey::{ERROR_FLOOR, ERROR_SCALE, zero_point};

use crate::error::{Error, Result};

/// What to write.
#[derive(Debug, Clone)]
pub struct Options {
    /// Folder for the files and the plan; made when it is not there.
    pub out: PathBuf,
    /// Rows in all files together.
    pub rows: u64,
    /// Number of files, 1 to 100,000.
    pub files: usize,
    /// Another seed gives other stars on the same sky.
    pub seed: u64,
    /// Rows in a row group, 1 to 100 million.
    pub row_group_rows: u64,
    /// Write the columns of truth.
    pub truth: bool,
}

impl Options {
    /// A mock of `rows` rows in `out`: one file, seed 1, row groups of 250,000 rows, with truth.
    pub fn new(out: impl Into<PathBuf>, rows: u64) -> Self {
        Self { out: out.into(), rows, files: 1, seed: 1, row_group_rows: 250_000, truth: true }
    }
}

/// What was written.
#[derive(Debug, Clone)]
pub struct Summary {
    /// Parquet files in order.
    pub files: Vec<PathBuf>,
    /// The plan that runs on them.
    pub plan: PathBuf,
    /// Rows in all files.
    pub rows: u64,
    /// Bytes of all Parquet files.
    pub bytes: u64,
}

/// Writes the mock; `progress` hears from time to time how many rows are written so far.
///
/// Nothing is overwritten: a file or plan that exists already is an error before anything is made.
pub fn write(options: &Options, progress: &dyn Fn(u64)) -> Result<Summary> {
    let (files, plan) = targets(options)?;
    fs::create_dir_all(&options.out)
        .map_err(|e| Error::failed(format!("The folder for the mock cannot be made: {e}.")).in_file(&options.out))?;
    let sky = survey::Sky::new();
    let job = writer::Job {
        sky: &sky,
        schema: std::sync::Arc::new(columns::schema(options.truth)),
        seed: options.seed,
        truth: options.truth,
        row_group_rows: options.row_group_rows,
    };
    let (mut bytes, mut done) = (0, 0);
    for (i, file) in files.iter().enumerate() {
        let share = |i: usize| (u128::from(options.rows) * i as u128 / files.len() as u128) as u64;
        bytes += writer::write_file(&job, file, share(i)..share(i + 1), &mut |rows| {
            done += rows;
            progress(done);
        })?;
    }
    let text = plan_text("lantern-ridge-*.parquet");
    writer::whole_or_absent(&plan, |mut out| {
        use std::io::Write;
        out.write_all(text.as_bytes()).map_err(|e| Error::failed(format!("The plan cannot be written: {e}.")))?;
        out.into_inner().map_err(|e| Error::failed(format!("The plan cannot be written: {}.", e.error())))
    })?;
    Ok(Summary { files, plan, rows: options.rows, bytes })
}

/// Paths of the files and the plan, after the options were found to make sense and the paths to be free.
fn targets(options: &Options) -> Result<(Vec<PathBuf>, PathBuf)> {
    if !(1..=100_000).contains(&options.files) {
        return Err(Error::plan("The number of files must lie between 1 and 100,000.").at_key("--files"));
    }
    if !(1..=100_000_000).contains(&options.row_group_rows) {
        return Err(Error::plan("Rows in a row group must lie between 1 and 100 million.").at_key("--row-group-rows"));
    }
    if options.rows > 1 << 40 {
        return Err(Error::plan("A mock has at most 2^40 rows.").at_key("--rows"));
    }
    if options.out.exists() && !options.out.is_dir() {
        return Err(Error::plan("The output is a file, not a folder: name another one.").in_file(&options.out));
    }
    let digits = (options.files - 1).to_string().len().max(2);
    let files: Vec<PathBuf> =
        (0..options.files).map(|i| options.out.join(format!("lantern-ridge-{i:0digits$}.parquet"))).collect();
    let plan = options.out.join("plan.toml");
    for path in files.iter().chain([&plan]) {
        if path.exists() {
            return Err(Error::plan(
                "The mock would overwrite this file: name another folder, or remove the file first.",
            )
            .in_file(path));
        }
    }
    Ok((files, plan))
}
