//! The plan: which pass carries out a resampling, and with which numbers. Plain data, to be compared and told.

use super::axis::{Axis, Way, choose_way};
use super::gather::stretch_at;
use super::rules::{Outside, Reduce, Rules};
use super::shear::Shears;
use super::values::Values;
use crate::error::{Error, Result};
use crate::grid::Grid;
use crate::kernel::{Extension, Shape};
use crate::map::Map;
use crate::raster::SampleType;
use std::ops::Range;

/// The longest line that the one polynomial is drawn through.
const POLYNOMIAL_LIMIT: usize = 64;

/// How a resampling is done.
#[derive(Clone, Debug, PartialEq)]
pub enum Plan {
    /// Samples are copied: rows and columns are whole-pixel images of the input's.
    Copy {
        /// Rows come from columns.
        swapped: bool,
        /// Step (1 or -1) and offset of rows.
        rows: (i64, i64),
        /// Step (1 or -1) and offset of columns.
        columns: (i64, i64),
    },
    /// Banded weights along rows, then along columns.
    RowsAndColumns {
        /// Rows come from columns: the input is transposed as it is read.
        swapped: bool,
        /// The axis that gives rows.
        rows: Axis,
        /// The axis that gives columns.
        columns: Axis,
    },
    /// The tensor product at every position.
    Gather {
        /// From output to input positions.
        back: Map,
        /// Input rows and columns per output pixel for anti-aliasing, at least 1; the largest where it varies.
        stretch: (f64, f64),
        /// The stretch follows the map from pixel to pixel.
        local: bool,
        /// The least-squares spline instead of a wider kernel.
        least_squares: bool,
    },
    /// Exact overlap of turned pixels.
    Overlap {
        /// From output to input positions.
        back: Map,
    },
    /// A quarter turn, then three passes that keep totals.
    Shear(Box<Shears>),
    /// The class that covers most of each pixel.
    Majority {
        /// From output to input positions.
        back: Map,
    },
}

/// Size of a raster: rows, columns.
pub type Size = (usize, usize);

impl Plan {
    /// Picks the plan for a raster of `source` pixels onto `target` pixels.
    ///
    /// # Errors
    /// When kernel, extension and map do not go together.
    pub fn new(source: Size, target: Size, back: &Map, rules: &Rules) -> Result<Plan> {
        rules.check()?;
        let kernel = &rules.kernel;
        check_whole_line_kernels(source, rules)?;
        let wanted = match rules.reduce {
            Reduce::None => false,
            Reduce::Auto | Reduce::Widen | Reduce::LeastSquares => true,
        };
        let least_squares = rules.reduce == Reduce::LeastSquares;
        // Nearest picks and area covers; neither is widened.
        let total = rules.values == Values::Total;
        let widens = wanted
            && !total
            && kernel.name() != "nearest"
            && kernel.name() != "bspline:0"
            && *kernel.shape() != Shape::Area;
        let slack = |step: f64| if widens && step.abs() > 1.0 + 1e-9 { step.abs() } else { 1.0 };
        let back = back.checked(target.0, target.1)?;
        if rules.values == Values::Label
            && (*kernel.shape() == Shape::Area || (wanted && shrinks(&back, target)))
        {
            return Ok(Plan::Majority { back });
        }
        if let Some(axes) = back.as_axes() {
            let lengths = if axes.swapped { (source.1, source.0) } else { source };
            let axis = |source: usize, target: usize, (step, offset): (f64, f64)| -> Result<Axis> {
                if step == 0.0 {
                    return Err(Error::unfit(
                        "the map squeezes the raster onto a line",
                        "check the map's matrix",
                    ));
                }
                if step.abs() > 64.0 * source as f64 {
                    return Err(Error::unfit(
                        format!(
                            "one output pixel would cover {:.3e} input pixels, and the raster has {source}",
                            step.abs()
                        ),
                        "choose a larger factor or a smaller pixel",
                    ));
                }
                let way = match choose_way(kernel, step, offset, slack(step), least_squares) {
                    Way::Copy => Way::Copy,
                    _ if total => Way::Conserve,
                    way => way,
                };
                if let Way::LeastSquares(_) = way {
                    check_least_squares(rules)?;
                }
                Ok(Axis { source, target, step, offset, way })
            };
            // A swapped map reads the transposed input: its rows are the input's columns.
            let (row_map, column_map) = (axes.rows, axes.columns);
            let (rows, columns) = if axes.swapped {
                // back gives (row_in from column_out, column_in from row_out).
                (axis(lengths.0, target.0, column_map)?, axis(lengths.1, target.1, row_map)?)
            } else {
                (axis(lengths.0, target.0, row_map)?, axis(lengths.1, target.1, column_map)?)
            };
            let whole = |a: &Axis| (a.step as i64, a.offset as i64);
            let copies = rows.way == Way::Copy && columns.way == Way::Copy;
            if copies && (rules.outside == Outside::Missing || inside(&rows, &columns)) {
                return Ok(Plan::Copy {
                    swapped: axes.swapped,
                    rows: whole(&rows),
                    columns: whole(&columns),
                });
            }
            return Ok(Plan::RowsAndColumns { swapped: axes.swapped, rows, columns });
        }
        if *kernel.shape() == Shape::Area || (total && !back.is_affine()) {
            return Ok(Plan::Overlap { back });
        }
        if total {
            return Ok(Plan::Shear(Box::new(Shears::new(source, &back)?)));
        }
        let mut stretch = (1.0f64, 1.0f64);
        let mut local = false;
        if widens {
            let (h, w) = (target.0 as f64 - 1.0, target.1 as f64 - 1.0);
            // One place tells all of an affine map; a projective one is sampled over the frame.
            let places = if back.is_affine() { 0 } else { 8 };
            for i in 0..=places {
                for j in 0..=places {
                    let s = stretch_at(&back, h * i as f64 / 8.0, w * j as f64 / 8.0);
                    stretch = (stretch.0.max(s.0), stretch.1.max(s.1));
                }
            }
            local = !back.is_affine() && stretch != (1.0, 1.0);
        }
        let least_squares = least_squares && stretch != (1.0, 1.0);
        if least_squares {
            check_least_squares(rules)?;
            if local {
                return Err(Error::usage(
                    "--reduce least-squares needs one factor for the whole raster, and this projective map has many",
                    "use --reduce widen",
                ));
            }
        }
        Ok(Plan::Gather { back, stretch, local, least_squares })
    }

