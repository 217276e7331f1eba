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

/// Sizes above this are taken for damage: 2^40 rows or columns.
const MAX_SIDE: usize = 1 << 40;

impl Grid {
    /// A grid without a place in the world.
    pub fn new(rows: usize, columns: usize) -> Self {
        Grid { rows, columns, world: None, sample: Sampling::Area, unit: None, crs: None }
    }

    /// Number of pixels.
    pub fn pixels(&self) -> usize {
        self.rows.saturating_mul(self.columns)
    }

    /// Refuses empty and absurd grids and world affines without inverse.
    ///
    /// # Errors
    /// Says what is wrong with the grid.
    pub fn check(&self) -> Result<()> {
        if self.rows == 0 || self.columns == 0 || self.rows > MAX_SIDE || self.columns > MAX_SIDE {
            return Err(Error::unfit(
                format!("a grid of {} x {} pixels is not possible", self.rows, self.columns),
                "rows and columns must be at least 1",
            ));
        }
        if self.world.is_some() {
            self.to_world().invert().map_err(|_| {
                Error::unfit(
                    "the grid's world affine has no inverse or holds numbers that are not finite",
                    "check the pixel size",
                )
            })?;
        }
        Ok(())
    }

    /// The world affine, or pixels themselves (x = column, y = row) where the grid has no place.
    pub fn world_or_pixels(&self) -> World {
        self.world.unwrap_or([[1.0, 0.0, 0.0], [0.0, 1.0, 0.0]])
    }

    /// From (row, column) to world, given as a [`Map`] that yields (y, x) in the places of (row, column).
    fn to_world(&self) -> Map {
        let w = self.world_or_pixels();
        Map::affine([[w[1][1], w[1][0], w[1][2]], [w[0][1], w[0][0], w[0][2]]])
    }

    /// World (x, y) of a position.
    pub fn world_at(&self, row: f64, column: f64) -> (f64, f64) {
        let (y, x) = self.to_world().apply(row, column);
        (x, y)
    }

    /// Height and width of a pixel in world units: the lengths of the steps to the next row and to the next column.
    pub fn pixel_size(&self) -> (f64, f64) {
        let w = self.world_or_pixels();
        (w[0][1].hypot(w[1][1]), w[0][0].hypot(w[1][0]))
    }

    /// Area of a pixel in squared world units.
    pub fn pixel_area(&self) -> f64 {
        let w = self.world_or_pixels();
        (w[0][0] * w[1][1] - w[0][1] * w[1][0]).abs()
    }

    /// The map from positions on this grid to positions of the same places on `other`, by way of the world.
    ///
    /// # Errors
    /// When `other` has a world affine without inverse.
    pub fn to(&self, other: &Grid) -> Result<Map> {
        let (from, to) = (self.to_world(), other.to_world());
        // The origins are subtracted first: world coordinates may be millions, their difference is small and exact.
        let moved = |m: &Map, by: (f64, f64)| {
            let mut m = *m;
            m.matrix[0][2] -= by.0;
            m.matrix[1][2] -= by.1;
            m
        };
        let origin = (to.matrix[0][2], to.matrix[1][2]);
        let back = moved(&to, origin).invert()?;
        Ok(moved(&from, origin).then(&back).snapped(self.rows, self.columns))
    }

    /// The grid whose pixel (0, 0) lies at `origin` of this one and whose steps are `step` (height, width) of this
    /// grid's pixels, in the same directions. Sampling, unit and CRS are kept.
    pub fn stepped(&self, rows: usize, columns: usize, step: (f64, f64), origin: (f64, f64)) -> Grid {
        let world = self.world.map(|w| {
            let (x, y) = self.world_at(origin.0, origin.1);
            [[w[0][0] * step.1, w[0][1] * step.0, x], [w[1][0] * step.1, w[1][1] * step.0, y]]
        });
        Grid { rows, columns, world, ..self.clone() }
    }

