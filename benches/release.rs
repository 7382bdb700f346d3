//! The whole program against the least that any program must do, side by side in one run; medians.
//!
//! `cargo bench --bench release -- [ROWS] [ROUNDS]` (10,000,000 and 3 unless given). The floor copies the 15 column chunks
//! of the reference catalogue and encodes the same new columns from arrays that are ready in memory, with the parquet
//! crate at the same number of threads and the same encodings. Build times are those of the whole process. Data go to
//! `target/bench-data`, which should be on the disk that is meant. With `.venv` present (see tests/python) a plain
//! streaming polars script that computes five columns runs beside.

use arrow::array::{Array, ArrayRef, RecordBatch};
use arrow::datatypes::Schema;
use parquet::arrow::arrow_reader::{ArrowReaderMetadata, ArrowReaderOptions, ParquetRecordBatchReaderBuilder};
use parquet::arrow::arrow_writer::{ArrowColumnChunk, ArrowRowGroupWriterFactory, compute_leaves};
use parquet::arrow::{ArrowSchemaConverter, ProjectionMask};
use parquet::basic::{Compression, ZstdLevel};
use parquet::column::writer::ColumnCloseResult;
use parquet::file::properties::{EnabledStatistics, WriterProperties};
use parquet::file::writer::SerializedFileWriter;
use parquet::schema::types::Type;
use std::collections::BTreeMap;
use std::fs::File;
use std::io::BufWriter;
use std::path::{Path, PathBuf};
use std::process::Command;
use std::sync::{Arc, Mutex};
use std::time::Instant;
use tenparsec::columnar::source::SourceFile;
use tenparsec::engine::schedule::{self, Work};
use tenparsec::error::Result;

const PROGRAM: &str = env!("CARGO_BIN_EXE_tenparsec");

fn main() {
    let numbers: Vec<usize> = std::env::args().filter_map(|a| a.parse().ok()).collect();
    let rows = numbers.first().copied().unwrap_or(10_000_000);
    let rounds = numbers.get(1).copied().unwrap_or(3);
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("target/bench-data").join(rows.to_string());
    catalogue(&folder, rows);
    let plan = folder.join("reference.toml");
    let release = folder.join("release");
    let beside = folder.join("beside");
    std::fs::create_dir_all(&beside).expect("a folder beside the catalogue");

    // once, to have the new columns, and to warm the page cache
    build(&plan, &release, 2);
    let input = parquet_files(&folder).remove(0);
    let part_files = parquet_files(&release.join("catalogue"));
    let ready = new_columns(&input, &part_files);

    let mut times: BTreeMap<&str, Vec<f64>> = BTreeMap::new();
    let mut peak = 0;
    for round in 0..rounds {
        for threads in [1, 2] {
            let before = cpu_seconds();
            let (seconds, memory) = build(&plan, &release, threads);
            let between = cpu_seconds();
            times.entry(["build, 1 thread", "build, 2 threads"][threads - 1]).or_default().push(seconds);
            times.entry("build, processor time").or_default().push(between.1 - before.1);
            peak = peak.max(memory);
            let seconds = floor(&input, &ready, &beside.join("floor.parquet"), threads);
            times.entry(["floor, 1 thread", "floor, 2 threads"][threads - 1]).or_default().push(seconds);
            times.entry("floor, processor time").or_default().push(cpu_seconds().0 - between.0);
        }
        if let Some(seconds) = polars(&input, &beside.join("polars.parquet")) {
            times.entry("polars, five columns, 2 threads").or_default().push(seconds);
        }
        eprintln!("round {} of {rounds}", round + 1);
    }
    let median = |name: &str| times.get(name).map(|list| median_of(list));
    println!("{rows} rows, {} computed columns, {rounds} rounds, medians", ready[0].num_columns());
    for (name, list) in &times {
        println!("  {name:<34} {:8.2} s   (from {:.2} to {:.2})", median_of(list), min(list), max(list));
    }
    let ratio = |a: &str, b: &str| median(a).zip(median(b)).map(|(a, b)| a / b);
    for (text, value) in [
        ("build / floor, 1 thread", ratio("build, 1 thread", "floor, 1 thread")),
        ("build / floor, 2 threads", ratio("build, 2 threads", "floor, 2 threads")),
        ("build, 1 thread / 2 threads", ratio("build, 1 thread", "build, 2 threads")),
        ("build / polars, 2 threads", ratio("build, 2 threads", "polars, five columns, 2 threads")),
    ] {
        if let Some(value) = value {
            println!("  {text:<34} {value:8.2}");
        }
    }
    println!("  peak resident set of build         {:8.0} MiB", peak as f64 / (1 << 20) as f64);
}

