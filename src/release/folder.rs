//! Guards the output folder: what may be written into, what may be removed, what is left alone.
//!
//! A folder is ours when it holds a manifest or a ledger of ours. Anything else that is not empty is refused and never
//! touched. `--overwrite` removes the files that the old manifest and ledger name, the release's own files (plan,
//! report, run record, tables and figures by their kind) and unfinished `*.tmp` files under names of ours; foreign files stay where they
//! are and are reported, except that a foreign `*.parquet` among the parts is refused before anything is removed,
//! because every reader of `catalogue/*.parquet` would take it for a part.
//!
//! The manifest is first renamed to `superseded.json`: from then on the folder no longer looks like a whole release,
//! and a removal that is interrupted is finished by the next run.

use std::collections::BTreeSet;
use std::fs;
use std::io::Write;
use std::path::{Component, Path, PathBuf};

use super::ledger;
use super::manifest::{self, Manifest};
use super::whole::{UNFINISHED, sync_folder, unfinished, write_error};
use crate::columnar::guard::io_reason;
use crate::error::{Error, Result};

/// A manifest whose release is being removed.
const SUPERSEDED: &str = "superseded.json";
/// Files at the top of a release, besides manifest and ledger.
const OWN_FILES: [&str; 3] = ["plan.toml", "run.json", "report.html"];
/// Folder of the parts.
const PARTS: &str = "catalogue";
/// Folders of a release with the endings of the files that belong there.
const OWN_FOLDERS: [(&str, &[&str]); 3] =
    [(PARTS, &["parquet"]), ("tables", &["parquet", "csv"]), ("figures", &["png"])];

/// An output folder that may be written.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ReleaseFolder {
    root: PathBuf,
}

/// What was found in it.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum State {
    /// Nothing (any more): begin.
    Fresh,
    /// An unfinished build with its ledger: continue.
    Unfinished,
}

/// Result of [`ReleaseFolder::open`].
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Opened {
    /// The folder.
    pub folder: ReleaseFolder,
    /// What to do with it.
    pub state: State,
    /// Foreign files that were found and left alone when an old release was removed, relative to the folder.
    pub kept: Vec<PathBuf>,
}

impl ReleaseFolder {
    /// Opens or creates `path` as output folder and makes sure that it can be written.
    ///
    /// Refused, with a sentence: a file; a non-empty folder that is not a release; a complete release unless
    /// `overwrite`; a folder that cannot be created or written.
    pub fn open(path: &Path, overwrite: bool) -> Result<Opened> {
        let folder = Self { root: path.to_path_buf() };
        let mut opened = Opened { folder, state: State::Fresh, kept: vec![] };
        let fail = |text: String| Error::failed(text).in_file(path);
        match fs::metadata(path) {
            Err(error) if error.kind() == std::io::ErrorKind::NotFound => {
                fs::create_dir_all(path)
                    .map_err(|error| fail(format!("The output folder cannot be made: {}.", io_reason(&error))))?;
            }
            Err(error) => return Err(fail(format!("The output folder cannot be used: {}.", io_reason(&error)))),
            Ok(found) if !found.is_dir() => {
                return Err(fail("The output is a file; name a folder with --output.".into()));
            }
            Ok(_) => {
                let ours = opened.folder.look()?;
                match ours {
                    Found::Empty => {}
                    Found::Foreign(first) => {
                        return Err(fail(format!(
                            "The folder is not empty and not a tenparsec release (it holds `{first}`), so it is left alone; choose another --output."
                        )));
                    }
                    Found::Complete if !overwrite => {
                        return Err(fail(
                            "The folder already holds a complete release; use --overwrite to replace it or choose another --output.".into(),
                        ));
                    }
                    Found::Unfinished if !overwrite => opened.state = State::Unfinished,
                    Found::Complete | Found::Unfinished | Found::Superseded => {
                        opened.folder.probe()?;
                        opened.kept = opened.folder.clear()?;
                    }
                }
            }
        }
        opened.folder.probe()?;
        Ok(opened)
    }

    /// The folder itself.
    pub fn root(&self) -> &Path {
        &self.root
    }