    /// The frame that holds every cell that totals reach under a turned map, and the way back from it: the passes reach a
    /// little farther than the turned outline. Other plans keep `target` and `back`.
    ///
    /// # Errors
    /// As [`Plan::new`].
    pub fn fit(source: Size, target: Grid, back: Map, rules: &Rules) -> Result<(Grid, Map)> {
        let Plan::Shear(shears) = Plan::new(source, (target.rows, target.columns), &back, rules)? else {
            return Ok((target, back));
        };
        let (rows, columns) = shears.touched();
        let low = (rows.start as f64, columns.start as f64);
        let size = ((rows.end - rows.start) as usize, (columns.end - columns.start) as usize);
        let grid = target.stepped(size.0, size.1, (1.0, 1.0), low);
        grid.check()?;
        Ok((grid, Map::shift(low.0, low.1).then(&back)))
    }

    /// The map from output to input positions that the plan carries out.
    pub fn back(&self) -> Map {
        let of = |swapped: bool, r: (f64, f64), c: (f64, f64)| {
            // A swapped plan's rows read the input's columns.
            if swapped { Map::affine([[0.0, c.0, c.1], [r.0, 0.0, r.1]]) } else { Map::axes(r, c) }
        };
        match self {
            Plan::Copy { swapped, rows, columns } => {
                let real = |a: &(i64, i64)| (a.0 as f64, a.1 as f64);
                of(*swapped, real(rows), real(columns))
            }
            Plan::RowsAndColumns { swapped, rows, columns } => {
                of(*swapped, (rows.step, rows.offset), (columns.step, columns.offset))
            }
            Plan::Gather { back, .. } | Plan::Overlap { back } | Plan::Majority { back } => *back,
            Plan::Shear(shears) => shears.back,
        }
    }

