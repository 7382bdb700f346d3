//! A plan bound to its catalogue: everything that is decided before the first row is read.

use super::fields;
use super::pipeline::Pipeline;
use super::{bind, votable};
use crate::calibration;
use crate::catalogue::{Catalogue, PartPlan};
use crate::error::{Error, Result};
use crate::frame::Declared;
use crate::plan::lineage::Recipes;
use crate::plan::{Plan, Precision};
use crate::release::{Layout, PassThrough};
use crate::tables::{Names, Tables};
use crate::verdicts::Cuts;
use arrow::datatypes::{FieldRef, Schema};
use std::collections::VecDeque;
use std::path::Path;
use std::sync::{Arc, Mutex};

/// Layouts kept for reuse; parts of one file follow each other.
const KEPT_LAYOUTS: usize = 16;

/// A bound plan.
pub struct Job {
    /// The plan.
    pub plan: Plan,
    /// The catalogue, footers read.
    pub catalogue: Catalogue,
    /// Stages and their columns.
    pub pipeline: Pipeline,
    /// Checked cuts.
    pub cuts: Cuts,
    /// Checked tables.
    pub tables: Tables,
    /// All computed columns in order, verdicts included.
    pub declared: Vec<Declared>,
    /// Recipes of all columns.
    pub recipes: Recipes,
    /// Parts in order.
    pub parts: Vec<PartPlan>,
    /// `cut_groups[s]`: cuts whose columns exist after `s` stages.
    pub cut_groups: Vec<Vec<usize>>,
    /// Catalogue columns that must be decoded for stages, tables and the check of ids.
    pub needed: Vec<String>,
    /// Columns that the tables need, catalogue or computed.
    pub table_columns: Vec<String>,
    /// Place of `prior_share` among the computed columns.
    pub prior_share: Option<usize>,
    /// Floats in 64 bits.
    pub double: bool,
    layouts: Mutex<VecDeque<(usize, Arc<Layout>)>>,
}

impl std::fmt::Debug for Job {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Job").field("parts", &self.parts.len()).finish_non_exhaustive()
    }
}

impl Job {
    /// Opens the catalogue and binds the plan to it; `output` is never read as input.
    ///
    /// # Errors
    /// A catalogue that cannot be opened; all faults of binding, cuts and tables at once.
    pub fn new(plan: Plan, output: &Path) -> Result<Self> {
        let release = &plan.document.release;
        let catalogue =
            Catalogue::open_except(&release.catalogue.list(), plan.folder(), &[output.to_path_buf(), plan.output()])?;
        let double = release.precision == Precision::Double;
        let stages = calibration::stages(&plan.survey);
        let mut faults = Vec::new();
        faults.extend(bind::check(&plan.survey.roles, &stages, &catalogue.schema).err());

        let pipeline = Pipeline::new(stages, double);
        let mut declared = pipeline.outputs().to_vec();
        faults.extend(clashes(&declared, &catalogue.schema));
        let mut columns: Vec<FieldRef> = catalogue.schema.fields().iter().cloned().collect();
        columns.extend(plain_fields(&declared, double));
        // conditions may not name the verdicts that they decide; tables may
        let cuts = Cuts::new(&plan.document.cuts, &Schema::new(columns.clone()));
        declared.extend(fields::verdict_declarations());
        columns.extend(plain_fields(&fields::verdict_declarations(), double));
        let names = Names {
            apparent: plan.survey.bands.keys().map(|b| (b.clone(), plan.survey.magnitude_column(b))).collect(),
            colours: plan.survey.colours.keys().cloned().collect(),
        };
        let tables = Tables::new(&plan.document.tables, &names, &Schema::new(columns));
        let (cuts, tables) = match (cuts, tables) {
            (Ok(cuts), Ok(tables)) if faults.is_empty() => (cuts, tables),
            (cuts, tables) => {
                faults.extend(cuts.err());
                faults.extend(tables.err());
                let faults = faults.into_iter().flat_map(|e| {
                    let list: Vec<Error> = e.each().map(|one| Error { others: Vec::new(), ..one.clone() }).collect();
                    list
                });
                let list = faults.map(|e| e.in_file(&plan.path)).collect();
                return Err(Error::all(list).unwrap_or_else(|| Error::plan("The plan cannot be used.")));
            }
        };

        let reads: Vec<Vec<String>> = (0..cuts.len()).map(|i| cuts.columns(i).to_vec()).collect();
        let mut cut_groups = vec![Vec::new(); pipeline.stages().len() + 1];
        for (i, columns) in reads.iter().enumerate() {
            let after = columns.iter().filter_map(|c| pipeline.ready_after(c)).max().unwrap_or(0);
            cut_groups[after].push(i);
        }
        let prior_share = declared.iter().position(|column| column.name == "prior_share");
        let recipes = fields::recipes(pipeline.stages(), &plan.document.cuts, &reads);
        let parts = catalogue.parts(release.rows_per_part);
        let mut needed: Vec<String> = Vec::new();
        let stage_columns = pipeline.loads().iter().map(|load| load.column.clone());
        let table_columns = tables.columns();
        for column in stage_columns.chain(table_columns.iter().cloned()) {
            if catalogue.schema.field_with_name(&column).is_ok() && !needed.contains(&column) {
                needed.push(column);
            }
        }
        Ok(Self {
            plan,
            catalogue,
            pipeline,
            cuts,
            tables,
            declared,
            recipes,
            parts,
            cut_groups,
            needed,
            table_columns,
            prior_share,
            double,
            layouts: Mutex::default(),
        })
    }

