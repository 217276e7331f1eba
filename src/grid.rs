//! The grid: rows, columns, and where the pixels lie in the world.
//!
//! # Positions
//! Positions are (row, column). The centre of the first pixel is (0, 0); its edges are at -0.5 and +0.5. World
//! coordinates are (x, y); the world affine takes (column, row, 1), whole numbers at pixel centres, to (x, y). That holds
//! for area and for point grids alike: [`Sampling`] says what a sample stands for, never where its centre is.

use crate::error::{Error, Result};
use crate::map::Map;
use serde::{Deserialize, Serialize};

/// An affine from (column, row, 1) to world (x, y): `[[a, b, c], [d, e, f]]`.
pub type World = [[f64; 3]; 2];

/// What a sample stands for.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Sampling {
    /// The mean (or sum) over the pixel's area: images, most measurements.
    #[default]
    Area,
    /// The value at the pixel's centre: elevation postings.
    Point,
}

/// Rows, columns and position in the world.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Grid {
    /// Number of rows.
    pub rows: usize,
    /// Number of columns.
    pub columns: usize,
    /// Affine from (column, row, 1), pixel centres whole numbers, to world (x, y); `None` for a raster without a place.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub world: Option<World>,
    /// Whether a sample stands for an area or a point.
    #[serde(default)]
    pub sample: Sampling,
    /// Unit of the world coordinates, such as `µm` or `metre`, where there is no CRS.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub unit: Option<String>,
    /// Coordinate reference system, such as `EPSG:32633`.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub crs: Option<String>,
}
