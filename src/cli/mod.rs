//! The command line: what can be asked for, and one file a command that does it.

mod build;
mod check;
mod draft;
mod mock;

use crate::engine::progress::{Voice, json_line};
use crate::error::{Error, Result};
use clap::{Args, Parser, Subcommand, ValueEnum};
use std::io::IsTerminal;
use std::path::PathBuf;

const EXAMPLES: &str = "\
Examples:
  tenparsec draft catalogue/ > plan.toml    propose a plan for a catalogue
  tenparsec check plan.toml                 what would be read, made and needed
  tenparsec build plan.toml                 make the release
  tenparsec mock --rows 1000000 sky/        an invented catalogue to try things on

Exit codes: 0 done; 1 failed; 2 the plan or the command line is wrong, nothing was written;
75 interrupted, the same command continues.";

/// Turns star catalogues in Parquet into calibrated luminosity releases.
#[derive(Debug, Parser)]
#[command(name = "tenparsec", version, after_help = EXAMPLES, disable_help_subcommand = true)]
pub struct Cli {
    #[command(subcommand)]
    command: Command,
    #[command(flatten)]
    common: Common,
}

/// Options of every command.
#[derive(Debug, Args)]
struct Common {
    /// Print errors only
    #[arg(long, global = true)]
    quiet: bool,
    /// Form of the messages on standard error
    #[arg(long, global = true, value_enum, default_value_t = Log::Text)]
    log: Log,
    /// Colours on the terminal
    #[arg(long, global = true, value_enum, default_value_t = Colour::Auto)]
    color: Colour,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
enum Log {
    /// For people
    Text,
    /// One JSON object a line
    Json,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
enum Colour {
    Auto,
    Always,
    Never,
}

#[derive(Debug, Subcommand)]
enum Command {
    /// Look at a catalogue and print a starter plan
    Draft(draft::Options),
    /// Read plan and footers only: bindings, units, rows, parts, size and memory expected
    Check(check::Options),
    /// Make the release; continues one that was interrupted
    Build(build::Options),
    /// Write an invented catalogue with known truth
    Mock(mock::Options),
}

/// Where a release goes and what may be used to make it.
#[derive(Debug, Args)]
struct Resources {
    /// Folder of the release [default: the plan's `release.output`]
    #[arg(long, value_name = "DIR")]
    output: Option<PathBuf>,
    /// Worker threads [default: the processors that this job may use]
    #[arg(long, value_name = "N", value_parser = clap::value_parser!(u16).range(1..=1024))]
    threads: Option<u16>,
    /// Memory that may be used, like 2GiB [default: half of what this job may use]
    #[arg(long, value_name = "SIZE", value_parser = size)]
    memory: Option<u64>,
}

fn size(text: &str) -> std::result::Result<u64, String> {
    crate::engine::machine::parse_size(text).map_err(|error| error.message)
}

impl Cli {
    /// How to speak on standard error.
    pub fn voice(&self) -> Voice {
        match (self.common.quiet, self.common.log) {
            (_, Log::Json) if !self.common.quiet => Voice::Json,
            (true, _) => Voice::Quiet,
            _ => Voice::Text,
        }
    }

    fn colour(&self) -> bool {
        match self.common.color {
            Colour::Always => true,
            Colour::Never => false,
            Colour::Auto => std::io::stderr().is_terminal() && std::env::var_os("NO_COLOR").is_none(),
        }
    }
}

/// Does what was asked; the exit code when that went well.
///
/// # Errors
/// Whatever went wrong, with its place and its exit code.
pub fn run(cli: Cli) -> Result<u8> {
    let (voice, colour) = (cli.voice(), cli.colour());
    match cli.command {
        Command::Draft(options) => draft::run(&options, voice),
        Command::Check(options) => check::run(&options),
        Command::Build(options) => build::run(&options, voice, colour),
        Command::Mock(options) => mock::run(&options, voice, colour),
    }
}

/// Prints an error and those that travel with it.
pub fn report(error: &Error, voice: Voice) {
    if voice == Voice::Json {
        for one in error.each() {
            json_line(
                "error",
                "error",
                &[("text", one.message.clone().into()), ("place", one.place.to_string().into())],
            );
        }
        return;
    }
    let count = error.each().count();
    if count > 1 {
        eprintln!("error: {count} faults");
        for one in error.each() {
            eprintln!("  {}", line(one));
        }
    } else {
        eprintln!("error: {}", line(error));
    }
}

fn line(error: &Error) -> String {
    match error.place.to_string() {
        place if place.is_empty() => error.message.clone(),
        place => format!("{place}: {}", error.message),
    }
}
