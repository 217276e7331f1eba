//! The passes of one plan, prepared once, and what they make of one block.

use super::axis::{Axis, Way};
use super::blocks::Engine;
use super::chain::{Chain, Stretch};
use super::gather::Look;
use super::patch::Patch;
use super::plan::Plan;
use super::rules::Outside;
use super::shear::Shears;
use super::values::Values;
use super::weights::Weigher;
use crate::error::Result;
use crate::kernel::{Extension, Prefilter};
use crate::map::Map;
use crate::real::Real;
use std::ops::Range;

/// The passes of one plan in one precision, prepared once.
pub(super) enum Passes<T> {
    Axes { swapped: bool, rows: Chain<T>, columns: Chain<T> },
    Gather { rows: Chain<T>, columns: Chain<T>, look: Box<Look>, lattice: Lattice },
    Overlap { rows: Chain<T>, columns: Chain<T>, back: Map },
    Majority { rows: Chain<T>, columns: Chain<T>, back: Map },
    Shear { shears: Box<Shears>, prefilter: Option<Prefilter<f64>> },
}

/// Where the gathered plane's nodes lie: input position = node * step + offset, for rows and columns.
#[derive(Clone, Copy)]
pub(super) struct Lattice {
    rows: (f64, f64),
    columns: (f64, f64),
}

/// A block of outputs, which may lie beyond the frame.
#[derive(Clone, Debug)]
pub(super) struct Span {
    pub rows: Range<i64>,
    pub columns: Range<i64>,
}

impl Span {
    /// A window within the frame.
    pub fn of(rows: &Range<usize>, columns: &Range<usize>) -> Self {
        let signed = |r: &Range<usize>| r.start as i64..r.end as i64;
        Span { rows: signed(rows), columns: signed(columns) }
    }

    pub fn size(&self) -> (usize, usize) {
        ((self.rows.end - self.rows.start) as usize, (self.columns.end - self.columns.start) as usize)
    }
}

/// A block with all that was read for it.
pub(super) struct Prepared<'a, T> {
    pub passes: &'a Passes<T>,
    pub engine: &'a Engine<'a>,
    pub span: Span,
    pub patch: Patch,
    pub stretches: Option<(Stretch<T>, Stretch<T>)>,
    /// Extended index of the patch's first row and column.
    pub origin: (i64, i64),
}

/// What a block of outputs reads: extended rows and columns of the input (of its transpose where `swapped`).
struct Reading<T> {
    rows: Range<i64>,
    columns: Range<i64>,
    swapped: bool,
    stretches: Option<(Stretch<T>, Stretch<T>)>,
    origin: (i64, i64),
}

/// Sorted ranges of a line that do not touch.
pub type Ranges = Vec<Range<usize>>;

