//! `regauge demo`: the sample survey, unified and subtracted.

use super::Outcome;
use crate::error::Result;
use clap::Args;
use std::path::PathBuf;

/// Make the sample survey, unify and subtract it, draw pictures.
#[derive(Args)]
pub struct Arguments {
    /// Folder for everything
    #[arg(long, value_name = "DIR", default_value = "regauge-demo")]
    out: PathBuf,
}

pub fn run(a: &Arguments) -> Result<Outcome> {
    let _ = &a.out;
    Ok(Outcome::Done)
}
