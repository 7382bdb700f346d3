//! Parse, dispatch, print what went wrong, exit code.

use clap::Parser;
use std::process::ExitCode;
use tenparsec::cli::{self, Cli};

fn main() -> ExitCode {
    tenparsec::columnar::bridge::keep_polars_on_the_calling_thread();
    let parsed = match Cli::try_parse() {
        Ok(parsed) => parsed,
        Err(error) => {
            let code = if error.use_stderr() { 2 } else { 0 };
            // a closed pipe is the reader's choice, not a failure
            let _ = error.print();
            return ExitCode::from(code);
        }
    };
    let voice = parsed.voice();
    match cli::run(parsed) {
        Ok(code) => ExitCode::from(code),
        Err(error) => {
            cli::report(&error, voice);
            ExitCode::from(error.exit_code())
        }
    }
}
