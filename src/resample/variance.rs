//! Variance of the outputs, through the squares of the effective weights.

use super::axis::{Axis, Way};
use super::chain::{Chain, Part, Stretch};
use super::effective::{CUT, Effective};
use super::gather::Look;
use super::overlap::{Cells, corners};
use super::passes::Span;
use super::patch::Patch;
use super::rows_and_columns::{Plane, resample};
use super::weights::{Banded, Weigher};
use crate::error::{Error, Result};
use crate::kernel::{Extension, Kernel, Place};
use crate::map::Map;
use crate::raster::{Header, MissingCodes, Sample, SampleType, Samples, Source, Window};
use crate::with_samples;
use ndarray::Array2;
use ndarray::parallel::prelude::*;
use std::ops::Range;
use std::sync::Arc;

/// What is known of the noise of the samples.
#[derive(Clone)]
pub enum Noise {
    /// The same standard uncertainty everywhere.
    Even(f64),
    /// A raster of standard uncertainties, band by band (or one band for all), with its codes for missing.
    Plane(Arc<dyn Source>, MissingCodes),
    /// Counts: `gain` electrons a count, `read` electrons of reading noise; variance max(v, 0) / gain + (read / gain)^2.
    Poisson {
        /// Electrons a count.
        gain: f64,
        /// Electrons.
        read: f64,
    },
}

impl std::fmt::Debug for Noise {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        match self {
            Noise::Even(v) => write!(f, "Even({v})"),
            Noise::Plane(..) => f.write_str("Plane"),
            Noise::Poisson { gain, read } => write!(f, "Poisson({gain}, {read})"),
        }
    }
}

/// The variance of one band's samples as a raster: 0 where a sample is missing, infinite where its uncertainty is.
pub(super) struct Variance<'a> {
    header: Header,
    source: &'a dyn Source,
    codes: &'a MissingCodes,
    noise: &'a Noise,
    band: usize,
}

impl<'a> Variance<'a> {
    pub fn new(source: &'a dyn Source, codes: &'a MissingCodes, noise: &'a Noise, band: usize) -> Self {
        let header = Header::new(source.header().grid.clone(), 1, SampleType::F64);
        Variance { header, source, codes, noise, band }
    }
}

impl Source for Variance<'_> {
    fn header(&self) -> &Header {
        &self.header
    }

    fn read(&self, _: Range<usize>, window: &Window) -> Result<Samples> {
        let read = |source: &dyn Source, band: usize, codes: &MissingCodes| -> Result<Vec<f64>> {
            let stored = source.read(band..band + 1, window)?;
            Ok(with_samples!(&stored, v => wide(v, codes)))
        };
        let mut values = read(self.source, self.band, self.codes)?;
        let set = |values: &mut [f64], variance: &dyn Fn(f64) -> f64| {
            values.iter_mut().for_each(|v| *v = if v.is_nan() { 0.0 } else { variance(*v) });
        };
        match self.noise {
            Noise::Even(sigma) => set(&mut values, &|_| sigma * sigma),
            Noise::Poisson { gain, read } => {
                set(&mut values, &|v| v.max(0.0) / gain + (read / gain) * (read / gain));
            }
            Noise::Plane(plane, codes) => {
                let band = if plane.header().bands == 1 { 0 } else { self.band };
                let sigma = read(plane.as_ref(), band, codes)?;
                if sigma.len() != values.len() {
                    return Err(Error::unfit("the sigma plane changed its size while it was read", ""));
                }
                for (v, s) in values.iter_mut().zip(sigma) {
                    // An unknown uncertainty makes all that lean on it unknown.
                    let s = if s.is_nan() { f64::INFINITY } else { s };
                    *v = if v.is_nan() { 0.0 } else { s * s };
                }
            }
        }
        Ok(Samples::F64(values))
    }
}

fn wide<S: Sample>(stored: &[S], codes: &MissingCodes) -> Vec<f64> {
    let codes: Vec<S> = codes.of();
    let there = |v: S| !codes.iter().any(|c| v.is(*c));
    stored.iter().map(|v| if there(*v) { v.wide() } else { f64::NAN }).collect()
}

