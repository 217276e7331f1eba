//! One line of cells on its way through one pass.

use super::{Step, hull};
use crate::kernel::{Extension, Kernel, Place, Prefilter, segment_window, segments};
use crate::resample::conserve::{Conserving, Shares};
use ndarray::Array2;
use ndarray::parallel::prelude::*;
use std::ops::Range;

/// Runs over the rows of a plane in parallel, each thread with buffers of its own.
pub(super) fn for_lines(plane: &mut Array2<f64>, each: impl Fn(usize, &mut [f64], &mut Work) + Sync) {
    plane.axis_iter_mut(ndarray::Axis(0)).into_par_iter().enumerate().for_each_init(
        Work::default,
        |work, (i, mut row)| {
            if let Some(row) = row.as_slice_mut() {
                each(i, row, work);
            }
        },
    );
}

/// Buffers of one thread.
#[derive(Default)]
pub(super) struct Work {
    coefficients: Vec<f64>,
    window: Vec<f64>,
    weights: Vec<f64>,
    first_edge: Shares,
    second_edge: Shares,
}

/// One line of cells on its way through one pass.
pub(super) struct Line<'a> {
    pub step: &'a Step,
    across: f64,
    pub cells: Range<i64>,
    pub reached: Range<i64>,
}

impl<'a> Line<'a> {
    pub fn new(step: &'a Step, across: i64, cells: &Range<i64>, reached: &Range<i64>) -> Self {
        Line { step, across: across as f64, cells: cells.clone(), reached: reached.clone() }
    }

    /// The edge `j` of the new line, in cells from the line's own beginning; its ends are the line's ends, so that nothing
    /// is lost between.
    pub fn edge(&self, j: i64) -> f64 {
        let n = (self.cells.end - self.cells.start) as f64;
        if j <= self.reached.start {
            0.0
        } else if j >= self.reached.end {
            n
        } else {
            (self.step.back(j, self.across) - self.cells.start as f64).clamp(0.0, n)
        }
    }

    /// The coefficients (counted from the line's beginning, beyond its ends as well) that the new cells `wanted` need.
    fn taps(&self, wanted: &Range<i64>, radius: f64) -> Range<i64> {
        let (a, b) = (self.edge(wanted.start), self.edge(wanted.end));
        (a - radius).floor() as i64 - 1..(b + radius).ceil() as i64 + 1
    }

    /// The cells of the line that the new cells `wanted` need.
    pub fn cells_for(&self, wanted: &Range<i64>, radius: f64, filtered: bool) -> Range<i64> {
        let n = (self.cells.end - self.cells.start) as usize;
        let taps = self.taps(wanted, radius);
        let all =
            if filtered { hull(segments(n, taps).iter().map(|s| segment_window(s, n, false))) } else { taps };
        // Beyond an end the line is mirrored: indices fold back.
        let n = n as i64;
        let mut low = all.start.clamp(0, n - 1);
        let mut high = all.end.clamp(1, n);
        if all.start < 0 {
            high = high.max((-all.start).min(n));
            low = 0;
        }
        if all.end > n {
            low = low.min((2 * n - all.end).max(0));
            high = n;
        }
        self.cells.start + low..self.cells.start + high
    }

    /// Fills the part of the new line that `out` holds over `span`.
    pub fn apply(
        &self,
        kernel: &Kernel,
        prefilter: Option<&Prefilter<f64>>,
        span: &Range<i64>,
        out: &mut [f64],
        work: &mut Work,
        cell: impl Fn(i64) -> f64,
    ) {
        let wanted = span.start.max(self.reached.start)..span.end.min(self.reached.end);
        if wanted.is_empty() || self.cells.is_empty() {
            return;
        }
        let n = (self.cells.end - self.cells.start) as usize;
        let conserving = Conserving::new(kernel, n);
        let whole = conserving.is_whole_line();
        let taps = if whole { 0..n as i64 } else { self.taps(&wanted, conserving.radius()) };
        let sample = |k: i64| match Extension::HalfSymmetric.place(k, n) {
            Place::Sample(i) => cell(self.cells.start + i as i64),
            _ => 0.0,
        };
        let Work { coefficients, window, weights, first_edge, second_edge } = work;
        coefficients.clear();
        match prefilter {
            None => coefficients.extend(taps.clone().map(sample)),
            Some(prefilter) => {
                for segment in segments(n, taps.clone()) {
                    let reach = segment_window(&segment, n, false);
                    window.clear();
                    window.extend(reach.clone().map(sample));
                    prefilter.solve(window, 1);
                    let keep = segment.start.max(taps.start)..segment.end.min(taps.end);
                    let from = (keep.start - reach.start) as usize..(keep.end - reach.start) as usize;
                    coefficients.extend_from_slice(&window[from]);
                }
            }
        }
        let mut put = |j: i64, first: i64, weights: &[f64]| {
            let at = ((first - taps.start).max(0) as usize).min(coefficients.len());
            let sum = weights.iter().zip(&coefficients[at..]).fold(0.0, |sum, (w, c)| sum + w * c);
            out[(j - span.start) as usize] = sum;
        };
        // Where the pass only shifts, all inner edges have the same phase, that of the first of them.
        let inner = self.reached.start + 1;
        let even = self.step.scale == 1.0 && !whole && inner + 1 < self.reached.end;
        if even {
            conserving.shares(self.edge(inner), first_edge);
            second_edge.clone_from(first_edge);
            second_edge.first += 1;
            let at = first_edge.up_to(second_edge, weights);
            for j in wanted.start.max(inner)..wanted.end.min(self.reached.end - 1) {
                put(j, at + j - inner, weights);
            }
        }
        let shares = |j: i64, out: &mut Shares| {
            if even && (inner..self.reached.end).contains(&j) {
                conserving.shares(self.edge(inner), out);
                out.first += j - inner;
            } else {
                conserving.shares(self.edge(j), out);
            }
        };
        let mut known = None;
        for j in wanted.filter(|j| !(even && *j >= inner && *j < self.reached.end - 1)) {
            if known != Some(j) {
                shares(j, first_edge);
            }
            shares(j + 1, second_edge);
            let first = first_edge.up_to(second_edge, weights);
            put(j, first, weights);
            std::mem::swap(first_edge, second_edge);
            known = Some(j + 1);
        }
    }
}