    /// A path in the release; makes the subfolder `inner` when it is not there.
    pub fn subfolder(&self, inner: &str) -> Result<PathBuf> {
        let path = self.root.join(inner);
        if !path.is_dir() {
            fs::create_dir_all(&path).map_err(|error| write_error(&path, &error))?;
            sync_folder(&self.root)?;
        }
        Ok(path)
    }

    /// Folder of the parts, made when it is not there.
    pub fn parts(&self) -> Result<PathBuf> {
        self.subfolder(PARTS)
    }

    /// Name of a part relative to the release, as manifest and ledger have it.
    pub fn part_name(name: &str) -> String {
        format!("{PARTS}/{name}")
    }

    fn look(&self) -> Result<Found> {
        let list = |error: std::io::Error| {
            Error::failed(format!("The folder cannot be listed: {}.", io_reason(&error))).in_file(&self.root)
        };
        let mut names = Vec::new();
        for item in fs::read_dir(&self.root).map_err(list)? {
            names.push(item.map_err(list)?.file_name().to_string_lossy().into_owned());
        }
        names.sort();
        let has = |name: &str| names.iter().any(|found| found == name);
        if has(ledger::FILE) && ledger::is_ledger(&self.root.join(ledger::FILE)) {
            return Ok(Found::Unfinished);
        }
        if has(manifest::FILE) {
            // an unreadable or foreign manifest says that the folder is not ours to overwrite
            return Manifest::read(&self.root).map(|_| Found::Complete);
        }
        if has(SUPERSEDED) && Manifest::read_file(&self.root.join(SUPERSEDED)).is_ok() {
            return Ok(Found::Superseded);
        }
        let foreign = names.into_iter().find(|name| {
            *name != PROBE
                && !OWN_FOLDERS.iter().any(|(own, _)| {
                    own == name && fs::read_dir(self.root.join(own)).is_ok_and(|mut inner| inner.next().is_none())
                })
        });
        Ok(foreign.map_or(Found::Empty, Found::Foreign))
    }

    /// Writes, syncs and removes a small file: better to learn now than after the first part.
    fn probe(&self) -> Result<()> {
        let path = self.root.join(PROBE);
        let tried = fs::File::create(&path).and_then(|mut file| {
            file.write_all(b"tenparsec")?;
            file.sync_all()
        });
        let removed = fs::remove_file(&path);
        tried.and(removed).map_err(|error| {
            Error::failed(format!("The output folder cannot be written: {}.", io_reason(&error))).in_file(&self.root)
        })
    }

    /// Removes what belongs to the old release; returns what else is there.
    fn clear(&self) -> Result<Vec<PathBuf>> {
        let mut named: BTreeSet<PathBuf> = BTreeSet::new();
        for name in [manifest::FILE, SUPERSEDED] {
            let path = self.root.join(name);
            if path.exists() {
                let old = Manifest::read_file(&path)?;
                let parts = old.parts.iter().map(|part| &part.file);
                named.extend(
                    parts.chain(old.tables.iter().map(|table| &table.file)).filter_map(|file| inside(file).ok()),
                );
            }
        }
        let ledger_path = self.root.join(ledger::FILE);
        let finished = ledger::named_parts(&ledger_path);
        named.extend(finished.iter().filter_map(|file| inside(file).ok()));
        if ledger_path.exists() {
            // a build that was killed between a part's rename and its ledger line leaves the part unnamed
            let parts = fs::read_dir(self.root.join(PARTS)).into_iter().flatten().flatten();
            named.extend(parts.map(|item| Path::new(PARTS).join(item.file_name())).filter(|path| is_part_name(path)));
        }

        let mut remove = Vec::new();
        let mut kept = Vec::new();
        self.sort_files(&self.root, &named, &mut remove, &mut kept)?;
        let intruder = kept.iter().find(|path| path.starts_with(PARTS) && has_ending(path, &["parquet"]));
        if let Some(path) = intruder {
            return Err(Error::failed(
                "This file is among the old release's parts but is not one of them; move it away first. Nothing was removed.",
            )
            .in_file(self.root.join(path)));
        }
        let old = self.root.join(manifest::FILE);
        if old.exists() {
            let renamed = self.root.join(SUPERSEDED);
            fs::rename(&old, &renamed).map_err(|error| write_error(&old, &error))?;
            sync_folder(&self.root)?;
        }
        let gone = |path: &Path| match fs::remove_file(path) {
            Err(error) if error.kind() != std::io::ErrorKind::NotFound => Err(write_error(path, &error)),
            _ => Ok(()),
        };
        for path in &remove {
            gone(&self.root.join(path))?;
        }
        for (folder, _) in OWN_FOLDERS {
            // fails when foreign files are left in it, which is what we want
            let _ = fs::remove_dir(self.root.join(folder));
        }
        // the markers go last: they are what makes an interrupted removal recognisable
        gone(&ledger_path)?;
        gone(&self.root.join(SUPERSEDED))?;
        sync_folder(&self.root)?;
        Ok(kept)
    }

