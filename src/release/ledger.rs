//! `ledger.jsonl`: finished parts, one JSON line each, while a build runs.
//!
//! A line is appended and synced after its part has its final name, so the ledger never promises what is not there. A
//! last line that a power cut tore is taken off. A part that is named but missing, of another size or without a
//! readable footer is simply built again; should it then appear twice, the later line holds.
//!
//! Whoever stores floats in `details` and wants them back bit by bit stores their bits as integers: JSON text may lose
//! the last one.

use std::collections::BTreeMap;
use std::fs::{File, OpenOptions, TryLockError};
use std::io::{BufRead, BufReader, Read, Write};
use std::path::{Path, PathBuf};

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use super::manifest::PartRecord;
use super::whole::{sync_folder, write_error};
use crate::columnar::guard::io_reason;
use crate::columnar::source::SourceFile;
use crate::error::{Error, Result};

/// Name of the ledger in the release.
pub(super) const FILE: &str = "ledger.jsonl";
const FORMAT: &str = "tenparsec ledger";
const REVISION: u32 = 1;
/// No header of ours is longer.
const MAX_HEADER: u64 = 64 << 10;

/// First line: what the parts were built from. A build continues only a ledger with an equal header.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
pub struct LedgerHeader {
    /// Always "tenparsec ledger".
    pub format: String,
    /// Revision of this format, now 1.
    pub revision: u32,
    /// Version of the program.
    pub tenparsec_version: String,
    /// BLAKE3 of the plan.
    pub plan_blake3: String,
    /// Fingerprint of the catalogue.
    pub catalogue_fingerprint: String,
    /// Parts of the whole build.
    pub parts: u64,
}

impl LedgerHeader {
    /// A header of this program's version.
    pub fn new(plan_blake3: impl Into<String>, catalogue_fingerprint: impl Into<String>, parts: u64) -> Self {
        Self {
            format: FORMAT.into(),
            revision: REVISION,
            tenparsec_version: env!("CARGO_PKG_VERSION").into(),
            plan_blake3: plan_blake3.into(),
            catalogue_fingerprint: catalogue_fingerprint.into(),
            parts,
        }
    }
}

/// A further line: a finished part and what the engine wants to know again (counts, accumulators).
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct LedgerEntry {
    /// Position of the part in the build.
    pub index: u64,
    /// The part.
    pub part: PartRecord,
    /// Opaque here.
    pub details: serde_json::Value,
}

/// The ledger of a running build, open for appending and locked against a second build in the same folder.
#[derive(Debug)]
pub struct Ledger {
    path: PathBuf,
    file: File,
}

/// What a ledger from an earlier run holds.
#[derive(Debug)]
pub struct Resumed {
    /// The ledger, ready for further lines.
    pub ledger: Ledger,
    /// Parts that are done, by index.
    pub entries: Vec<LedgerEntry>,
    /// Parts that the ledger names but that must be built again, with the reason, in sentences.
    pub redo: Vec<String>,
}

impl Ledger {
    /// Starts a new ledger in the release folder with its header line, synced. Fails when one is there.
    pub fn create(release: &Path, header: &LedgerHeader) -> Result<Self> {
        let path = release.join(FILE);
        let file = OpenOptions::new().append(true).create_new(true).open(&path);
        let file = file.map_err(|error| write_error(&path, &error))?;
        let mut ledger = Self::locked(path, file)?;
        ledger.line(header)?;
        sync_folder(release)?;
        Ok(ledger)
    }

    /// Reads the ledger that an interrupted build left, checks the parts that it names, and opens it for more.
    ///
    /// Errors: unreadable, not a ledger of ours, another plan or catalogue or version (the message says which and what to do),
    /// another build at work in the folder.
    pub fn resume(release: &Path, header: &LedgerHeader) -> Result<Resumed> {
        let path = release.join(FILE);
        let fail = |text: String| Error::failed(text).in_file(&path);
        let file = OpenOptions::new().append(true).open(&path);
        let file = file.map_err(|error| write_error(&path, &error))?;
        let mut ledger = Self::locked(path.clone(), file)?;
        let text =
            std::fs::read(&path).map_err(|error| fail(format!("The ledger cannot be read: {}.", io_reason(&error))))?;
        let whole = text.iter().rposition(|byte| *byte == b'\n').map_or(0, |at| at + 1);
        let mut lines = text[..whole].split(|byte| *byte == b'\n').filter(|line| !line.is_empty());
        match lines.next() {
            Some(line) => check_header(line, header).map_err(|error| error.in_file(&path))?,
            // the power cut came before the header was on disk: nothing is done yet
            None => {
                ledger.truncate(0)?;
                ledger.line(header)?;
                return Ok(Resumed { ledger, entries: vec![], redo: vec![] });
            }
        }
        let mut entries = BTreeMap::new();
        for (number, line) in lines.enumerate() {
            let entry: LedgerEntry = serde_json::from_slice(line).map_err(|error| {
                fail(format!("Line {} is damaged ({error}); start afresh with --overwrite.", number + 2))
            })?;
            entries.insert(entry.index, entry);
        }
        if whole < text.len() {
            ledger.truncate(whole as u64)?;
        }
        let mut redo = Vec::new();
        entries.retain(|_, entry| match check_part(release, &entry.part) {
            Ok(()) => true,
            Err(error) => {
                redo.push(format!("{} is built again: {}", entry.part.file, error.message));
                false
            }
        });
        Ok(Resumed { ledger, entries: entries.into_values().collect(), redo })
    }