    /// Whether two grids may be brought together: the same CRS, or at most one of them names one, or neither.
    ///
    /// # Errors
    /// Names both systems.
    pub fn check_same_crs(&self, other: &Grid, names: (&str, &str)) -> Result<()> {
        match (&self.crs, &other.crs) {
            (Some(a), Some(b)) if a != b => Err(Error::unfit(
                format!("{} is in {a}, {} is in {b}", names.0, names.1),
                "bring them into one coordinate reference system first; changes of CRS are not built",
            )),
            _ => Ok(()),
        }
    }

    /// Reads a grid from its JSON file.
    ///
    /// # Errors
    /// When the file is missing, is not such JSON, or describes no possible grid.
    pub fn read(path: &std::path::Path) -> Result<Grid> {
        let text = std::fs::read_to_string(path).map_err(|e| Error::io(path, "reading the grid", e))?;
        let grid: Grid = serde_json::from_str(&text).map_err(|e| {
            Error::malformed(path, format!("line {}, column {}", e.line(), e.column()), e.to_string())
        })?;
        grid.check().map_err(|e| Error::malformed(path, "grid", e.to_string()))?;
        Ok(grid)
    }
}

/// `extent / pixel` rounded half up, after a slack of 1e-9 for what division leaves behind; at least 1.
pub fn round_size(extent: f64) -> usize {
    ((extent + 0.5 + 1e-9).floor() as usize).max(1)
}

/// Which part of several grids the common grid covers.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Span {
    /// All of every input.
    Union,
    /// What all inputs have in common.
    Overlap,
}

/// The common grid of several: axes of the first, lattice through its upper-left outer corner, pixels of `pixel`
/// (height, width) in world units (the first grid's own if `None`); sizes rounded up for the union, down for the overlap.
///
/// # Errors
/// When there is no grid, CRS differ, or nothing is common to all.
pub fn span(grids: &[Grid], span: Span, pixel: Option<(f64, f64)>) -> Result<Grid> {
    let first = grids.first().ok_or_else(|| Error::usage("no grid to span", "name at least one input"))?;
    let own = first.pixel_size();
    let step = match pixel {
        Some(p) => (p.0 / own.0, p.1 / own.1),
        None => (1.0, 1.0),
    };
    if !(step.0.is_finite() && step.1.is_finite() && step.0 > 0.0 && step.1 > 0.0) {
        return Err(Error::usage("the pixel size must be a positive number", "such as --pixel 2.5"));
    }
    let mut low = (f64::INFINITY, f64::INFINITY);
    let mut high = (f64::NEG_INFINITY, f64::NEG_INFINITY);
    if span == Span::Overlap {
        (low, high) = (high, low);
    }
    for grid in grids {
        let b = grid.to(first)?.bounds((-0.5, grid.rows as f64 - 0.5), (-0.5, grid.columns as f64 - 0.5));
        let pick =
            |a: f64, b: f64, lower: bool| if (span == Span::Union) == lower { a.min(b) } else { a.max(b) };
        low = (pick(low.0, b.rows.0, true), pick(low.1, b.columns.0, true));
        high = (pick(high.0, b.rows.1, false), pick(high.1, b.columns.1, false));
    }
    // Whole pixels counted from the first grid's outer corner at (-0.5, -0.5).
    const SLACK: f64 = 1e-6;
    let count = |v: f64, step: f64, up: bool| {
        let p = (v + 0.5) / step;
        if up { (p - SLACK).ceil() } else { (p + SLACK).floor() }
    };
    let grow = span == Span::Union;
    let (r0, c0) = (count(low.0, step.0, !grow), count(low.1, step.1, !grow));
    let (r1, c1) = (count(high.0, step.0, grow), count(high.1, step.1, grow));
    if r1 - r0 < 1.0 || c1 - c0 < 1.0 {
        return Err(Error::unfit(
            "the inputs have no region in common that holds a whole pixel",
            "use --span union, or check the georeference of the inputs",
        ));
    }
    let origin = ((r0 + 0.5) * step.0 - 0.5, (c0 + 0.5) * step.1 - 0.5);
    let grid = first.stepped((r1 - r0) as usize, (c1 - c0) as usize, step, origin);
    grid.check()?;
    Ok(grid)
}
