//! The passes of one plan, prepared once and carried out block by block; and what is missing afterwards.

use super::axis::{Axis, Way, is_inside};
use super::blocks::{Block, Engine};
use super::chain::{Chain, Part, Stretch};
use super::convert::{Counts, convert};
use super::gather::{By, Look, Plane, gather};
use super::overlap::overlap;
use super::patch::Patch;
use super::plan::Plan;
use super::rows_and_columns as passes;
use super::rules::Outside;
use super::weights::Weigher;
use crate::error::{Error, Result};
use crate::kernel::Extension;
use crate::map::Map;
use crate::raster::{Samples, Window};
use crate::real::Real;
use ndarray::Array2;
use rayon::prelude::*;
use std::ops::Range;

/// The passes of one plan in one precision, prepared once.
pub(super) enum Passes<T> {
    Axes { swapped: bool, rows: Chain<T>, columns: Chain<T> },
    Gather { rows: Chain<T>, columns: Chain<T>, look: Box<Look>, lattice: Lattice },
    Overlap { rows: Chain<T>, columns: Chain<T> },
}

/// Where the gathered plane's nodes lie: input position = node * step + offset, for rows and columns.
#[derive(Clone, Copy)]
pub(super) struct Lattice {
    rows: (f64, f64),
    columns: (f64, f64),
}

/// The four planes of a masked resampling, or the values alone.
struct Resampled<T> {
    values: Array2<T>,
    mask: Option<Mask<T>>,
}

/// The responses to the mask.
struct Mask<T> {
    /// Of the whole chain.
    whole: Array2<T>,
    /// Of the kernel's own taps.
    taps: Option<Array2<T>>,
    /// Of the moduli of its taps, where some are negative.
    moduli: Option<Array2<T>>,
}

