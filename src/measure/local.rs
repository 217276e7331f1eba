//! Where signal went: sums before and after on a coarse grid of whole output pixels.

use super::flux::{Balance, Frame};
use super::sum::Sum;
use crate::map::Map;
use crate::map::polygon::{area, clip};
use rayon::prelude::*;
use std::ops::Range;

/// Most cells along an axis.
const MOST: usize = 16;

/// Sums before and after over coarse cells; both in signal times area in input pixels, of totals in their own unit.
#[derive(Clone, Debug)]
pub struct Local {
    /// Output pixels of a coarse cell.
    step: (usize, usize),
    /// Coarse rows and columns.
    size: (usize, usize),
    target: (usize, usize),
    onward: Map,
    back: Map,
    total: bool,
    /// Of input rows and columns, where the map keeps them apart: the coarse cells that they reach, with their shares.
    shares: Option<(bool, AxisShares, AxisShares)>,
    cells: Vec<Cell>,
}

/// For each line of an axis: coarse cells with the share of the line that they hold.
#[derive(Clone, Debug)]
struct AxisShares {
    of: Vec<Vec<(usize, f64)>>,
    /// For each line, where the run of lines ends that lie in the same one cell.
    run_end: Vec<usize>,
}

impl AxisShares {
    fn new(of: Vec<Vec<(usize, f64)>>) -> Self {
        let mut run_end: Vec<usize> = (1..=of.len()).collect();
        for i in (0..of.len().saturating_sub(1)).rev() {
            if of[i].len() <= 1 && of[i] == of[i + 1] {
                run_end[i] = run_end[i + 1];
            }
        }
        AxisShares { of, run_end }
    }
}

#[derive(Clone, Copy, Debug, Default)]
struct Cell {
    before: Sum,
    after: Sum,
    modulus: Sum,
}

impl Local {
    /// For an input of `source` pixels resampled onto `target` pixels, whose positions `back` takes to input positions.
    ///
    /// # Errors
    /// When the map has no inverse.
    pub fn new(
        back: &Map,
        source: (usize, usize),
        target: (usize, usize),
        total: bool,
    ) -> crate::Result<Self> {
        let onward = back.invert()?.checked(source.0, source.1).unwrap_or(back.invert()?);
        let step = (target.0.div_ceil(MOST).max(1), target.1.div_ceil(MOST).max(1));
        let size = (target.0.div_ceil(step.0), target.1.div_ceil(step.1));
        let shares = onward.as_axes().map(|axes| {
            let line = |n: usize, (scale, offset): (f64, f64), step: usize, m: usize| -> AxisShares {
                let of = (0..n).map(|i| {
                    let edge = |u: f64| u * scale + offset + 0.5;
                    let (a, b) = (edge(i as f64 - 0.5), edge(i as f64 + 0.5));
                    parts(a.min(b), a.max(b), step, m)
                });
                AxisShares::new(of.collect())
            };
            // `rows` gives the output's row, from the input's column where the map swaps them.
            let (n, m) = if axes.swapped { (source.1, source.0) } else { source };
            (axes.swapped, line(n, axes.rows, step.0, target.0), line(m, axes.columns, step.1, target.1))
        });
        let cells = vec![Cell::default(); size.0 * size.1];
        Ok(Local { step, size, target, onward, back: *back, total, shares, cells })
    }

    /// Adds input samples of a window, row by row; NaN is missing.
    pub fn add_before(&mut self, rows: &Range<usize>, columns: &Range<usize>, values: &[f64]) {
        let width = columns.len();
        let parts: Vec<Vec<(usize, f64, f64)>> = values
            .par_chunks(width.max(1))
            .zip(rows.clone())
            .map(|(line, r)| self.row_before(r, columns, line))
            .collect();
        for (cell, signal, modulus) in parts.into_iter().flatten() {
            self.cells[cell].before.add(signal);
            self.cells[cell].modulus.add(modulus);
        }
    }

