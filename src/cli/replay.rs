//! `regauge replay`: a ledger's job again, compared by digest.

use super::common::say;
use super::progress::Bar;
use super::{Outcome, print_json};
use crate::error::{Error, Result};
use crate::job::Job;
use crate::report::Ledger;
use clap::Args;
use std::path::PathBuf;

/// Run a ledger's job again and compare the output's digest. Nothing is written.
#[derive(Args)]
#[command(after_help = "Examples:\n  regauge replay common/year2.tif.ledger.json\n\n\
    Exit code 0: the same samples came out; 3: others did.")]
pub struct Arguments {
    /// The ledger
    #[arg(value_name = "LEDGER")]
    ledger: PathBuf,
    /// Threads [default: all cores]
    #[arg(long, value_name = "N")]
    threads: Option<usize>,
    /// Say nothing but errors
    #[arg(long, short)]
    quiet: bool,
    /// Print the new ledger as JSON on stdout
    #[arg(long)]
    json: bool,
}

pub fn run(a: &Arguments) -> Result<Outcome> {
    let old = Ledger::read(&a.ledger)?;
    let mut job: Job = serde_json::from_value(old.job.clone())
        .map_err(|e| Error::malformed(&a.ledger, "job", e.to_string()))?;
    if !job.input.exists() && job.input.is_relative() {
        // Paths are as they were typed: from the working folder, or beside the ledger.
        let folder = a.ledger.parent().map(PathBuf::from).unwrap_or_default();
        let beside = [folder.join(&job.input), folder.join(job.input.file_name().unwrap_or_default())];
        if let Some(found) = beside.into_iter().find(|p| p.exists()) {
            job.input = found;
        }
    }
    if a.threads.is_some() {
        job.rules.threads = a.threads;
    }
    let bar = Bar::new(&a.ledger.display().to_string(), a.quiet);
    let result = job.rehearse(&bar);
    bar.clear();
    let new = result?;
    if a.json {
        print_json(&new)?;
    }
    let same = new.output.sha256 == old.output.sha256;
    let changed = old.inputs.first().is_some_and(|i| i.sha256 != new.inputs[0].sha256);
    if !a.quiet {
        let mut lines = Vec::new();
        if changed {
            lines.push(format!(
                "the input is not what it was: {} holds other samples or another grid",
                job.input.display()
            ));
        }
        if same {
            lines.push(format!("the same samples came out: {}", new.output.sha256));
        } else {
            lines.push(format!(
                "OTHER samples came out:\n  then {}\n  now  {}",
                old.output.sha256, new.output.sha256
            ));
        }
        if old.regauge != new.regauge {
            lines.push(format!("the ledger was written by version {}, this is {}", old.regauge, new.regauge));
        }
        say(&lines);
    }
    Ok(if same { Outcome::Done } else { Outcome::CheckFailed })
}
