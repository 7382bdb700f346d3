//! Tells whoever watches how far the work is: a bar on a terminal, plain or JSON lines elsewhere.
//!
//! Everything here goes to standard error; standard output is kept for results.

use super::machine::{show_count, show_size, show_time};
use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};
use std::io::{IsTerminal, Write};
use std::sync::atomic::{AtomicU64, Ordering};
use std::sync::{Condvar, Mutex};
use std::time::{Duration, Instant};

/// How to speak.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Voice {
    /// Bar on a terminal, else plain lines.
    Text,
    /// One JSON object a line.
    Json,
    /// Errors only.
    Quiet,
}

/// Time between two lines when nobody sees a bar.
const PERIOD: Duration = Duration::from_secs(10);

/// Counts the work done and reports it.
pub struct Progress {
    voice: Voice,
    total_rows: u64,
    start: Instant,
    rows: AtomicU64,
    bytes: AtomicU64,
    parts: AtomicU64,
    total_parts: u64,
    bar: Option<ProgressBar>,
    finished: Mutex<bool>,
    wake: Condvar,
}

impl Progress {
    /// `colour` allows escape codes for colours in the bar.
    pub fn new(voice: Voice, colour: bool, total_rows: u64, total_parts: u64) -> Self {
        let bar = (voice == Voice::Text && std::io::stderr().is_terminal()).then(|| {
            let bar = ProgressBar::with_draw_target(Some(total_rows), ProgressDrawTarget::stderr_with_hz(8));
            let tint = if colour { ".cyan" } else { "" };
            let template = format!("{{bar:32{tint}}} {{percent:>3}}% {{msg}}");
            if let Ok(style) = ProgressStyle::with_template(&template) {
                bar.set_style(style.progress_chars("=> "));
            }
            bar
        });
        Self {
            voice,
            total_rows,
            start: Instant::now(),
            rows: AtomicU64::new(0),
            bytes: AtomicU64::new(0),
            parts: AtomicU64::new(0),
            total_parts,
            bar,
            finished: Mutex::new(false),
            wake: Condvar::new(),
        }
    }

    /// Rows and input bytes that are through.
    pub fn add(&self, rows: u64, bytes: u64) {
        let rows = self.rows.fetch_add(rows, Ordering::Relaxed) + rows;
        self.bytes.fetch_add(bytes, Ordering::Relaxed);
        if let Some(bar) = &self.bar {
            bar.set_message(self.rates());
            bar.set_position(rows);
        }
    }

    /// Rows that are through by now, for work that counts them itself.
    pub fn set(&self, rows: u64) {
        self.rows.store(rows, Ordering::Relaxed);
        self.add(0, 0);
    }

    /// A part is on disk.
    pub fn part_done(&self, file: &str, rows: u64, bytes: u64) {
        self.parts.fetch_add(1, Ordering::Relaxed);
        if self.voice == Voice::Json {
            self.line("info", "part", &[("file", file.into()), ("rows", rows.into()), ("bytes", bytes.into())]);
        }
    }

    /// Runs `work` while lines appear from time to time.
    pub fn watch<T>(&self, work: impl FnOnce() -> T) -> T {
        std::thread::scope(|scope| {
            scope.spawn(|| self.speak_now_and_then());
            let result = work();
            *self.finished.lock().unwrap_or_else(|p| p.into_inner()) = true;
            self.wake.notify_all();
            if let Some(bar) = &self.bar {
                bar.finish_and_clear();
            }
            result
        })
    }

    fn speak_now_and_then(&self) {
        let mut finished = self.finished.lock().unwrap_or_else(|p| p.into_inner());
        while !*finished {
            let (guard, waited) = self.wake.wait_timeout(finished, PERIOD).unwrap_or_else(|p| p.into_inner());
            finished = guard;
            if waited.timed_out() && !*finished && self.bar.is_none() && self.voice != Voice::Quiet {
                self.speak();
            }
        }
    }