    /// The sums of one input row by coarse cell.
    fn row_before(&self, r: usize, columns: &Range<usize>, line: &[f64]) -> Vec<(usize, f64, f64)> {
        let mut sums = vec![(0.0f64, 0.0f64); self.cells.len()];
        let mut add = |cell: usize, v: f64, modulus: f64| {
            sums[cell].0 += v;
            sums[cell].1 += modulus;
        };
        if let Some((swapped, rows, columns_out)) = &self.shares {
            // The row belongs to some coarse cells as a whole, its samples to others along it.
            let (whole, along) =
                if *swapped { (&columns_out.of[r], rows) } else { (&rows.of[r], columns_out) };
            let cell = |i: usize, k: usize| if *swapped { k * self.size.1 + i } else { i * self.size.1 + k };
            let (mut start, n) = (0, line.len());
            while start < n {
                let shares = &along.of[columns.start + start];
                let end = (along.run_end[columns.start + start] - columns.start).min(n);
                let (signal, modulus) = sum_of(&line[start..end]);
                for (i, a) in whole {
                    shares.iter().for_each(|(k, b)| add(cell(*i, *k), signal * a * b, modulus * a * b));
                }
                start = end;
            }
        } else {
            for (v, c) in line.iter().zip(columns.clone()).filter(|(v, _)| !v.is_nan()) {
                self.spread(r as f64, c as f64, |cell, share| add(cell, v * share, (v * share).abs()));
            }
        }
        let used = |(_, s): &(usize, (f64, f64))| s.1 > 0.0;
        sums.into_iter().enumerate().filter(used).map(|(cell, (s, m))| (cell, s, m)).collect()
    }

    /// The coarse cells under the image of an input pixel, with the share of it that each holds.
    fn spread(&self, row: f64, column: f64, mut give: impl FnMut(usize, f64)) {
        let corners = [(-0.5, -0.5), (-0.5, 0.5), (0.5, 0.5), (0.5, -0.5)]
            .map(|(r, c)| self.onward.apply(row + r, column + c));
        let range = |pick: fn(&(f64, f64)) -> f64, step: usize, n: usize| {
            let low = corners.iter().map(pick).fold(f64::INFINITY, f64::min) + 0.5;
            let high = corners.iter().map(pick).fold(f64::NEG_INFINITY, f64::max) + 0.5;
            let inside = low >= 0.0 && high <= n as f64;
            let cell = |v: f64| (v.clamp(0.0, n as f64 - 0.5) as usize) / step;
            (high > 0.0 && low < n as f64).then(|| (cell(low)..cell(high) + 1, inside))
        };
        let (Some((rows, a)), Some((columns, b))) =
            (range(|p| p.0, self.step.0, self.target.0), range(|p| p.1, self.step.1, self.target.1))
        else {
            return;
        };
        if a && b && rows.len() == 1 && columns.len() == 1 {
            return give(rows.start * self.size.1 + columns.start, 1.0);
        }
        let whole = area(&corners);
        if !(whole > 0.0) {
            return;
        }
        let edge = |i: usize, step: usize, n: usize| (i * step).min(n) as f64 - 0.5;
        let (mut p, mut q) = (Vec::new(), Vec::new());
        for i in rows {
            let (top, bottom) =
                (edge(i, self.step.0, self.target.0), edge(i + 1, self.step.0, self.target.0));
            for k in columns.clone() {
                let (left, right) =
                    (edge(k, self.step.1, self.target.1), edge(k + 1, self.step.1, self.target.1));
                clip(&corners, |c| c.0 - top, &mut p);
                clip(&p, |c| bottom - c.0, &mut q);
                clip(&q, |c| c.1 - left, &mut p);
                clip(&p, |c| right - c.1, &mut q);
                let part = area(&q);
                if part > 0.0 {
                    give(i * self.size.1 + k, part / whole);
                }
            }
        }
    }

