//! `build`: plan and catalogue become a release.
//!
//! Order on disk: ledger, plan, parts (each followed by its ledger line), tables, run record, manifest, and the ledger goes.
//! A folder with a manifest is whole; one with a ledger is not, and the same command continues it.

use super::job::Job;
use super::machine;
use super::piece::{self, Made, Tally};
use super::progress::{Progress, Voice, utc_now};
use super::schedule::{self, Work};
use super::stop::Stop;
use super::summary::Summary;
use crate::error::{Error, Result};
use crate::plan::Plan;
use crate::release::{
    ColumnRecord, FileRecord, InputRecord, Ledger, LedgerEntry, LedgerHeader, Manifest, Origin, PartRecord, PartWriter,
    ReleaseFolder, State, write_whole,
};
use crate::tables::{self, CutRow};
use serde_json::json;
use std::collections::BTreeMap;
use std::path::PathBuf;
use std::sync::{Arc, Mutex};
use std::time::Instant;

/// What the command line says about a build.
#[derive(Debug, Clone)]
pub struct Request {
    /// Folder of the release.
    pub output: PathBuf,
    /// Worker threads; all that this job may use when not given.
    pub threads: Option<usize>,
    /// Bytes of memory that may be used; half of what this job may use when not given.
    pub memory: Option<u64>,
    /// Replace an existing release.
    pub overwrite: bool,
    /// How to report.
    pub voice: Voice,
    /// Colours in the bar.
    pub colour: bool,
}

/// Threads and pieces in flight for a job.
///
/// # Errors
/// A memory budget that not even one piece fits in, with what would do.
pub fn resources(job: &Job, threads: Option<usize>, memory: Option<u64>) -> Result<(usize, usize)> {
    let threads = threads.unwrap_or_else(machine::threads);
    let piece = job.piece_memory();
    let budget = memory.or_else(|| machine::memory().map(|bytes| bytes / 2)).unwrap_or(4 << 30);
    // footers, tables and the program itself
    let rest = 96 << 20;
    let fit = budget.saturating_sub(rest) / piece.max(1);
    if fit == 0 {
        let least = machine::show_size(rest + piece);
        return Err(Error::plan(format!(
            "{} of memory are too little: the largest row group needs about {}, the rest {}; give --memory {least} or more, or write the catalogue with smaller row groups",
            machine::show_size(budget),
            machine::show_size(piece),
            machine::show_size(rest)
        )));
    }
    let fit = usize::try_from(fit).unwrap_or(usize::MAX);
    let threads = threads.min(fit);
    Ok((threads, fit.min(threads + threads.div_ceil(2))))
}

/// Makes the release.
///
/// # Errors
/// Everything that can go wrong, before anything is written where possible; afterwards finished parts stay and the same
/// command continues.
pub fn run(plan: Plan, request: &Request) -> Result<Summary> {
    let start = Instant::now();
    let started = utc_now();
    let stop = Stop::on_signals()?;
    let job = Job::new(plan, &request.output)?;
    let (threads, in_flight) = resources(&job, request.threads, request.memory)?;
    // columns that cannot be passed through are found before the output is touched
    job.layout(0)?;

    let opened = ReleaseFolder::open(&request.output, request.overwrite)?;
    let folder = opened.folder;
    let header = LedgerHeader::new(job.plan.hash(), job.catalogue.fingerprint(), job.parts.len() as u64);
    let (ledger, finished, mut notes) = match opened.state {
        State::Fresh => (Ledger::create(folder.root(), &header)?, Vec::new(), Vec::new()),
        State::Unfinished => {
            let resumed = Ledger::resume(folder.root(), &header)?;
            (resumed.ledger, resumed.entries, resumed.redo)
        }
    };
    notes.extend(opened.kept.iter().map(|path| format!("`{}` is no part of a release and was left.", path.display())));
    write_whole(&folder.root().join("plan.toml"), job.plan.text.as_bytes())?;

    let mut done = BTreeMap::new();
    for entry in finished {
        let tally: Tally = serde_json::from_value(entry.details).map_err(|e| {
            Error::failed(format!("A line of the ledger cannot be read ({e}); start afresh with --overwrite."))
        })?;
        done.insert(entry.index as usize, (entry.part, tally));
    }
    let continued = done.len();
    let todo: Vec<usize> = (0..job.parts.len()).filter(|part| !done.contains_key(part)).collect();
    let rows: u64 = todo.iter().map(|part| job.parts[*part].rows).sum();
    let progress = Progress::new(request.voice, request.colour, rows, todo.len() as u64);
    for note in job.catalogue.notes.iter().chain(&notes) {
        progress.note(note);
    }
    if continued > 0 {
        progress.note(&format!("{continued} of {} parts were done before; continuing.", job.parts.len()));
    }
    let build = Build {
        job: &job,
        parts_folder: folder.parts()?,
        shared: Mutex::new(Shared { ledger, done }),
        progress: &progress,
        stop,
    };
    progress.watch(|| schedule::run(&build, &todo, threads, in_flight))?;

    let Shared { ledger, done } = build.shared.into_inner().unwrap_or_else(|poisoned| poisoned.into_inner());
    if done.len() < job.parts.len() {
        return Err(Error::interrupted(format!(
            "Stopped by a signal with {} of {} parts done; run the same command again to continue.",
            done.len(),
            job.parts.len()
        ))
        .in_file(&request.output));
    }
    let mut total = Tally::new(&job);
    let mut parts = Vec::new();
    for (_, (part, tally)) in done {
        parts.push(part);
        total.merge(tally)?;
    }
    let tables = write_tables(&job, &folder, &total)?;
    let manifest = manifest(&job, parts, tables, &total);
    let seconds = start.elapsed().as_secs_f64();
    let summary = Summary::new(&job, &manifest, &total, &request.output, seconds, rows);
    write_run(&folder, &started, seconds, threads, in_flight, rows, continued)?;
    manifest.write(folder.root())?;
    ledger.remove()?;
    Ok(summary)
}