    /// Whether rows may be left out, so that pass-through columns have to be encoded again.
    pub fn may_drop(&self) -> bool {
        self.cuts.dropping() != 0
    }

    /// Layout of the parts made from file `file`.
    ///
    /// # Errors
    /// A file that changed or cannot be opened; columns that cannot be passed through.
    pub fn layout(&self, file: usize) -> Result<Arc<Layout>> {
        let lock = || self.layouts.lock().unwrap_or_else(|poisoned| poisoned.into_inner());
        if let Some((_, layout)) = lock().iter().find(|(kept, _)| *kept == file) {
            return Ok(layout.clone());
        }
        let source = self.catalogue.source(file)?;
        let cuts = &self.plan.document.cuts;
        let computed = fields::computed_fields(&self.declared, self.double, &self.recipes, cuts, &source.fingerprint);
        let all = source.embedded_schema().fields().iter().chain(&computed).cloned().collect::<Vec<_>>();
        let title = &self.plan.document.release.title;
        let pairs = [
            (votable::VERSION.0.to_owned(), votable::VERSION.1.to_owned()),
            (votable::CONTENT.to_owned(), votable::header(title, &Schema::new(all))),
            ("tenparsec.plan".to_owned(), self.plan.text.clone()),
        ];
        let pieces = self.parts.iter().filter(|part| part.file == file).all(PartPlan::whole);
        let pass = if self.may_drop() || !pieces { PassThrough::Encoded } else { PassThrough::Copied };
        let layout = Arc::new(Layout::new(&source, &computed, &pairs, pass)?);
        let mut kept = lock();
        if kept.len() == KEPT_LAYOUTS {
            kept.pop_front();
        }
        kept.push_back((file, layout.clone()));
        Ok(layout)
    }

    /// Bytes of memory that one piece in flight takes, about: its encoded columns, a page buffer for each column that
    /// is encoded or decoded, and the numbers of one chunk.
    pub fn piece_memory(&self) -> u64 {
        let rows = self.parts.iter().flat_map(|part| &part.pieces).map(|piece| piece.rows).max().unwrap_or(0);
        let width = if self.double { 8 } else { 4 };
        let computed = self.declared.len() as u64;
        let mut encoded = rows * computed * width;
        if self.may_drop() || self.parts.iter().any(|part| !part.whole()) {
            encoded += self.catalogue.bytes() * rows / self.catalogue.rows.max(1) * 2;
        }
        let buffers = (computed + self.catalogue.schema.fields().len() as u64) * (512 << 10);
        let chunk = super::piece::CHUNK_ROWS as u64 * (self.pipeline.loads().len() as u64 + 2 * computed) * 8;
        encoded + buffers + 2 * chunk
    }
}

fn plain_fields(declared: &[Declared], double: bool) -> Vec<FieldRef> {
    declared.iter().map(|d| Arc::new(crate::release::computed_field(d, double, &[]))).collect()
}

/// Catalogue columns with a name that tenparsec writes.
fn clashes(declared: &[Declared], schema: &Schema) -> Vec<Error> {
    let verdicts = fields::verdict_declarations();
    let taken = declared.iter().chain(&verdicts).filter(|d| schema.field_with_name(&d.name).is_ok());
    taken
        .map(|d| {
            Error::plan(format!(
                "The catalogue already has a column `{}`, which tenparsec writes; rename it in the catalogue.",
                d.name
            ))
            .at_key("`release.catalogue`")
        })
        .collect()
}
