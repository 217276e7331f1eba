//! Grids, and how one comes from another.

use super::raised;
use crate::error::Error;
use crate::grid::{Grid, Span};
use crate::map::{Anchor, Frame, Map, MapFile, Motion, Rescale};
use pyo3::prelude::*;
use std::path::PathBuf;

/// A 3 x 3 matrix on (row, column, 1).
pub type Matrix = [[f64; 3]; 3];

/// Rows, columns and place in the world of a raster.
///
/// ``world`` is the affine ``((a, b, c), (d, e, f))`` from (column, row, 1), whole numbers at pixel centres, to (x, y).
#[pyclass(frozen, name = "Grid", module = "regauge", eq)]
#[derive(Clone, PartialEq)]
pub struct PyGrid(pub Grid);

#[pymethods]
impl PyGrid {
    #[new]
    #[pyo3(signature = (rows, columns, *, world=None, sample="area", unit=None, crs=None))]
    fn new(
        rows: usize,
        columns: usize,
        world: Option<[[f64; 3]; 2]>,
        sample: &str,
        unit: Option<String>,
        crs: Option<String>,
    ) -> PyResult<Self> {
        let told = serde_json::json!({ "rows": rows, "columns": columns, "sample": sample });
        let grid: Grid = serde_json::from_value(told).map_err(|_| {
            raised(&Error::usage(format!("sample=\"{sample}\""), "use \"area\" or \"point\""))
        })?;
        let grid = Grid { world, unit, crs, ..grid };
        grid.check().map_err(|e| raised(&e))?;
        Ok(PyGrid(grid))
    }

    /// Reads a grid file (JSON).
    #[staticmethod]
    fn read(path: PathBuf) -> PyResult<Self> {
        Grid::read(&path).map(PyGrid).map_err(|e| raised(&e))
    }

    /// From the text of a grid file.
    #[staticmethod]
    fn from_json(text: &str) -> PyResult<Self> {
        let grid: Grid = serde_json::from_str(text)
            .map_err(|e| raised(&Error::usage(format!("no grid: {e}"), "give rows and columns")))?;
        grid.check().map_err(|e| raised(&e))?;
        Ok(PyGrid(grid))
    }

    /// The text of a grid file.
    fn to_json(&self) -> String {
        serde_json::to_string(&self.0).unwrap_or_default()
    }

    /// Number of rows.
    #[getter]
    fn rows(&self) -> usize {
        self.0.rows
    }

    /// Number of columns.
    #[getter]
    fn columns(&self) -> usize {
        self.0.columns
    }

    /// (rows, columns).
    #[getter]
    fn shape(&self) -> (usize, usize) {
        (self.0.rows, self.0.columns)
    }

    /// Affine from (column, row, 1) to (x, y), or None.
    #[getter]
    fn world(&self) -> Option<[[f64; 3]; 2]> {
        self.0.world
    }

    /// "area" or "point".
    #[getter]
    fn sample(&self) -> &'static str {
        match self.0.sample {
            crate::grid::Sampling::Area => "area",
            crate::grid::Sampling::Point => "point",
        }
    }

    /// Unit of the world, or None.
    #[getter]
    fn unit(&self) -> Option<String> {
        self.0.unit.clone()
    }

    /// Coordinate reference system, or None.
    #[getter]
    fn crs(&self) -> Option<String> {
        self.0.crs.clone()
    }

    /// Height and width of a pixel in world units.
    #[getter]
    fn pixel_size(&self) -> (f64, f64) {
        self.0.pixel_size()
    }

    /// World (x, y) of a position (row, column).
    fn world_at(&self, row: f64, column: f64) -> (f64, f64) {
        self.0.world_at(row, column)
    }

    /// The 3 x 3 map from positions on this grid to positions of the same places on ``other``.
    fn to(&self, other: &PyGrid) -> PyResult<Matrix> {
        self.0.check_same_crs(&other.0, ("this grid", "the other")).map_err(|e| raised(&e))?;
        self.0.to(&other.0).map(|m| m.matrix).map_err(|e| raised(&e))
    }

    fn __repr__(&self) -> String {
        let place = match self.0.world {
            Some(w) => format!(", world={w:?}"),
            None => String::new(),
        };
        let text =
            |name: &str, v: &Option<String>| v.as_ref().map_or(String::new(), |v| format!(", {name}={v:?}"));
        let sample = if self.sample() == "point" { ", sample=\"point\"" } else { "" };
        format!(
            "Grid({}, {}{place}{sample}{}{})",
            self.0.rows,
            self.0.columns,
            text("unit", &self.0.unit),
            text("crs", &self.0.crs)
        )
    }

    fn __reduce__<'py>(&self, py: Python<'py>) -> PyResult<(Bound<'py, PyAny>, (String,))> {
        Ok((py.get_type::<PyGrid>().getattr("from_json")?, (self.to_json(),)))
    }
}

