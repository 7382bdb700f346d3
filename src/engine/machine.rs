//! What the machine gives this job: threads, memory, and the memory that was used at the peak.

use crate::error::{Error, Result};
use std::fs;

/// Threads that the job may use; affinity and cgroup quota are honoured.
pub fn threads() -> usize {
    std::thread::available_parallelism().map_or(1, usize::from)
}

/// Memory in bytes that the job may use: the least of the machine's memory and its cgroup limits; `None` where the
/// system does not say.
pub fn memory() -> Option<u64> {
    let machine = fs::read_to_string("/proc/meminfo").ok().and_then(|text| kilobytes(&text, "MemTotal:"));
    machine.into_iter().chain(cgroup_limits()).min()
}

/// Limits of the cgroup of this process and of those above it (version 2, then version 1).
fn cgroup_limits() -> Vec<u64> {
    let number = |path: &str| fs::read_to_string(path).ok()?.trim().parse::<u64>().ok();
    let text = fs::read_to_string("/proc/self/cgroup").unwrap_or_default();
    let mut limits = Vec::new();
    if let Some(path) = text.lines().find_map(|line| line.strip_prefix("0::")) {
        let mut path = path.trim_end_matches('/').to_owned();
        loop {
            limits.extend(number(&format!("/sys/fs/cgroup{path}/memory.max")));
            match path.rfind('/') {
                Some(at) => path.truncate(at),
                None => break,
            }
        }
    }
    limits.extend(number("/sys/fs/cgroup/memory/memory.limit_in_bytes"));
    limits
}

/// Largest resident set of this process so far, bytes.
pub fn peak_memory() -> Option<u64> {
    kilobytes(&fs::read_to_string("/proc/self/status").ok()?, "VmHWM:")
}

fn kilobytes(text: &str, key: &str) -> Option<u64> {
    let line = text.lines().find(|line| line.starts_with(key))?;
    line.split_whitespace().nth(1)?.parse::<u64>().ok().map(|kb| kb * 1024)
}

/// Reads a size such as `2GiB`, `600 MiB`, `1500MB` or a plain number of bytes.
///
/// # Errors
/// A sentence when the text is no size above zero.
pub fn parse_size(text: &str) -> Result<u64> {
    let split = text.find(|c: char| !c.is_ascii_digit() && c != '.').unwrap_or(text.len());
    let (digits, suffix) = (text[..split].trim(), text[split..].trim().to_ascii_lowercase());
    let factor: f64 = match suffix.as_str() {
        "" | "b" => 1.0,
        "k" | "kib" => 1024.0,
        "m" | "mib" => 1024.0 * 1024.0,
        "g" | "gib" => 1024.0 * 1024.0 * 1024.0,
        "t" | "tib" => 1024.0 * 1024.0 * 1024.0 * 1024.0,
        "kb" => 1e3,
        "mb" => 1e6,
        "gb" => 1e9,
        "tb" => 1e12,
        _ => f64::NAN,
    };
    let bytes = digits.parse::<f64>().unwrap_or(f64::NAN) * factor;
    if (1.0..1e18).contains(&bytes) {
        return Ok(bytes as u64);
    }
    Err(Error::plan(format!("`{text}` is no size; write it like 2GiB, 600MiB or 1500MB")))
}

/// A size for people: three digits and a binary unit.
pub fn show_size(bytes: u64) -> String {
    let mut value = bytes as f64;
    let mut unit = "B";
    for larger in ["KiB", "MiB", "GiB", "TiB", "PiB"] {
        if value < 1000.0 {
            break;
        }
        value /= 1024.0;
        unit = larger;
    }
    match unit {
        "B" => format!("{bytes} B"),
        _ if value < 10.0 => format!("{value:.2} {unit}"),
        _ if value < 100.0 => format!("{value:.1} {unit}"),
        _ => format!("{value:.0} {unit}"),
    }
}

/// A count for people: thousands set apart.
pub fn show_count(count: u64) -> String {
    let digits = count.to_string();
    let mut out = String::new();
    for (i, digit) in digits.chars().enumerate() {
        if i > 0 && (digits.len() - i).is_multiple_of(3) {
            out.push(',');
        }
        out.push(digit);
    }
    out
}

/// A duration for people.
pub fn show_time(seconds: f64) -> String {
    let whole = seconds.round() as u64;
    match whole {
        _ if seconds < 10.0 => format!("{seconds:.2} s"),
        0..120 => format!("{seconds:.1} s"),
        120..7200 => format!("{} min {:02} s", whole / 60, whole % 60),
        _ => format!("{} h {:02} min", whole / 3600, whole % 3600 / 60),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn sizes_are_read_and_shown() {
        assert_eq!(parse_size("2GiB").unwrap(), 2 << 30);
        assert_eq!(parse_size("600 MiB").unwrap(), 600 << 20);
        assert_eq!(parse_size("1.5mb").unwrap(), 1_500_000);
        for wrong in ["", "GiB", "0", "-1", "nan", "inf", "12 parsecs"] {
            assert!(parse_size(wrong).is_err(), "{wrong}");
        }
        assert_eq!(show_size(999), "999 B");
        assert_eq!(show_size(1 << 30), "1.00 GiB");
        assert_eq!(show_count(1_234_567), "1,234,567");
        assert_eq!(show_count(123), "123");
        assert_eq!(show_time(75.0), "75.0 s");
        assert_eq!(show_time(7260.0), "2 h 01 min");
    }
}
