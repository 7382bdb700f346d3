//! Decodes a piece: named columns only, batch by batch, pages as they come.
//!
//! Before the first batch the page headers are walked (see `columnar::pages`). Page checksums are verified where a page has one. A damaged page gives an error with file, row group and, found by
//! decoding the columns one at a time, the column. A column chunk that ends early is an error too, never a short read.

use std::sync::Arc;

use arrow::array::RecordBatch;
use parquet::arrow::ProjectionMask;
use parquet::arrow::arrow_reader::{
    ParquetRecordBatchReader, ParquetRecordBatchReaderBuilder, RowSelection, RowSelector,
};

use super::Piece;
use crate::columnar::guard::{guard, parquet_error};
use crate::columnar::source::{SourceFile, check_pages};
use crate::error::{Error, Result};

/// Iterator over the batches of a piece; ends after the first error.
pub struct PieceReader {
    source: Arc<SourceFile>,
    piece: Piece,
    columns: Vec<String>,
    /// For each wanted column, its place in the decoder's (file) order.
    order: Vec<usize>,
    batch_rows: usize,
    inner: Option<ParquetRecordBatchReader>,
    given: u64,
    /// Leaf columns whose pages are still to be walked before the first batch.
    unchecked: Vec<usize>,
}

/// Reads `columns` (root columns; batches have them in the order asked) of `piece` in batches of `batch_rows` rows.
///
/// Types are those of [`SourceFile::schema`]. Nothing is decoded before the first `next`. Memory: one batch and one
/// page per column. Errors: an unknown column here, damaged data from the iterator.
pub fn read(source: &Arc<SourceFile>, piece: &Piece, columns: &[String], batch_rows: usize) -> Result<PieceReader> {
    let place = |error: Error| error.in_file(&source.shown).in_row_group(piece.row_group);
    let mut roots = Vec::with_capacity(columns.len());
    for name in columns {
        let root = source.root(name).ok_or_else(|| {
            let known = source.schema().fields().iter().map(|field| field.name().as_str());
            let hint = crate::error::suggestion(name, known);
            Error::failed(format!("The file has no such column.{hint}")).in_file(&source.shown).in_column(name)
        })?;
        roots.push(root);
    }
    let mut in_file = roots.clone();
    in_file.sort_unstable();
    in_file.dedup();
    let order = roots.iter().map(|root| in_file.binary_search(root).unwrap_or(0)).collect();
    let batch_rows = batch_rows.clamp(1, usize::try_from(piece.rows).unwrap_or(usize::MAX).max(1));
    let inner = decoder(source, piece, &in_file, batch_rows).map_err(place)?;
    Ok(PieceReader {
        source: source.clone(),
        piece: piece.clone(),
        columns: columns.to_vec(),
        order,
        batch_rows,
        inner: Some(inner),
        given: 0,
        unchecked: leaves(source, &in_file),
    })
}

fn leaves(source: &SourceFile, roots: &[usize]) -> Vec<usize> {
    let schema = source.metadata().file_metadata().schema_descr();
    (0..schema.num_columns()).filter(|leaf| roots.binary_search(&schema.get_column_root_idx(*leaf)).is_ok()).collect()
}

fn decoder(source: &SourceFile, piece: &Piece, roots: &[usize], batch_rows: usize) -> Result<ParquetRecordBatchReader> {
    let group_rows = source.row_group_rows(piece.row_group);
    if piece.first_row.checked_add(piece.rows).is_none_or(|end| end > group_rows) {
        return Err(Error::failed(format!(
            "Rows {} to {} are wanted, but the row group has {group_rows}.",
            piece.first_row,
            piece.first_row.saturating_add(piece.rows)
        )));
    }
    guard(|| {
        let metadata = source.arrow_metadata().clone();
        let mask = ProjectionMask::roots(metadata.parquet_schema(), roots.iter().copied());
        let mut builder = ParquetRecordBatchReaderBuilder::new_with_metadata(source.reader().clone(), metadata)
            .with_row_groups(vec![piece.row_group])
            .with_projection(mask)
            .with_batch_size(batch_rows);
        if piece.rows != group_rows {
            let selection = [RowSelector::skip(piece.first_row as usize), RowSelector::select(piece.rows as usize)];
            builder = builder.with_row_selection(RowSelection::from(selection.to_vec()));
        }
        builder.build().map_err(parquet_error)
    })
}

impl PieceReader {
    fn next_batch(&mut self) -> Result<Option<RecordBatch>> {
        for leaf in std::mem::take(&mut self.unchecked) {
            let chunk = self.source.metadata().row_group(self.piece.row_group).column(leaf);
            check_pages(self.source.reader(), chunk, false)
                .map_err(|error| error.in_column(chunk.column_path().string()))?;
        }
        let Some(inner) = self.inner.as_mut() else { return Ok(None) };
        match guard(|| inner.next().transpose().map_err(|error| parquet_error(error.into()))) {
            Ok(Some(batch)) => {
                self.given += batch.num_rows() as u64;
                let batch = batch.project(&self.order).map_err(|error| parquet_error(error.into()))?;
                Ok(Some(batch))
            }
            Ok(None) if self.given == self.piece.rows => Ok(None),
            Ok(None) => Err(self.named(Error::failed(format!(
                "The data end after {} of {} rows; the file is damaged.",
                self.given, self.piece.rows
            )))),
            Err(error) => Err(self.named(error)),
        }
    }

    /// Decodes the columns one at a time to find the one that fails; the combined error stands when none does alone.
    fn named(&self, error: Error) -> Error {
        if let [only] = self.columns.as_slice() {
            return error.in_column(only);
        }
        for name in &self.columns {
            let alone = std::slice::from_ref(name);
            let Ok(reader) = read(&self.source, &self.piece, alone, self.batch_rows) else { continue };
            for batch in reader {
                if let Err(found) = batch {
                    return found;
                }
            }
        }
        error
    }
}

impl Iterator for PieceReader {
    type Item = Result<RecordBatch>;

    fn next(&mut self) -> Option<Self::Item> {
        match self.next_batch() {
            Ok(Some(batch)) => Some(Ok(batch)),
            Ok(None) => None,
            Err(error) => {
                self.inner = None; // a decoder that panicked must not be asked again
                self.given = self.piece.rows;
                Some(Err(error.in_file(&self.source.shown).in_row_group(self.piece.row_group)))
            }
        }
    }
}
