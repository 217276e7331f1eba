//! How an audit reads: bands, gaps, statistics, and BEFORE brought onto windows of AFTER's grid.

use super::super::account::as_f64;
use super::super::{Progress, reading_windows};
use crate::error::{Error, Result};
use crate::kernel::{Extension, Kernel};
use crate::map::Map;
use crate::measure::audit::{Field, Known};
use crate::raster::{Digest, Header, MissingCodes, Raster, SampleType, Samples, Source, Window};
use crate::resample::{Engine, Extras, Outside, Plan, Reduce, Rules};
use crate::with_samples;
use ndarray::Array2;
use rayon::prelude::*;
use std::ops::Range;

/// One of the two rasters, with what it means by missing.
pub struct Side<'a> {
    pub source: &'a dyn Source,
    pub codes: MissingCodes,
    /// The bands that are looked at.
    pub bands: Range<usize>,
}

impl Side<'_> {
    pub fn size(&self) -> (usize, usize) {
        let grid = &self.source.header().grid;
        (grid.rows, grid.columns)
    }

    /// A window of one band as f64, NaN where samples are missing.
    pub fn plane(&self, band: usize, window: &Window) -> Result<Array2<f64>> {
        let samples = self.source.read(band..band + 1, window)?;
        let mut out = vec![0.0; window.area()];
        with_samples!(&samples, v => as_f64(v, &self.codes, &mut out));
        Array2::from_shape_vec((window.rows.len(), window.columns.len()), out)
            .map_err(|e| Error::unfit(format!("a window came back in another size: {e}"), ""))
    }
}

/// The bands of a side as a raster of their own: their samples, or 1 where there is one and 0 where it is missing.
pub struct View<'a> {
    side: &'a Side<'a>,
    header: Header,
    coverage: bool,
}

impl<'a> View<'a> {
    pub fn new(side: &'a Side<'a>, coverage: bool) -> Self {
        let mut header = side.source.header().clone();
        header.bands = side.bands.len();
        header.band_names = Vec::new();
        if coverage {
            header.sample_type = SampleType::F32;
            header.missing = None;
        }
        View { side, header, coverage }
    }

    /// What means missing in the view.
    pub fn codes(&self) -> MissingCodes {
        if self.coverage { MissingCodes::default() } else { self.side.codes.clone() }
    }
}

impl Source for View<'_> {
    fn header(&self) -> &Header {
        &self.header
    }

    fn read(&self, bands: Range<usize>, window: &Window) -> Result<Samples> {
        let first = self.side.bands.start;
        let samples = self.side.source.read(first + bands.start..first + bands.end, window)?;
        if !self.coverage {
            return Ok(samples);
        }
        let mut values = vec![0.0; samples.len()];
        with_samples!(&samples, v => as_f64(v, &self.side.codes, &mut values));
        Ok(Samples::F32(values.iter().map(|v| if v.is_nan() { 0.0 } else { 1.0 }).collect()))
    }
}

/// What reading one band from end to end tells.
#[derive(Clone, Copy, Debug)]
pub struct Extremes {
    pub low: f64,
    pub high: f64,
    /// Samples that equal the least and the greatest.
    pub at_low: u64,
    pub at_high: u64,
    pub missing: u64,
}

impl Default for Extremes {
    fn default() -> Self {
        Extremes { low: f64::INFINITY, high: f64::NEG_INFINITY, at_low: 0, at_high: 0, missing: 0 }
    }
}

impl Extremes {
    fn add(&mut self, v: f64) {
        if v.is_nan() {
            self.missing += 1;
            return;
        }
        if v < self.low {
            (self.low, self.at_low) = (v, 0);
        }
        if v > self.high {
            (self.high, self.at_high) = (v, 0);
        }
        self.at_low += u64::from(v == self.low);
        self.at_high += u64::from(v == self.high);
    }

    fn merge(&mut self, other: &Extremes) {
        if other.low < self.low {
            (self.low, self.at_low) = (other.low, 0);
        }
        if other.high > self.high {
            (self.high, self.at_high) = (other.high, 0);
        }
        self.at_low += if other.low == self.low { other.at_low } else { 0 };
        self.at_high += if other.high == self.high { other.at_high } else { 0 };
        self.missing += other.missing;
    }

    /// Greatest minus least; 0 of nothing.
    pub fn range(&self) -> f64 {
        (self.high - self.low).max(0.0)
    }
}

