//! The catalogue: which Parquet files, with which columns and rows, in which order, cut into which parts.
//!
//! `find` turns the plan's entries into files, `agree` compares their columns, `parts` cuts row groups into units of
//! work, `read` decodes them. Everything is decided from file names and footers, so that the same plan gives the same
//! parts on any machine. A catalogue keeps a few numbers per row group; footers are read again when a file's turn
//! comes, and a file that changed in between is refused.

mod agree;
mod find;
mod parts;
mod read;

use std::collections::VecDeque;
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex};

use arrow::datatypes::SchemaRef;
use rayon::prelude::*;

pub use parts::{HUGE_GROUP, PIECE_ROWS, PartPlan, Piece};
pub use read::{PieceReader, read};

use crate::columnar::source::SourceFile;
use crate::error::{Error, Result};

/// Opened footers kept for reuse; parts are worked on in order, so a few suffice for any number of threads in practice.
const KEPT_OPEN: usize = 16;

/// One file of the catalogue, as its footer describes it.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct CatalogueFile {
    /// Where it is.
    pub path: PathBuf,
    /// Relative to the plan where possible, else absolute; what reports and manifests say.
    pub shown: String,
    /// Length in bytes.
    pub bytes: u64,
    /// Rows in all row groups.
    pub rows: u64,
    /// See [`SourceFile::fingerprint`].
    pub fingerprint: String,
    /// Rows of each row group.
    pub groups: Vec<u64>,
}

/// The input of a build: files in a fixed order, with one set of columns.
#[derive(Debug)]
pub struct Catalogue {
    /// Files in reading order.
    pub files: Vec<CatalogueFile>,
    /// Columns of all files: names, order and types agree; a column is nullable when it is so in any file. Field
    /// metadata (unit, ucd, description) are those of the first file that states them.
    pub schema: SchemaRef,
    /// Rows in all files; never 0.
    pub rows: u64,
    /// What a reader of the summary should know, in sentences: files named twice, files without rows.
    pub notes: Vec<String>,
    open: Mutex<VecDeque<(usize, Arc<SourceFile>)>>,
}

impl Catalogue {
    /// Finds the files of `patterns` (see the plan's `release.catalogue`; relative entries start at `base`), reads
    /// all footers in parallel and checks that they agree.
    ///
    /// Errors: an entry that matches nothing, a file that cannot be opened (all such files at once), columns that
    /// differ between files, no rows at all.
    pub fn open(patterns: &[String], base: &Path) -> Result<Self> {
        Self::open_except(patterns, base, &[])
    }

    /// Like [`Self::open`], never descending into the folders `except` (a release that is written below the
    /// catalogue's own folder must not become its input).
    pub fn open_except(patterns: &[String], base: &Path, except: &[PathBuf]) -> Result<Self> {
        let found = find::find(patterns, base, except)?;
        let mut notes = found.notes;
        let opened: Vec<Result<SourceFile>> =
            found.files.par_iter().map(|(path, shown)| SourceFile::open(path, shown.clone())).collect();
        let mut files = Vec::with_capacity(opened.len());
        let mut failures = Vec::new();
        let mut columns = None;
        for source in opened {
            match source {
                Ok(source) => {
                    let merged = match columns.take() {
                        None => agree::Columns::of(&source),
                        Some(columns) => agree::Columns::merge(columns, &source)?,
                    };
                    columns = Some(merged);
                    files.push(CatalogueFile {
                        groups: (0..source.row_groups()).map(|group| source.row_group_rows(group)).collect(),
                        path: source.path,
                        shown: source.shown,
                        bytes: source.bytes,
                        rows: source.rows,
                        fingerprint: source.fingerprint,
                    });
                }
                Err(error) => failures.push(error),
            }
        }
        if let Some(error) = Error::all(failures) {
            return Err(error);
        }
        let Some(columns) = columns else {
            return Err(Error::failed("The catalogue has no files: name at least one in `release.catalogue`."));
        };
        let rows = files.iter().try_fold(0u64, |sum, file| sum.checked_add(file.rows)).unwrap_or(u64::MAX);
        if rows == 0 {
            return Err(Error::failed(format!(
                "The catalogue has no rows: {}.",
                if files.len() == 1 {
                    "its only file is empty".into()
                } else {
                    format!("all {} files are empty", files.len())
                }
            ))
            .in_file(&files[0].shown));
        }
        let empty = files.iter().filter(|file| file.rows == 0).count();
        if empty > 0 {
            notes.push(format!("{empty} of {} files have no rows.", files.len()));
        }
        Ok(Self { files, schema: columns.schema(), rows, notes, open: Mutex::default() })
    }

    /// Bytes of all files.
    pub fn bytes(&self) -> u64 {
        self.files.iter().map(|file| file.bytes).sum()
    }

    /// Hex BLAKE3 over name, length and fingerprint of every file in order.
    pub fn fingerprint(&self) -> String {
        let mut hasher = blake3::Hasher::new();
        for file in &self.files {
            hasher.update(&(file.shown.len() as u64).to_le_bytes()).update(file.shown.as_bytes());
            hasher.update(&file.bytes.to_le_bytes()).update(file.fingerprint.as_bytes());
        }
        hasher.finalize().to_hex().to_string()
    }

    /// Opens file `index` again, or hands out the footer that is still in memory.
    ///
    /// Fails when the file is gone or its fingerprint is no longer the one seen when the catalogue was opened.
    pub fn source(&self, index: usize) -> Result<Arc<SourceFile>> {
        let lock = || self.open.lock().unwrap_or_else(|poisoned| poisoned.into_inner());
        if let Some((_, source)) = lock().iter().find(|(kept, _)| *kept == index) {
            return Ok(source.clone());
        }
        let file = self.files.get(index).ok_or_else(|| Error::failed(format!("The catalogue has no file {index}.")))?;
        let source = Arc::new(SourceFile::open(&file.path, file.shown.clone())?);
        if source.fingerprint != file.fingerprint {
            return Err(Error::failed(
                "The file changed since this command started; leave the catalogue alone while it is read and run again.",
            )
            .in_file(&file.shown));
        }
        let mut open = lock();
        if open.len() == KEPT_OPEN {
            open.pop_front();
        }
        open.push_back((index, source.clone()));
        Ok(source)
    }

    /// Cuts the catalogue into parts of about `rows_per_part` rows; see [`PartPlan`].
    pub fn parts(&self, rows_per_part: u64) -> Vec<PartPlan> {
        parts::cut(&self.files, rows_per_part, HUGE_GROUP, PIECE_ROWS)
    }

    /// Like [`Self::parts`] with own limits: row groups of more than `huge` rows are cut into pieces of `piece` rows.
    pub fn parts_with_limits(&self, rows_per_part: u64, huge: u64, piece: u64) -> Vec<PartPlan> {
        parts::cut(&self.files, rows_per_part, huge, piece)
    }
}
