//! Writes one part: a temporary file beside its place, hashed and counted byte by byte, that gets its name when synced.

use std::fs::File;
use std::io::Write;
use std::path::{Path, PathBuf};
use std::sync::{Arc, OnceLock};

use parquet::file::writer::SerializedFileWriter;

use super::encode::EncodedPiece;
use super::folder::{ReleaseFolder, unfinished_part};
use super::layout::Layout;
use super::manifest::PartRecord;
use super::splice::splice;
use super::whole::{publish, write_error};
use crate::columnar::guard::{guard, io_reason, parquet_error};
use crate::columnar::source::SourceFile;
use crate::error::{Error, Result};

/// Bytes gathered before they are hashed and written. Larger writes make the kernel cache the file in larger blocks, which
/// it finds less often among memory that was in use before: with 1 MiB the reference build spent 3.5 s of 14 in the
/// kernel, with 128 KiB 1.0 s (a virtual machine, ext4).
const BUFFER: usize = 128 << 10;

/// A part in the making. Dropped before [`PartWriter::finish`], it removes its temporary file.
pub struct PartWriter {
    layout: Arc<Layout>,
    name: String,
    target: PathBuf,
    temporary: PathBuf,
    writer: Option<SerializedFileWriter<HashingFile<File>>>,
    failure: Arc<OnceLock<String>>,
    first_row: u64,
    rows: u64,
    rows_in: u64,
}

impl PartWriter {
    /// Begins part `name` in the folder `dir` (the release's `catalogue`); `first_row` is the first row it reads, counted in the input file.
    pub fn create(dir: &Path, name: &str, layout: &Arc<Layout>, first_row: u64) -> Result<Self> {
        let target = dir.join(name);
        let temporary = unfinished_part(dir, name);
        let file = File::create(&temporary).map_err(|error| write_error(&target, &error))?;
        let sink = HashingFile::new(file);
        let mut part = Self {
            failure: sink.failure.clone(),
            layout: layout.clone(),
            name: name.to_owned(),
            target,
            temporary,
            writer: None,
            first_row,
            rows: 0,
            rows_in: 0,
        };
        let writer = SerializedFileWriter::new(sink, layout.root.clone(), layout.properties.clone());
        part.writer = Some(writer.map_err(|error| part.failed(error))?);
        Ok(part)
    }

    /// Appends a whole row group: the input's chunks copied undecoded, then the computed columns of `encoded`.
    ///
    /// Errors: damaged pages (place: input file, row group, column); a piece with another number of rows; a failing disk.
    pub fn append_spliced(&mut self, source: &SourceFile, row_group: usize, encoded: EncodedPiece) -> Result<()> {
        let rows = source.row_group_rows(row_group);
        if encoded.whole_rows || encoded.rows != rows || source.fingerprint != self.layout.input_fingerprint {
            return Err(defect(format!("{} encoded rows do not fit a row group of {rows} rows", encoded.rows)));
        }
        if rows == 0 {
            return Ok(());
        }
        self.rows_in += rows;
        self.rows += rows;
        let target = self.target.clone();
        self.with_writer(|writer, leaves| {
            let mut indexes = source.page_indexes(row_group);
            let failed = |error| parquet_error(error).in_file(&target);
            let mut group = writer.next_row_group().map_err(failed)?;
            for leaf in 0..leaves {
                splice(source, row_group, leaf, &mut indexes, &mut group)?;
            }
            for chunk in encoded.chunks {
                chunk.append_to_row_group(&mut group).map_err(failed)?;
            }
            group.close().map_err(failed).map(drop)
        })
    }

    /// Appends a piece of which all columns were encoded; `rows_in` rows were read for it. A piece that lost all its
    /// rows adds no row group.
    pub fn append_encoded(&mut self, encoded: EncodedPiece, rows_in: u64) -> Result<()> {
        if !encoded.whole_rows || encoded.rows > rows_in {
            return Err(defect(format!("{} encoded rows do not fit {rows_in} rows read", encoded.rows)));
        }
        self.rows_in += rows_in;
        if encoded.rows == 0 {
            return Ok(());
        }
        self.rows += encoded.rows;
        let target = self.target.clone();
        self.with_writer(|writer, _| {
            let failed = |error| parquet_error(error).in_file(&target);
            let mut group = writer.next_row_group().map_err(failed)?;
            for chunk in encoded.chunks {
                chunk.append_to_row_group(&mut group).map_err(failed)?;
            }
            group.close().map_err(failed).map(drop)
        })
    }

