//! Effective weights: what each output sample of an axis takes of each input sample, prefilters and extension included.
//!
//! The steps of the axis are followed backwards: from the output through the filters on the output's line, the weights,
//! and the filter on the input's line, to the extended samples, which are folded onto those that exist. Variance goes
//! through the squares of these weights.

use super::axis::{Axis, Way};
use super::least_squares::Projection;
use super::weights::{Banded, Weigher};
use crate::kernel::{Extension, Kernel, Place, Prefilter, WARM_UP};
use std::ops::Range;

/// Weights below this share of an output's largest are left out: their squares add up to less than 1e-8.
pub(super) const CUT: f64 = 3e-5;

/// The same for weights that are weighed once more: what they leave out meets larger weights then, and counts by itself, not
/// by its square.
const FINE_CUT: f64 = 3e-7;

/// The effective weights of one axis.
#[derive(Clone)]
pub struct Effective {
    axis: Axis,
    weigher: Weigher,
    extension: Extension,
    before: Option<Filter>,
    after: Option<Filter>,
    /// Values at knots taken after the filter on the output's line.
    finish: Vec<f64>,
}

/// A run of weights.
#[derive(Clone, Debug, Default)]
pub(super) struct Run {
    pub first: i64,
    pub weights: Vec<f64>,
}

impl Run {
    /// Adds `factor` times other weights.
    pub fn add(&mut self, first: i64, weights: &[f64], factor: f64) {
        if weights.is_empty() {
            return;
        }
        if self.weights.is_empty() {
            self.first = first;
        }
        if first < self.first {
            let more = (self.first - first) as usize;
            self.weights.splice(0..0, std::iter::repeat_n(0.0, more));
            self.first = first;
        }
        let at = (first - self.first) as usize;
        if self.weights.len() < at + weights.len() {
            self.weights.resize(at + weights.len(), 0.0);
        }
        self.weights[at..].iter_mut().zip(weights).for_each(|(s, w)| *s += factor * w);
    }

    /// The samples that weights fall on; `None` if there are none.
    pub fn range(&self) -> Option<Range<i64>> {
        (!self.weights.is_empty()).then(|| self.first..self.first + self.weights.len() as i64)
    }

    /// Drops what is too small at both ends for squares.
    pub fn trim(&mut self) {
        self.drop_below(CUT);
    }

    /// Drops what is too small at both ends for further weighing.
    pub fn trim_finely(&mut self) {
        self.drop_below(FINE_CUT);
    }

    fn drop_below(&mut self, share: f64) {
        let most = self.weights.iter().fold(0.0f64, |m, w| m.max(w.abs()));
        let counts = |w: &f64| w.abs() > share * most;
        let end = self.weights.iter().rposition(counts).map_or(0, |i| i + 1);
        self.weights.truncate(end);
        let start = self.weights.iter().position(counts).unwrap_or(0);
        self.weights.drain(..start);
        self.first += start as i64;
    }
}

/// A prefilter, seen from its coefficients.
#[derive(Clone)]
pub(super) struct Filter {
    /// What coefficient l takes of sample l - m, for m from `-reach` on.
    taken: Vec<f64>,
    reach: i64,
    /// For an open line: the filter itself and the one of the transposed equations.
    open: Option<(Prefilter<f64>, Prefilter<f64>)>,
    /// Length of the line.
    n: usize,
}

impl Filter {
    pub fn new(symbol: &[f64], n: usize, open: bool) -> Self {
        let mut line = vec![0.0; 2 * WARM_UP + 1];
        line[WARM_UP] = 1.0;
        Prefilter::<f64>::new(symbol, 2 * WARM_UP + 1).solve(&mut line, 1);
        let counts = |w: &f64| w.abs() > 1e-3 * FINE_CUT;
        let reach = line.iter().position(counts).map_or(0, |i| WARM_UP - i);
        let reach = reach.max(line.iter().rposition(counts).map_or(0, |i| i.saturating_sub(WARM_UP)));
        let taken = line[WARM_UP - reach..=WARM_UP + reach].to_vec();
        let open = open.then(|| {
            let turned: Vec<f64> = symbol.iter().rev().copied().collect();
            let len = n.min(4 * WARM_UP + 4096);
            (Prefilter::new(symbol, len), Prefilter::new(&turned, len))
        });
        Filter { taken, reach: reach as i64, open, n }
    }

    /// Weights on samples from weights on coefficients.
    pub fn back(&self, on: &Run) -> Run {
        let mut out = Run::default();
        if on.weights.is_empty() {
            return out;
        }
        let Some((prefilter, transposed)) = &self.open else {
            out.first = on.first - self.reach;
            out.weights = vec![0.0; on.weights.len() + self.taken.len() - 1];
            for (i, w) in on.weights.iter().enumerate() {
                // Coefficient l = first + i takes `taken[m + reach]` of sample l - m.
                for (t, sum) in self.taken.iter().rev().zip(&mut out.weights[i..]) {
                    *sum += w * t;
                }
            }
            return out;
        };
        let low = (on.first - WARM_UP as i64).clamp(0, self.n as i64);
        let high = (on.first + on.weights.len() as i64 + WARM_UP as i64).clamp(low, self.n as i64);
        let mut window = vec![0.0; (high - low) as usize];
        for (w, l) in on.weights.iter().zip(on.first..) {
            if (low..high).contains(&l) {
                window[(l - low) as usize] = *w;
            }
        }
        transposed.solve(&mut window, 1);
        for (w, k) in window.iter_mut().zip(low..) {
            *w *= prefilter.open_factor(k as usize, self.n);
        }
        out.first = low;
        out.weights = window;
        out
    }
}

