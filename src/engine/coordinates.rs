//! Right ascensions and declinations outside their range, as far as footers tell.
//!
//! No stage reads coordinates yet, so they are not decoded for this. A range in a footer that lies outside is certain
//! (some row has that value); a footer without ranges proves nothing, and NaN never appears in one.

use super::job::Job;
use crate::columnar::source::SourceFile;
use parquet::file::statistics::Statistics;

/// One sentence a column, naming the first place.
pub fn notes(job: &Job) -> Vec<String> {
    let roles = &job.plan.survey.roles;
    let columns = [(&roles.ra, 0.0, 360.0, "right ascension"), (&roles.dec, -90.0, 90.0, "declination")];
    let mut notes = Vec::new();
    for (column, low, high, name) in columns {
        let Some(column) = column else { continue };
        let mut places = 0;
        let mut first = String::new();
        for (number, file) in job.catalogue.files.iter().enumerate() {
            let Ok(source) = job.catalogue.source(number) else { continue };
            for group in 0..source.row_groups() {
                if let Some((least, most)) = range(&source, group, column).filter(|(a, b)| *a < low || *b > high) {
                    places += 1;
                    if first.is_empty() {
                        first = format!("{} row group {group} ({least} to {most})", file.shown);
                    }
                }
            }
        }
        if places > 0 {
            notes.push(format!(
                "`{column}` leaves the range of a {name}, {low} to {high} deg, in {places} row groups, first in {first}; is it in degrees?"
            ));
        }
    }
    notes
}

fn range(source: &SourceFile, row_group: usize, column: &str) -> Option<(f64, f64)> {
    let group = source.metadata().row_group(row_group);
    let chunk = group.columns().iter().find(|c| c.column_path().parts() == [column])?;
    let (low, high) = match chunk.statistics()? {
        Statistics::Double(s) => (*s.min_opt()?, *s.max_opt()?),
        Statistics::Float(s) => (f64::from(*s.min_opt()?), f64::from(*s.max_opt()?)),
        Statistics::Int32(s) => (f64::from(*s.min_opt()?), f64::from(*s.max_opt()?)),
        _ => return None,
    };
    (low.is_finite() && high.is_finite()).then_some((low, high))
}