impl<T: Real> Passes<T> {
    /// Prepares the engine's plan.
    pub fn new(engine: &Engine) -> Self {
        let (kernel, extension) = (&engine.rules.kernel, engine.rules.extension);
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
            Plan::Overlap { .. } => Passes::Overlap { rows: chain(r), columns: chain(c) },
        }
    }

    /// Resamples one block of the output.
    ///
    /// # Errors
    /// When the source cannot be read.
    pub fn block(&self, engine: &Engine, rows: &Range<usize>, columns: &Range<usize>) -> Result<Block> {
        let bands = engine.source.header().bands;
        let mut samples: Option<Samples> = None;
        let mut counts = Counts::default();
        let mut near_gap = 0;
        let mut each = |resampled: Resampled<T>| -> Result<()> {
            let (plane, near) = settle(resampled, engine.rules.min_coverage);
            near_gap += near;
            let (converted, c) = convert(plane.view(), engine.sample_type, engine.fill);
            counts.add(&c);
            match &mut samples {
                Some(all) => all.append(converted)?,
                None => samples = Some(converted),
            }
            Ok(())
        };
        match self {
            Passes::Axes { swapped, rows: r, columns: c } => {
                let (sr, sc) = (r.stretch(signed(rows)), c.stretch(signed(columns)));
                let patch = self.patch(engine, &sr.reach.samples, &sc.reach.samples, *swapped)?;
                for band in 0..bands {
                    let mut resampled = resample_axes(&patch, band, (r, &sr), (c, &sc));
                    blank(engine, &mut resampled.values, (r, &sr), (c, &sc));
                    each(resampled)?;
                }
            }
            Passes::Gather { rows: r, columns: c, look, lattice } => {
                let radius = (look.weighers.0.radius(), look.weighers.1.radius());
                let whole = (look.weighers.0.is_whole_line(), look.weighers.1.is_whole_line());
                let Some((nr, nc)) = nodes(engine, &look.back, rows, columns, radius, whole, Some(*lattice))
                else {
                    for _ in 0..bands {
                        each(Resampled { values: nothing(rows, columns), mask: None })?;
                    }
                    return finish(rows, columns, samples, counts, near_gap);
                };
                let (sr, sc) = (r.stretch(nr.clone()), c.stretch(nc.clone()));
                let patch = self.patch(engine, &sr.reach.samples, &sc.reach.samples, false)?;
                let origin = (nr.start, nc.start);
                for band in 0..bands {
                    let plane = |what, part| passes::resample(&patch, band, what, part, (r, &sr), (c, &sc));
                    let look_at =
                        |values: &Array2<T>, by| gather(look, &Plane { values, origin }, by, rows, columns);
                    let values = look_at(&plane(passes::Plane::Values, Part::Whole), By::Weights);
                    let mask = patch.has_missing(band).then(|| {
                        let whole = look_at(&plane(passes::Plane::Mask, Part::Whole), By::Weights);
                        let raw = plane(passes::Plane::Mask, Part::Weights);
                        let taps = (r.is_filtered() || c.is_filtered()).then(|| look_at(&raw, By::Weights));
                        Mask { whole, taps, moduli: Some(look_at(&raw, By::Moduli)) }
                    });
                    each(Resampled { values, mask })?;
                }
            }
            Passes::Overlap { rows: r, columns: c } => {
                let Plan::Overlap { back } = &engine.plan else {
                    return Err(Error::unfit("the overlap pass was asked for another plan", ""));
                };
                // The widest image of a pixel in the block; under a projective map it stands at a corner.
                let mut radius = (1.0f64, 1.0f64);
                for r in [rows.start, rows.end] {
                    for c in [columns.start, columns.end] {
                        let j = back.jacobian(r as f64, c as f64);
                        radius.0 = radius.0.max(1.0 + j[0][0].abs() + j[0][1].abs());
                        radius.1 = radius.1.max(1.0 + j[1][0].abs() + j[1][1].abs());
                    }
                }
                let Some((nr, nc)) = nodes(engine, back, rows, columns, radius, (false, false), None) else {
                    for _ in 0..bands {
                        each(Resampled { values: nothing(rows, columns), mask: None })?;
                    }
                    return finish(rows, columns, samples, counts, near_gap);
                };
                let (sr, sc) = (r.stretch(nr.clone()), c.stretch(nc.clone()));
                let patch = self.patch(engine, &sr.reach.samples, &sc.reach.samples, false)?;
                let origin = (nr.start, nc.start);
                let size = engine.source_size();
                let limits = (engine.rules.extension == Extension::Open).then_some(size);
                let keep = |row: f64, column: f64| {
                    let (x, y) = back.apply(row, column);
                    engine.rules.outside == Outside::Extend || (is_inside(x, size.0) && is_inside(y, size.1))
                };
                for band in 0..bands {
                    let over = |what| {
                        let values = &passes::resample(&patch, band, what, Part::Whole, (r, &sr), (c, &sc));
                        overlap(back, &Plane { values, origin }, limits, rows, columns, keep)
                    };
                    let values = over(passes::Plane::Values);
                    let mask = patch.has_missing(band).then(|| Mask {
                        whole: over(passes::Plane::Mask),
                        taps: None,
                        moduli: None,
                    });
                    each(Resampled { values, mask })?;
                }
            }
        }
        finish(rows, columns, samples, counts, near_gap)
    }

    fn patch(
        &self,
        engine: &Engine,
        rows: &Range<i64>,
        columns: &Range<i64>,
        swapped: bool,
    ) -> Result<Patch> {
        Patch::read(engine.source, rows, columns, swapped, engine.rules.extension, engine.codes.clone())
    }
}

/// The stretch of one axis of a gather: where the other axis is widened, a factor a hair above 1 keeps both on samples.
fn widened(both: (f64, f64), own: f64) -> f64 {
    if both == (1.0, 1.0) { 1.0 } else { own.max(1.0 + 1e-12) }
}

fn signed(r: &Range<usize>) -> Range<i64> {
    r.start as i64..r.end as i64
}

fn nothing<T: Real>(rows: &Range<usize>, columns: &Range<usize>) -> Array2<T> {
    Array2::from_elem((rows.len(), columns.len()), T::from_f64(f64::NAN))
}

fn finish(
    rows: &Range<usize>,
    columns: &Range<usize>,
    samples: Option<Samples>,
    counts: Counts,
    near_gap: u64,
) -> Result<Block> {
    let samples = samples.ok_or_else(|| Error::unfit("the raster has no bands", ""))?;
    Ok(Block { window: Window { rows: rows.clone(), columns: columns.clone() }, samples, counts, near_gap })
}

