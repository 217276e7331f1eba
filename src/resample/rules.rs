//! The choices of one resampling, apart from where things are.

use super::values::{Limit, Values};
use crate::error::{Error, Result};
use crate::kernel::{Extension, Kernel, Shape};
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
    /// What a number is; default density.
    #[serde(default)]
    pub values: Values,
    /// What holds overshoot; default nothing.
    #[serde(default)]
    pub limit: Limit,
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
            values: Values::default(),
            limit: Limit::default(),
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
    /// What stands beyond the edges: totals have nothing there and are kept whole by mirrored samples, whatever is asked.
    pub fn edges(&self) -> Extension {
        match self.values {
            Values::Total => Extension::HalfSymmetric,
            _ => self.extension,
        }
    }

    /// Refuses numbers out of range and choices that contradict each other.
    ///
    /// # Errors
    /// Names the option.
    pub fn check(&self) -> Result<()> {
        let name = self.kernel.name();
        if self.values == Values::Label && !matches!(name, "nearest" | "bspline:0" | "area") {
            return Err(Error::usage(
                format!("labels are never mixed: {name} would invent classes between them"),
                "use --kernel nearest, or --kernel area for the majority",
            ));
        }
        if self.values == Values::Total && self.reduce == Reduce::LeastSquares {
            return Err(Error::usage(
                "totals are not reduced by least squares: their sum would not be kept",
                "leave --reduce out",
            ));
        }
        if self.limit == Limit::Neighbours {
            if matches!(self.values, Values::Label | Values::Cyclic(_)) {
                return Err(Error::usage(
                    format!("--limit neighbours has no meaning for --values {}", self.values),
                    "leave --limit out",
                ));
            }
            if matches!(self.kernel.shape(), Shape::Sinc | Shape::Polynomial) {
                return Err(Error::usage(
                    format!("--limit neighbours needs a kernel of finite support, not {name}"),
                    "use --kernel bspline:5 or lanczos:4",
                ));
            }
        }
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
