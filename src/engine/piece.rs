//! One piece from decoded batches to encoded chunks: stages, cuts as soon as their columns exist, tables, encoding.

use super::job::Job;
use super::tally::{StarCounts, merge_unusable};
use super::values::Unusable;
use crate::catalogue::{Piece, read};
use crate::columnar::source::SourceFile;
use crate::error::{Error, Result};
use crate::release::{ENCODE_ROWS, EncodedPiece, PieceEncoder};
use crate::tables;
use crate::verdicts::statistics::{self, Verdict};
use crate::verdicts::{BatchVerdict, CutCounts};
use arrow::array::{Array, ArrayRef, BooleanArray, RecordBatch, RecordBatchOptions};
use arrow::compute::filter_record_batch;
use arrow::datatypes::{Field, Schema};
use serde::{Deserialize, Serialize};
use std::sync::Arc;

/// Rows that are computed at a time; no result depends on it.
pub const CHUNK_ROWS: usize = ENCODE_ROWS;

/// Everything that is counted over rows.
#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct Tally {
    /// By cut.
    pub cuts: CutCounts,
    /// By loaded column.
    pub unusable: Vec<Unusable>,
    /// By what was learnt of the distance.
    pub stars: StarCounts,
    /// Of the tables.
    pub tables: tables::Tally,
}

impl Tally {
    /// Nothing counted yet.
    pub fn new(job: &Job) -> Self {
        Self {
            cuts: CutCounts::new(&job.cuts),
            unusable: vec![Unusable::default(); job.pipeline.loads().len()],
            stars: StarCounts::default(),
            tables: job.tables.start(),
        }
    }

    /// Adds what was counted over other rows.
    ///
    /// # Errors
    /// A table that outgrew its bound.
    pub fn merge(&mut self, other: Self) -> Result<()> {
        self.cuts.merge(&other.cuts);
        merge_unusable(&mut self.unusable, &other.unusable);
        self.stars.merge(&other.stars);
        self.tables.merge(&other.tables)
    }
}

/// A computed piece.
pub struct Made {
    /// Chunks to write.
    pub encoded: EncodedPiece,
    /// Whether the input's chunks are copied beside them.
    pub copied: bool,
    /// Counts.
    pub tally: Tally,
}

/// Computes a piece.
///
/// # Errors
/// Damaged input, a null id, a table that outgrew its bound; with file, row group, column and row where known.
pub fn make(job: &Job, piece: &Piece) -> Result<Made> {
    let source = job.catalogue.source(piece.file)?;
    compute(job, piece, &source).map_err(|e| e.in_file(&source.shown).in_row_group(piece.row_group))
}

fn compute(job: &Job, piece: &Piece, source: &Arc<SourceFile>) -> Result<Made> {
    let layout = job.layout(piece.file)?;
    let copied = piece.whole && !job.may_drop();
    let mut encoder = if copied { layout.encoder()? } else { layout.encoder_of_all()? };
    let mut tally = Tally::new(job);
    let decided = decide(job, piece, source);
    if let Some((fails, missing)) = all_dropped(job, &decided) {
        tally.cuts.book_many(piece.rows, mask(&job.cut_groups[0]), fails, missing);
        return Ok(Made { encoded: encoder.finish()?, copied, tally });
    }

    let id = &job.plan.survey.roles.id;
    let check_ids = may_have_nulls(source, piece.row_group, id);
    let columns = wanted(job, source, &decided, copied, check_ids);
    for (number, batch) in read(source, piece, &columns, CHUNK_ROWS)?.enumerate() {
        let batch = batch?;
        if check_ids {
            refuse_null_id(&batch, id, piece.first_row_in_file + (number * CHUNK_ROWS) as u64)?;
        }
        let pass_through = if copied { 0 } else { source.schema().fields().len() };
        chunk(job, batch, pass_through, &decided, &mut encoder, &mut tally)?;
    }
    Ok(Made { encoded: encoder.finish()?, copied, tally })
}

/// What row-group statistics prove of each cut on catalogue columns.
fn decide(job: &Job, piece: &Piece, source: &SourceFile) -> Vec<Option<Verdict>> {
    let mut decided = vec![None; job.cuts.len()];
    let group = source.metadata().row_group(piece.row_group);
    for cut in &job.cut_groups[0] {
        decided[*cut] = statistics::decide(job.cuts.condition(*cut), group);
    }
    decided
}

/// The cuts that every row fails and those of them that miss a value, when all cuts on catalogue columns are decided and
/// one of them drops the rows.
fn all_dropped(job: &Job, decided: &[Option<Verdict>]) -> Option<(u32, u32)> {
    let first = &job.cut_groups[0];
    if !first.iter().all(|cut| decided[*cut].is_some()) {
        return None;
    }
    let those = |verdict| mask(first.iter().filter(|cut| decided[**cut] == Some(verdict)));
    let missing = those(Verdict::AllMissing);
    let fails = those(Verdict::AllFail) | missing;
    (fails & job.cuts.dropping() != 0).then_some((fails, missing))
}

fn mask<'a>(cuts: impl IntoIterator<Item = &'a usize>) -> u32 {
    cuts.into_iter().fold(0, |mask, cut| mask | 1 << cut)
}

