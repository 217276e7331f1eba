//! Work: one raster resampled onto one grid, whole or window by window.

use super::arrays::{Looked, Owned, array, type_named};
use super::grid::{Matrix, PyGrid};
use super::{free, raised};
use crate::error::Error;
use crate::grid::Grid;
use crate::job::{AuditRules, AuditValues, Job, Made, Wants, relate};
use crate::map::Map;
use crate::raster::{Header, Held, MissingCodes, Pieces, SampleType, Window};
use crate::resample::{Limit, Noise, Outside, Plan, Reduce, Rules};
use numpy::PyUntypedArray;
use pyo3::exceptions::PyTypeError;
use pyo3::prelude::*;
use pyo3::types::PyDict;
use serde::{Deserialize, Serialize};
use std::path::{Path, PathBuf};
use std::sync::Arc;

/// One raster resampled onto one grid: all that is needed but the samples. It pickles.
#[pyclass(frozen, module = "regauge._regauge")]
#[derive(Serialize, Deserialize)]
pub struct Work {
    job: Job,
    /// The input's grid, bands and type.
    grid: Grid,
    bands: usize,
    sample_type: SampleType,
}

/// An array of a piece with its first row and column.
type Piece<'py> = (usize, usize, Bound<'py, PyUntypedArray>);

/// Values, missing, sigma, coverage, ledger; all but the first may be None.
type Parts<'py> = (
    Bound<'py, PyAny>,
    Option<Bound<'py, PyAny>>,
    Option<Bound<'py, PyAny>>,
    Option<Bound<'py, PyAny>>,
    Option<String>,
);

/// Sorted half-open ranges of rows and of columns.
type Ranges = (Vec<(usize, usize)>, Vec<(usize, usize)>);

#[pymethods]
impl Work {
    /// ``options`` are those of the command line, with underscores; ``fit`` grows the frame for totals as ``frame="fit"`` asks.
    #[new]
    #[pyo3(signature = (grid, bands, sample_type, target, back, options, fit=false, name="array"))]
    #[allow(clippy::too_many_arguments)]
    fn new(
        grid: &PyGrid,
        bands: usize,
        sample_type: &str,
        target: &PyGrid,
        back: Matrix,
        options: &Bound<'_, PyDict>,
        fit: bool,
        name: &str,
    ) -> PyResult<Self> {
        let rules = rules(options)?;
        let made = || {
            let sample_type = type_named(sample_type)?;
            let (mut target, mut back) = (target.0.clone(), Map { matrix: back });
            if fit {
                (target, back) = Plan::fit((grid.0.rows, grid.0.columns), target, back, &rules)?;
            }
            let (input, output) = (PathBuf::from(name), PathBuf::from("array"));
            let job = Job { input, output, target, back, rules, sigma: None, mask: None };
            let work = Work { job, grid: grid.0.clone(), bands, sample_type };
            work.job.output_of(&work.header())?;
            Ok(work)
        };
        made().map_err(|e: Error| raised(&e))
    }

    /// From :meth:`to_json`.
    #[staticmethod]
    fn from_json(text: &str) -> PyResult<Self> {
        serde_json::from_str(text).map_err(|e| raised(&Error::usage(format!("no work: {e}"), "")))
    }

    /// All of it as text.
    fn to_json(&self) -> String {
        serde_json::to_string(self).unwrap_or_default()
    }

