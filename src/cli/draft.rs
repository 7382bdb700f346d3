//! `tenparsec draft CATALOGUE`: looks at the columns of a catalogue and prints a starter plan.

use crate::catalogue::Catalogue;
use crate::columnar::source;
use crate::engine::progress::{Voice, json_line};
use crate::error::{Error, Result};
use crate::plan::draft::{self, ColumnSeen};
use clap::Args;
use std::path::Path;

const EXAMPLES: &str = "\
Examples:
  tenparsec draft sky/ > plan.toml
  tenparsec draft 'catalogue/*.parquet' > plan.toml

The plan goes to standard output; what could not be guessed is said on standard error and marked in the plan.";

#[derive(Debug, Args)]
#[command(after_help = EXAMPLES)]
pub(super) struct Options {
    /// A Parquet file, a folder of them, or a glob
    catalogue: String,
}

pub(super) fn run(options: &Options, voice: Voice) -> Result<u8> {
    let catalogue = Catalogue::open(std::slice::from_ref(&options.catalogue), Path::new(""))
        .map_err(|error| Error { kind: crate::error::Kind::Failed, ..error })?;
    let columns: Vec<ColumnSeen> = catalogue
        .schema
        .fields()
        .iter()
        .map(|field| {
            let kind = field.data_type();
            ColumnSeen {
                name: field.name().clone(),
                kind: kind.to_string(),
                numeric: kind.is_numeric(),
                float: kind.is_floating(),
                unit: source::unit(field).map(str::to_owned),
                ucd: source::ucd(field).map(str::to_owned),
                description: source::description(field).map(str::to_owned),
            }
        })
        .collect();
    let draft = draft::propose(&columns, &options.catalogue);
    print!("{}", draft.toml);
    for text in &draft.could_not_guess {
        match voice {
            Voice::Text => eprintln!("could not guess: {text}"),
            Voice::Json => json_line("warning", "could_not_guess", &[("text", text.clone().into())]),
            Voice::Quiet => {}
        }
    }
    Ok(0)
}