    /// Writes the footer, syncs, renames: afterwards the part is there, whole.
    pub fn finish(mut self) -> Result<PartRecord> {
        let writer = self.writer.take().ok_or_else(|| defect("a part is finished after a failure".into()))?;
        let sink = guard(|| writer.into_inner().map_err(|error| self.failed(error)))?;
        let (file, bytes, blake3) = sink.finish().map_err(|error| write_error(&self.target, &error))?;
        file.sync_all().map_err(|error| write_error(&self.target, &error))?;
        drop(file);
        publish(&self.temporary, &self.target)?;
        Ok(PartRecord {
            file: ReleaseFolder::part_name(&self.name),
            rows: self.rows,
            bytes,
            blake3,
            input: self.layout.input.clone(),
            input_fingerprint: self.layout.input_fingerprint.clone(),
            first_row: self.first_row,
            rows_in: self.rows_in,
        })
    }

    /// Runs `work` on the open file; after a failure the part cannot be finished any more.
    fn with_writer(
        &mut self,
        work: impl FnOnce(&mut SerializedFileWriter<HashingFile<File>>, usize) -> Result<()>,
    ) -> Result<()> {
        let mut writer = self.writer.take().ok_or_else(|| defect("a part is written after a failure".into()))?;
        let leaves = self.layout.input_leaves;
        guard(|| work(&mut writer, leaves)).map_err(|error| match self.failure.get() {
            Some(reason) => Error::failed(format!("The file cannot be written: {reason}.")).in_file(&self.target),
            None => error,
        })?;
        self.writer = Some(writer);
        Ok(())
    }

    fn failed(&self, error: parquet::errors::ParquetError) -> Error {
        parquet_error(error).in_file(&self.target)
    }
}

impl Drop for PartWriter {
    fn drop(&mut self) {
        // after a successful finish the name is gone already; a leftover would only cost space
        let _ = std::fs::remove_file(&self.temporary);
    }
}

/// A file that is hashed and counted as it is written.
struct HashingFile<W: Write> {
    inner: W,
    buffer: Vec<u8>,
    hasher: blake3::Hasher,
    bytes: u64,
    /// Why a write failed; whoever copied from an input at that moment must not blame the input.
    failure: Arc<OnceLock<String>>,
}

impl<W: Write> HashingFile<W> {
    fn new(inner: W) -> Self {
        let buffer = Vec::with_capacity(BUFFER);
        Self { inner, buffer, hasher: blake3::Hasher::new(), bytes: 0, failure: Arc::default() }
    }

    fn pass_on(&mut self) -> std::io::Result<()> {
        self.inner.write_all(&self.buffer).inspect_err(|error| {
            let _ = self.failure.set(io_reason(error));
        })?;
        self.hasher.update(&self.buffer);
        self.bytes += self.buffer.len() as u64;
        self.buffer.clear();
        Ok(())
    }

    /// The file, the number of bytes and their hex BLAKE3.
    fn finish(mut self) -> std::io::Result<(W, u64, String)> {
        self.pass_on()?;
        self.inner.flush()?;
        Ok((self.inner, self.bytes, self.hasher.finalize().to_hex().to_string()))
    }
}

impl<W: Write> Write for HashingFile<W> {
    fn write(&mut self, data: &[u8]) -> std::io::Result<usize> {
        let taken = data.len().min(BUFFER - self.buffer.len());
        self.buffer.extend_from_slice(&data[..taken]);
        if self.buffer.len() == BUFFER {
            self.pass_on()?;
        }
        Ok(taken)
    }

    /// Nothing: the parquet writer flushes after each row group, and only [`HashingFile::finish`] needs the bytes out.
    fn flush(&mut self) -> std::io::Result<()> {
        Ok(())
    }
}

fn defect(text: String) -> Error {
    Error::failed(format!("{text}; this is a defect of tenparsec."))
}

#[cfg(test)]
mod tests {
    use super::*;

    /// /dev/full answers every write with ENOSPC (Linux, full(4)).
    #[test]
    fn a_full_disk_is_named() {
        let full = std::fs::OpenOptions::new().write(true).open("/dev/full").unwrap();
        let mut file = HashingFile::new(full);
        file.write_all(&[7; 100]).unwrap();
        let error = file.finish().unwrap_err();
        let shown = write_error(Path::new("part-00000.parquet"), &error).to_string();
        assert!(shown.contains("the disk is full"), "{shown}");
        let inside = parquet_error(parquet::errors::ParquetError::from(error)).to_string();
        assert!(inside.contains("the disk is full"), "{inside}");
    }

    #[test]
    fn hash_and_length_are_those_of_the_bytes() {
        let mut file = HashingFile::new(Vec::new());
        let data: Vec<u8> = (0..3_000_001u32).map(|i| (i * 7 % 251) as u8).collect();
        for piece in data.chunks(70_001) {
            file.write_all(piece).unwrap();
        }
        let (written, bytes, hash) = file.finish().unwrap();
        assert_eq!(written, data);
        assert_eq!(bytes, data.len() as u64);
        assert_eq!(hash, blake3::hash(&data).to_hex().to_string());
    }
}
