//! Do all files have the same columns?
//!
//! Names, order and types must agree, and so must units where both files state one. Nullability may differ; the
//! looser one holds. Types are Parquet's own (see `columnar::source`); names of list elements and nullability inside
//! nested types do not count, since readers of Parquet ignore the former and nothing here depends on the latter.

use std::sync::Arc;

use arrow::datatypes::{DataType, Field, FieldRef, Fields, Metadata, Schema, SchemaRef};

use crate::columnar::source::{SourceFile, unit};
use crate::error::{Error, Result};

/// At most this many differences are spelled out.
const SHOWN_DIFFERENCES: usize = 20;

/// Columns of the files so far, and the file that they are compared with.
pub(super) struct Columns {
    first: String,
    fields: Vec<FieldRef>,
    metadata: Metadata,
}

impl Columns {
    pub fn of(source: &SourceFile) -> Self {
        let schema = source.schema();
        Self {
            first: source.shown.clone(),
            fields: schema.fields().iter().cloned().collect(),
            metadata: schema.metadata().clone(),
        }
    }

    /// Takes a further file in; all its differences travel in one error, each naming both files, column and types.
    pub fn merge(mut self, source: &SourceFile) -> Result<Self> {
        let theirs = source.schema().fields();
        let differences = self.differences(theirs, &source.shown);
        if !differences.is_empty() {
            let count = differences.len();
            let errors = differences
                .into_iter()
                .take(SHOWN_DIFFERENCES)
                .map(|(column, text)| Error::failed(text).in_file(&source.shown).in_column(column));
            let mut errors: Vec<Error> = errors.collect();
            if count > SHOWN_DIFFERENCES {
                let more = count - SHOWN_DIFFERENCES;
                errors.push(Error::failed(format!("{more} more differences.")).in_file(&source.shown));
            }
            return Err(Error::all(errors).unwrap_or_else(|| Error::failed("The files differ.")));
        }
        for (mine, other) in self.fields.iter_mut().zip(theirs) {
            let looser = other.is_nullable() && !mine.is_nullable();
            let missing = other.metadata().keys().any(|key| !mine.metadata().contains_key(key));
            if looser || missing {
                let mut field = mine.as_ref().clone();
                field.set_nullable(mine.is_nullable() || other.is_nullable());
                let mut metadata = other.metadata().clone();
                metadata.extend(mine.metadata().clone());
                *mine = Arc::new(field.with_metadata(metadata));
            }
        }
        Ok(self)
    }

    pub fn schema(self) -> SchemaRef {
        Arc::new(Schema::new_with_metadata(Fields::from(self.fields), self.metadata))
    }

    fn differences(&self, theirs: &Fields, file: &str) -> Vec<(String, String)> {
        let find = |fields: &[FieldRef], name: &str| fields.iter().position(|field| field.name() == name);
        let first = &self.first;
        let mut out = Vec::new();
        for mine in &self.fields {
            let name = mine.name().clone();
            let Some(other) = find(theirs, &name).map(|at| &theirs[at]) else {
                out.push((
                    name,
                    format!("The column is in {first} but not in {file}; all files must have the same columns."),
                ));
                continue;
            };
            if !same_type(mine.data_type(), other.data_type()) {
                let (a, b) = (shown_type(mine.data_type()), shown_type(other.data_type()));
                out.push((name, format!("The column is {a} in {first} but {b} in {file}; write both with one type.")));
            } else if let (Some(a), Some(b)) = (unit(mine), unit(other))
                && a != b
            {
                out.push((name, format!("The column's unit is `{a}` in {first} but `{b}` in {file}.")));
            }
        }
        for other in theirs {
            if find(&self.fields, other.name()).is_none() {
                let text = format!("The column is in {file} but not in {first}; all files must have the same columns.");
                out.push((other.name().clone(), text));
            }
        }
        if out.is_empty()
            && let Some(at) = self.fields.iter().zip(theirs).position(|(a, b)| a.name() != b.name())
        {
            let (a, b) = (self.fields[at].name(), theirs[at].name());
            out.push((
                b.clone(),
                format!("The columns are in another order: column {} is `{a}` in {first} but `{b}` in {file}.", at + 1),
            ));
        }
        out
    }
}

fn same_type(a: &DataType, b: &DataType) -> bool {
    use DataType as D;
    let same_field = |a: &Field, b: &Field| same_type(a.data_type(), b.data_type());
    match (a, b) {
        (D::List(a), D::List(b)) => same_field(a, b),
        (D::Struct(a), D::Struct(b)) => {
            a.len() == b.len() && a.iter().zip(b).all(|(a, b)| a.name() == b.name() && same_field(a, b))
        }
        (D::Map(a, _), D::Map(b, _)) => match (a.data_type(), b.data_type()) {
            (D::Struct(a), D::Struct(b)) => a.len() == b.len() && a.iter().zip(b).all(|(a, b)| same_field(a, b)),
            _ => false,
        },
        (a, b) => a == b,
    }
}

/// A type in words that a person reads.
pub(super) fn shown_type(data_type: &DataType) -> String {
    use DataType as D;
    match data_type {
        D::Boolean => "boolean".into(),
        D::Float16 => "a 16-bit float".into(),
        D::Float32 => "a 32-bit float".into(),
        D::Float64 => "a 64-bit float".into(),
        D::Int8 | D::Int16 | D::Int32 | D::Int64 => format!("a {}-bit integer", bits(data_type)),
        D::UInt8 | D::UInt16 | D::UInt32 | D::UInt64 => format!("an unsigned {}-bit integer", bits(data_type)),
        D::Utf8 => "text".into(),
        D::Binary => "binary".into(),
        other => format!("{other}"),
    }
}

fn bits(data_type: &DataType) -> usize {
    data_type.primitive_width().unwrap_or(0) * 8
}