/// Along rows, then along columns.
pub(super) fn of_axes(
    variance: &Variance,
    (rows, columns): (&Axis, &Axis),
    swapped: bool,
    (kernel, extension): (&Kernel, Extension),
    span: &Span,
) -> Result<Array2<f64>> {
    let squares = |axis: &Axis, range: &Range<i64>| {
        let (banded, reach) = Effective::new(kernel, extension, axis).squares(range.clone());
        // The weights are all there is: no filters of its own.
        let plain = Axis { way: Way::Taps, ..*axis };
        (Chain::<f64>::new(plain, kernel, extension), Stretch::of_weights(range.clone(), reach, banded))
    };
    let (r, c) = (squares(rows, &span.rows), squares(columns, &span.columns));
    let (reach_r, reach_c) = (&r.1.reach.samples, &c.1.reach.samples);
    if reach_r.is_empty() || reach_c.is_empty() {
        return Ok(Array2::zeros(span.size()));
    }
    let patch =
        Patch::read(variance, reach_r, reach_c, swapped, Extension::Periodic, MissingCodes::default())?;
    Ok(resample(&patch, 0, Plane::Values, Part::Weights, (&r.0, &r.1), (&c.0, &c.1)))
}

/// The tensor product at every position. `nodes` are the rows and columns of the gathered plane that the block looks at.
pub(super) fn of_gather(
    variance: &Variance,
    look: &Look,
    (rows, columns): (&Axis, &Axis),
    (kernel, extension): (&Kernel, Extension),
    nodes: (&Range<i64>, &Range<i64>),
    span: &Span,
) -> Result<Array2<f64>> {
    let effective = |axis: &Axis, range: &Range<i64>| {
        let effective = Effective::new(kernel, extension, axis);
        Banded::<f64>::from_rows(range.clone(), |o, out| effective.row(o, out))
    };
    let (er, ec) = (effective(rows, nodes.0), effective(columns, nodes.1));
    let (Some(reach_r), Some(reach_c)) = (er.reach(), ec.reach()) else {
        return Ok(Array2::zeros(span.size()));
    };
    let patch =
        Patch::read(variance, &reach_r, &reach_c, false, Extension::Periodic, MissingCodes::default())?;
    let (height, width) = patch.size();
    let mut plane = Array2::<f64>::zeros((height, width));
    for (i, mut line) in plane.rows_mut().into_iter().enumerate() {
        if let Some(line) = line.as_slice_mut() {
            Plane::Values.load(&patch, 0, i, line, &mut []);
        }
    }
    let mut out = Array2::<f64>::zeros(span.size());
    out.axis_iter_mut(ndarray::Axis(0)).into_par_iter().enumerate().for_each_init(
        || (look.weighers.clone(), Composite::default(), Composite::default(), Vec::new()),
        |(weighers, down, across, taps), (i, mut line)| {
            let row = (span.rows.start + i as i64) as f64;
            for (v, column) in line.iter_mut().zip(span.columns.clone()) {
                let Some((x, y)) = look.position(row, column as f64, weighers) else { continue };
                down.squares(&weighers.0, x, taps, &er, (nodes.0.start, rows.source));
                across.squares(&weighers.1, y, taps, &ec, (nodes.1.start, columns.source));
                let (Ok(top), Ok(left)) = (
                    usize::try_from(down.first - reach_r.start),
                    usize::try_from(across.first - reach_c.start),
                ) else {
                    continue;
                };
                let Some(values) = plane.as_slice() else { continue };
                let mut sum = 0.0;
                for (k, a) in down.weights.iter().enumerate() {
                    let line = &values[(top + k) * width + left..][..across.weights.len()];
                    sum += a * across.weights.iter().zip(line).map(|(b, v)| b * v).sum::<f64>();
                }
                *v = sum;
            }
        },
    );
    Ok(out)
}

/// Weights on nodes, brought to the samples and squared.
#[derive(Default)]
struct Composite {
    first: i64,
    weights: Vec<f64>,
}

impl Composite {
    fn squares(
        &mut self,
        weigher: &Weigher,
        x: f64,
        taps: &mut Vec<f64>,
        rows: &Banded<f64>,
        (nodes_at, period): (i64, usize),
    ) {
        self.weights.clear();
        let first = weigher.weights(x, taps);
        let row = |k: usize| {
            let at = usize::try_from(first + k as i64 - nodes_at).ok()?;
            (at < rows.len()).then(|| rows.row(at)).filter(|(_, w)| !w.is_empty())
        };
        let mut range: Option<Range<i64>> = None;
        for (start, weights) in (0..taps.len()).filter_map(row) {
            let own = start..start + weights.len() as i64;
            range = Some(match range {
                Some(r) => r.start.min(own.start)..r.end.max(own.end),
                None => own,
            });
        }
        let Some(range) = range else { return };
        self.first = range.start;
        self.weights.resize((range.end - range.start) as usize, 0.0);
        for (k, factor) in taps.iter().enumerate() {
            if let Some((start, weights)) = row(k) {
                let at = (start - range.start) as usize;
                self.weights[at..].iter_mut().zip(weights).for_each(|(s, w)| *s += factor * w);
            }
        }
        // More than a period of a periodic line shows samples twice: their weights add before they are squared.
        while self.weights.len() > period {
            let again = self.weights.pop().unwrap_or_default();
            let at = self.weights.len() % period;
            self.weights[at] += again;
        }
        let most = self.weights.iter().fold(0.0f64, |m, w| m.max(w.abs()));
        while self.weights.last().is_some_and(|w| w.abs() <= CUT * most) {
            self.weights.pop();
        }
        let lead = self.weights.iter().position(|w| w.abs() > CUT * most).unwrap_or(0);
        self.weights.drain(..lead);
        self.first += lead as i64;
        self.weights.iter_mut().for_each(|w| *w *= *w);
    }
}

