//! Lineage: for each column the fingerprint of all that determined it.
//!
//! The *recipe* of a column hashes the stage's name and revision, the settings that the column depends on, and the
//! recipes of the columns that it was made from; the recipe of a catalogue column is its name. The *lineage* in the
//! field metadata of a part adds how the column is stored and the fingerprint of the catalogue file that the part was
//! made from. So two parts hold the same column when recipe, stored type and source are the same. BLAKE3, 32 hex digits.

use crate::calibration::{From, Stage};
use std::collections::BTreeMap;

/// Recipes by column.
#[derive(Debug, Clone, Default)]
pub struct Recipes {
    by_column: BTreeMap<String, String>,
}

impl Recipes {
    /// Recipes of everything that the stages write.
    pub fn of_stages(stages: &[Box<dyn Stage>]) -> Self {
        let mut recipes = Self::default();
        for stage in stages {
            for output in stage.outputs() {
                let mut words: Vec<String> =
                    ["stage", stage.name(), &stage.revision().to_string(), &output.settings, &output.declared.name]
                        .map(str::to_owned)
                        .to_vec();
                words.extend(output.reads.iter().map(|read| match &stage.inputs()[*read].from {
                    From::Catalogue(column) => of_catalogue(column),
                    From::Computed(column) => recipes.get(column),
                }));
                recipes.by_column.insert(output.declared.name.clone(), digest(&words));
            }
        }
        recipes
    }

    /// Recipe of a column, computed or of the catalogue.
    pub fn get(&self, column: &str) -> String {
        self.by_column.get(column).cloned().unwrap_or_else(|| of_catalogue(column))
    }

    /// Adds a column that something other than a stage made from `reads`; `words` are the settings it depends on.
    pub fn add(&mut self, column: &str, words: &[String], reads: &[String]) {
        let mut all = vec!["made".to_owned(), column.to_owned()];
        all.extend(words.iter().cloned());
        all.extend(reads.iter().map(|read| self.get(read)));
        self.by_column.insert(column.to_owned(), digest(&all));
    }
}

fn of_catalogue(column: &str) -> String {
    digest(&["catalogue".to_owned(), column.to_owned()])
}

/// Lineage of a column of one part from its recipe, its stored type and the fingerprint of the part's source file.
pub fn lineage(recipe: &str, stored: &str, source: &str) -> String {
    digest(&["lineage".to_owned(), recipe.to_owned(), stored.to_owned(), source.to_owned()])
}

/// Hash of a list of words; lengths keep apart lists that differ only in where they are cut.
fn digest(words: &[String]) -> String {
    let mut hasher = blake3::Hasher::new();
    for word in words {
        hasher.update(&(word.len() as u64).to_le_bytes());
        hasher.update(word.as_bytes());
    }
    hasher.finalize().to_hex()[..32].to_owned()
}