impl Effective {
    /// For an axis of a plan.
    pub fn new(kernel: &Kernel, extension: Extension, axis: &Axis) -> Self {
        let open = extension == Extension::Open;
        let filter = |symbol: &[f64], n: usize| Filter::new(symbol, n, open);
        let before =
            (axis.filters_input() && kernel.is_prefiltered()).then(|| filter(&kernel.symbol(), axis.source));
        let after = match axis.way {
            Way::WidenThenPrefilter(_) => Some(filter(&kernel.symbol(), axis.target)),
            Way::LeastSquares(_) | Way::LeastSquaresCoefficients(_) => {
                Some(filter(&Projection::gram_symbol(kernel), axis.target))
            }
            _ => None,
        };
        let finish = if matches!(axis.way, Way::LeastSquares(_)) { kernel.symbol() } else { Vec::new() };
        let weigher = Weigher::new(kernel, extension, axis);
        Effective { axis: *axis, weigher, extension, before, after, finish }
    }

    /// The weights of output `o` on the samples `first..first + out.len()`; indices beyond the line stand for the periodic
    /// line's samples.
    pub fn row(&self, o: i64, out: &mut Vec<f64>) -> i64 {
        let mut run = self.extended(o);
        self.fold(&mut run);
        run.trim_finely();
        out.clone_from(&run.weights);
        run.first
    }

    /// Input samples per output sample, without sign.
    pub fn step(&self) -> f64 {
        self.axis.step.abs()
    }

    /// The same axis with output 0 at another place.
    pub fn look_at(&mut self, offset: f64) {
        self.axis.offset = offset;
    }

    /// The weights of output `o` on extended samples, as if the line had no ends.
    pub fn unfolded(&self, o: i64, out: &mut Vec<f64>) -> i64 {
        let mut run = self.extended(o);
        run.trim();
        out.clone_from(&run.weights);
        run.first
    }

    /// The weights on extended samples.
    fn extended(&self, o: i64) -> Run {
        let mut outputs = Run { first: o, weights: vec![1.0] };
        if !self.finish.is_empty() {
            outputs = self.finished(o);
        }
        if let Some(after) = &self.after {
            outputs = after.back(&outputs);
            outputs.drop_below(1e-3 * FINE_CUT);
        }
        if self.axis.way == Way::Coefficients {
            return self.before.as_ref().map_or(outputs.clone(), |before| before.back(&outputs));
        }
        let (mut on, mut weights) = (Run::default(), Vec::new());
        for (factor, j) in outputs.weights.iter().zip(outputs.first..) {
            let first = self.weigher.of_output(&self.axis, j, &mut weights);
            on.add(first, &weights, *factor);
        }
        self.before.as_ref().map_or(on.clone(), |before| before.back(&on))
    }

    /// The spline's value at knot `o`, of its coefficients.
    fn finished(&self, o: i64) -> Run {
        let r = self.finish.len() as i64 / 2;
        let mut run = Run { first: o - r, weights: self.finish.clone() };
        if self.extension == Extension::Open {
            let all: f64 = run.weights.iter().sum();
            for (w, k) in run.weights.iter_mut().zip(o - r..) {
                if !(0..self.axis.target as i64).contains(&k) {
                    *w = 0.0;
                }
            }
            let these: f64 = run.weights.iter().sum();
            run.weights.iter_mut().for_each(|w| *w *= all / these);
        }
        run
    }

    /// Moves weights beyond the line's ends to the samples that stand there.
    fn fold(&self, run: &mut Run) {
        let n = self.axis.source;
        let end = run.first + run.weights.len() as i64;
        if run.weights.is_empty() || (run.first >= 0 && end <= n as i64) {
            return;
        }
        if self.extension == Extension::Periodic && run.weights.len() <= n {
            return;
        }
        let mut folded = Run::default();
        for (w, k) in run.weights.iter().zip(run.first..) {
            match self.extension.place(k, n) {
                Place::Sample(i) => folded.add(i as i64, &[*w], 1.0),
                Place::Constant(_) | Place::Absent => {}
                Place::Turned { index, sign, first, last } => {
                    folded.add(index as i64, &[*w], sign);
                    if first != 0.0 {
                        folded.add(0, &[*w], first);
                    }
                    if last != 0.0 {
                        folded.add(n as i64 - 1, &[*w], last);
                    }
                }
            }
        }
        *run = folded;
    }

    /// The squares of the weights of the outputs `range`, and the samples that they fall on.
    pub fn squares(&self, range: Range<i64>) -> (Banded<f64>, Range<i64>) {
        let mut reach: Option<Range<i64>> = None;
        let banded = Banded::from_rows(range, |o, out| {
            let mut run = self.extended(o);
            self.fold(&mut run);
            run.trim();
            let first = run.first;
            out.clone_from(&run.weights);
            out.iter_mut().for_each(|w| *w *= *w);
            if !out.is_empty() {
                let own = first..first + out.len() as i64;
                reach = Some(match reach.take() {
                    Some(r) => r.start.min(own.start)..r.end.max(own.end),
                    None => own,
                });
            }
            first
        });
        (banded, reach.unwrap_or(0..0))
    }
}
