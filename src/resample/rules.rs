//! The choices of one resampling, apart from where things are.

use crate::error::{Error, Result};
use crate::kernel::{Extension, Kernel};
use crate::raster::SampleType;
use serde::{Deserialize, Serialize};

/// What an output pixel becomes whose centre lies outside the input's edges (a centre on the edge is inside).
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Outside {
    /// Missing.
    #[default]
    Missing,
    /// What the extension says.
    Extend,
}

/// What is done against aliasing where pixels grow.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Reduce {
    /// `Widen`.
    #[default]
    Auto,
    /// Nothing.
    None,
    /// A wider kernel: the cardinal kernel is stretched by the local Jacobian.
    Widen,
    /// The least-squares spline at the output's pitch.
    LeastSquares,
}

/// The choices of one resampling. [`Rules::default`] gives the documented defaults.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Rules {
    /// Default `bspline:3`.
    pub kernel: Kernel,
    /// Default half-symmetric.
    pub extension: Extension,
    /// Default missing.
    pub outside: Outside,
    /// Default auto.
    pub reduce: Reduce,
    /// A code that means "no data", beside NaN and what the file declares.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub missing: Option<f64>,
    /// The share of its weights that a pixel must find filled; default 0.5.
    pub min_coverage: f64,
    /// Type of the output's samples; `None` = the input's.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub sample_type: Option<SampleType>,
    /// Bound on |closure|; exceeded, the check has failed.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub tolerance: Option<f64>,
    /// Bytes that the run may use at its peak; default 512 MiB.
    pub memory: u64,
    /// Threads; `None` = all cores.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub threads: Option<usize>,
}

impl Default for Rules {
    fn default() -> Self {
        Rules {
            kernel: Kernel::default(),
            extension: Extension::default(),
            outside: Outside::default(),
            reduce: Reduce::default(),
            missing: None,
            min_coverage: 0.5,
            sample_type: None,
            tolerance: None,
            memory: 512 << 20,
            threads: None,
        }
    }
}

impl Rules {
    /// Refuses numbers out of range.
    ///
    /// # Errors
    /// Names the option.
    pub fn check(&self) -> Result<()> {
        if !(0.0..=1.0).contains(&self.min_coverage) {
            return Err(Error::usage(
                format!("--min-coverage {} is not between 0 and 1", self.min_coverage),
                "",
            ));
        }
        if self.tolerance.is_some_and(|t| !(t >= 0.0)) {
            return Err(Error::usage("--tolerance must not be negative", "such as 1e-6"));
        }
        if self.memory < 16 << 20 {
            return Err(Error::usage(
                format!("--memory of {} bytes is too little to work in", self.memory),
                "give at least 16MiB",
            ));
        }
        if self.threads == Some(0) {
            return Err(Error::usage("--threads 0 leaves nobody to do the work", "give at least 1"));
        }
        Ok(())
    }
}