impl<T: Real> Passes<T> {
    /// Prepares the engine's plan.
    pub fn new(engine: &Engine) -> Self {
        let (kernel, extension) = (&engine.rules.kernel, engine.rules.edges());
        let (r, c) = engine.gather_axes();
        let chain = |axis: Axis| Chain::new(axis, kernel, extension);
        match &engine.plan {
            Plan::Copy { swapped, rows, columns } => {
                let (n, m) = engine.source_size();
                let lengths = if *swapped { (m, n) } else { (n, m) };
                let axis = |source, target, (step, offset): (i64, i64)| Axis {
                    source,
                    target,
                    step: step as f64,
                    offset: offset as f64,
                    way: Way::Copy,
                };
                Passes::Axes {
                    swapped: *swapped,
                    rows: chain(axis(lengths.0, engine.target.0, *rows)),
                    columns: chain(axis(lengths.1, engine.target.1, *columns)),
                }
            }
            Plan::RowsAndColumns { swapped, rows, columns } => {
                Passes::Axes { swapped: *swapped, rows: chain(*rows), columns: chain(*columns) }
            }
            Plan::Gather { back, stretch, local, least_squares } => {
                let weigher = |axis: &Axis, a: f64| {
                    let a = if *least_squares { 1.0 } else { a };
                    // What is cut off is lost in the working precision's rounding.
                    Weigher::free(kernel, extension, axis.target, a, 1e-2 * T::UNITY_SLACK)
                };
                // Under least squares the positions are those of the coarser lattice.
                let onto = Map::axes((1.0 / r.step, -r.offset / r.step), (1.0 / c.step, -c.offset / c.step));
                let look = Box::new(Look {
                    back: *back,
                    lattice: onto,
                    source: engine.source_size(),
                    outside: engine.rules.outside,
                    // A prefiltered kernel that is widened along one axis works on samples along both.
                    weighers: (
                        weigher(&r, widened(*stretch, stretch.0)),
                        weigher(&c, widened(*stretch, stretch.1)),
                    ),
                    local: local.then_some(*stretch),
                });
                let lattice = Lattice { rows: (r.step, r.offset), columns: (c.step, c.offset) };
                Passes::Gather { rows: chain(r), columns: chain(c), look, lattice }
            }
            Plan::Overlap { back } => Passes::Overlap { rows: chain(r), columns: chain(c), back: *back },
            Plan::Majority { back } => Passes::Majority { rows: chain(r), columns: chain(c), back: *back },
            Plan::Shear(shears) => Passes::Shear {
                shears: shears.clone(),
                prefilter: kernel.is_prefiltered().then(|| Prefilter::for_segments(&kernel.symbol())),
            },
        }
    }

    /// Reads what a block of outputs needs; `None` if it sees nothing.
    ///
    /// # Errors
    /// When the source cannot be read.
    pub fn prepare<'a>(&'a self, engine: &'a Engine<'a>, span: &Span) -> Result<Option<Prepared<'a, T>>> {
        let Some(reading) = self.reading(engine, span) else { return Ok(None) };
        let Reading { rows, columns, swapped, stretches, origin } = reading;
        let (edges, codes) = (engine.rules.edges(), engine.codes.clone());
        let patch = Patch::read(engine.source, &rows, &columns, swapped, edges, codes)?;
        Ok(Some(Prepared { passes: self, engine, span: span.clone(), patch, stretches, origin }))
    }

    /// The rows and columns of the input that [`Passes::prepare`] reads, every combination of them.
    pub fn needs(&self, engine: &Engine, span: &Span) -> Option<(Ranges, Ranges)> {
        let reading = self.reading(engine, span)?;
        let (rows, columns) = Patch::ranges(
            engine.source_size(),
            &reading.rows,
            &reading.columns,
            reading.swapped,
            engine.rules.edges(),
        );
        Some(if reading.swapped { (columns, rows) } else { (rows, columns) })
    }

    fn reading(&self, engine: &Engine, span: &Span) -> Option<Reading<T>> {
        let total = engine.rules.values == Values::Total;
        let (nodes, swapped) = match self {
            Passes::Axes { swapped, .. } => (Some((span.rows.clone(), span.columns.clone())), *swapped),
            Passes::Gather { look, lattice, .. } => {
                let radius = (look.weighers.0.radius(), look.weighers.1.radius());
                let whole = (look.weighers.0.is_whole_line(), look.weighers.1.is_whole_line());
                (nodes(engine, &look.back, span, radius, whole, Some(*lattice)), false)
            }
            Passes::Overlap { back, .. } | Passes::Majority { back, .. } if total => {
                (touched_nodes(engine, back, span), false)
            }
            Passes::Overlap { back, .. } | Passes::Majority { back, .. } => {
                (nodes(engine, back, span, widest_image(back, span), (false, false), None), false)
            }
            Passes::Shear { shears, .. } => {
                let (rows, columns) = shears.window(&engine.rules.kernel, &span.rows, &span.columns)?;
                let signed = |r: Range<usize>| r.start as i64..r.end as i64;
                let (rows, columns) = (signed(rows), signed(columns));
                let origin = (rows.start, columns.start);
                return Some(Reading { rows, columns, swapped: false, stretches: None, origin });
            }
        };
        let (nr, nc) = nodes?;
        let origin = (nr.start, nc.start);
        let (r, c) = match self {
            Passes::Axes { rows, columns, .. }
            | Passes::Gather { rows, columns, .. }
            | Passes::Overlap { rows, columns, .. }
            | Passes::Majority { rows, columns, .. } => (rows.stretch(nr), columns.stretch(nc)),
            Passes::Shear { .. } => return None,
        };
        let (rows, columns) = (r.reach.samples.clone(), c.reach.samples.clone());
        Some(Reading { rows, columns, swapped, stretches: Some((r, c)), origin })
    }
}

