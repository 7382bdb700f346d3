//! Walks the pages of a column chunk by their headers, without decoding them (field numbers: Apache Parquet,
//! `parquet.thrift`).
//!
//! The walk finds sizes that do not chain up inside the chunk, a number of values that is not the footer's, checksums
//! that do not match, and unpacked sizes that would make a decoder reserve memory that nothing justifies. It costs one
//! small read per page.

use std::io::BufRead;

use parquet::file::metadata::ColumnChunkMetaData;

use super::compact::{Compact, Field};
use super::guard::io_reason;
use super::pread::Pread;
use crate::error::{Error, Result};

/// Most headers are smaller; those with long text statistics need a second read.
const FIRST_READ: u64 = 256;
/// Checksums are computed through a buffer of this many bytes.
const BUFFER: u64 = 1 << 20;
/// A page may unpack to this much even where the footer's total says less: some writers state that total wrongly.
const HARMLESS_PAGE: u64 = 64 << 20;

/// What a page header says.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
struct PageSizes {
    /// Bytes of the header.
    header: u64,
    /// Bytes of the body, as stored.
    body: u64,
    /// Bytes of the body once unpacked.
    unpacked: u64,
    /// CRC-32 of the body, when the writer stated one.
    checksum: Option<u32>,
    /// Values (nulls included) of a data page; 0 for a dictionary or index page.
    values: u64,
}

/// Walks the pages of `chunk` until its values are complete; `checksums` also reads the bodies of pages that state one.
pub fn check_pages(reader: &Pread, chunk: &ColumnChunkMetaData, checksums: bool) -> Result<()> {
    let (start, len) = chunk.byte_range();
    let damaged = |text: String| Err(Error::failed(format!("The column's data are damaged: {text}.")));
    let wanted = u64::try_from(chunk.num_values()).unwrap_or(0);
    let limit = u64::try_from(chunk.uncompressed_size()).unwrap_or(0).max(HARMLESS_PAGE);
    let (mut at, end, mut values) = (start, start + len, 0u64);
    while values < wanted {
        let Some(page) = page_sizes(reader, at, end)? else {
            return damaged(format!("there is no page header at offset {at}, after {values} of {wanted} values"));
        };
        let body = at + page.header;
        at = body + page.body;
        if at > end {
            return damaged(format!("a page of {} bytes at offset {body} reaches beyond its column", page.body));
        }
        if page.unpacked > limit {
            return damaged(format!("a page at offset {body} claims {} bytes when unpacked", page.unpacked));
        }
        if let Some(stated) = page.checksum.filter(|_| checksums)
            && checksum(reader, body, page.body)? != stated
        {
            return damaged(format!("the page at offset {body} does not match its checksum"));
        }
        values = values.saturating_add(page.values);
    }
    if values > wanted {
        return damaged(format!("its pages hold {values} values, the footer claims {wanted}"));
    }
    Ok(())
}

/// CRC-32 of a page body.
fn checksum(reader: &Pread, start: u64, len: u64) -> Result<u32> {
    let mut hasher = crc32fast::Hasher::new();
    let mut input = reader.range(start, len, len.clamp(1, BUFFER) as usize);
    loop {
        let piece = input
            .fill_buf()
            .map_err(|error| Error::failed(format!("The file cannot be read: {}.", io_reason(&error))))?;
        if piece.is_empty() {
            return Ok(hasher.finalize());
        }
        hasher.update(piece);
        let used = piece.len();
        input.consume(used);
    }
}

/// Reads the page header at `at`; `None` when the bytes up to `end` hold no well-formed one.
fn page_sizes(reader: &Pread, at: u64, end: u64) -> Result<Option<PageSizes>> {
    let mut want = FIRST_READ;
    loop {
        let left = end.saturating_sub(at);
        let take = want.min(left);
        let bytes = reader
            .bytes(at, take as usize)
            .map_err(|error| Error::failed(format!("The file cannot be read: {}.", io_reason(&error))))?;
        if let Some((fields, header)) = Compact::new(&bytes).structure() {
            return Ok(sizes(&bytes, &fields, header as u64));
        }
        if take == left {
            return Ok(None);
        }
        want = want.saturating_mul(16);
    }
}

fn sizes(bytes: &[u8], fields: &[Field], header: u64) -> Option<PageSizes> {
    let integer = |id: i16| fields.iter().find(|field| field.id == id).and_then(|field| field.integer);
    let nested = |id: i16| fields.iter().find(|field| field.id == id && field.integer.is_none());
    let body = u64::try_from(integer(3)?).ok()?;
    let unpacked = u64::try_from(integer(2)?).ok()?;
    let checksum = integer(4).map(|crc| crc as u32); // stored as i32
    let values = match integer(1)? {
        0 => first_integer(bytes, nested(5)?)?,
        3 => first_integer(bytes, nested(8)?)?,
        1 | 2 => 0,
        _ => return None,
    };
    Some(PageSizes { header, body, unpacked, checksum, values })
}

/// `num_values`, field 1 of both data page headers.
fn first_integer(bytes: &[u8], field: &Field) -> Option<u64> {
    let (fields, _) = Compact::new(bytes.get(field.start..)?).structure()?;
    fields.iter().find(|inner| inner.id == 1).and_then(|inner| u64::try_from(inner.integer?).ok())
}
