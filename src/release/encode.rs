//! Encodes the columns of one piece into column chunks, on any thread.
//!
//! The parquet writer looks at its limits between the slices that it is handed, and treats a slice without nulls in
//! another way than one with; pages would depend on the batch size. So rows are regrouped here into slices of
//! [`ENCODE_ROWS`] rows, counted from the start of the piece, and null masks without a null are taken off: the bytes
//! depend on the values only.

use std::sync::Arc;

use arrow::array::{Array, ArrayRef, UInt32Array, make_array};
use arrow::buffer::NullBuffer;
use arrow::datatypes::DataType;
use parquet::arrow::arrow_writer::{ArrowColumnChunk, ArrowColumnWriter, compute_leaves};

use super::layout::Shape;
use super::splice::counts;
use crate::columnar::guard::{guard, parquet_error};
use crate::error::{Error, Result};

/// Rows of the slices that the parquet writer sees. Batches of a multiple of this pass without a copy.
pub const ENCODE_ROWS: usize = 16_384;

/// Encoder of one piece; made by a [`super::Layout`].
pub struct PieceEncoder {
    shape: Arc<Shape>,
    writers: Vec<ArrowColumnWriter>,
    /// Slices of each column that wait for the rest of their group.
    waiting: Vec<Vec<ArrayRef>>,
    waiting_rows: usize,
    rows: u64,
    nulls: Vec<u64>,
}

/// Column chunks of one piece, ready to be appended to a part.
#[derive(Debug)]
pub struct EncodedPiece {
    /// Rows of each chunk.
    pub rows: u64,
    /// Bytes held in memory, about: what a budget for pieces in flight should count.
    pub approx_bytes: u64,
    pub(super) chunks: Vec<ArrowColumnChunk>,
    /// Do the chunks hold all columns, or the computed ones only?
    pub(super) whole_rows: bool,
}

impl PieceEncoder {
    pub(super) fn new(shape: &Arc<Shape>) -> Result<Self> {
        let columns = shape.fields.len();
        Ok(Self {
            shape: shape.clone(),
            writers: shape.factory.create_column_writers(0).map_err(parquet_error)?,
            waiting: vec![Vec::new(); columns],
            waiting_rows: 0,
            rows: 0,
            nulls: vec![0; columns],
        })
    }

    /// Adds rows: one array per column, of equal length and of the layout's types.
    ///
    /// Errors: other columns or types than the layout has (a defect), a null in a column that has none.
    pub fn write(&mut self, arrays: &[ArrayRef]) -> Result<()> {
        if arrays.len() != self.shape.fields.len() {
            return Err(defect(format!(
                "{} columns are written where {} are laid out",
                arrays.len(),
                self.shape.fields.len()
            )));
        }
        let rows = arrays.first().map_or(0, |array| array.len());
        for (array, field) in arrays.iter().zip(&self.shape.fields) {
            if array.len() != rows || array.data_type() != field.data_type() {
                return Err(defect(format!(
                    "{} values of type {} are written where {rows} of type {} are laid out",
                    array.len(),
                    array.data_type(),
                    field.data_type()
                ))
                .in_column(field.name()));
            }
        }
        let mut start = 0;
        while start < rows {
            let take = (rows - start).min(ENCODE_ROWS - self.waiting_rows);
            for (waiting, array) in self.waiting.iter_mut().zip(arrays) {
                waiting.push(array.slice(start, take));
            }
            self.waiting_rows += take;
            start += take;
            if self.waiting_rows == ENCODE_ROWS {
                self.flush()?;
            }
        }
        Ok(())
    }

    /// Bytes held so far, about.
    pub fn approx_bytes(&self) -> u64 {
        self.writers.iter().map(|writer| writer.memory_size() as u64).sum()
    }

    /// Closes the chunks.
    pub fn finish(mut self) -> Result<EncodedPiece> {
        if self.waiting_rows > 0 {
            self.flush()?;
        }
        let closed = self.writers.into_iter().map(|writer| writer.close().map_err(parquet_error));
        let mut chunks = closed.collect::<Result<Vec<_>>>()?;
        for (leaf, column) in &self.shape.floats {
            let close = chunks[*leaf].close_mut();
            let kind = close.metadata.column_type();
            let builder = close.metadata.clone().into_builder();
            let counted = builder.set_statistics(counts(kind, None, Some(self.nulls[*column])));
            close.metadata = counted.build().map_err(parquet_error)?;
        }
        let approx_bytes = chunks.iter().map(|chunk| chunk.close().bytes_written).sum();
        Ok(EncodedPiece { rows: self.rows, approx_bytes, chunks, whole_rows: self.shape.whole_rows })
    }

    fn flush(&mut self) -> Result<()> {
        let mut writers = self.writers.iter_mut();
        for (column, (waiting, field)) in self.waiting.iter_mut().zip(&self.shape.fields).enumerate() {
            let slices = std::mem::take(waiting);
            let array = canonical(joined(&slices)?)?;
            self.nulls[column] += array.null_count() as u64;
            let written = guard(|| {
                for leaf in compute_leaves(field, &array).map_err(parquet_error)? {
                    let writer =
                        writers.next().ok_or_else(|| defect("a column has more leaves than laid out".into()))?;
                    writer.write(&leaf).map_err(parquet_error)?;
                }
                Ok(())
            });
            written.map_err(|error| error.in_column(field.name()))?;
        }
        self.rows += self.waiting_rows as u64;
        self.waiting_rows = 0;
        Ok(())
    }
}

fn joined(slices: &[ArrayRef]) -> Result<ArrayRef> {
    match slices {
        [one] => Ok(one.clone()),
        several => {
            let views: Vec<&dyn Array> = several.iter().map(AsRef::as_ref).collect();
            arrow::compute::concat(&views).map_err(|error| parquet_error(error.into()))
        }
    }
}

/// The same values in the one form that does not depend on how the array came about.
fn canonical(array: ArrayRef) -> Result<ArrayRef> {
    if !array.data_type().is_nested() {
        return match array.nulls() {
            Some(nulls) if nulls.null_count() == 0 => Ok(without_mask(&array)),
            _ => Ok(array),
        };
    }
    // taking every row copies children without what lies outside the slice; then masks can be judged at each level
    let every = UInt32Array::from_iter_values(0..array.len() as u32);
    let copied = arrow::compute::take(&array, &every, None).map_err(|error| parquet_error(error.into()))?;
    Ok(without_masks(&copied))
}

fn without_mask(array: &ArrayRef) -> ArrayRef {
    let data = array.to_data().into_builder().nulls(None);
    data.build().map_or_else(|_| array.clone(), make_array)
}

fn without_masks(array: &ArrayRef) -> ArrayRef {
    let data = array.to_data();
    let children = data.child_data().iter().map(|child| without_masks(&make_array(child.clone())).to_data()).collect();
    let nulls: Option<NullBuffer> = data.nulls().filter(|nulls| nulls.null_count() > 0).cloned();
    let keep_children = matches!(data.data_type(), DataType::Dictionary(..));
    let builder = data.clone().into_builder().nulls(nulls);
    let builder = if keep_children { builder } else { builder.child_data(children) };
    builder.build().map_or_else(|_| array.clone(), make_array)
}

fn defect(text: String) -> Error {
    Error::failed(format!("{text}; this is a defect of tenparsec."))
}

const _: fn() = || {
    fn shared_by_threads<T: Send + Sync>() {}
    shared_by_threads::<super::Layout>();
    fn sent_to_threads<T: Send>() {}
    sent_to_threads::<EncodedPiece>();
    sent_to_threads::<PieceEncoder>();
};
