//! One axis of a resampling: where each output sample looks, and by which steps its value comes about.

use crate::kernel::{Extension, Kernel, SEGMENT, Shape, WARM_UP, segment_window, segments};
use std::ops::Range;

/// How an axis is resampled.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Way {
    /// Whole-pixel positions: samples are taken as they are.
    Copy,
    /// Weights on the samples.
    Taps,
    /// Prefilter, then weights on the coefficients.
    Interpolate,
    /// Weights of the kernel stretched by so many input samples per output sample.
    Widen(f64),
    /// Weights of the stretched basis, then the prefilter on the output's line.
    WidenThenPrefilter(f64),
    /// Prefilter, projection onto the spline of this pitch, its prefilter, and its values.
    LeastSquares(f64),
    /// Overlap with cells of this length.
    Area(f64),
    /// The whole line by the discrete Fourier transform, band-limited to 1/2 over this.
    Fourier(f64),
    /// The polynomial through the whole line.
    Polynomial,
    /// Coefficients only: what the gather pass evaluates.
    Coefficients,
    /// The coefficients of the least-squares spline of this pitch, for the gather pass.
    LeastSquaresCoefficients(f64),
    /// Prefilter, then weights that keep totals.
    Conserve,
}

/// One axis: `target` samples from a line of `source` samples; output sample o looks at `o * step + offset`.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Axis {
    /// Samples of the input's line.
    pub source: usize,
    /// Samples of the output's line.
    pub target: usize,
    /// Input samples per output sample; negative for a mirror.
    pub step: f64,
    /// Where output sample 0 looks.
    pub offset: f64,
    /// The steps.
    pub way: Way,
}

/// What a range of output samples needs, from the end of the chain to its beginning. All ranges are of the extended line.
#[derive(Clone, Debug, PartialEq)]
pub struct Reach {
    /// Outputs for which weights are needed: the wanted ones and what warms up a prefilter behind them.
    pub outputs: Range<i64>,
    /// Coefficients (or samples) that the weights fall on.
    pub taps: Range<i64>,
    /// Samples.
    pub samples: Range<i64>,
}

impl Axis {
    /// Where an output sample looks.
    #[inline(always)]
    pub fn position(&self, output: i64) -> f64 {
        output as f64 * self.step + self.offset
    }

    /// The edges of output cell `output` on the input's line, measured from its outer edge and clamped to it. Neighbours
    /// share their edge to the bit.
    pub fn cell(&self, output: i64) -> (f64, f64) {
        let edge = |o: i64| ((o as f64 - 0.5) * self.step + self.offset + 0.5).clamp(0.0, self.source as f64);
        let (a, b) = (edge(output), edge(output + 1));
        (a.min(b), a.max(b))
    }

    /// Whether an output sample's centre lies within the input's edges, which belong to it.
    pub fn is_inside(&self, output: i64) -> bool {
        is_inside(self.position(output), self.source)
    }

    /// Whether a prefilter runs over the input's line.
    pub fn filters_input(&self) -> bool {
        matches!(
            self.way,
            Way::Interpolate
                | Way::LeastSquares(_)
                | Way::Coefficients
                | Way::LeastSquaresCoefficients(_)
                | Way::Conserve
        )
    }

    /// Whether a prefilter runs over the output's line.
    pub fn filters_output(&self) -> bool {
        matches!(
            self.way,
            Way::WidenThenPrefilter(_) | Way::LeastSquares(_) | Way::LeastSquaresCoefficients(_)
        )
    }

    /// The samples that values after the output prefilter take on either side (the spline's own values).
    fn finish_radius(&self, kernel: &Kernel) -> i64 {
        if matches!(self.way, Way::LeastSquares(_)) { kernel.symbol().len() as i64 / 2 } else { 0 }
    }