    /// The name that the ledger tells.
    pub fn method(&self) -> &'static str {
        match self {
            Plan::Copy { .. } => "copy",
            Plan::RowsAndColumns { .. } => "rows-and-columns",
            Plan::Gather { .. } => "gather",
            Plan::Overlap { .. } => "overlap",
            Plan::Shear(_) => "shear",
            Plan::Majority { .. } => "majority",
        }
    }

    /// Rows and columns of the output's lattice, beyond its frame as well, that receive anything of a raster of totals; `None`
    /// where the map sends it beyond all bounds.
    pub fn touched(&self, source: Size, rules: &Rules) -> Option<(Range<i64>, Range<i64>)> {
        let axis = |a: &Axis| {
            let edge = |u: f64| (u - 0.5 - a.offset) / a.step + 0.5;
            let (low, high) = (edge(0.0), edge(a.source as f64));
            Some(whole(low.min(high).floor())? - 1..whole(low.max(high).ceil())? + 1)
        };
        if rules.values != Values::Total {
            return None;
        }
        match self {
            Plan::Copy { swapped, rows, columns } => {
                let lengths = if *swapped { (source.1, source.0) } else { source };
                let line = |n: usize, (step, offset): (i64, i64)| {
                    let (a, b) = (-offset * step, (n as i64 - 1 - offset) * step);
                    a.min(b)..a.max(b) + 1
                };
                Some((line(lengths.0, *rows), line(lengths.1, *columns)))
            }
            Plan::RowsAndColumns { rows, columns, .. } => Some((axis(rows)?, axis(columns)?)),
            Plan::Shear(shears) => Some(shears.touched()),
            Plan::Overlap { back } => {
                let onward = back.invert().ok()?.checked(source.0, source.1).ok()?;
                let b = onward.bounds((-0.5, source.0 as f64 - 0.5), (-0.5, source.1 as f64 - 0.5));
                let line = |(low, high): (f64, f64)| Some(whole(low.floor())? - 1..whole(high.ceil())? + 2);
                Some((line(b.rows)?, line(b.columns)?))
            }
            Plan::Gather { .. } | Plan::Majority { .. } => None,
        }
    }

    /// Whether some output pixel has nothing of the input: its centre lies outside the input's edges, or, of totals, it
    /// receives nothing.
    pub fn looks_outside(&self, source: Size, target: Size) -> bool {
        match self {
            Plan::Copy { swapped, rows, columns } => {
                let lengths = if *swapped { (source.1, source.0) } else { source };
                let out = |n: usize, m: usize, (step, offset): (i64, i64)| {
                    [0, m as i64 - 1].iter().any(|o| !(0..n as i64).contains(&(o * step + offset)))
                };
                out(lengths.0, target.0, *rows) || out(lengths.1, target.1, *columns)
            }
            Plan::RowsAndColumns { rows, columns, .. }
                if rows.way == Way::Conserve || columns.way == Way::Conserve =>
            {
                let empty = |a: &Axis| {
                    [0, a.target as i64 - 1].iter().any(|o| {
                        let (low, high) = a.cell(*o);
                        !(high > low)
                    })
                };
                empty(rows) || empty(columns)
            }
            Plan::RowsAndColumns { rows, columns, .. } => !inside(rows, columns),
            Plan::Shear(shears) => {
                let (h, w) = (target.0 as i64 - 1, target.1 as i64 - 1);
                [(0, 0), (0, w), (h, 0), (h, w)].iter().any(|p| !shears.receives(p.0, p.1))
            }
            Plan::Gather { back, .. } | Plan::Overlap { back } | Plan::Majority { back } => {
                let (h, w) = (target.0 as f64 - 1.0, target.1 as f64 - 1.0);
                [(0.0, 0.0), (0.0, w), (h, 0.0), (h, w)].iter().any(|p| {
                    let (r, c) = back.apply(p.0, p.1);
                    !(super::axis::is_inside(r, source.0) && super::axis::is_inside(c, source.1))
                })
            }
        }
    }

    /// Whether the passes must compute in f64: for f64 and 32-bit integers, and where f32 would not keep 2e-6.
    pub fn needs_f64(&self, from: SampleType, to: SampleType, rules: &Rules) -> bool {
        let wide = |t: SampleType| matches!(t, SampleType::F64 | SampleType::U32 | SampleType::I32);
        // The prefilter amplifies rounding along each axis; a factor of 3 (cubic spline) is what f32 bears.
        let amplified = rules.kernel.amplification() > 3.5;
        let whole_line = matches!(rules.kernel.shape(), Shape::Sinc | Shape::Polynomial);
        rules.values != Values::Density
            || wide(from)
            || wide(to)
            || amplified
            || whole_line
            || rules.reduce == Reduce::LeastSquares
    }
}

/// A whole number as an index; `None` beyond what indices are sure of.
fn whole(v: f64) -> Option<i64> {
    (v.abs() < 9e15).then_some(v as i64)
}

/// Whether some output pixel covers more than an input pixel along an axis.
fn shrinks(back: &Map, target: Size) -> bool {
    let (h, w) = (target.0 as f64 - 1.0, target.1 as f64 - 1.0);
    [(0.0, 0.0), (0.0, w), (h, 0.0), (h, w)].iter().any(|p| stretch_at(back, p.0, p.1) != (1.0, 1.0))
}

fn inside(rows: &Axis, columns: &Axis) -> bool {
    let ends = |a: &Axis| a.is_inside(0) && a.is_inside(a.target as i64 - 1);
    ends(rows) && ends(columns)
}

fn check_least_squares(rules: &Rules) -> Result<()> {
    let degree = match rules.kernel.name().strip_prefix("bspline:").and_then(|d| d.parse::<u32>().ok()) {
        Some(d) => Some(d),
        None if rules.kernel.name() == "linear" => Some(1),
        None => None,
    };
    match degree {
        Some(1..=7) => Ok(()),
        _ => Err(Error::usage(
            format!("--reduce least-squares needs a B-spline of degree 1 to 7, not {}", rules.kernel),
            "use --kernel bspline:3, or --reduce widen",
        )),
    }
}

fn check_whole_line_kernels(source: Size, rules: &Rules) -> Result<()> {
    match rules.kernel.shape() {
        Shape::Sinc if !matches!(rules.edges(), Extension::HalfSymmetric | Extension::Periodic) => {
            Err(Error::usage(
                format!("the sinc kernel cannot extend a raster as {}", rules.extension),
                "use --extend half-symmetric or --extend periodic",
            ))
        }
        Shape::Polynomial if source.0.max(source.1) > POLYNOMIAL_LIMIT => Err(Error::usage(
            format!(
                "one polynomial through {} samples swings beyond any use (Runge's phenomenon); the limit is {POLYNOMIAL_LIMIT}",
                source.0.max(source.1)
            ),
            "use lagrange:8, which looks at the nearest samples only",
        )),
        _ => Ok(()),
    }
}
