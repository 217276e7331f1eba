//! The steps along one axis, applied to a bundle of lines side by side.

use super::axis::{Axis, Reach, Way};
use super::fourier::LineSinc;
use super::least_squares::Projection;
use super::weights::{Banded, Weigher};
use crate::kernel::{Extension, Kernel, Prefilter, segment_window, segments};
use crate::real::Real;
use crate::simd;
use std::ops::Range;

/// Lanes are handled in groups of this many; bundles are padded to it.
pub const LANES: usize = 16;

/// One axis, ready to be applied: prefilters factored, transforms prepared.
pub struct Chain<T> {
    /// Where each output looks.
    pub axis: Axis,
    kernel: Kernel,
    extension: Extension,
    weigher: Weigher,
    before: Option<Prefilter<T>>,
    after: Option<Prefilter<T>>,
    /// The spline's values at its knots, applied last under least squares.
    finish: Vec<T>,
    fourier: Option<LineSinc>,
}

/// The weights for a range of outputs, with what they need.
#[derive(Clone)]
pub struct Stretch<T> {
    /// The outputs wanted.
    pub wanted: Range<i64>,
    /// What they need.
    pub reach: Reach,
    banded: Banded<T>,
}

impl<T: Real> Stretch<T> {
    /// Weights of their own, on the samples `reach`.
    pub fn of_weights(wanted: Range<i64>, reach: Range<i64>, banded: Banded<T>) -> Self {
        let reach = Reach { outputs: wanted.clone(), taps: reach.clone(), samples: reach };
        Stretch { wanted, reach, banded }
    }

    /// Where a piece's samples lie among those of the whole, and its outputs among the whole's.
    pub fn places(&self, whole: &Stretch<T>) -> (Range<usize>, Range<usize>) {
        let among = |own: &Range<i64>, all: &Range<i64>| {
            (own.start - all.start) as usize..(own.end - all.start) as usize
        };
        (among(&self.reach.samples, &whole.reach.samples), among(&self.wanted, &whole.wanted))
    }
}

/// Whether the whole chain is applied or only the weights, without prefilters.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Part {
    /// Prefilter, weights, and all that follows.
    Whole,
    /// The weights alone: how much of them falls on samples that are there.
    Weights,
}

impl<T: Real> Chain<T> {
    /// Prepares an axis.
    pub fn new(axis: Axis, kernel: &Kernel, extension: Extension) -> Self {
        let symbol = || kernel.symbol();
        let after = match axis.way {
            Way::WidenThenPrefilter(_) => Some(Prefilter::for_segments(&symbol())),
            Way::LeastSquares(_) | Way::LeastSquaresCoefficients(_) => {
                Some(Prefilter::for_segments(&Projection::gram_symbol(kernel)))
            }
            _ => None,
        };
        let finish = match axis.way {
            Way::LeastSquares(_) => symbol().into_iter().map(T::from_f64).collect(),
            _ => Vec::new(),
        };
        let before =
            (axis.filters_input() && kernel.is_prefiltered()).then(|| Prefilter::for_segments(&symbol()));
        let fourier = match axis.way {
            Way::Fourier(a) => Some(LineSinc::new(&axis, extension, a)),
            _ => None,
        };
        let weigher = Weigher::new(kernel, extension, &axis);
        Chain { axis, kernel: kernel.clone(), extension, weigher, before, after, finish, fourier }
    }

    /// The weights for the outputs `wanted`.
    pub fn stretch(&self, wanted: Range<i64>) -> Stretch<T> {
        let reach = self.axis.reach(&self.kernel, self.extension, wanted.clone());
        let unweighted = matches!(self.axis.way, Way::Coefficients | Way::Fourier(_));
        let banded =
            Banded::build(&self.axis, &self.weigher, if unweighted { 0..0 } else { reach.outputs.clone() });
        Stretch { wanted, reach, banded }
    }

    /// Cuts a stretch into pieces whose samples lie close together, as far as `part` of the chain allows: each gives the
    /// same numbers as the whole.
    pub fn pieces(&self, part: Part, stretch: &Stretch<T>) -> Vec<Stretch<T>> {
        const PIECE: usize = 64;
        let wanted = stretch.wanted.clone();
        let cuts = part == Part::Weights || !self.is_filtered();
        if self.fourier.is_some() || self.axis.way == Way::Coefficients || !cuts {
            return vec![stretch.clone()];
        }
        let of = |start: i64| {
            let wanted = start..(start + PIECE as i64).min(stretch.wanted.end);
            let rows = (wanted.start - stretch.reach.outputs.start) as usize..;
            let banded = stretch.banded.part(rows.start..rows.start + wanted.clone().count());
            let first = stretch.reach.taps.start;
            let taps = banded.reach().unwrap_or(first..first);
            Stretch {
                reach: Reach { outputs: wanted.clone(), taps: taps.clone(), samples: taps },
                wanted,
                banded,
            }
        };
        wanted.step_by(PIECE).map(of).collect()
    }