    /// Splits the files below `folder` into ours and others (paths relative to the release).
    fn sort_files(
        &self,
        folder: &Path,
        named: &BTreeSet<PathBuf>,
        remove: &mut Vec<PathBuf>,
        kept: &mut Vec<PathBuf>,
    ) -> Result<()> {
        let list = |error: std::io::Error| {
            Error::failed(format!("The folder cannot be listed: {}.", io_reason(&error))).in_file(folder)
        };
        let mut items = fs::read_dir(folder).map_err(list)?.collect::<std::io::Result<Vec<_>>>().map_err(list)?;
        items.sort_by_key(fs::DirEntry::file_name);
        for item in items {
            let path = item.path();
            let relative = path.strip_prefix(&self.root).unwrap_or(&path).to_path_buf();
            // links are never followed: what they point to is not inside the release
            if item.file_type().map_err(list)?.is_dir() {
                self.sort_files(&path, named, remove, kept)?;
            } else if [manifest::FILE, SUPERSEDED, ledger::FILE].iter().any(|own| relative == Path::new(own)) {
            } else if named.contains(&relative) || is_own(&relative) {
                remove.push(relative);
            } else {
                kept.push(relative);
            }
        }
        Ok(())
    }
}

const PROBE: &str = "probe.tmp";

enum Found {
    Empty,
    Foreign(String),
    Complete,
    Unfinished,
    Superseded,
}

/// Files that carry names of ours though no manifest or ledger need name them: the fixed ones, tables and figures, and
/// the unfinished form of any of ours. Parts are ours only when they are named, or unfinished.
fn is_own(relative: &Path) -> bool {
    let text = relative.to_string_lossy();
    let (text, unfinished) = match text.strip_suffix(UNFINISHED) {
        Some(stem) => (stem.to_owned(), true),
        None => (text.clone().into_owned(), false),
    };
    let path = Path::new(&text);
    let top = [manifest::FILE, ledger::FILE].into_iter().chain(OWN_FILES);
    if top.into_iter().any(|own| path == Path::new(own)) || relative == Path::new(PROBE) {
        return true;
    }
    OWN_FOLDERS.iter().any(|(folder, endings)| {
        path.parent() == Some(Path::new(folder))
            && has_ending(path, endings)
            && (*folder != PARTS || (unfinished && is_part_name(path)))
    })
}

fn is_part_name(path: &Path) -> bool {
    let stem = path.file_stem().map(|stem| stem.to_string_lossy().into_owned()).unwrap_or_default();
    stem.strip_prefix("part-").is_some_and(|digits| digits.len() >= 5 && digits.bytes().all(|b| b.is_ascii_digit()))
}

fn has_ending(path: &Path, endings: &[&str]) -> bool {
    path.extension().is_some_and(|extension| endings.iter().any(|ending| extension == *ending))
}

/// A path of a manifest or ledger, if it leads nowhere but down into the release.
pub(super) fn inside(file: &str) -> Result<PathBuf> {
    let path = Path::new(file);
    if file.is_empty() || !path.components().all(|part| matches!(part, Component::Normal(_))) {
        return Err(Error::failed(format!("`{file}` leads out of the release.")));
    }
    Ok(path.to_path_buf())
}

/// The temporary name of a part in `folder`.
pub(super) fn unfinished_part(folder: &Path, name: &str) -> PathBuf {
    unfinished(&folder.join(name))
}
