//! One Parquet file of the mock: row groups made and encoded in parallel, written in order, whole or absent.
//!
//! Row groups go in waves: while the finished wave is written, the next one is made. So memory is bounded by two waves of
//! two row groups a thread, and no thread ever waits on a channel, which could lock up a pool of one thread.

use std::fs::{self, File};
use std::io::{BufWriter, Write};
use std::ops::Range;
use std::path::{Path, PathBuf};

use arrow::datatypes::SchemaRef;
use parquet::arrow::ArrowWriter;
use parquet::arrow::arrow_writer::{ArrowColumnChunk, ArrowRowGroupWriterFactory, ArrowWriterOptions, compute_leaves};
use parquet::basic::{Compression, ZstdLevel};
use parquet::errors::Result as ParquetResult;
use parquet::file::properties::{EnabledStatistics, WriterProperties};
use parquet::file::writer::SerializedFileWriter;
use parquet::schema::types::ColumnPath;
use rayon::prelude::*;

use super::columns::arrays;
use super::survey::{Sky, Start, observe, start};
use crate::error::{Error, Result};

/// What all files of one mock share.
pub struct Job<'a> {
    pub sky: &'a Sky,
    pub schema: SchemaRef,
    pub seed: u64,
    pub truth: bool,
    pub row_group_rows: u64,
}

/// A file under its temporary name; it is removed unless it was given its final name.
struct Unfinished {
    temporary: PathBuf,
    kept: bool,
}

impl Drop for Unfinished {
    fn drop(&mut self) {
        if !self.kept {
            // Nothing can be done about a failure here; the name ends in .tmp and says what it is.
            let _ = fs::remove_file(&self.temporary);
        }
    }
}

/// Writes `bytes` through `fill` to a temporary file beside `target`, syncs it and gives it its name. Returns its size.
pub fn whole_or_absent(target: &Path, fill: impl FnOnce(BufWriter<File>) -> Result<File>) -> Result<u64> {
    let mut name = target.file_name().unwrap_or_default().to_os_string();
    name.push(".tmp");
    let temporary = target.with_file_name(name);
    let told = |what: &str, error: std::io::Error| Error::failed(format!("{what}: {error}.")).in_file(target);
    let file = File::create(&temporary).map_err(|e| told("The file cannot be made", e))?;
    let mut unfinished = Unfinished { temporary, kept: false };
    let file = fill(BufWriter::with_capacity(1 << 20, file)).map_err(|e| e.in_file(target))?;
    file.sync_all().map_err(|e| told("The file cannot be written to the disk", e))?;
    let size = file.metadata().map_err(|e| told("The size of the file cannot be read", e))?.len();
    fs::rename(&unfinished.temporary, target).map_err(|e| told("The finished file cannot be given its name", e))?;
    unfinished.kept = true;
    Ok(size)
}

/// Writes the rows `rows` of the mock as one file. `progress` hears of each row count written.
pub fn write_file(job: &Job, target: &Path, rows: Range<u64>, progress: &mut dyn FnMut(u64)) -> Result<u64> {
    whole_or_absent(target, |out| {
        let told = |e: parquet::errors::ParquetError| Error::failed(format!("The file cannot be written: {e}."));
        let options = ArrowWriterOptions::new().with_properties(properties());
        let writer = ArrowWriter::try_new_with_options(out, job.schema.clone(), options).map_err(told)?;
        let (mut file, factory) = writer.into_serialized_writer().map_err(told)?;
        let groups: Vec<(usize, Range<u64>)> = (rows.start..rows.end)
            .step_by(job.row_group_rows as usize)
            .map(|from| from..(from + job.row_group_rows).min(rows.end))
            .enumerate()
            .collect();
        let mut finished: Vec<Encoded> = Vec::new();
        for wave in groups.chunks(2 * rayon::current_num_threads()) {
            let count = finished.iter().map(|group| group.rows).sum();
            let (written, made) = rayon::join(
                || append(&mut file, std::mem::take(&mut finished)),
                || {
                    wave.par_iter()
                        .map(|(index, rows)| encode(job, &factory, *index, rows.clone()))
                        .collect::<ParquetResult<Vec<Encoded>>>()
                },
            );
            written.map_err(told)?;
            finished = made.map_err(told)?;
            progress(count);
        }
        let count = finished.iter().map(|group| group.rows).sum();
        append(&mut file, finished).map_err(told)?;
        progress(count);
        let out = file.into_inner().map_err(told)?;
        out.into_inner().map_err(|e| Error::failed(format!("The file cannot be written: {}.", e.error())))
    })
}

struct Encoded {
    rows: u64,
    chunks: Vec<ArrowColumnChunk>,
}

fn encode(job: &Job, factory: &ArrowRowGroupWriterFactory, index: usize, rows: Range<u64>) -> ParquetResult<Encoded> {
    // Stars are opened in blocks before they are drawn: see `Lattice::candidates`.
    const BLOCK: u64 = 32;
    let count = rows.end - rows.start;
    let blocks = (rows.start..rows.end).step_by(BLOCK as usize).map(|from| from..(from + BLOCK).min(rows.end));
    let stars = blocks.flat_map(|block| {
        let starts: Vec<Start> = block.map(|row| start(job.sky, job.seed, row)).collect();
        starts.into_iter().map(|start| observe(start, job.seed))
    });
    let arrays = arrays(stars, count as usize, job.truth);
    let writers = factory.create_column_writers(index)?;
    let mut chunks = Vec::with_capacity(arrays.len());
    for ((mut writer, array), field) in writers.into_iter().zip(&arrays).zip(job.schema.fields()) {
        for leaf in compute_leaves(field, array)? {
            writer.write(&leaf)?;
        }
        chunks.push(writer.close()?);
    }
    Ok(Encoded { rows: count, chunks })
}

fn append<W: Write + Send>(file: &mut SerializedFileWriter<W>, groups: Vec<Encoded>) -> ParquetResult<()> {
    for group in groups {
        let mut row_group = file.next_row_group()?;
        for chunk in group.chunks {
            chunk.append_to_row_group(&mut row_group)?;
        }
        row_group.close()?;
    }
    Ok(())
}

/// Zstandard at its quickest. A dictionary only where values repeat: for measured floats it would be built and thrown away.
fn properties() -> WriterProperties {
    let mut properties = WriterProperties::builder()
        .set_compression(Compression::ZSTD(ZstdLevel::default()))
        .set_dictionary_enabled(false)
        .set_statistics_enabled(EnabledStatistics::Chunk)
        .set_max_row_group_row_count(None);
    for name in ["field", "population", "visits"] {
        properties = properties.set_column_dictionary_enabled(ColumnPath::from(name), true);
    }
    properties.build()
}