/// The reference catalogue and the reference plan.
fn catalogue(folder: &Path, rows: usize) {
    if !folder.join("reference.toml").exists() {
        let status = Command::new(PROGRAM)
            .args(["mock", "--no-truth", "--rows", &rows.to_string()])
            .arg(folder)
            .status()
            .expect("the program runs");
        assert!(status.success(), "the mock catalogue could not be made");
        let plan = std::fs::read_to_string(Path::new(env!("CARGO_MANIFEST_DIR")).join("benches/reference.toml"))
            .expect("reference.toml");
        std::fs::write(folder.join("reference.toml"), plan).expect("the plan can be written");
    }
}

fn parquet_files(folder: &Path) -> Vec<PathBuf> {
    let entries = std::fs::read_dir(folder).expect("a folder").flatten();
    let mut found: Vec<PathBuf> =
        entries.map(|entry| entry.path()).filter(|path| path.extension().is_some_and(|e| e == "parquet")).collect();
    found.sort();
    found
}

/// Seconds on processors, of this process and of its finished children (Linux: utime, stime, cutime, cstime of proc(5)).
fn cpu_seconds() -> (f64, f64) {
    let text = std::fs::read_to_string("/proc/self/stat").unwrap_or_default();
    let fields: Vec<f64> =
        text.rsplit(')').next().unwrap_or_default().split_whitespace().filter_map(|f| f.parse().ok()).collect();
    let ticks = |at: usize| fields.get(at).copied().unwrap_or(0.0) / 100.0;
    // the state is no number, so utime is the 11th of the numbers that follow it
    (ticks(10) + ticks(11), ticks(12) + ticks(13))
}

/// Seconds of the whole process and its peak memory in bytes.
fn build(plan: &Path, release: &Path, threads: usize) -> (f64, u64) {
    let start = Instant::now();
    let status = Command::new(PROGRAM)
        .args(["build", "--quiet", "--overwrite", "--threads", &threads.to_string(), "--output"])
        .args([release, plan])
        .status()
        .expect("the program runs");
    let seconds = start.elapsed().as_secs_f64();
    assert!(status.success(), "the build failed");
    let run: serde_json::Value =
        serde_json::from_slice(&std::fs::read(release.join("run.json")).expect("run.json")).expect("JSON");
    (seconds, run["peak_memory_bytes"].as_u64().unwrap_or(0))
}

/// The computed columns by row group of the input, in memory.
fn new_columns(input: &Path, parts: &[PathBuf]) -> Vec<RecordBatch> {
    let source = SourceFile::open(input, "input").expect("the reference catalogue opens");
    let old = source.schema().fields().len();
    let mut groups = Vec::new();
    for part in parts {
        let file = File::open(part).expect("a part opens");
        let metadata = ArrowReaderMetadata::load(&file, ArrowReaderOptions::new()).expect("a part has a footer");
        for group in 0..metadata.metadata().num_row_groups() {
            let rows = metadata.metadata().row_group(group).num_rows() as usize;
            let all = metadata.schema().fields().len();
            let mask = ProjectionMask::roots(metadata.parquet_schema(), old..all);
            let reader = ParquetRecordBatchReaderBuilder::new_with_metadata(
                file.try_clone().expect("a handle"),
                metadata.clone(),
            )
            .with_row_groups(vec![group])
            .with_projection(mask)
            .with_batch_size(rows)
            .build()
            .expect("a part can be read");
            groups.extend(reader.map(|batch| batch.expect("a part can be decoded")));
        }
    }
    assert_eq!(groups.len(), source.row_groups(), "one group of new columns for each of the input");
    groups
}

/// Copy the input's chunks, encode the ready arrays; seconds until the file is synced.
fn floor(input: &Path, ready: &[RecordBatch], output: &Path, threads: usize) -> f64 {
    let start = Instant::now();
    // as the build does with --overwrite: a file that is truncated instead keeps its pages in the cache, which is faster
    let _ = std::fs::remove_file(output);
    let source = SourceFile::open(input, "input").expect("the reference catalogue opens");
    let descriptor = source.metadata().file_metadata().schema_descr();
    let schema = ready[0].schema();
    let new = ArrowSchemaConverter::new().convert(&schema).expect("the new columns have a Parquet schema");
    let nodes = descriptor.root_schema().get_fields().iter().chain(new.root_schema().get_fields()).cloned().collect();
    let root = Arc::new(Type::group_type_builder("schema").with_fields(nodes).build().expect("a schema"));
    let mut builder = WriterProperties::builder()
        .set_compression(Compression::ZSTD(ZstdLevel::try_new(1).expect("a level")))
        .set_data_page_row_count_limit(65_536);
    for column in new.columns() {
        let words = column.physical_type() == parquet::basic::Type::INT32;
        builder = builder.set_column_dictionary_enabled(column.path().clone(), words);
        if column.physical_type() == parquet::basic::Type::FLOAT {
            builder = builder.set_column_statistics_enabled(column.path().clone(), EnabledStatistics::None);
        }
    }
    let properties = Arc::new(builder.build());
    let shape =
        SerializedFileWriter::new(std::io::sink(), new.root_schema_ptr(), properties.clone()).expect("a writer");
    let factory = ArrowRowGroupWriterFactory::new(&shape, schema.clone());
    let file = BufWriter::with_capacity(1 << 20, File::create(output).expect("the output opens"));
    let writer = SerializedFileWriter::new(file, root, properties).expect("a writer");
    let work = Floor { source: &source, factory, schema, ready, writer: Mutex::new(writer) };
    schedule::run(&work, &[0], threads, threads + 1).expect("the floor is written");
    let writer = work.writer.into_inner().expect("no panics");
    writer.into_inner().expect("written").into_inner().expect("flushed").sync_all().expect("synced");
    start.elapsed().as_secs_f64()
}