/// Reads all bands once: extremes of those looked at, and the digest of the whole.
pub fn survey(
    side: &Side,
    memory: u64,
    progress: &dyn Progress,
    done: &mut u64,
    total: u64,
) -> Result<(Vec<Extremes>, String)> {
    let header = side.source.header();
    let mut digest = Digest::new(header);
    let mut bands = vec![Extremes::default(); side.bands.len()];
    for window in reading_windows(header, memory) {
        if progress.stopped() {
            return Err(Error::Stopped);
        }
        let samples = side.source.read(0..header.bands, &window)?;
        digest.feed(&window, &samples);
        let area = window.area();
        for (extremes, b) in bands.iter_mut().zip(side.bands.clone()) {
            let parts: Vec<Extremes> = (0..area.div_ceil(PART))
                .into_par_iter()
                .map(|p| {
                    let range = b * area + p * PART..b * area + ((p + 1) * PART).min(area);
                    let mut line = vec![0.0; range.len()];
                    with_samples!(&samples, v => as_f64(&v[range], &side.codes, &mut line));
                    let mut part = Extremes::default();
                    line.iter().for_each(|v| part.add(*v));
                    part
                })
                .collect();
            parts.iter().for_each(|p| extremes.merge(p));
        }
        *done += area as u64;
        progress.advance(*done, total);
    }
    Ok((bands, digest.finish(header)))
}

const PART: usize = 1 << 16;

/// All bands of a view by exact overlap on a window of AFTER's grid, band by band; NaN where nothing is.
pub fn overlap(view: &View, window: &Window, back: &Map, memory: u64) -> Result<Vec<f64>> {
    let rules = Rules {
        kernel: Kernel::parse("area")?,
        extension: Extension::Open,
        outside: Outside::Extend,
        // A pixel that finds any sample shows the mean of what it finds.
        min_coverage: 1e-6,
        memory,
        ..Rules::default()
    };
    let bands = view.header.bands;
    let mut out = vec![f64::NAN; bands * window.area()];
    run(view, view.codes(), window, back, &rules, &mut |at, values| {
        let (h, w) = (window.rows.len(), window.columns.len());
        let (bh, bw) = (at.rows.len(), at.columns.len());
        for b in 0..bands {
            for r in 0..bh {
                let to = (b * h + at.rows.start + r) * w + at.columns.start;
                out[to..to + bw].copy_from_slice(&values[(b * bh + r) * bw..][..bw]);
            }
        }
    })?;
    Ok(out)
}

/// Runs the engine over a window of AFTER's grid; `take` gets windows within it and their values, band by band.
fn run(
    source: &dyn Source,
    codes: MissingCodes,
    window: &Window,
    back: &Map,
    rules: &Rules,
    take: &mut dyn FnMut(&Window, &[f64]),
) -> Result<()> {
    let grid = &source.header().grid;
    let target = (window.rows.len(), window.columns.len());
    let there = Map::shift(window.rows.start as f64, window.columns.start as f64).then(back);
    let plan = Plan::new((grid.rows, grid.columns), target, &there, rules)?;
    let engine = Engine {
        source,
        target,
        plan,
        rules,
        codes,
        sample_type: SampleType::F64,
        fill: None,
        extras: Extras::default(),
    };
    engine.run(1, None, &mut |block| {
        let Samples::F64(values) = &block.samples else {
            return Err(Error::unfit("the engine answered in another type than asked for", ""));
        };
        take(&block.window, values);
        Ok(())
    })?;
    Ok(())
}

/// BEFORE brought onto patches of AFTER's grid by high-order splines.
pub struct Bringer<'a> {
    pub before: &'a Side<'a>,
    pub band: usize,
    pub back: Map,
    pub memory: u64,
    /// Input pixels per pixel of AFTER along the input's rows and columns, at least 1.
    pub stretch: (f64, f64),
}

/// Samples around a patch that the spline's prefilter still feels (0.61^28, the slowest pole of degree 9: 1e-6).
const REACH: f64 = 28.0;
/// Gaps so near (in coarser pixels) spoil a patch.
const NEAR: f64 = 6.0;

