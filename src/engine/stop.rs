//! SIGINT and SIGTERM ask a build to stop: no new pieces are taken, unfinished parts are dropped, finished ones stay.
//!
//! The second signal ends the process at once, with the same exit code: a build is continued from any state.

use crate::error::{Error, Result};
use signal_hook::consts::{SIGINT, SIGTERM};
use signal_hook::flag;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};

/// Whether somebody asked to stop.
#[derive(Debug, Clone, Default)]
pub struct Stop(Arc<AtomicBool>);

impl Stop {
    /// Listens to the signals from now on.
    ///
    /// # Errors
    /// A system that refuses handlers.
    pub fn on_signals() -> Result<Self> {
        let stop = Self::default();
        let code = i32::from(Error::interrupted("").exit_code());
        for signal in [SIGINT, SIGTERM] {
            flag::register_conditional_shutdown(signal, code, stop.0.clone())
                .and_then(|_| flag::register(signal, stop.0.clone()))
                .map_err(|e| Error::failed(format!("Signals cannot be listened to: {e}.")))?;
        }
        Ok(stop)
    }

    /// True once a signal came.
    pub fn asked(&self) -> bool {
        self.0.load(Ordering::Relaxed)
    }
}