/// The stretch of one axis of a gather: where the other axis is widened, a factor a hair above 1 keeps both on samples.
fn widened(both: (f64, f64), own: f64) -> f64 {
    if both == (1.0, 1.0) { 1.0 } else { own.max(1.0 + 1e-12) }
}

/// Half the extent of the widest image of a pixel in the block; under a projective map it stands at a corner.
fn widest_image(back: &Map, span: &Span) -> (f64, f64) {
    let mut radius = (1.0f64, 1.0f64);
    for r in [span.rows.start, span.rows.end] {
        for c in [span.columns.start, span.columns.end] {
            let j = back.jacobian(r as f64, c as f64);
            radius.0 = radius.0.max(1.0 + j[0][0].abs() + j[0][1].abs());
            radius.1 = radius.1.max(1.0 + j[1][0].abs() + j[1][1].abs());
        }
    }
    radius
}

/// The input's own pixels under a block of cells; `None` if there are none.
fn touched_nodes(engine: &Engine, back: &Map, span: &Span) -> Option<(Range<i64>, Range<i64>)> {
    let edges = |r: &Range<i64>| (r.start as f64 - 0.5, r.end as f64 - 0.5);
    let b = back.bounds(edges(&span.rows), edges(&span.columns));
    let (n, m) = engine.source_size();
    let range = |(low, high): (f64, f64), n: usize| {
        let range = (low.floor().max(0.0) as i64)..((high.ceil() + 1.0).min(n as f64) as i64);
        (!range.is_empty()).then_some(range)
    };
    Some((range(b.rows, n)?, range(b.columns, m)?))
}

/// The nodes (extended indices of the gathered plane) that a block of outputs looks at; `None` if it sees nothing.
fn nodes(
    engine: &Engine,
    back: &Map,
    span: &Span,
    radius: (f64, f64),
    whole: (bool, bool),
    lattice: Option<Lattice>,
) -> Option<(Range<i64>, Range<i64>)> {
    let ends = |r: &Range<i64>| (r.start as f64, r.end as f64 - 1.0);
    let b = back.bounds(ends(&span.rows), ends(&span.columns));
    let (n, m) = engine.source_size();
    let lattice = lattice.unwrap_or(Lattice { rows: (1.0, 0.0), columns: (1.0, 0.0) });
    let open = engine.rules.edges() == Extension::Open;
    let axes = engine.gather_axes();
    let range = |(low, high): (f64, f64),
                 n: usize,
                 radius: f64,
                 whole: bool,
                 (step, offset): (f64, f64),
                 nodes: usize| {
        let (low, high) = match engine.rules.outside {
            Outside::Missing => (low.max(-0.5 - 1e-9), high.min(n as f64 - 0.5 + 1e-9)),
            Outside::Extend => (low, high),
        };
        if !(low <= high) {
            return None;
        }
        if whole {
            return Some(0..n as i64);
        }
        let (low, high) = ((low - offset) / step, (high - offset) / step);
        let (low, high) = ((low - radius).floor() as i64 - 1, (high + radius).ceil() as i64 + 2);
        let range = if open { low.clamp(0, nodes as i64)..high.clamp(0, nodes as i64) } else { low..high };
        (!range.is_empty()).then_some(range)
    };
    Some((
        range(b.rows, n, radius.0, whole.0, lattice.rows, axes.0.target)?,
        range(b.columns, m, radius.1, whole.1, lattice.columns, axes.1.target)?,
    ))
}
