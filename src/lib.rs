//! Regauge puts rasters of measurements on a common grid and says what that cost.

#[cfg(feature = "cli")]
pub mod cli;
pub mod error;
pub mod grid;
pub mod job;
pub mod kernel;
pub mod map;
pub mod measure;
pub mod pattern;
pub mod raster;
mod real;
pub mod report;
pub mod resample;
pub mod simd;
pub mod slow;

pub use error::{Error, Result};
pub use real::Real;