struct Build<'a> {
    job: &'a Job,
    parts_folder: PathBuf,
    shared: Mutex<Shared>,
    progress: &'a Progress,
    stop: Stop,
}

struct Shared {
    ledger: Ledger,
    done: BTreeMap<usize, (PartRecord, Tally)>,
}

/// A part that is being written.
struct Open {
    writer: PartWriter,
    tally: Tally,
    next_piece: usize,
}

impl Work for Build<'_> {
    type Made = Made;
    type Open = Open;

    fn pieces(&self, part: usize) -> usize {
        self.job.parts[part].pieces.len()
    }

    fn make(&self, part: usize, piece: usize) -> Result<Made> {
        piece::make(self.job, &self.job.parts[part].pieces[piece])
    }

    fn open(&self, part: usize) -> Result<Open> {
        let plan = &self.job.parts[part];
        let layout = self.job.layout(plan.file)?;
        let first_row = plan.pieces.first().map_or(0, |piece| piece.first_row_in_file);
        let writer = PartWriter::create(&self.parts_folder, &plan.name, &layout, first_row)?;
        Ok(Open { writer, tally: Tally::new(self.job), next_piece: 0 })
    }

    fn commit(&self, part: usize, open: &mut Open, made: Made) -> Result<()> {
        let plan = &self.job.parts[part];
        let piece = &plan.pieces[open.next_piece];
        open.next_piece += 1;
        if made.copied {
            let source: Arc<_> = self.job.catalogue.source(plan.file)?;
            open.writer.append_spliced(&source, piece.row_group, made.encoded)?;
        } else {
            open.writer.append_encoded(made.encoded, piece.rows)?;
        }
        open.tally.merge(made.tally)?;
        let file = &self.job.catalogue.files[plan.file];
        let bytes = (file.bytes as f64 * piece.rows as f64 / file.rows.max(1) as f64) as u64;
        self.progress.add(piece.rows, bytes);
        Ok(())
    }

    fn close(&self, part: usize, open: Open) -> Result<()> {
        let record = open.writer.finish()?;
        self.progress.part_done(&record.file, record.rows, record.bytes);
        let details = serde_json::to_value(&open.tally)
            .map_err(|e| Error::failed(format!("The counts of a part cannot be written as JSON: {e}.")))?;
        let mut shared = self.shared.lock().unwrap_or_else(|poisoned| poisoned.into_inner());
        shared.ledger.append(&LedgerEntry { index: part as u64, part: record.clone(), details })?;
        shared.done.insert(part, (record, open.tally));
        Ok(())
    }

    fn stopping(&self) -> bool {
        self.stop.asked()
    }
}

