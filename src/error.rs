//! The one error type: what happened, where, and what to do next.
//!
//! Inner code says what is wrong; each outer layer adds the part of the place that only it knows (file, row
//! group, column, row, plan key). [`Error::exit_code`] gives the exit code that the command ends with.

use std::fmt;
use std::path::{Path, PathBuf};

/// Result of everything that can fail here.
pub type Result<T, E = Error> = std::result::Result<T, E>;

/// Whose turn it is to act.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Kind {
    /// The plan or the command line is wrong; nothing was written. Exit code 2.
    Plan,
    /// The input, the output or the machine failed. Exit code 1.
    Failed,
    /// Stopped before the end; the same command continues. Exit code 75.
    Interrupted,
}

/// Where it happened; every field is filled by the layer that knows it.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct Place {
    /// File on disk.
    pub file: Option<PathBuf>,
    /// Row group in that file, from 0.
    pub row_group: Option<usize>,
    /// Column name.
    pub column: Option<String>,
    /// Row in that file, from 0.
    pub row: Option<u64>,
    /// Key path of the plan, `bands.G.magnitude` say, with the line when it is known.
    pub key: Option<String>,
}

/// An error with its place. Several plan errors travel together in `others`.
#[derive(Debug, Clone)]
pub struct Error {
    /// Decides the exit code.
    pub kind: Kind,
    /// One or two sentences: what is wrong and what to do.
    pub message: String,
    /// Where.
    pub place: Box<Place>,
    /// Further errors that were found in the same pass.
    pub others: Vec<Error>,
}

impl Error {
    /// A wrong plan or command line (exit code 2).
    pub fn plan(message: impl Into<String>) -> Self {
        Self::new(Kind::Plan, message)
    }

    /// A failure of input, output or machine (exit code 1).
    pub fn failed(message: impl Into<String>) -> Self {
        Self::new(Kind::Failed, message)
    }

    /// An interrupted build that can go on (exit code 75).
    pub fn interrupted(message: impl Into<String>) -> Self {
        Self::new(Kind::Interrupted, message)
    }

    fn new(kind: Kind, message: impl Into<String>) -> Self {
        Self { kind, message: message.into(), place: Box::default(), others: Vec::new() }
    }

    /// Joins several errors into one; `None` when there are none.
    pub fn all(errors: Vec<Error>) -> Option<Self> {
        let mut flat = Vec::new();
        for mut error in errors {
            let others = std::mem::take(&mut error.others);
            flat.push(error);
            flat.extend(others);
        }
        let mut errors = flat.into_iter();
        let mut first = errors.next()?;
        first.others = errors.collect();
        Some(first)
    }

    /// This error and those that travel with it.
    pub fn each(&self) -> impl Iterator<Item = &Error> {
        std::iter::once(self).chain(self.others.iter())
    }

    /// Adds the file to this error and those that travel with it, unless an inner layer named one.
    pub fn in_file(mut self, file: impl AsRef<Path>) -> Self {
        for error in self.others.iter_mut().map(|other| &mut other.place).chain([&mut self.place]) {
            error.file.get_or_insert_with(|| file.as_ref().to_path_buf());
        }
        self
    }

    /// Adds the row group, unless an inner layer named one.
    pub fn in_row_group(mut self, row_group: usize) -> Self {
        self.place.row_group.get_or_insert(row_group);
        self
    }

    /// Adds the column, unless an inner layer named one.
    pub fn in_column(mut self, column: impl Into<String>) -> Self {
        self.place.column.get_or_insert_with(|| column.into());
        self
    }

    /// Adds the row, unless an inner layer named one.
    pub fn at_row(mut self, row: u64) -> Self {
        self.place.row.get_or_insert(row);
        self
    }

    /// Adds the plan key, unless an inner layer named one.
    pub fn at_key(mut self, key: impl Into<String>) -> Self {
        self.place.key.get_or_insert_with(|| key.into());
        self
    }

    /// Exit code of the process: 2, 1 or 75 (see [`Kind`]).
    pub fn exit_code(&self) -> u8 {
        match self.kind {
            Kind::Plan => 2,
            Kind::Failed => 1,
            Kind::Interrupted => 75,
        }
    }
}

impl fmt::Display for Place {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let mut parts = Vec::new();
        if let Some(file) = &self.file {
            parts.push(file.display().to_string());
        }
        if let Some(key) = &self.key {
            parts.push(key.clone());
        }
        if let Some(row_group) = self.row_group {
            parts.push(format!("row group {row_group}"));
        }
        if let Some(column) = &self.column {
            parts.push(format!("column `{column}`"));
        }
        if let Some(row) = self.row {
            parts.push(format!("row {row}"));
        }
        f.write_str(&parts.join(", "))
    }
}

impl fmt::Display for Error {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (i, error) in self.each().enumerate() {
            if i > 0 {
                writeln!(f)?;
            }
            let place = error.place.to_string();
            if place.is_empty() {
                write!(f, "{}", error.message)?;
            } else {
                write!(f, "{place}: {}", error.message)?;
            }
        }
        Ok(())
    }
}

impl std::error::Error for Error {}

/// The one of `known` that is nearest to `name`, if near enough to be a slip of the finger.
pub fn nearest<'a>(name: &str, known: impl IntoIterator<Item = &'a str>) -> Option<&'a str> {
    let lower = name.to_lowercase();
    let slips = 1 + lower.chars().count() / 5;
    known
        .into_iter()
        .map(|k| {
            let other = k.to_lowercase();
            (strsim::damerau_levenshtein(&lower, &other), strsim::jaro_winkler(&lower, &other), k)
        })
        .filter(|(distance, alike, _)| *distance <= slips || *alike > 0.85)
        .min_by(|a, b| a.0.cmp(&b.0).then(b.1.total_cmp(&a.1)))
        .map(|(_, _, k)| k)
}

/// " Did you mean `x`?" when something is near, else empty; made to be appended to a sentence.
pub fn suggestion<'a>(name: &str, known: impl IntoIterator<Item = &'a str>) -> String {
    nearest(name, known).map(|k| format!(" Did you mean `{k}`?")).unwrap_or_default()
}