    fn __reduce__<'py>(&self, py: Python<'py>) -> PyResult<(Bound<'py, PyAny>, (String,))> {
        Ok((py.get_type::<Work>().getattr("from_json")?, (self.to_json(),)))
    }

    /// The grid of the output.
    #[getter]
    fn target(&self) -> PyGrid {
        PyGrid(self.job.target.clone())
    }

    /// From output to input positions.
    #[getter]
    fn back(&self) -> Matrix {
        self.job.back.matrix
    }

    /// Type of the output: ``u8`` to ``f64``.
    #[getter]
    fn output_type(&self) -> PyResult<&'static str> {
        self.job.output_of(&self.header()).map(|h| h.sample_type.name()).map_err(|e| raised(&e))
    }

    /// Whether a mask comes with the output: integers without a code.
    #[getter]
    fn masks(&self) -> PyResult<bool> {
        let out = self.job.output_of(&self.header()).map_err(|e| raised(&e))?;
        Ok(out.sample_type.integer_range().is_some() && out.missing.is_none())
    }

    /// Resamples a whole array of (bands, rows, columns).
    #[allow(clippy::too_many_arguments)]
    #[pyo3(signature = (samples, sigma=None, even=None, poisson=None, coverage=false, ledger=false))]
    fn run<'py>(
        &self,
        py: Python<'py>,
        samples: &Bound<'py, PyUntypedArray>,
        sigma: Option<Bound<'py, PyUntypedArray>>,
        even: Option<f64>,
        poisson: Option<(f64, f64)>,
        coverage: bool,
        ledger: bool,
    ) -> PyResult<Parts<'py>> {
        let looked = Looked::at(samples)?;
        let header = self.header();
        let whole = Window::whole(&self.grid);
        self.check_shape(&looked, &whole)?;
        let sigma = sigma.as_ref().map(Looked::at).transpose()?;
        let noisy = sigma.as_ref().map(|s| s.held().map(|h| (s.shape(), h))).transpose()?;
        let held = looked.held()?;
        let made = free(py, || {
            let planes = noisy.map(|(shape, held)| (shape.0, vec![(whole.clone(), held)]));
            let wants = Wants {
                noise: noise(&self.grid, planes, even, poisson)?,
                coverage,
                ledger,
                signed_angles: None,
            };
            self.job.run_on(Box::new(Pieces::new(header, vec![(whole.clone(), held)])?), &wants, &())
        })?;
        parts(py, made)
    }

    /// The rows and the columns of the input that a window of the output needs, every combination of them; None if it
    /// sees nothing.
    fn needs(&self, rows: (usize, usize), columns: (usize, usize)) -> PyResult<Option<Ranges>> {
        let window = Window { rows: rows.0..rows.1, columns: columns.0..columns.1 };
        let found = self.job.needs(&self.header(), &window).map_err(|e| raised(&e))?;
        let plain = |r: Vec<std::ops::Range<usize>>| r.into_iter().map(|r| (r.start, r.end)).collect();
        Ok(found.map(|(r, c)| (plain(r), plain(c))))
    }

    /// Resamples a window of the output from pieces of the input, each with its first row and column.
    #[pyo3(signature = (pieces, rows, columns, sigma=None, even=None, poisson=None, coverage=false, signed=false))]
    #[allow(clippy::too_many_arguments)]
    fn window<'py>(
        &self,
        py: Python<'py>,
        pieces: Vec<Piece<'py>>,
        rows: (usize, usize),
        columns: (usize, usize),
        sigma: Option<Vec<Piece<'py>>>,
        even: Option<f64>,
        poisson: Option<(f64, f64)>,
        coverage: bool,
        signed: bool,
    ) -> PyResult<Parts<'py>> {
        let window = Window { rows: rows.0..rows.1, columns: columns.0..columns.1 };
        let look = |pieces: &[Piece<'py>]| -> PyResult<Vec<(usize, usize, Looked<'py>)>> {
            pieces.iter().map(|(r, c, a)| Ok((*r, *c, Looked::at(a)?))).collect()
        };
        let (looked, noisy) = (look(&pieces)?, sigma.as_deref().map(look).transpose()?);
        let held = held(&looked)?;
        let noisy_held = noisy.as_deref().map(self::held).transpose()?;
        let planes = noisy.as_ref().and_then(|n| n.first()).map_or(1, |(_, _, a)| a.shape().0);
        let made = free(py, || {
            let noise = noise(&self.grid, noisy_held.map(|held| (planes, held)), even, poisson)?;
            let wants = Wants { noise, coverage, ledger: false, signed_angles: Some(signed) };
            self.job.window_on(Box::new(Pieces::new(self.header(), held)?), &wants, &window)
        })?;
        parts(py, made)
    }
}

