//! Reads a file at given offsets, with every length checked against the file before memory is taken.
//!
//! The parquet crate's own reader for `File` clones the descriptor, so that all clones share one seek offset and race
//! when used from several threads, and it reserves whatever length a damaged footer claims. This one does neither.

use std::fs::File;
use std::io::{BufReader, Read};
use std::os::unix::fs::FileExt;
use std::sync::Arc;

use bytes::Bytes;
use parquet::errors::ParquetError;
use parquet::file::reader::{ChunkReader, Length};

/// Page headers and small pages are read through a buffer of this many bytes.
const BUFFER: usize = 64 << 10;

/// A shared, read-only file of known length.
#[derive(Debug, Clone)]
pub struct Pread {
    file: Arc<File>,
    len: u64,
}

impl Pread {
    /// Wraps an open file; its length is taken once, now.
    pub fn new(file: File) -> std::io::Result<Self> {
        let len = file.metadata()?.len();
        Ok(Self { file: Arc::new(file), len })
    }

    /// `len` bytes from `start`; fails, without reserving memory, when they are not all inside the file.
    pub fn bytes(&self, start: u64, len: usize) -> std::io::Result<Vec<u8>> {
        if start.checked_add(len as u64).is_none_or(|end| end > self.len) {
            return Err(std::io::Error::new(std::io::ErrorKind::UnexpectedEof, self.beyond(start, len as u64)));
        }
        let mut buffer = vec![0; len];
        self.file.read_exact_at(&mut buffer, start)?;
        Ok(buffer)
    }

    /// Reader over exactly `start..start + len`, with a buffer of `capacity` bytes.
    pub fn range(&self, start: u64, len: u64, capacity: usize) -> BufReader<PreadFrom> {
        let end = start.saturating_add(len).min(self.len);
        BufReader::with_capacity(capacity, PreadFrom { file: self.file.clone(), position: start, end })
    }

    fn beyond(&self, start: u64, len: u64) -> String {
        format!("{len} bytes from offset {start} are wanted, but the file has {} bytes", self.len)
    }
}

/// Sequential reader with an offset of its own.
#[derive(Debug)]
pub struct PreadFrom {
    file: Arc<File>,
    position: u64,
    end: u64,
}

impl Read for PreadFrom {
    fn read(&mut self, buffer: &mut [u8]) -> std::io::Result<usize> {
        let left = usize::try_from(self.end.saturating_sub(self.position)).unwrap_or(usize::MAX);
        let want = buffer.len().min(left);
        let got = self.file.read_at(&mut buffer[..want], self.position)?;
        self.position += got as u64;
        Ok(got)
    }
}

impl Length for Pread {
    fn len(&self) -> u64 {
        self.len
    }
}

impl ChunkReader for Pread {
    type T = BufReader<PreadFrom>;

    fn get_read(&self, start: u64) -> parquet::errors::Result<Self::T> {
        if start > self.len {
            return Err(ParquetError::EOF(self.beyond(start, 0)));
        }
        Ok(self.range(start, self.len - start, BUFFER))
    }

    fn get_bytes(&self, start: u64, length: usize) -> parquet::errors::Result<Bytes> {
        self.bytes(start, length).map(Bytes::from).map_err(|error| match error.kind() {
            std::io::ErrorKind::UnexpectedEof => ParquetError::EOF(error.to_string()),
            _ => ParquetError::External(Box::new(error)),
        })
    }
}
