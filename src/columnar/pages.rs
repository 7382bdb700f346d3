//! Sizes of pages from their headers, without decoding them (field numbers: Apache Parquet, `parquet.thrift`).

use super::compact::{Compact, Field};
use super::guard::io_reason;
use super::pread::Pread;
use crate::error::{Error, Result};

/// Most headers are smaller; those with long text statistics need a second read.
const FIRST_READ: u64 = 256;

/// What a page header says.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct PageSizes {
    /// Bytes of the header.
    pub header: u64,
    /// Bytes of the body, as stored.
    pub body: u64,
    /// CRC-32 of the body, when the writer stated one.
    pub checksum: Option<u32>,
    /// Values (nulls included) of a data page; 0 for a dictionary or index page.
    pub values: u64,
}

/// Reads the page header at `at`; `None` when the bytes up to `end` hold no well-formed one.
pub fn page_sizes(reader: &Pread, at: u64, end: u64) -> Result<Option<PageSizes>> {
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
    let checksum = integer(4).map(|crc| crc as u32); // stored as i32
    let values = match integer(1)? {
        0 => first_integer(bytes, nested(5)?)?,
        3 => first_integer(bytes, nested(8)?)?,
        1 | 2 => 0,
        _ => return None,
    };
    Some(PageSizes { header, body, checksum, values })
}

/// `num_values`, field 1 of both data page headers.
fn first_integer(bytes: &[u8], field: &Field) -> Option<u64> {
    let (fields, _) = Compact::new(bytes.get(field.start..)?).structure()?;
    fields.iter().find(|inner| inner.id == 1).and_then(|inner| u64::try_from(inner.integer?).ok())
}