    /// What the outputs `wanted` need.
    pub fn reach(&self, kernel: &Kernel, extension: Extension, wanted: Range<i64>) -> Reach {
        let open = extension == Extension::Open;
        let n = self.source as i64;
        let mut outputs = wanted.clone();
        if self.filters_output() {
            let r = self.finish_radius(kernel);
            outputs = hull(
                segments(self.target, wanted.start - r..wanted.end + r)
                    .iter()
                    .map(|s| segment_window(s, self.target, open)),
            );
        }
        let taps = match self.way {
            Way::Coefficients => outputs.clone(),
            Way::Fourier(_) | Way::Polynomial => 0..n,
            Way::Conserve if is_whole_line(kernel) => 0..n,
            _ => {
                let radius = match self.way {
                    Way::Copy => 0.0,
                    Way::Widen(a) | Way::WidenThenPrefilter(a) => kernel.radius() * a,
                    Way::LeastSquares(a) | Way::LeastSquaresCoefficients(a) => (1.0 + a) * kernel.radius(),
                    Way::Area(a) => 0.5 * a + 0.5,
                    Way::Conserve => kernel.radius().max(1.0) + 0.5 * self.step.abs() + 1.0,
                    _ => kernel.radius(),
                };
                let (a, b) =
                    (self.position(outputs.start), self.position((outputs.end - 1).max(outputs.start)));
                let (mut a, mut b) = (a.min(b), a.max(b));
                if self.way == Way::Conserve {
                    // Nothing lies beyond the line's ends.
                    (a, b) = (a.clamp(-1.0, n as f64), b.clamp(-1.0, n as f64));
                }
                let (low, high) = (a - radius, b + radius);
                // One more on either side for rounding: unused samples cost a little, missing ones would be wrong.
                clamp_index(low.floor() - 1.0)..clamp_index(high.ceil() + 2.0)
            }
        };
        let taps = if open { taps.start.clamp(0, n)..taps.end.clamp(0, n) } else { taps };
        let samples = if self.filters_input() && kernel.is_prefiltered() && !taps.is_empty() {
            hull(segments(self.source, taps.clone()).iter().map(|s| segment_window(s, self.source, open)))
        } else {
            taps.clone()
        };
        Reach { outputs, taps, samples }
    }

    /// The most samples and outputs that any block of `count` outputs needs when the line is cut into such blocks.
    pub fn most_needed(&self, kernel: &Kernel, extension: Extension, count: usize) -> (usize, usize) {
        let (mut samples, mut outputs) = (0, 0);
        let blocks = self.target.div_ceil(count.max(1));
        // Beyond some hundred blocks they repeat each other; the ends differ most.
        let stride = (blocks / 200).max(1);
        for b in (0..blocks).step_by(stride).chain([blocks - 1]) {
            let (start, end) = (b * count, ((b + 1) * count).min(self.target));
            let reach = self.reach(kernel, extension, start as i64..end as i64);
            samples = samples.max(reach.samples.end.saturating_sub(reach.samples.start) as usize);
            outputs = outputs.max(reach.outputs.end.saturating_sub(reach.outputs.start) as usize);
        }
        (samples, outputs)
    }

    /// The most samples that `count` neighbouring coefficients can need, wherever they lie.
    pub fn most_samples(&self, kernel: &Kernel, count: usize) -> usize {
        let whole = self.target + 2 * WARM_UP + 64;
        let segments = SEGMENT + SEGMENT / 2 + 2 * WARM_UP + 32;
        let outputs =
            if self.filters_output() { (count + 2 * segments).min(whole.max(count)) } else { count };
        let stretch = if let Way::LeastSquaresCoefficients(a) = self.way { a } else { 1.0 };
        let samples =
            (outputs as f64 * self.step.abs() + 2.0 * (kernel.radius() + 1.0) * (stretch + 1.0)) as usize + 4;
        if self.filters_input() {
            (samples + 2 * segments).min(self.source.max(samples) + 2 * WARM_UP + 64)
        } else {
            samples
        }
    }
}

/// Whether a position lies within the edges of a line of `n` samples; a rounding's breadth outside still does.
#[inline(always)]
pub fn is_inside(x: f64, n: usize) -> bool {
    const SLACK_PX: f64 = 1e-9;
    x >= -0.5 - SLACK_PX && x <= n as f64 - 0.5 + SLACK_PX
}

/// The way of an axis under a kernel: `stretch` is the anti-aliasing factor wanted (1 = none).
pub fn choose_way(kernel: &Kernel, step: f64, offset: f64, stretch: f64, least_squares: bool) -> Way {
    let whole = step.abs() == 1.0 && offset.fract() == 0.0;
    if whole && kernel.is_interpolating() {
        return Way::Copy;
    }
    match kernel.shape() {
        Shape::Sinc => Way::Fourier(stretch),
        Shape::Polynomial => Way::Polynomial,
        Shape::Area => Way::Area(step.abs()),
        _ if stretch > 1.0 && least_squares => Way::LeastSquares(stretch),
        _ if stretch > 1.0 && kernel.is_prefiltered() => Way::WidenThenPrefilter(stretch),
        _ if stretch > 1.0 => Way::Widen(stretch),
        _ if kernel.is_prefiltered() => Way::Interpolate,
        _ => Way::Taps,
    }
}

fn is_whole_line(kernel: &Kernel) -> bool {
    matches!(kernel.shape(), Shape::Sinc | Shape::Polynomial)
}

fn hull(ranges: impl Iterator<Item = Range<i64>>) -> Range<i64> {
    ranges.reduce(|a, b| a.start.min(b.start)..a.end.max(b.end)).unwrap_or(0..0)
}

fn clamp_index(v: f64) -> i64 {
    v.clamp(-9e15, 9e15) as i64
}