    /// Adds a finished part; on return the line is on disk.
    pub fn append(&mut self, entry: &LedgerEntry) -> Result<()> {
        self.line(entry)
    }

    /// Removes the ledger, after the manifest has been written.
    pub fn remove(self) -> Result<()> {
        std::fs::remove_file(&self.path).map_err(|error| write_error(&self.path, &error))?;
        sync_folder(self.path.parent().unwrap_or(Path::new(".")))
    }

    fn locked(path: PathBuf, file: File) -> Result<Self> {
        match file.try_lock() {
            Ok(()) => Ok(Self { path, file }),
            Err(TryLockError::WouldBlock) => {
                Err(Error::failed("Another build is writing this release; wait for it or stop it first.").in_file(path))
            }
            // file systems without locks: nothing to hold against a second build
            Err(TryLockError::Error(_)) => Ok(Self { path, file }),
        }
    }

    fn line(&mut self, value: &impl Serialize) -> Result<()> {
        let mut line = serde_json::to_vec(value)
            .map_err(|error| Error::failed(format!("A ledger line cannot be written as JSON: {error}.")))?;
        line.push(b'\n');
        let before = self.file.metadata().map(|found| found.len());
        let written = self.file.write_all(&line).and_then(|()| self.file.sync_data());
        if let (Err(_), Ok(len)) = (&written, before) {
            // half a line must not be continued by the next one; if this fails too, resume sees a damaged line
            let _ = self.file.set_len(len);
        }
        written.map_err(|error| write_error(&self.path, &error))
    }

    fn truncate(&mut self, len: u64) -> Result<()> {
        let cut = self.file.set_len(len).and_then(|()| self.file.sync_data());
        cut.map_err(|error| write_error(&self.path, &error))
    }
}

/// Is the first line of this file a header of ours?
pub(super) fn is_ledger(path: &Path) -> bool {
    let mut first = String::new();
    let read = File::open(path).and_then(|file| BufReader::new(file.take(MAX_HEADER)).read_line(&mut first));
    // a power cut during the first write leaves nothing or a piece of the header
    let mark = format!("{{\"format\":\"{FORMAT}\"");
    let torn = !first.ends_with('\n') && (first.starts_with(&mark) || mark.starts_with(&first));
    read.is_ok() && (torn || serde_json::from_str::<LedgerHeader>(&first).is_ok_and(|header| header.format == FORMAT))
}

/// Parts named by a ledger, as far as its lines can be read.
pub(super) fn named_parts(path: &Path) -> Vec<String> {
    let text = std::fs::read(path).unwrap_or_default();
    let lines = text.split(|byte| *byte == b'\n').skip(1);
    lines.filter_map(|line| serde_json::from_slice::<LedgerEntry>(line).ok()).map(|entry| entry.part.file).collect()
}

fn check_header(line: &[u8], wanted: &LedgerHeader) -> Result<()> {
    let found: LedgerHeader = serde_json::from_slice(line)
        .map_err(|error| Error::failed(format!("The first line is no header of a tenparsec ledger: {error}.")))?;
    if found == *wanted {
        return Ok(());
    }
    let what = if found.format != wanted.format || found.revision != wanted.revision {
        "in another ledger format".to_owned()
    } else if found.tenparsec_version != wanted.tenparsec_version {
        format!("by tenparsec {} (this is {})", found.tenparsec_version, wanted.tenparsec_version)
    } else if found.plan_blake3 != wanted.plan_blake3 {
        "from another plan".to_owned()
    } else if found.catalogue_fingerprint != wanted.catalogue_fingerprint {
        "from another state of the catalogue".to_owned()
    } else {
        "with parts of another size".to_owned()
    };
    Err(Error::failed(format!(
        "The unfinished release here was begun {what}, so it cannot be continued; start afresh with --overwrite or choose another --output."
    )))
}

fn check_part(release: &Path, part: &PartRecord) -> Result<()> {
    let path = release.join(super::folder::inside(&part.file)?);
    let bytes = std::fs::metadata(&path)
        .map_err(|error| Error::failed(format!("The file cannot be read: {}.", io_reason(&error))))?
        .len();
    if bytes != part.bytes {
        return Err(Error::failed(format!("It has {bytes} bytes instead of {}.", part.bytes)));
    }
    let source = SourceFile::open(&path, part.file.clone())?;
    if source.rows != part.rows {
        return Err(Error::failed(format!("It has {} rows instead of {}.", source.rows, part.rows)));
    }
    Ok(())
}