fn anchor_of(text: &str) -> crate::Result<Anchor> {
    match text {
        "edge" => Ok(Anchor::Edge),
        "centre" => Ok(Anchor::Centre),
        _ => Err(Error::usage(format!("anchor=\"{text}\""), "use \"edge\" or \"centre\"")),
    }
}

/// The grid of a rescaled raster and the way back from it, by one of factor, pixel, size.
#[pyfunction]
#[pyo3(signature = (grid, factor, pixel, size, anchor))]
pub fn rescaled(
    grid: &PyGrid,
    factor: Option<(f64, f64)>,
    pixel: Option<(f64, f64)>,
    size: Option<(usize, usize)>,
    anchor: &str,
) -> PyResult<(PyGrid, Matrix)> {
    let made = || {
        let how = match (factor, pixel, size) {
            (Some((r, c)), None, None) => Rescale::Factor(r, c),
            (None, Some((h, w)), None) => Rescale::Pixel(h, w),
            (None, None, Some((r, c))) => Rescale::Size(r, c),
            _ => return Err(Error::usage("one of factor, pixel and size is needed", "such as factor=0.5")),
        };
        crate::map::rescaled(&grid.0, how, anchor_of(anchor)?)
    };
    made().map(|(g, m)| (PyGrid(g), m.matrix)).map_err(|e| raised(&e))
}

/// The grid of a moved raster and the way back from it. ``map`` is a motion of the content that comes first.
#[pyfunction]
#[pyo3(signature = (grid, shift, turn, scale, shear, about, map, fit))]
#[allow(clippy::too_many_arguments)]
pub fn moved(
    grid: &PyGrid,
    shift: (f64, f64),
    turn: f64,
    scale: f64,
    shear: f64,
    about: Option<(f64, f64)>,
    map: Option<Matrix>,
    fit: bool,
) -> PyResult<(PyGrid, Matrix)> {
    let grid = &grid.0;
    let made = || {
        let defaults = Motion::about_centre(grid.rows, grid.columns);
        let about = about.unwrap_or(defaults.about);
        let options = Motion { shift, turn, scale, shear, about, pixel: grid.pixel_size() };
        let first = map.map_or(Map::IDENTITY, |matrix| Map { matrix });
        let frame = if fit { Frame::Fit } else { Frame::Keep };
        crate::map::moved(grid, &first.then(&options.map()?), frame)
    };
    made().map(|(g, m)| (PyGrid(g), m.matrix)).map_err(|e| raised(&e))
}

/// The common grid of several.
#[pyfunction]
#[pyo3(signature = (grids, span, pixel=None))]
pub fn span(grids: Vec<PyRef<'_, PyGrid>>, span: &str, pixel: Option<(f64, f64)>) -> PyResult<PyGrid> {
    let how = match span {
        "union" => Span::Union,
        "overlap" => Span::Overlap,
        _ => return Err(raised(&Error::usage(format!("span=\"{span}\""), "use \"union\" or \"overlap\""))),
    };
    let grids: Vec<Grid> = grids.iter().map(|g| g.0.clone()).collect();
    crate::grid::span(&grids, how, pixel).map(PyGrid).map_err(|e| raised(&e))
}

/// From positions on ``target`` to positions on ``grid``: by their worlds, or by a map file.
#[pyfunction]
#[pyo3(signature = (grid, target, file=None, name="an input"))]
pub fn way_back(grid: &PyGrid, target: &PyGrid, file: Option<PathBuf>, name: &str) -> PyResult<Matrix> {
    let made = || {
        let file = file.map(|f| MapFile::read(&f)).transpose()?;
        crate::job::way_back(name.as_ref(), &grid.0, file.as_ref(), &target.0, "the common grid")
    };
    made().map(|m: Map| m.matrix).map_err(|e| raised(&e))
}