fn resample_axes<T: Real>(
    patch: &Patch,
    band: usize,
    rows: (&Chain<T>, &Stretch<T>),
    columns: (&Chain<T>, &Stretch<T>),
) -> Resampled<T> {
    let values = passes::resample(patch, band, passes::Plane::Values, Part::Whole, rows, columns);
    let mask = patch.has_missing(band).then(|| {
        let on_mask =
            |part, rows, columns| passes::resample(patch, band, passes::Plane::Mask, part, rows, columns);
        let whole = on_mask(Part::Whole, rows, columns);
        let taps =
            (rows.0.is_filtered() || columns.0.is_filtered()).then(|| on_mask(Part::Weights, rows, columns));
        let (mr, mc) = (rows.0.moduli(rows.1), columns.0.moduli(columns.1));
        let moduli = (mr.is_some() || mc.is_some()).then(|| {
            let rows = (rows.0, mr.as_ref().unwrap_or(rows.1));
            let columns = (columns.0, mc.as_ref().unwrap_or(columns.1));
            on_mask(Part::Weights, rows, columns)
        });
        Mask { whole, taps, moduli }
    });
    Resampled { values, mask }
}

/// Marks as missing what lies outside, and what an open raster offers nothing for.
fn blank<T: Real>(
    engine: &Engine,
    values: &mut Array2<T>,
    rows: (&Chain<T>, &Stretch<T>),
    columns: (&Chain<T>, &Stretch<T>),
) {
    let nan = T::from_f64(f64::NAN);
    let there = |axis: &(&Chain<T>, &Stretch<T>)| -> Vec<bool> {
        let extends = engine.rules.outside == Outside::Extend;
        axis.1
            .wanted
            .clone()
            .map(|o| (extends || axis.0.axis.is_inside(o)) && axis.0.is_reached(axis.1, o))
            .collect()
    };
    let (r, c) = (there(&rows), there(&columns));
    if r.iter().chain(&c).all(|t| *t) {
        return;
    }
    for (mut line, row_there) in values.rows_mut().into_iter().zip(r) {
        line.iter_mut()
            .zip(&c)
            .filter(|(_, column_there)| !(row_there && **column_there))
            .for_each(|(v, _)| *v = nan);
    }
}

/// Divides by the response to the mask and drops what finds too little; NaN = missing. Also counts the outputs near a gap.
///
/// The value is S[m f] / S[m], with S the whole resampling and m the mask. It is missing where the kernel's own taps, or
/// their moduli, find less than `min_coverage` of their weight, or S[m] less than half of that: a cardinal kernel
/// that stands almost wholly on a gap would have to be guessed from its ripples.
fn settle<T: Real>(resampled: Resampled<T>, min_coverage: f64) -> (Array2<T>, u64) {
    let Resampled { mut values, mask } = resampled;
    let Some(mask) = mask else { return (values, 0) };
    const NEAR_GAP: f64 = 1e-3;
    let least = min_coverage.max(1e-6);
    let near: u64 = values
        .axis_iter_mut(ndarray::Axis(0))
        .into_par_iter()
        .enumerate()
        .map(|(r, mut line)| {
            let mut near = 0;
            for (c, v) in line.iter_mut().enumerate() {
                let whole = mask.whole[(r, c)].to_f64();
                // Where no sample is missing the response is 1 but for rounding: the value stays as it is, to the bit.
                if (whole - 1.0).abs() <= T::UNITY_SLACK {
                    continue;
                }
                let taps = mask.taps.as_ref().map_or(whole, |m| m[(r, c)].to_f64());
                let moduli = mask.moduli.as_ref().map_or(taps, |m| m[(r, c)].to_f64());
                if taps < least || moduli < least || whole < 0.5 * least || v.to_f64().is_nan() {
                    *v = T::from_f64(f64::NAN);
                    continue;
                }
                near += u64::from((whole - 1.0).abs() > NEAR_GAP);
                *v = *v / mask.whole[(r, c)];
            }
            near
        })
        .collect::<Vec<u64>>()
        .iter()
        .sum();
    (values, near)
}

/// The nodes (extended indices of the gathered plane) that a block of outputs looks at; `None` if it sees nothing.
fn nodes(
    engine: &Engine,
    back: &Map,
    rows: &Range<usize>,
    columns: &Range<usize>,
    radius: (f64, f64),
    whole: (bool, bool),
    lattice: Option<Lattice>,
) -> Option<(Range<i64>, Range<i64>)> {
    let b = back
        .bounds((rows.start as f64, rows.end as f64 - 1.0), (columns.start as f64, columns.end as f64 - 1.0));
    let (n, m) = engine.source_size();
    let lattice = lattice.unwrap_or(Lattice { rows: (1.0, 0.0), columns: (1.0, 0.0) });
    let open = engine.rules.extension == Extension::Open;
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
