//! Panics of a decoder on damaged bytes become errors.
//!
//! The parquet crate (60.1) panics on some mutated footers and pages: 108 and 25 of 20,000 in our measurement. A panic
//! inside a rayon task would end the process, and its text would reach the user's terminal, so code that touches bytes
//! of unknown origin runs inside [`guard`], which is silent.

use std::cell::Cell;
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::sync::Once;

use parquet::errors::ParquetError;

use crate::error::{Error, Result};

thread_local! {
    static GUARDED: Cell<u32> = const { Cell::new(0) };
}

/// Silences the panic message on guarded threads; every other panic keeps the hook that was there before.
fn install_quiet_hook() {
    static ONCE: Once = Once::new();
    ONCE.call_once(|| {
        let previous = std::panic::take_hook();
        std::panic::set_hook(Box::new(move |info| {
            if GUARDED.with(Cell::get) == 0 {
                previous(info);
            }
        }));
    });
}

/// Runs `work`; a panic becomes an error whose sentence says that the data are damaged.
///
/// Unwind safety is asserted: whatever `work` was changing must be dropped by the caller when this returns an error.
pub fn guard<T>(work: impl FnOnce() -> Result<T>) -> Result<T> {
    install_quiet_hook();
    GUARDED.with(|depth| depth.set(depth.get() + 1));
    let outcome = catch_unwind(AssertUnwindSafe(work));
    GUARDED.with(|depth| depth.set(depth.get() - 1));
    match outcome {
        Ok(result) => result,
        Err(payload) => {
            let said = payload
                .downcast_ref::<String>()
                .map(String::as_str)
                .or_else(|| payload.downcast_ref::<&str>().copied())
                .unwrap_or("no reason given");
            let said: String = said.lines().next().unwrap_or_default().chars().take(160).collect();
            Err(Error::failed(format!("The data are damaged: the decoder gave up ({said}).")))
        }
    }
}

/// Says in a sentence what the parquet crate reports; an I/O error inside keeps its own words.
pub fn parquet_error(error: ParquetError) -> Error {
    if let ParquetError::External(inner) = &error
        && let Some(io) = inner.downcast_ref::<std::io::Error>()
    {
        return Error::failed(format!("Reading or writing failed: {}.", io_reason(io)));
    }
    let text = match error {
        ParquetError::General(text) | ParquetError::EOF(text) | ParquetError::ArrowError(text) => text,
        ParquetError::NYI(text) => format!("not supported: {text}"),
        other => other.to_string(),
    };
    Error::failed(format!("Parquet data cannot be decoded: {}.", text.trim_end_matches('.')))
}

/// A cause for the end of a sentence, without full stop: "permission denied; check ...".
pub fn io_reason(error: &std::io::Error) -> String {
    use std::io::ErrorKind as K;
    match error.kind() {
        K::StorageFull => "the disk is full; free some space and run the same command again".into(),
        K::QuotaExceeded => "your disk quota is used up; free some space and run the same command again".into(),
        K::ReadOnlyFilesystem => "the disk is mounted read-only; choose another place".into(),
        K::PermissionDenied => "permission denied; check the owner and mode of the file and its folder".into(),
        K::NotFound => "there is no such file or folder".into(),
        K::FileTooLarge => "the file would be larger than this disk or user limit allows".into(),
        _ => error.to_string(),
    }
}