impl Bringer<'_> {
    /// The same, with a displacement undone on the way.
    pub fn corrected(&self, field: Option<&Field>) -> Self {
        let back = field.map_or(self.back, |f| self.back.then(&f.undone()));
        Bringer { back, ..*self }
    }

    /// What is known of the transfer of the spline that brings BEFORE onto AFTER's grid.
    pub fn known(&self, kernel: &Kernel) -> Known {
        let phase = |(step, offset): (f64, f64)| (step.abs() == 1.0).then(|| offset - offset.floor());
        let axes = self.back.as_axes().filter(|a| !a.swapped);
        Known {
            symbol: kernel.symbol(),
            degree: 9,
            stretch: self.stretch,
            phase: axes.map_or((None, None), |a| (phase(a.rows), phase(a.columns))),
        }
    }

    /// Refuses patches that would not fit the memory, with all threads at work.
    pub fn check(&self, patch: (usize, usize)) -> Result<()> {
        let j = self.back.jacobian(0.0, 0.0);
        let side = |row: [f64; 2], stretch: f64| {
            row[0].abs() * patch.0 as f64 + row[1].abs() * patch.1 as f64 + 2.0 * REACH * stretch
        };
        let size = self.before.size();
        let need = side(j[0], self.stretch.0).min(size.0 as f64 + 2.0 * REACH)
            * side(j[1], self.stretch.1).min(size.1 as f64 + 2.0 * REACH)
            * 48.0
            * rayon::current_num_threads() as f64;
        if need <= self.memory as f64 {
            return Ok(());
        }
        let mib = |bytes: f64| (bytes / 1_048_576.0).ceil();
        Err(Error::Limit {
            what: "comparing tiles of rasters whose pixels differ so much in size".into(),
            needed: format!("{} MiB", mib(need)),
            limit: format!("--memory {} MiB", mib(self.memory as f64)),
            mend: format!("give --memory {}MiB or more", mib(1.1 * need)),
        })
    }

    /// The patch under a window of AFTER's grid for each of `ways` (kernel, protection against aliasing); `None` where
    /// samples are missing in or near it, or it reaches beyond BEFORE.
    pub fn patches(&self, window: &Window, ways: &[(&Kernel, Reduce)]) -> Result<Option<Vec<Array2<f64>>>> {
        let edges = |r: &Range<usize>| (r.start as f64 - 0.5, r.end as f64 - 0.5);
        let b = self.back.bounds(edges(&window.rows), edges(&window.columns));
        let (n, m) = self.before.size();
        // A little beyond the edge there is the extension; only a tile's rim looks there.
        let beyond = (2.0 * self.stretch.0, 2.0 * self.stretch.1);
        if !(b.rows.0 > -0.5 - beyond.0
            && b.rows.1 < n as f64 - 0.5 + beyond.0
            && b.columns.0 > -0.5 - beyond.1
            && b.columns.1 < m as f64 - 0.5 + beyond.1)
        {
            return Ok(None);
        }
        let grown = |by: f64| {
            let axis = |(low, high): (f64, f64), stretch: f64, n: usize| {
                let start = (low - by * stretch).floor().max(0.0) as usize;
                let end = ((high + by * stretch).ceil() + 1.0).min(n as f64) as usize;
                start.min(n)..end.max(start.min(n))
            };
            Window { rows: axis(b.rows, self.stretch.0, n), columns: axis(b.columns, self.stretch.1, m) }
        };
        let (around, near) = (grown(REACH), grown(NEAR));
        let crop = self.before.plane(self.band, &around)?;
        let inside = |r: usize, c: usize| {
            near.rows.contains(&(r + around.rows.start)) && near.columns.contains(&(c + around.columns.start))
        };
        if crop.indexed_iter().any(|((r, c), v)| !v.is_finite() && inside(r, c)) {
            return Ok(None);
        }
        let mut header =
            Header::new(crate::grid::Grid::new(around.rows.len(), around.columns.len()), 1, SampleType::F64);
        header.missing = None;
        let raster = Raster::new(header, Samples::F64(crop.into_iter().collect()))?;
        let back = self.back.then(&Map::shift(-(around.rows.start as f64), -(around.columns.start as f64)));
        let mut out = Vec::new();
        for (kernel, reduce) in ways {
            let rules = Rules {
                kernel: (*kernel).clone(),
                outside: Outside::Extend,
                reduce: *reduce,
                // The patch was measured against the memory before; blocks would only repeat the prefilter.
                memory: 1 << 40,
                ..Rules::default()
            };
            let mut patch = Array2::from_elem((window.rows.len(), window.columns.len()), f64::NAN);
            run(&raster, MissingCodes::default(), window, &back, &rules, &mut |at, values| {
                for (i, r) in at.rows.clone().enumerate() {
                    for (j, c) in at.columns.clone().enumerate() {
                        patch[(r, c)] = values[i * at.columns.len() + j];
                    }
                }
            })?;
            if patch.iter().any(|v| !v.is_finite()) {
                return Ok(None);
            }
            out.push(patch);
        }
        Ok(Some(out))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn extremes_of_parts_are_those_of_the_whole() {
        let values = [3.0, f64::NAN, 1.0, 7.0, 7.0, 1.0, 1.0, 2.0, 7.0, 7.0];
        let of = |v: &[f64]| {
            let mut e = Extremes::default();
            v.iter().for_each(|v| e.add(*v));
            e
        };
        for cut in 0..=values.len() {
            let mut e = of(&values[..cut]);
            e.merge(&of(&values[cut..]));
            assert_eq!((e.low, e.high, e.at_low, e.at_high, e.missing), (1.0, 7.0, 3, 4, 1), "{cut}");
        }
        let mut e = of(&[5.0, 5.0]);
        e.merge(&of(&[5.0]));
        assert_eq!((e.at_low, e.at_high), (3, 3));
    }
}