    /// Whether the whole chain differs from its weights alone.
    pub fn is_filtered(&self) -> bool {
        self.before.is_some() || self.after.is_some()
    }

    fn open(&self) -> bool {
        self.extension == Extension::Open
    }

    /// Applies the chain. `samples` holds the lines over `stretch.reach.samples`, `out` over `stretch.wanted`; sample i of
    /// lane j at `i * lanes + j`, with `lanes` a multiple of [`LANES`].
    pub fn apply(
        &self,
        part: Part,
        stretch: &Stretch<T>,
        samples: &[T],
        lanes: usize,
        out: &mut [T],
        scratch: &mut Scratch<T>,
    ) {
        let reach = &stretch.reach;
        if let Some(fourier) = &self.fourier {
            if part == Part::Weights {
                // Every sample of the line has a say; its mean is what is there.
                return mean_of_lines(samples, lanes, out);
            }
            for lane in 0..lanes {
                fourier.apply(
                    |k| samples[k * lanes + lane].to_f64(),
                    |o, v| {
                        let o = o as i64;
                        if stretch.wanted.contains(&o) {
                            out[(o - stretch.wanted.start) as usize * lanes + lane] = T::from_f64(v);
                        }
                    },
                );
            }
            return;
        }
        if part == Part::Weights || !self.is_filtered() {
            let skip = (reach.taps.start - reach.samples.start) as usize * lanes;
            if self.axis.way == Way::Coefficients {
                out.copy_from_slice(&samples[skip..][..out.len()]);
                return;
            }
            let from = (stretch.wanted.start - reach.outputs.start) as usize;
            return self.apply_taps(stretch, from, &samples[skip..], reach.taps.start, lanes, out);
        }
        let Scratch { coefficients, outputs, window, finished } = scratch;
        let (taps, tap_start): (&[T], i64) = match &self.before {
            Some(prefilter) => {
                coefficients.clear();
                coefficients
                    .resize(reach.taps.end.saturating_sub(reach.taps.start) as usize * lanes, T::default());
                self.filter(
                    prefilter,
                    self.axis.source,
                    (samples, &reach.samples),
                    (coefficients, &reach.taps),
                    lanes,
                    window,
                );
                (coefficients, reach.taps.start)
            }
            None => (samples, reach.samples.start),
        };
        let Some(after) = &self.after else {
            if self.axis.way == Way::Coefficients {
                out.copy_from_slice(taps);
            } else {
                self.apply_taps(stretch, 0, taps, tap_start, lanes, out);
            }
            return;
        };
        outputs.clear();
        outputs.resize(reach.outputs.end.saturating_sub(reach.outputs.start) as usize * lanes, T::default());
        self.apply_taps(stretch, 0, taps, tap_start, lanes, outputs);
        if self.finish.is_empty() {
            self.filter(
                after,
                self.axis.target,
                (outputs, &reach.outputs),
                (out, &stretch.wanted),
                lanes,
                window,
            );
            return;
        }
        let r = self.finish.len() as i64 / 2;
        let range = stretch.wanted.start - r..stretch.wanted.end + r;
        finished.clear();
        finished.resize((range.end - range.start) as usize * lanes, T::default());
        self.filter(after, self.axis.target, (outputs, &reach.outputs), (finished, &range), lanes, window);
        simd::wide(|| {
            for (o, row) in out.chunks_exact_mut(lanes).enumerate() {
                weighted_rows(&self.finish, &finished[o * lanes..], lanes, row);
                if self.open() {
                    let first = stretch.wanted.start + o as i64 - r;
                    let there = |k: i64| (0..self.axis.target as i64).contains(&(first + k));
                    let of_all: f64 = self.finish.iter().map(|w| w.to_f64()).sum();
                    let of_these: f64 =
                        self.finish.iter().zip(0..).filter(|(_, k)| there(*k)).map(|(w, _)| w.to_f64()).sum();
                    if of_these != of_all {
                        let factor = T::from_f64(of_all / of_these);
                        row.iter_mut().for_each(|v| *v = *v * factor);
                    }
                }
            }
        });
    }

