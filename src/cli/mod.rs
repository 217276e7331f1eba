//! The command line: one file a command; parses, calls the library, prints. No numerics.

mod audit;
mod common;
mod demo;
mod describe;
mod kernels;
mod r#move;
mod progress;
mod replay;
mod rescale;
mod subtract;
mod unify;

use crate::error::{Error, Result};
use clap::{Parser, Subcommand};
use std::io::Write;
use std::process::ExitCode;

/// Puts rasters of measurements on a common grid and says what that cost.
#[derive(Parser)]
#[command(
    name = "regauge",
    version,
    max_term_width = 100,
    disable_help_subcommand = true,
    after_help = "Every output gets a ledger beside it: what went in, what came out, what it cost.\n\
                  `regauge COMMAND --help` tells the options of a command, with examples.\n\
                  Not a certified instrument; follow local codes and licensed practice."
)]
struct Cli {
    #[command(subcommand)]
    command: Command,
}

#[derive(Subcommand)]
enum Command {
    /// New pixel size: by a factor, a pixel size or a number of pixels
    Rescale(rescale::Arguments),
    /// Shift, turn, scale or shear the content, or apply a map file
    Move(r#move::Arguments),
    /// Several rasters onto one grid: the main job
    Unify(unify::Arguments),
    /// The difference of two rasters on one grid, with its uncertainty
    Subtract(subtract::Arguments),
    /// Check a resampling done by anyone: signal, displacement, blur, gaps
    Audit(audit::Arguments),
    /// What is in a file: grid, samples, missing, statistics
    Describe(describe::Arguments),
    /// The kernels, with support, order, regularity and poles
    Kernels(kernels::Arguments),
    /// Run a ledger's job again and compare the output's digest
    Replay(replay::Arguments),
    /// Make the sample survey, unify and subtract it, draw pictures
    Demo(demo::Arguments),
}

/// How a command that did its work ended.
#[derive(Clone, Copy, PartialEq, Eq)]
enum Outcome {
    Done,
    /// Done, but a check that was asked for did not hold.
    CheckFailed,
}

/// Runs the command line; the exit code is 0 done, 1 failed, 2 wrong usage, 3 done but a check did not hold.
pub fn main() -> ExitCode {
    // clap prints its own errors and ends with 2.
    let cli = Cli::parse();
    let outcome = match cli.command {
        Command::Rescale(a) => rescale::run(&a),
        Command::Move(a) => r#move::run(&a),
        Command::Unify(a) => unify::run(&a),
        Command::Subtract(a) => subtract::run(&a),
        Command::Audit(a) => audit::run(&a),
        Command::Describe(a) => describe::run(&a),
        Command::Kernels(a) => kernels::run(&a),
        Command::Replay(a) => replay::run(&a),
        Command::Demo(a) => demo::run(&a),
    };
    match outcome {
        Ok(Outcome::Done) => ExitCode::SUCCESS,
        Ok(Outcome::CheckFailed) => ExitCode::from(3),
        Err(error) => {
            let mut stderr = std::io::stderr().lock();
            // There is nowhere left to tell of a failure to print.
            let _ = writeln!(stderr, "error: {error}");
            let mend = error.mend();
            if !mend.is_empty() {
                let _ = writeln!(stderr, "help: {mend}");
            }
            ExitCode::from(error.exit_code())
        }
    }
}

/// Prints to stdout; a reader that went away is no failure.
fn print(text: &str) -> Result<()> {
    let mut out = std::io::stdout().lock();
    match out.write_all(text.as_bytes()).and_then(|()| out.flush()) {
        Err(e) if e.kind() != std::io::ErrorKind::BrokenPipe => {
            Err(Error::io("stdout".as_ref(), "printing", e))
        }
        _ => Ok(()),
    }
}

/// Prints a value as JSON.
fn print_json(value: &impl serde::Serialize) -> Result<()> {
    let text = serde_json::to_string_pretty(value)
        .map_err(|e| Error::io("stdout".as_ref(), "printing", e.into()))?;
    print(&(text + "\n"))
}
