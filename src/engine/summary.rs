//! What a build says when it is done, and the notes that go into the manifest.

use super::job::Job;
use super::machine::{peak_memory, show_count, show_size, show_time};
use super::piece::Tally;
use super::tally::PRIOR_DOMINATED;
use crate::calibration::Domain;
use crate::release::Manifest;
use std::fmt;
use std::path::Path;

/// The closing words of a build.
#[derive(Debug, Clone)]
pub struct Summary {
    lines: Vec<(String, String)>,
    title: String,
    /// Cautions, in sentences.
    pub notes: Vec<String>,
    /// The same as numbers, for logs.
    pub figures: Vec<(&'static str, serde_json::Value)>,
}

fn share(part: u64, whole: u64) -> String {
    let percent = 100.0 * part as f64 / whole.max(1) as f64;
    match percent {
        _ if part == 0 => "none".to_owned(),
        _ if part == whole => "all".to_owned(),
        p if p < 0.1 => "under 0.1 %".to_owned(),
        p if p > 99.9 => "over 99.9 %".to_owned(),
        p => format!("{p:.1} %"),
    }
}

impl Summary {
    /// Words about a finished release; `rows_now` were computed in this run, in `seconds`.
    pub fn new(job: &Job, manifest: &Manifest, total: &Tally, output: &Path, seconds: f64, rows_now: u64) -> Self {
        let mut lines = Vec::new();
        let mut line = |key: &str, text: String| lines.push((key.to_owned(), text));
        let (files, parts) = (manifest.inputs.len(), manifest.parts.len());
        line("read", format!("{} rows from {files} {}", show_count(manifest.rows_in), plural(files, "file")));
        let written: u64 = manifest.parts.iter().map(|part| part.bytes).sum();
        line(
            "written",
            format!(
                "{} rows in {parts} {}, {}",
                show_count(manifest.rows_written),
                plural(parts, "part"),
                show_size(written)
            ),
        );
        let cuts = &total.cuts;
        if !job.cuts.is_empty() {
            let text =
                format!("{} rows pass every cut ({})", show_count(cuts.accepted), share(cuts.accepted, cuts.read));
            line("accepted", text);
        }
        for (settings, count) in job.plan.document.cuts.iter().zip(&cuts.cuts) {
            let missing = match count.missing {
                0 => String::new(),
                n => format!(", {} of them for a missing value", show_count(n)),
            };
            let verb = if settings.effect.word() == "drop" { "dropped" } else { "flagged" };
            let text = format!("{verb} {} ({}){missing}", show_count(count.fails), share(count.fails, count.judged));
            line(&format!("cut {}", settings.name), text);
        }
        let stars = &total.stars;
        line(
            "distances",
            format!(
                "{} posteriors under {}; {} ({}) dominated by the prior",
                show_count(stars.posteriors),
                job.plan.survey.sections.distance.prior().describe(),
                show_count(stars.prior_dominated),
                share(stars.prior_dominated, stars.posteriors)
            ),
        );
        line("tables", format!("{} in {}", manifest.tables.len() / 2, output.join("tables").display()));
        line("release", output.display().to_string());
        let speed = show_count((rows_now as f64 / seconds) as u64);
        let memory = peak_memory().map_or(String::new(), |bytes| format!(", peak memory {}", show_size(bytes)));
        line("time", format!("{}, {speed} rows/s{memory}", show_time(seconds)));
        let figures = vec![
            ("release", output.display().to_string().into()),
            ("rows_in", manifest.rows_in.into()),
            ("rows_written", manifest.rows_written.into()),
            ("rows_dropped", manifest.rows_dropped.into()),
            ("rows_accepted", cuts.accepted.into()),
            ("posteriors", stars.posteriors.into()),
            ("prior_dominated", stars.prior_dominated.into()),
            ("parts", parts.into()),
            ("bytes", written.into()),
            ("seconds", ((seconds * 1e3).round() / 1e3).into()),
            ("peak_memory_bytes", peak_memory().into()),
        ];
        Self { lines, title: manifest.title.clone(), notes: manifest.notes.clone(), figures }
    }
}

/// "1 value", "1,200 values".
fn values(count: u64) -> String {
    format!("{} {}", show_count(count), if count == 1 { "value" } else { "values" })
}

/// "file" or "files".
pub fn plural(count: usize, word: &str) -> String {
    if count == 1 { word.to_owned() } else { format!("{word}s") }
}

impl fmt::Display for Summary {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        writeln!(f, "{}", self.title)?;
        let width = self.lines.iter().map(|(key, _)| key.chars().count()).max().unwrap_or(0);
        for (key, text) in &self.lines {
            writeln!(f, "  {key:<width$}  {text}")?;
        }
        for note in &self.notes {
            writeln!(f, "  note: {note}")?;
        }
        Ok(())
    }
}

/// Cautions that belong to the release, in sentences; they depend on plan and catalogue only.
pub fn notes(job: &Job, total: &Tally) -> Vec<String> {
    let mut notes = job.catalogue.notes.clone();
    let stars = &total.stars;
    if stars.prior_dominated > 0 {
        notes.push(format!(
            "{} of {} distances have prior_share >= {PRIOR_DOMINATED}: they say more about the prior than about the star.",
            show_count(stars.prior_dominated),
            show_count(stars.posteriors)
        ));
    }
    for (load, unusable) in job.pipeline.loads().iter().zip(&total.unusable) {
        if unusable.not_finite > 0 {
            notes.push(format!(
                "{} of `{}` NaN or infinite, taken as missing.",
                values(unusable.not_finite),
                load.column
            ));
        }
        if unusable.out_of_domain > 0 {
            let what = match load.domain {
                Domain::Positive => "zero or negative",
                _ => "negative",
            };
            notes.push(format!(
                "{} of `{}` {what}, which no standard error can be; taken as missing.",
                values(unusable.out_of_domain),
                load.column
            ));
        }
    }
    notes.extend(super::coordinates::notes(job));
    for (name, band) in &job.plan.survey.bands {
        if band.magnitude.is_some() && band.magnitude_error.is_none() {
            notes.push(format!("Band {name} has no magnitude error: its magnitudes were taken as exact."));
        }
    }
    notes
}