/// Exact overlap: squares of the shares of area. `inside` counts the input's own pixels only, `sum` gives totals.
pub(super) fn of_overlap(
    variance: &Variance,
    back: &Map,
    extension: Extension,
    (inside, sum): (bool, bool),
    span: &Span,
) -> Result<Array2<f64>> {
    let (n, m) = (variance.header.grid.rows, variance.header.grid.columns);
    let edges = |r: &Range<i64>| (r.start as f64 - 0.5, r.end as f64 - 0.5);
    let b = back.bounds(edges(&span.rows), edges(&span.columns));
    let extended = |(low, high): (f64, f64), n: usize| {
        let range = (low.floor().clamp(-9e15, 9e15) as i64)..(high.ceil().clamp(-9e15, 9e15) as i64 + 1);
        // What lies beyond is mirrored, at most a raster's length away.
        let n = n as i64;
        range.start.clamp(-n, n)..range.end.clamp(-n, 2 * n)
    };
    let own = |r: Range<i64>, n: usize| -> Range<usize> {
        if r.start < 0 || r.end > n as i64 {
            return 0..n;
        }
        r.start as usize..r.end as usize
    };
    let window = Window { rows: own(extended(b.rows, n), n), columns: own(extended(b.columns, m), m) };
    let mut out = Array2::<f64>::zeros(span.size());
    if window.area() == 0 {
        return Ok(out);
    }
    let Samples::F64(values) = variance.read(0..1, &window)? else { return Ok(out) };
    let width = window.columns.len();
    out.axis_iter_mut(ndarray::Axis(0)).into_par_iter().enumerate().for_each_init(
        || (Cells::default(), Vec::<(usize, f64)>::new()),
        |(cells, parts), (i, mut line)| {
            let row = (span.rows.start + i as i64) as f64;
            for (v, column) in line.iter_mut().zip(span.columns.clone()) {
                parts.clear();
                let (mut all, mut beyond) = (0.0, false);
                let mut take = |i: i64, k: i64, area: f64| {
                    all += area;
                    let own = (0..n as i64).contains(&i) && (0..m as i64).contains(&k);
                    beyond |= !own;
                    for (r, a) in stands(extension, i, n) {
                        for (c, b) in stands(extension, k, m) {
                            if let (Some(r), Some(c)) =
                                (r.checked_sub(window.rows.start), c.checked_sub(window.columns.start))
                            {
                                parts.push((r * width + c, area * a * b));
                            }
                        }
                    }
                };
                let image = corners(back, row, column as f64);
                cells.under(&image, inside.then_some((n, m)), &mut take);
                if beyond {
                    // Mirrored places show the same sample: its shares add before they are squared.
                    parts.sort_unstable_by_key(|p| p.0);
                    parts.dedup_by(|next, kept| {
                        let same = next.0 == kept.0;
                        if same {
                            kept.1 += next.1;
                        }
                        same
                    });
                }
                let squares: f64 =
                    parts.iter().map(|(at, a)| a * a * values.get(*at).copied().unwrap_or(0.0)).sum();
                *v = if sum || all == 0.0 { squares } else { squares / (all * all) };
            }
        },
    );
    Ok(out)
}

/// The samples that stand at an extended index, with their factors.
fn stands(extension: Extension, k: i64, n: usize) -> impl Iterator<Item = (usize, f64)> {
    let all = match extension.place(k, n) {
        Place::Sample(i) => [(i, 1.0), (0, 0.0), (0, 0.0)],
        Place::Constant(_) | Place::Absent => [(0, 0.0); 3],
        Place::Turned { index, sign, first, last } => [(index, sign), (0, first), (n - 1, last)],
    };
    all.into_iter().filter(|p| p.1 != 0.0)
}
