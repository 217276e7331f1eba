//! A job: what a command becomes. It is run, written into the ledger, and replayed from there.

use crate::error::{Error, Result};
use crate::grid::Grid;
use crate::map::Map;
use crate::resample::Rules;
use serde::{Deserialize, Serialize};
use std::path::PathBuf;

/// One input resampled to one output: everything that is needed to do it again.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Job {
    /// The raster to resample.
    pub input: PathBuf,
    /// Where the result goes; the format follows the ending.
    pub output: PathBuf,
    /// The grid of the result.
    pub target: Grid,
    /// From a position in the output to the position in the input that it shows.
    pub back: Map,
    /// Kernel, extension and the other choices.
    pub rules: Rules,
}

/// What a run may do beside its result.
#[derive(Clone, Debug, Default)]
pub struct Conduct {
    /// The command as it was typed, for the ledger.
    pub command: Vec<String>,
    /// Where the ledger goes; `None`: OUT + `.ledger.json`.
    pub ledger: Option<PathBuf>,
    /// Whether an output that exists is replaced.
    pub overwrite: bool,
}

/// Told how the work goes on; may stop it.
pub trait Progress: Sync {
    /// `done` of `total` output pixels are finished. Called from one thread, in order.
    fn advance(&self, done: u64, total: u64);
    /// Asked now and then; `true` stops the run with [`Error::Stopped`].
    fn stopped(&self) -> bool {
        false
    }
}

/// Nobody watches.
impl Progress for () {
    fn advance(&self, _: u64, _: u64) {}
}

impl Job {
    /// Runs the job: writes the output and its ledger.
    ///
    /// # Errors
    /// Whatever stands in the way; then nothing is left under the output's name.
    pub fn run(&self, conduct: &Conduct, progress: &dyn Progress) -> Result<crate::report::Ledger> {
        let _ = (conduct, progress);
        Err(Error::unfit("not there", ""))
    }

    /// Runs the job without writing anything: the ledger (with the output's digest) is all that comes out.
    ///
    /// # Errors
    /// As [`Job::run`].
    pub fn rehearse(&self, progress: &dyn Progress) -> Result<crate::report::Ledger> {
        let _ = progress;
        Err(Error::unfit("not there", ""))
    }
}