    /// Adds output samples of a window, row by row; `frame` tells which share of a pixel counts.
    pub fn add_after(&mut self, frame: &Frame, rows: &Range<usize>, columns: &Range<usize>, values: &[f64]) {
        let width = columns.len();
        let (back, total, step) = (self.back, self.total, self.step.1);
        let parts: Vec<Vec<(usize, f64)>> = values
            .par_chunks(width.max(1))
            .zip(rows.clone())
            .map_init(Vec::new, |shares, (line, r)| {
                let mut out = Vec::new();
                let mut start = 0;
                // Stretches of the row that lie in one coarse cell each.
                while start < width {
                    let k = (columns.start + start) / step;
                    let end = ((k + 1) * step - columns.start).min(width);
                    let mut balance = Balance::default();
                    let span = columns.start + start..columns.start + end;
                    balance.add_row(frame, &back, !total, r, &span, &line[start..end], shares);
                    out.push((k, balance.signal.value()));
                    start = end;
                }
                out
            })
            .collect();
        for (part, r) in parts.into_iter().zip(rows.clone()) {
            for (k, signal) in part {
                self.cells[r / self.step.0 * self.size.1 + k].after.add(signal);
            }
        }
    }

    /// Takes back what an output pixel's gap keeps from being compared.
    pub fn take(&mut self, row: usize, column: usize, before: f64, modulus: f64, after: f64) {
        let cell = &mut self.cells[row / self.step.0 * self.size.1 + column / self.step.1];
        cell.before.add(-before);
        cell.modulus.add(-modulus);
        cell.after.add(-after);
    }

    /// Whether samples are sums over their pixel.
    pub fn is_total(&self) -> bool {
        self.total
    }

    /// Output pixels of a coarse cell: rows, columns.
    pub fn step(&self) -> (usize, usize) {
        self.step
    }

    /// Coarse rows and columns, and of each cell (after - before) / sum of |before|; `None` where there is nothing to compare.
    pub fn closure(&self) -> (usize, usize, Vec<Option<f64>>) {
        let most = self.cells.iter().map(|c| c.modulus.value()).fold(0.0, f64::max);
        let value = |c: &Cell| {
            let scale = c.modulus.value();
            // A cell with next to nothing in it would tell of roundings.
            (scale > 1e-9 * most).then(|| (c.after.value() - c.before.value()) / scale)
        };
        (self.size.0, self.size.1, self.cells.iter().map(value).collect())
    }
}

/// The sum of what is there, and of its moduli; in lanes that are added in a fixed order.
fn sum_of(values: &[f64]) -> (f64, f64) {
    const LANES: usize = 8;
    let (mut signal, mut modulus) = ([0.0; LANES], [0.0; LANES]);
    for part in values.chunks(LANES) {
        for (lane, v) in part.iter().enumerate() {
            let v = if v.is_nan() { 0.0 } else { *v };
            signal[lane] += v;
            modulus[lane] += v.abs();
        }
    }
    (signal.iter().sum(), modulus.iter().sum())
}

/// The coarse cells between two edges (in output pixels from the outer edge), with their shares of the length.
fn parts(low: f64, high: f64, step: usize, n: usize) -> Vec<(usize, f64)> {
    let (a, b) = (low.max(0.0), high.min(n as f64));
    if !(b > a) {
        return Vec::new();
    }
    let first = (a as usize / step).min((n - 1) / step);
    let last = ((b.ceil() as usize).saturating_sub(1) / step).min((n - 1) / step);
    (first..=last)
        .filter_map(|k| {
            let (start, end) = ((k * step) as f64, ((k + 1) * step).min(n) as f64);
            let part = (b.min(end) - a.max(start)) / (high - low);
            (part > 0.0).then_some((k, if part > 1.0 - 1e-12 { 1.0 } else { part }))
        })
        .collect()
}
