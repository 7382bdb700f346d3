//! Copies a column chunk from an input file into a part, byte for byte.
//!
//! Before a chunk is copied its page headers are walked: sizes must chain up to the chunk's number of values inside
//! the chunk, and pages that carry a checksum (CRC-32 of the page body, parquet.thrift) are verified. Only the
//! headers are read for pages without one.
//!
//! What the footer says of a chunk is copied, with one exception. The parquet crate states column orders of its own
//! choice (IEEE 754 total order for floats), under which minima and maxima written by others are not known to hold
//! (signed zeros, NaN; old writers' byte order). Those are left out, null counts stay: a missing minimum costs a reader a
//! skipped page, a wrong one costs rows.

use std::io::BufReader;

use bytes::Bytes;
use parquet::basic::{ColumnOrder, LogicalType, Type};
use parquet::bloom_filter::Sbbf;
use parquet::column::writer::ColumnCloseResult;
use parquet::file::metadata::{ColumnChunkMetaData, ParquetMetaData};
use parquet::file::reader::{ChunkReader, Length};
use parquet::file::statistics::Statistics;
use parquet::file::writer::SerializedRowGroupWriter;

use crate::columnar::guard::{guard, parquet_error};
use crate::columnar::source::{PageIndexes, Pread, SourceFile, check_pages};
use crate::error::{Error, Result};

/// Chunks pass through a buffer of this many bytes.
const BUFFER: usize = 1 << 20;

/// Appends leaf column `leaf` of the input's `row_group` to the open row group of a part.
pub(super) fn splice<W: std::io::Write + Send>(
    source: &SourceFile,
    row_group: usize,
    leaf: usize,
    indexes: &mut PageIndexes,
    out: &mut SerializedRowGroupWriter<'_, W>,
) -> Result<()> {
    let metadata = source.metadata();
    let group = metadata.row_group(row_group);
    let chunk = group.column(leaf);
    let place =
        |error: Error| error.in_file(&source.shown).in_row_group(row_group).in_column(chunk.column_path().string());
    check_pages(source.reader(), chunk, true).map_err(place)?;
    let (start, len) = chunk.byte_range();
    let bounds_hold = bounds_hold(metadata, leaf, chunk);
    let bloom_filter = guard(|| Sbbf::read_from_column_chunk(chunk, source.reader()).map_err(parquet_error));
    let close = ColumnCloseResult {
        bytes_written: len,
        rows_written: group.num_rows() as u64,
        metadata: if bounds_hold { chunk.clone() } else { without_bounds(chunk).map_err(place)? },
        // a filter only helps to skip; one that cannot be read is left out like a page index
        bloom_filter: bloom_filter.ok().flatten(),
        column_index: indexes.columns[leaf].take().filter(|_| bounds_hold),
        offset_index: indexes.offsets[leaf].take(),
    };
    let window = Window { reader: source.reader(), end: start + len };
    out.append_column(&window, close).map_err(parquet_error).map_err(place)
}

/// Are the input's minima and maxima true under the order that the output's footer will state?
fn bounds_hold(metadata: &ParquetMetaData, leaf: usize, chunk: &ColumnChunkMetaData) -> bool {
    let column = chunk.column_descr();
    let float = matches!(column.physical_type(), Type::FLOAT | Type::DOUBLE)
        || column.logical_type_ref() == Some(&LogicalType::Float16);
    let stated = metadata
        .file_metadata()
        .column_orders()
        .is_some_and(|orders| matches!(orders.get(leaf), Some(ColumnOrder::TYPE_DEFINED_ORDER(_))));
    let deprecated = chunk.statistics().is_some_and(Statistics::is_min_max_deprecated);
    stated && !float && !deprecated && column.physical_type() != Type::INT96
}

/// The chunk's metadata with null count and distinct count as its only statistics.
fn without_bounds(chunk: &ColumnChunkMetaData) -> Result<ColumnChunkMetaData> {
    let Some(statistics) = chunk.statistics() else { return Ok(chunk.clone()) };
    let (distinct, nulls) = (statistics.distinct_count_opt(), statistics.null_count_opt());
    chunk
        .clone()
        .into_builder()
        .set_statistics(counts(chunk.column_type(), distinct, nulls))
        .build()
        .map_err(parquet_error)
}

/// Statistics that state counts only.
pub(super) fn counts(kind: Type, distinct: Option<u64>, nulls: Option<u64>) -> Statistics {
    match kind {
        Type::BOOLEAN => Statistics::boolean(None, None, distinct, nulls, false),
        Type::INT32 => Statistics::int32(None, None, distinct, nulls, false),
        Type::INT64 => Statistics::int64(None, None, distinct, nulls, false),
        Type::INT96 => Statistics::int96(None, None, distinct, nulls, false),
        Type::FLOAT => Statistics::float(None, None, distinct, nulls, false),
        Type::DOUBLE => Statistics::double(None, None, distinct, nulls, false),
        Type::BYTE_ARRAY => Statistics::byte_array(None, None, distinct, nulls, false),
        Type::FIXED_LEN_BYTE_ARRAY => Statistics::fixed_len_byte_array(None, None, distinct, nulls, false),
    }
}

/// The input file up to the end of one chunk, so that read-ahead stops there.
struct Window<'a> {
    reader: &'a Pread,
    end: u64,
}

impl Length for Window<'_> {
    fn len(&self) -> u64 {
        self.end
    }
}

impl ChunkReader for Window<'_> {
    type T = BufReader<crate::columnar::source::PreadFrom>;

    fn get_read(&self, start: u64) -> parquet::errors::Result<Self::T> {
        Ok(self.reader.range(start, self.end.saturating_sub(start), BUFFER))
    }

    fn get_bytes(&self, start: u64, length: usize) -> parquet::errors::Result<Bytes> {
        self.reader.get_bytes(start, length)
    }
}