/// Whether the footer leaves it open that the column has a null in this row group.
fn may_have_nulls(source: &SourceFile, row_group: usize, column: &str) -> bool {
    let Some(root) = source.root(column) else { return true };
    if !source.schema().field(root).is_nullable() {
        return false;
    }
    let group = source.metadata().row_group(row_group);
    let leaf = group.columns().iter().find(|chunk| chunk.column_path().parts().first().is_some_and(|p| p == column));
    leaf.and_then(|chunk| chunk.statistics()?.null_count_opt()) != Some(0)
}

fn refuse_null_id(batch: &RecordBatch, id: &str, first_row: u64) -> Result<()> {
    let column = batch.column_by_name(id).expect("the reader was asked for the id");
    match (0..column.len()).find(|row| column.is_null(*row)) {
        Some(row) => Err(Error::failed(
            "The id is null; every star needs one. Repair the catalogue or choose another `columns.id`.",
        )
        .in_column(id)
        .at_row(first_row + row as u64)),
        None => Ok(()),
    }
}

/// Columns to decode: all of them in file order when they are encoded again, else those that something needs.
fn wanted(job: &Job, source: &SourceFile, decided: &[Option<Verdict>], copied: bool, check_ids: bool) -> Vec<String> {
    if !copied {
        return source.schema().fields().iter().map(|field| field.name().clone()).collect();
    }
    let mut columns = job.needed.clone();
    let open = (0..job.cuts.len()).filter(|cut| decided[*cut].is_none());
    let of_cuts = open.flat_map(|cut| job.cuts.columns(cut)).filter(|column| source.root(column).is_some());
    let id = check_ids.then_some(&job.plan.survey.roles.id);
    for column in of_cuts.chain(id) {
        if !columns.contains(column) {
            columns.push(column.clone());
        }
    }
    columns
}

/// Computes, judges, counts and encodes one chunk; its first `pass_through` columns are encoded too.
fn chunk(
    job: &Job,
    mut batch: RecordBatch,
    pass_through: usize,
    decided: &[Option<Verdict>],
    encoder: &mut PieceEncoder,
    tally: &mut Tally,
) -> Result<()> {
    let mut numbers = job.pipeline.load(&batch, &mut tally.unusable)?;
    let mut published: Vec<Option<ArrayRef>> = vec![None; job.pipeline.outputs().len()];
    let mut verdict = BatchVerdict::new(batch.num_rows());
    let dropping = job.cuts.dropping();
    for stage in 0..=job.pipeline.stages().len() {
        if stage > 0 {
            job.pipeline.run(stage - 1, &mut numbers, batch.num_rows());
        }
        if job.cut_groups[stage].is_empty() {
            continue;
        }
        for cut in &job.cut_groups[stage] {
            match decided[*cut] {
                Some(all) => verdict.apply_to_all(*cut, all),
                None => {
                    let view = view(job, &batch, job.cuts.columns(*cut), &mut |output| {
                        published[output].get_or_insert_with(|| numbers.published(output)).clone()
                    })?;
                    verdict.apply(*cut, &job.cuts.evaluate(*cut, &view)?);
                }
            }
        }
        if mask(&job.cut_groups[stage]) & dropping != 0
            && let Some(stays) = verdict.drop_failing(dropping, &mut tally.cuts)
        {
            let stays = BooleanArray::new(stays, None);
            batch = filter_record_batch(&batch, &stays).map_err(|e| Error::failed(e.to_string()))?;
            numbers.retain(&stays);
            published.iter_mut().for_each(|column| *column = None);
            if batch.num_rows() == 0 {
                return Ok(());
            }
        }
    }
    let (fails, accepted) = verdict.finish(&mut tally.cuts);
    if let Some(share) = job.prior_share {
        tally.stars.add(numbers.computed(share));
    }

    let outputs = published.into_iter().enumerate();
    let mut computed: Vec<ArrayRef> =
        outputs.map(|(output, column)| column.unwrap_or_else(|| numbers.published(output))).collect();
    computed.push(Arc::new(fails));
    computed.push(Arc::new(accepted));
    let seen = view(job, &batch, &job.table_columns, &mut |output| computed[output].clone())?;
    tally.tables.add(&job.tables, &seen)?;
    let passed = batch.columns()[..pass_through].iter().cloned();
    encoder.write(&passed.chain(computed).collect::<Vec<_>>())
}

/// The named columns of a chunk, from the catalogue or computed.
fn view(
    job: &Job,
    batch: &RecordBatch,
    columns: &[String],
    computed: &mut dyn FnMut(usize) -> ArrayRef,
) -> Result<RecordBatch> {
    let mut fields = Vec::with_capacity(columns.len());
    let mut arrays = Vec::with_capacity(columns.len());
    for name in columns {
        let array = match job.declared.iter().position(|declared| declared.name == *name) {
            Some(output) => computed(output),
            None => batch.column_by_name(name).expect("the reader was asked for every named column").clone(),
        };
        fields.push(Field::new(name, array.data_type().clone(), true));
        arrays.push(array);
    }
    let options = RecordBatchOptions::new().with_row_count(Some(batch.num_rows()));
    RecordBatch::try_new_with_options(Arc::new(Schema::new(fields)), arrays, &options)
        .map_err(|e| Error::failed(e.to_string()))
}