impl Work {
    fn header(&self) -> Header {
        Header::new(self.grid.clone(), self.bands, self.sample_type)
    }

    fn check_shape(&self, looked: &Looked<'_>, window: &Window) -> PyResult<()> {
        let shape = (self.bands, window.rows.len(), window.columns.len());
        if looked.shape() == shape && looked.held()?.sample_type() == self.sample_type {
            return Ok(());
        }
        Err(raised(&Error::usage(
            format!(
                "an array of shape {:?} where {shape:?} of {} is due",
                looked.shape(),
                self.sample_type.name()
            ),
            "",
        )))
    }
}

/// Windows with their samples.
fn held<'a>(looked: &'a [(usize, usize, Looked<'_>)]) -> PyResult<Vec<(Window, Held<'a>)>> {
    let one = |(r, c, a): &'a (usize, usize, Looked<'_>)| {
        let (_, rows, columns) = a.shape();
        Ok((Window { rows: *r..*r + rows, columns: *c..*c + columns }, a.held()?))
    };
    looked.iter().map(one).collect()
}

/// The noise of the samples: counts, or planes of standard uncertainties (as many as bands, or one for all).
fn noise(
    grid: &Grid,
    planes: Option<(usize, Vec<(Window, Held<'_>)>)>,
    even: Option<f64>,
    poisson: Option<(f64, f64)>,
) -> crate::Result<Option<Noise>> {
    if let Some(v) = even {
        if !(v >= 0.0 && v.is_finite()) {
            return Err(Error::usage(
                format!("sigma={v}: an uncertainty is not negative"),
                "such as sigma=0.5",
            ));
        }
        return Ok(Some(Noise::Even(v)));
    }
    if let Some((gain, read)) = poisson {
        if !(gain > 0.0 && read >= 0.0 && gain.is_finite() && read.is_finite()) {
            return Err(Error::usage(
                format!("poisson:{gain},{read}: electrons a count and of reading noise are needed"),
                "such as sigma=\"poisson:2.2,5\"",
            ));
        }
        return Ok(Some(Noise::Poisson { gain, read }));
    }
    let Some((bands, pieces)) = planes else { return Ok(None) };
    let sample_type = pieces.first().map_or(SampleType::F64, |p| p.1.sample_type());
    let header = Header::new(grid.clone(), bands, sample_type);
    Pieces::new(header.clone(), pieces.clone())?;
    Ok(Some(Noise::Plane(Arc::new(Owned::copied(header, &pieces)), MissingCodes::default())))
}

fn parts(py: Python<'_>, made: Made) -> PyResult<Parts<'_>> {
    let grid = &made.header.grid;
    let shape = (made.header.bands, grid.rows, grid.columns);
    let plane = |s: Option<crate::raster::Samples>| s.map(|s| array(py, s, shape)).transpose();
    let ledger = made.ledger.as_ref().map(|l| serde_json::to_string(l).unwrap_or_default());
    Ok((
        array(py, made.samples, shape)?,
        plane(made.missing)?,
        plane(made.sigma)?,
        plane(made.coverage)?,
        ledger,
    ))
}

/// The rules that options ask for.
fn rules(options: &Bound<'_, PyDict>) -> PyResult<Rules> {
    let mut rules = Rules { threads: None, ..Rules::default() };
    let fail = |e: Error| raised(&e);
    for (key, value) in options {
        let key: String = key.extract()?;
        if value.is_none() {
            continue;
        }
        let text = || value.extract::<String>();
        let number = || value.extract::<f64>();
        let one_of = |given: &str, names: &str| {
            Error::usage(format!("{key}=\"{given}\""), format!("use one of {names}"))
        };
        match key.as_str() {
            "kernel" => rules.kernel = text()?.parse().map_err(fail)?,
            "extend" => rules.extension = text()?.parse().map_err(fail)?,
            "values" => rules.values = text()?.parse().map_err(fail)?,
            "outside" => {
                rules.outside = match text()?.as_str() {
                    "missing" => Outside::Missing,
                    "extend" => Outside::Extend,
                    other => return Err(raised(&one_of(other, "missing, extend"))),
                }
            }
            "reduce" => {
                rules.reduce = match text()?.as_str() {
                    "auto" => Reduce::Auto,
                    "none" => Reduce::None,
                    "widen" => Reduce::Widen,
                    "least-squares" => Reduce::LeastSquares,
                    other => return Err(raised(&one_of(other, "auto, none, widen, least-squares"))),
                }
            }
            "limit" => {
                rules.limit = match text()?.as_str() {
                    "none" => Limit::None,
                    "neighbours" => Limit::Neighbours,
                    other => return Err(raised(&one_of(other, "none, neighbours"))),
                }
            }
            "missing" => rules.missing = Some(number()?),
            "min_coverage" => rules.min_coverage = number()?,
            "tolerance" => rules.tolerance = Some(number()?),
            "type" => rules.sample_type = Some(type_named(&text()?).map_err(fail)?),
            "threads" => rules.threads = Some(value.extract()?),
            "memory" => rules.memory = value.extract()?,
            other => return Err(PyTypeError::new_err(format!("unknown option \"{other}\""))),
        }
    }
    rules.check().map_err(fail)?;
    Ok(rules)
}

/// Audits two arrays of (bands, rows, columns); the answer is the audit's JSON.
#[pyfunction]
#[pyo3(signature = (before, after, grids, back, values, missing, tolerance, max_displacement, min_mtf50, band))]
#[allow(clippy::too_many_arguments)]
pub fn audit(
    py: Python<'_>,
    before: &Bound<'_, PyUntypedArray>,
    after: &Bound<'_, PyUntypedArray>,
    grids: (PyRef<'_, PyGrid>, PyRef<'_, PyGrid>),
    back: Option<Matrix>,
    values: &str,
    missing: Option<f64>,
    tolerance: Option<f64>,
    max_displacement: Option<f64>,
    min_mtf50: Option<f64>,
    band: Option<usize>,
) -> PyResult<String> {
    let (b, a) = (Looked::at(before)?, Looked::at(after)?);
    let values = match values {
        "density" => AuditValues::Density,
        "total" => AuditValues::Total,
        _ => return Err(raised(&Error::usage(format!("values=\"{values}\""), "use density or total"))),
    };
    let defaults = AuditRules::default();
    let rules = AuditRules { values, missing, tolerance, max_displacement, min_mtf50, band, ..defaults };
    let (grids, shapes) = ((grids.0.0.clone(), grids.1.0.clone()), (b.shape(), a.shape()));
    let held = (b.held()?, a.held()?);
    free(py, || {
        let source = |held: Held<'_>, grid: &Grid, bands: usize| {
            let header = Header::new(grid.clone(), bands, held.sample_type());
            (header, Window::whole(grid))
        };
        let (header_b, window_b) = source(held.0, &grids.0, shapes.0.0);
        let (header_a, window_a) = source(held.1, &grids.1, shapes.1.0);
        let before = Pieces::new(header_b.clone(), vec![(window_b, held.0)])?;
        let after = Pieces::new(header_a.clone(), vec![(window_a, held.1)])?;
        let names = (Path::new("before"), Path::new("after"));
        let relation = match back {
            Some(matrix) => crate::report::Relation { by: "map".into(), back: Map { matrix } },
            None => relate((names.0, &header_b), (names.1, &header_a))?,
        };
        let made = crate::job::audit((&before, names.0), (&after, names.1), relation, &rules, &())?;
        let mut told = serde_json::to_value(&made).unwrap_or_default();
        told["summary"] = made.summary().into();
        told["failed"] = made.failed_a_check().into();
        Ok(told.to_string())
    })
}
