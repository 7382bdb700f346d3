//! From the entries of `release.catalogue` to Parquet files in a fixed order.
//!
//! An entry is a file, a folder (all `*.parquet` files below it), or a glob. Entries keep the plan's order; within an
//! entry files are sorted by the bytes of their path. Names that start with a dot are skipped below folders and by
//! globs that do not write the dot. A file that several entries match is read once, at its first place, and a note
//! says so: a catalogue that counts a star twice by an overlapping glob is never what was meant.

use std::collections::HashSet;
use std::io::Read;
use std::os::unix::ffi::OsStrExt;
use std::path::{Component, Path, PathBuf};

use crate::columnar::guard::io_reason;
use crate::error::{Error, Result};

/// Files with the names to show, and notes.
pub(super) struct Found {
    pub files: Vec<(PathBuf, String)>,
    pub notes: Vec<String>,
}

/// All files of `patterns`; errors of several entries travel together.
pub(super) fn find(patterns: &[String], base: &Path, except: &[PathBuf]) -> Result<Found> {
    let mut walk = Walk { except: except.iter().map(|path| canonical(path)).collect(), visited: HashSet::new() };
    let mut seen = HashSet::new();
    let mut files = Vec::new();
    let mut repeated = Vec::new();
    let mut errors = Vec::new();
    for pattern in patterns {
        match entry(pattern, base, &mut walk) {
            Ok(matched) => {
                for path in matched {
                    let name = shown(&path, base);
                    if seen.insert(canonical(&path)) {
                        files.push((path, name));
                    } else {
                        repeated.push(name);
                    }
                }
            }
            Err(error) => errors.push(error),
        }
    }
    if let Some(error) = Error::all(errors) {
        return Err(error);
    }
    let notes = match repeated.as_slice() {
        [] => vec![],
        [one] => vec![format!("{one} is named by more than one entry of the catalogue and is read once.")],
        [first, ..] => vec![format!(
            "{} files ({first} first) are named by more than one entry of the catalogue and are read once.",
            repeated.len()
        )],
    };
    Ok(Found { files, notes })
}

struct Walk {
    except: HashSet<PathBuf>,
    /// Folders of the entry at hand, so that a circle of symbolic links ends.
    visited: HashSet<PathBuf>,
}

fn entry(pattern: &str, base: &Path, walk: &mut Walk) -> Result<Vec<PathBuf>> {
    let nothing = |text: String| Err(Error::failed(text).at_key("release.catalogue"));
    if pattern.trim().is_empty() {
        return nothing("An entry is empty: name a file, a folder or a glob.".into());
    }
    walk.visited.clear();
    let literal = base.join(pattern);
    let mut found = Vec::new();
    if literal.is_dir() {
        walk.folder(&literal, &mut found)?;
        if found.is_empty() {
            return nothing(format!("The folder `{pattern}` holds no *.parquet file."));
        }
    } else if literal.exists() {
        found.push(literal);
    } else if pattern.contains(['*', '?', '[']) {
        let text = if Path::new(pattern).is_absolute() {
            pattern.to_owned()
        } else {
            format!("{}/{pattern}", glob::Pattern::escape(&base.to_string_lossy()))
        };
        let options = glob::MatchOptions { require_literal_leading_dot: true, ..glob::MatchOptions::new() };
        let matches = glob::glob_with(&text, options).map_err(|error| {
            Error::plan(format!("`{pattern}` is not a valid glob: {}.", error.msg)).at_key("release.catalogue")
        })?;
        for path in matches {
            let path = path.map_err(|error| {
                Error::failed(format!("The folder cannot be listed: {}.", io_reason(error.error())))
                    .in_file(error.path())
            })?;
            if path.is_dir() {
                walk.folder(&path, &mut found)?;
            } else if !walk.excepted(&path) {
                found.push(path);
            }
        }
        if found.is_empty() {
            return nothing(format!("No Parquet file matches `{pattern}` (looked in {}).", base.display()));
        }
    } else {
        return nothing(format!("There is no file or folder `{pattern}` (looked in {}).", base.display()));
    }
    found.sort_by(|a, b| a.as_os_str().as_bytes().cmp(b.as_os_str().as_bytes()));
    found.dedup();
    Ok(found)
}

impl Walk {
    fn excepted(&self, path: &Path) -> bool {
        !self.except.is_empty() && canonical(path).ancestors().any(|parent| self.except.contains(parent))
    }

    fn folder(&mut self, folder: &Path, found: &mut Vec<PathBuf>) -> Result<()> {
        if self.excepted(folder) || !self.visited.insert(canonical(folder)) {
            return Ok(());
        }
        let fail = |error: std::io::Error| {
            Error::failed(format!("The folder cannot be listed: {}.", io_reason(&error))).in_file(folder)
        };
        for item in std::fs::read_dir(folder).map_err(fail)? {
            let item = item.map_err(fail)?;
            if item.file_name().as_bytes().starts_with(b".") {
                continue;
            }
            let path = item.path();
            if path.is_dir() {
                if !is_release(&path) {
                    self.folder(&path, found)?;
                }
            } else if path.extension().is_some_and(|extension| extension.eq_ignore_ascii_case("parquet")) {
                found.push(path);
            }
        }
        Ok(())
    }
}

/// Does the folder hold a release, whole or unfinished? A release that stands below a catalogue's folder is no part of
/// the catalogue; who wants to read one names it.
fn is_release(folder: &Path) -> bool {
    let begins = |name: &str, words: &str| {
        let mut start = vec![0; 256];
        let read = std::fs::File::open(folder.join(name)).and_then(|mut file| file.read(&mut start)).unwrap_or(0);
        String::from_utf8_lossy(&start[..read]).contains(words)
    };
    begins("manifest.json", "tenparsec release") || begins("ledger.jsonl", "tenparsec ledger")
}

fn canonical(path: &Path) -> PathBuf {
    path.canonicalize().unwrap_or_else(|_| path.to_path_buf())
}

/// Relative to `base` when it lies below it, without `.` steps, so that moving plan and catalogue together changes nothing.
fn shown(path: &Path, base: &Path) -> String {
    let relative = path.strip_prefix(base).unwrap_or(path);
    let clean: PathBuf = relative.components().filter(|part| !matches!(part, Component::CurDir)).collect();
    clean.to_string_lossy().into_owned()
}
