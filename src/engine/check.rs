//! `check`: what a build would read, make and need; reads plan and footers only.

use super::build::resources;
use super::job::Job;
use super::machine::{show_count, show_size, show_time};
use super::summary::plural;
use crate::calibration::{From, Input};
use crate::columnar::source;
use crate::error::Result;
use crate::plan::Plan;
use std::fmt::Write;
use std::path::Path;

/// Bytes of a stored value of a computed 32-bit float column, measured on the reference catalogue (DEVELOPERS.md).
const BYTES_PER_VALUE: f64 = 2.9;
/// Rows a second and thread of the reference plan on the machine of DEVELOPERS.md; only for the estimate of time.
const ROWS_PER_SECOND: f64 = 650_000.0;

/// The report, as text for a terminal.
///
/// # Errors
/// All that a build would find wrong before it reads the first row.
pub fn report(plan: Plan, output: &Path, threads: Option<usize>, memory: Option<u64>) -> Result<String> {
    let job = Job::new(plan, output)?;
    let (threads, in_flight) = resources(&job, threads, memory)?;
    job.layout(0)?;
    let mut out = String::new();
    let catalogue = &job.catalogue;
    let groups: usize = catalogue.files.iter().map(|file| file.groups.len()).sum();
    let largest = catalogue.files.iter().flat_map(|file| &file.groups).max().copied().unwrap_or(0);
    let mut line = |key: &str, text: String| {
        let _ = writeln!(out, "  {key:<11} {text}");
    };
    line("title", job.plan.document.release.title.clone());
    line(
        "catalogue",
        format!(
            "{} rows, {} columns, {} in {} {}; {groups} {}, the largest of {} rows",
            show_count(catalogue.rows),
            catalogue.schema.fields().len(),
            show_size(catalogue.bytes()),
            catalogue.files.len(),
            plural(catalogue.files.len(), "file"),
            plural(groups, "row group"),
            show_count(largest)
        ),
    );
    let copied = !job.may_drop() && job.parts.iter().all(|part| part.whole());
    let how = if copied { "catalogue columns copied undecoded" } else { "catalogue columns encoded again" };
    line("parts", format!("{}, {how}", job.parts.len()));
    let computed = job.declared.len() as f64 * BYTES_PER_VALUE * if job.double { 2.0 } else { 1.0 };
    let expected = catalogue.bytes() + (catalogue.rows as f64 * computed) as u64;
    line("release", format!("{}, {} new columns, about {}", output.display(), job.declared.len(), show_size(expected)));
    let seconds = catalogue.rows as f64 / ROWS_PER_SECOND / threads as f64;
    line("threads", format!("{threads}, {in_flight} row groups in flight"));
    line("memory", format!("about {}", show_size((96 << 20) + job.piece_memory() * in_flight as u64 / 2)));
    line("time", format!("roughly {} (from another machine's speed)", show_time(seconds)));
    line("prior", job.plan.survey.sections.distance.prior().describe());
    out.push_str("\n  columns that are read\n");
    for (key, column) in bindings(&job) {
        let field = catalogue.schema.field_with_name(&column).ok();
        let kind = field.map_or(String::new(), |field| field.data_type().to_string());
        let unit = field.and_then(source::unit).map_or("no unit stated".to_owned(), |unit| format!("[{unit}]"));
        let _ = writeln!(out, "    {key:<28} {column:<24} {kind:<10} {unit}");
    }
    for (i, cut) in job.plan.document.cuts.iter().enumerate() {
        let stage = job.cut_groups.iter().position(|group| group.contains(&i)).unwrap_or(0);
        let when = if stage == 0 { "from the catalogue".to_owned() } else { format!("after stage {stage}") };
        let _ = writeln!(out, "  cut {i} {} ({}, {when}): {}", cut.name, cut.effect.word(), cut.keep);
    }
    for note in catalogue.notes.iter().cloned().chain(super::coordinates::notes(&job)) {
        let _ = writeln!(out, "  note: {note}");
    }
    Ok(out)
}

/// Plan keys with the catalogue columns that they name.
fn bindings(job: &Job) -> Vec<(String, String)> {
    let roles = &job.plan.survey.roles;
    let mut list = vec![("columns.id".to_owned(), roles.id.clone())];
    let positions = [("columns.ra", &roles.ra), ("columns.dec", &roles.dec)];
    list.extend(positions.into_iter().filter_map(|(key, column)| Some((key.to_owned(), column.clone()?))));
    let inputs = job.pipeline.stages().iter().flat_map(|stage| stage.inputs());
    for Input { from, key, .. } in inputs {
        if let From::Catalogue(column) = from
            && !list.iter().any(|(k, _)| k == key)
        {
            list.push((key.clone(), column.clone()));
        }
    }
    list
}