    /// Coefficients over `to.1` from samples over `from.1`, segment by segment.
    fn filter(
        &self,
        prefilter: &Prefilter<T>,
        n: usize,
        from: (&[T], &Range<i64>),
        to: (&mut [T], &Range<i64>),
        lanes: usize,
        window: &mut Vec<T>,
    ) {
        for segment in segments(n, to.1.clone()) {
            let span = segment_window(&segment, n, self.open());
            let start = (span.start - from.1.start) as usize * lanes;
            let end = (span.end - from.1.start) as usize * lanes;
            window.clear();
            window.extend_from_slice(&from.0[start..end]);
            if self.open() {
                for (row, k) in window.chunks_exact_mut(lanes).zip(span.clone()) {
                    let factor = prefilter.open_factor(k as usize, n);
                    if factor != 1.0 {
                        let factor = T::from_f64(factor);
                        row.iter_mut().for_each(|v| *v = *v * factor);
                    }
                }
            }
            simd::wide(|| prefilter.solve(window, lanes));
            let keep = segment.start.max(to.1.start).max(span.start)..segment.end.min(to.1.end).min(span.end);
            if keep.start < keep.end {
                let source = &window
                    [(keep.start - span.start) as usize * lanes..(keep.end - span.start) as usize * lanes];
                to.0[(keep.start - to.1.start) as usize * lanes..][..source.len()].copy_from_slice(source);
            }
        }
    }

    /// Weighs rows `from..` of the banded weights.
    fn apply_taps(
        &self,
        stretch: &Stretch<T>,
        from: usize,
        taps: &[T],
        tap_start: i64,
        lanes: usize,
        out: &mut [T],
    ) {
        simd::wide(|| {
            for (o, row) in out.chunks_exact_mut(lanes).enumerate() {
                let (first, weights) = stretch.banded.row(from + o);
                if weights.is_empty() {
                    row.fill(T::default());
                    continue;
                }
                let source = &taps[(first - tap_start) as usize * lanes..];
                weighted_rows(weights, source, lanes, row);
            }
        });
    }

    /// The moduli of the weights of a stretch, as a stretch of its own.
    pub fn moduli(&self, stretch: &Stretch<T>) -> Option<Stretch<T>> {
        stretch.banded.has_negative().then(|| Stretch {
            wanted: stretch.wanted.clone(),
            reach: stretch.reach.clone(),
            banded: stretch.banded.moduli(),
        })
    }

    /// Whether an output of a stretch gets weight from anything (an open line may offer nothing).
    pub fn is_reached(&self, stretch: &Stretch<T>, output: i64) -> bool {
        stretch.banded.is_empty()
            || !stretch.banded.row((output - stretch.reach.outputs.start) as usize).1.is_empty()
    }
}

/// Buffers that one thread lends to [`Chain::apply`]; garbage afterwards.
#[derive(Default)]
pub struct Scratch<T> {
    coefficients: Vec<T>,
    outputs: Vec<T>,
    window: Vec<T>,
    finished: Vec<T>,
}

/// `out = sum_k weights[k] * source[k]` over rows of `lanes`, tap by tap in order.
#[inline(always)]
pub(super) fn weighted_rows<T: Real>(weights: &[T], source: &[T], lanes: usize, out: &mut [T]) {
    for (g, group) in out.as_chunks_mut::<LANES>().0.iter_mut().enumerate() {
        let mut sum = [T::default(); LANES];
        for (k, w) in weights.iter().enumerate() {
            let row = &source[k * lanes + g * LANES..][..LANES];
            if k == 0 {
                // Not added to 0: a copy must keep the sign of -0.
                for j in 0..LANES {
                    sum[j] = *w * row[j];
                }
            } else {
                for j in 0..LANES {
                    sum[j] = sum[j] + *w * row[j];
                }
            }
        }
        *group = sum;
    }
}

fn mean_of_lines<T: Real>(samples: &[T], lanes: usize, out: &mut [T]) {
    let n = samples.len() / lanes;
    for lane in 0..lanes {
        let sum: f64 = (0..n).map(|k| samples[k * lanes + lane].to_f64()).sum();
        let mean = T::from_f64(sum / n as f64);
        for row in out.chunks_exact_mut(lanes) {
            row[lane] = mean;
        }
    }
}