/// The floor under the scheduling of the program, so that threads are used as well as there.
struct Floor<'a> {
    source: &'a SourceFile,
    factory: ArrowRowGroupWriterFactory,
    schema: Arc<Schema>,
    ready: &'a [RecordBatch],
    writer: Mutex<SerializedFileWriter<BufWriter<File>>>,
}

impl Work for Floor<'_> {
    type Made = Vec<ArrowColumnChunk>;
    type Open = usize;

    fn pieces(&self, _part: usize) -> usize {
        self.ready.len()
    }

    fn make(&self, _part: usize, piece: usize) -> Result<Self::Made> {
        Ok(encode(&self.factory, &self.schema, &self.ready[piece]))
    }

    fn open(&self, _part: usize) -> Result<usize> {
        Ok(0)
    }

    fn commit(&self, _part: usize, open: &mut usize, made: Self::Made) -> Result<()> {
        write_group(&mut self.writer.lock().expect("no panics"), self.source, *open, made);
        *open += 1;
        Ok(())
    }

    fn close(&self, _part: usize, _open: usize) -> Result<()> {
        Ok(())
    }

    fn stopping(&self) -> bool {
        false
    }
}

fn encode(factory: &ArrowRowGroupWriterFactory, schema: &Arc<Schema>, batch: &RecordBatch) -> Vec<ArrowColumnChunk> {
    let mut writers = factory.create_column_writers(0).expect("column writers");
    for ((writer, column), field) in writers.iter_mut().zip(batch.columns()).zip(schema.fields()) {
        let mut at = 0;
        while at < column.len() {
            let slice: ArrayRef = column.slice(at, (column.len() - at).min(16_384));
            for leaf in compute_leaves(field, &slice).expect("leaves") {
                writer.write(&leaf).expect("encoded");
            }
            at += slice.len();
        }
    }
    writers.into_iter().map(|writer| writer.close().expect("closed")).collect()
}

fn write_group<W: std::io::Write + Send>(
    writer: &mut SerializedFileWriter<W>,
    source: &SourceFile,
    group: usize,
    chunks: Vec<ArrowColumnChunk>,
) {
    let metadata = source.metadata().row_group(group);
    let mut out = writer.next_row_group().expect("a row group");
    for chunk in metadata.columns() {
        let close = ColumnCloseResult {
            bytes_written: chunk.byte_range().1,
            rows_written: metadata.num_rows() as u64,
            metadata: chunk.clone(),
            bloom_filter: None,
            column_index: None,
            offset_index: None,
        };
        out.append_column(source.reader(), close).expect("copied");
    }
    for chunk in chunks {
        chunk.append_to_row_group(&mut out).expect("appended");
    }
    out.close().expect("closed");
}

fn polars(input: &Path, output: &Path) -> Option<f64> {
    let root = Path::new(env!("CARGO_MANIFEST_DIR"));
    let python = root.join(".venv/bin/python");
    if !python.exists() {
        return None;
    }
    let start = Instant::now();
    let done = Command::new(python)
        .arg(root.join("tests/python/baseline_polars.py"))
        .args([input, output])
        .args(["--threads", "2"])
        .output()
        .ok()?;
    if !done.status.success() {
        eprintln!("{}", String::from_utf8_lossy(&done.stderr));
        return None;
    }
    Some(start.elapsed().as_secs_f64())
}

fn median_of(list: &[f64]) -> f64 {
    let mut sorted = list.to_vec();
    sorted.sort_by(f64::total_cmp);
    sorted[sorted.len() / 2]
}

fn min(list: &[f64]) -> f64 {
    list.iter().copied().fold(f64::INFINITY, f64::min)
}

fn max(list: &[f64]) -> f64 {
    list.iter().copied().fold(0.0, f64::max)
}