    fn speak(&self) {
        let (rows, parts) = (self.rows.load(Ordering::Relaxed), self.parts.load(Ordering::Relaxed));
        if self.voice == Voice::Json {
            let seconds = self.start.elapsed().as_secs_f64();
            let pairs = [
                ("rows", rows.into()),
                ("of_rows", self.total_rows.into()),
                ("parts", parts.into()),
                ("of_parts", self.total_parts.into()),
                ("rows_per_second", ((rows as f64 / seconds.max(1e-9)) as u64).into()),
            ];
            return self.line("info", "progress", &pairs);
        }
        let share = 100.0 * rows as f64 / self.total_rows.max(1) as f64;
        eprintln!("{share:3.0}%  part {parts}/{}  {}", self.total_parts, self.rates());
    }

    fn rates(&self) -> String {
        let seconds = self.start.elapsed().as_secs_f64().max(1e-9);
        let (rows, bytes) = (self.rows.load(Ordering::Relaxed), self.bytes.load(Ordering::Relaxed));
        let per_second = rows as f64 / seconds;
        let left = match self.total_rows.saturating_sub(rows) as f64 / per_second {
            left if left.is_finite() && rows > 0 => format!("{} left", show_time(left)),
            _ => "time left unknown".to_owned(),
        };
        let bytes = match bytes {
            0 => String::new(), // nothing is read
            bytes => format!("  {}/s", show_size((bytes as f64 / seconds) as u64)),
        };
        format!(
            "{} of {} rows  {} rows/s{bytes}  {left}",
            show_count(rows),
            show_count(self.total_rows),
            show_count(per_second as u64)
        )
    }

    /// A remark: above the bar, or as a line.
    pub fn note(&self, text: &str) {
        match (self.voice, &self.bar) {
            (Voice::Quiet, _) => {}
            (Voice::Json, _) => self.line("warning", "note", &[("text", text.into())]),
            (Voice::Text, Some(bar)) => bar.suspend(|| eprintln!("note: {text}")),
            (Voice::Text, None) => eprintln!("note: {text}"),
        }
    }

    fn line(&self, level: &str, event: &str, pairs: &[(&str, serde_json::Value)]) {
        json_line(level, event, pairs);
    }
}

/// Writes one JSON line to standard error: time (UTC), level, event and `pairs`.
pub fn json_line(level: &str, event: &str, pairs: &[(&str, serde_json::Value)]) {
    let mut map = serde_json::Map::new();
    map.insert("time".into(), utc_now().into());
    map.insert("level".into(), level.into());
    map.insert("event".into(), event.into());
    map.extend(pairs.iter().map(|(key, value)| ((*key).to_owned(), value.clone())));
    let _ = writeln!(std::io::stderr().lock(), "{}", serde_json::Value::Object(map));
}

/// Now as `2026-12-01T23:59:59Z`.
pub fn utc_now() -> String {
    let seconds = std::time::SystemTime::now().duration_since(std::time::UNIX_EPOCH).map_or(0, |d| d.as_secs());
    let (days, rest) = (seconds / 86_400, seconds % 86_400);
    let (year, month, day) = civil(days as i64);
    format!("{year:04}-{month:02}-{day:02}T{:02}:{:02}:{:02}Z", rest / 3600, rest % 3600 / 60, rest % 60)
}

/// Gregorian date of a day counted from 1970-01-01 (days from a March-based 400-year cycle; common practice).
fn civil(days: i64) -> (i64, i64, i64) {
    let shifted = days + 719_468;
    let cycle = shifted.div_euclid(146_097);
    let day_of_cycle = shifted.rem_euclid(146_097);
    let year_of_cycle = (day_of_cycle - day_of_cycle / 1460 + day_of_cycle / 36_524 - day_of_cycle / 146_096) / 365;
    let day_of_year = day_of_cycle - (365 * year_of_cycle + year_of_cycle / 4 - year_of_cycle / 100);
    let month_from_march = (5 * day_of_year + 2) / 153;
    let day = day_of_year - (153 * month_from_march + 2) / 5 + 1;
    let month = if month_from_march < 10 { month_from_march + 3 } else { month_from_march - 9 };
    (year_of_cycle + 400 * cycle + i64::from(month <= 2), month, day)
}

#[cfg(test)]
mod tests {
    use super::civil;

    #[test]
    fn dates_of_known_days() {
        assert_eq!(civil(0), (1970, 1, 1));
        assert_eq!(civil(19_782), (2024, 2, 29));
        assert_eq!(civil(20_788), (2026, 12, 1));
    }
}
