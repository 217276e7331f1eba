//! Regauge puts rasters of measurements on a common grid and says what that cost.

pub mod error;
pub mod grid;
pub mod map;
pub mod raster;

pub use error::{Error, Result};