fn write_tables(job: &Job, folder: &ReleaseFolder, total: &Tally) -> Result<Vec<FileRecord>> {
    let cuts: Vec<CutRow> = job
        .plan
        .document
        .cuts
        .iter()
        .zip(&total.cuts.cuts)
        .map(|(settings, count)| CutRow {
            cut: settings.name.clone(),
            effect: settings.effect.word().to_owned(),
            keep: settings.keep.clone(),
            judged: count.judged,
            fails: count.fails,
            fails_first: count.fails_first,
            fails_only: count.fails_only,
            missing: count.missing,
        })
        .collect();
    let place = folder.subfolder("tables")?;
    let mut records = Vec::new();
    for table in job.tables.finish(&total.tables, &cuts)? {
        for (ending, bytes) in [("parquet", tables::parquet(&table)?), ("csv", tables::csv(&table)?)] {
            let name = format!("{}.{ending}", table.name);
            write_whole(&place.join(&name), &bytes)?;
            records.push(FileRecord {
                file: format!("tables/{name}"),
                rows: table.batch.num_rows() as u64,
                bytes: bytes.len() as u64,
                blake3: blake3::hash(&bytes).to_hex().to_string(),
            });
        }
    }
    Ok(records)
}

fn manifest(job: &Job, parts: Vec<PartRecord>, tables: Vec<FileRecord>, total: &Tally) -> Manifest {
    let mut manifest = Manifest::new(&job.plan.document.release.title, job.plan.hash());
    manifest.rows_in = total.cuts.read;
    manifest.rows_written = parts.iter().map(|part| part.rows).sum();
    manifest.rows_dropped = total.cuts.dropped;
    manifest.parts = parts;
    manifest.columns = columns(job);
    manifest.inputs = job
        .catalogue
        .files
        .iter()
        .map(|file| InputRecord {
            file: file.shown.clone(),
            bytes: file.bytes,
            rows: file.rows,
            fingerprint: file.fingerprint.clone(),
        })
        .collect();
    manifest.cuts = json!({
        "accepted": total.cuts.accepted,
        "flagged": total.cuts.flagged(),
        "dropped": total.cuts.dropped,
        "by_cut": job.plan.document.cuts.iter().zip(&total.cuts.cuts).map(|(settings, count)| json!({
            "name": settings.name,
            "keep": settings.keep,
            "effect": settings.effect.word(),
            "counts": count,
        })).collect::<Vec<_>>(),
    });
    manifest.tables = tables;
    manifest.notes = super::summary::notes(job, total);
    manifest
}

fn columns(job: &Job) -> Vec<ColumnRecord> {
    use crate::columnar::source::{description, ucd, unit};
    let owned = |text: Option<&str>| text.unwrap_or_default().to_owned();
    let catalogue = job.catalogue.schema.fields().iter().map(|field| ColumnRecord {
        name: field.name().clone(),
        kind: field.data_type().to_string(),
        unit: owned(unit(field)),
        ucd: owned(ucd(field)),
        description: owned(description(field)),
        method: String::new(),
        origin: Origin::Catalogue,
        recipe: job.recipes.get(field.name()),
    });
    let computed = job.declared.iter().map(|declared| ColumnRecord {
        name: declared.name.clone(),
        kind: super::fields::stored(declared.kind, job.double).to_owned(),
        unit: declared.unit.clone(),
        ucd: declared.ucd.clone(),
        description: declared.description.clone(),
        method: declared.method.clone(),
        origin: Origin::Computed,
        recipe: job.recipes.get(&declared.name),
    });
    catalogue.chain(computed).collect()
}

/// `run.json`: all that may differ between two builds of the same release.
fn write_run(
    folder: &ReleaseFolder,
    started: &str,
    seconds: f64,
    threads: usize,
    in_flight: usize,
    rows: u64,
    continued: usize,
) -> Result<()> {
    let host = std::fs::read_to_string("/proc/sys/kernel/hostname").unwrap_or_default();
    let run = json!({
        "started": started,
        "finished": utc_now(),
        "seconds": (seconds * 1e3).round() / 1e3,
        "host": host.trim(),
        "threads": threads,
        "pieces_in_flight": in_flight,
        "rows_this_run": rows,
        "rows_per_second": (rows as f64 / seconds).round(),
        "parts_from_earlier_runs": continued,
        "peak_memory_bytes": machine::peak_memory(),
    });
    let mut text = serde_json::to_string_pretty(&run).map_err(|e| Error::failed(e.to_string()))?;
    text.push('\n');
    write_whole(&folder.root().join("run.json"), text.as_bytes())
}
