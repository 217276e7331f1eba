//! Weights of one axis: from positions to banded rows, in f64, cast once.

use super::axis::{Axis, Way};
use super::conserve::Conserving;
use super::least_squares::Projection;
use crate::kernel::windowed::dirichlet;
use crate::kernel::{Extension, Kernel, Pieces, Shape};
use crate::real::Real;
use std::ops::Range;

/// Gives the weights at any position of one line; what every pass asks.
#[derive(Clone, Debug)]
pub struct Weigher {
    kernel: Kernel,
    source: usize,
    extension: Extension,
    kind: Kind,
}

#[derive(Clone, Debug)]
enum Kind {
    /// The kernel as it is.
    Plain,
    /// The basis stretched by the factor, normalised.
    Stretched(f64),
    /// The cardinal kernel of a prefilter, as a table of its own, stretched.
    Cardinal { stretch: f64, pieces: Pieces },
    /// Projection onto the spline of a coarser pitch.
    Projected(Projection),
    /// Overlap with a cell of this length.
    Overlap(f64),
    /// The periodic sinc.
    Periodic(f64),
    /// The polynomial through all samples, by its barycentric weights.
    Barycentric(Vec<f64>),
    /// Whole positions.
    Pick,
    /// Cells of this length that keep totals.
    Cell(f64, Conserving),
}

impl Weigher {
    /// For an axis of a plan.
    pub fn new(kernel: &Kernel, extension: Extension, axis: &Axis) -> Self {
        let kind = match axis.way {
            Way::Copy => Kind::Pick,
            Way::Taps | Way::Interpolate | Way::Coefficients => Kind::Plain,
            Way::Widen(a) | Way::WidenThenPrefilter(a) => Kind::Stretched(a),
            Way::LeastSquares(a) | Way::LeastSquaresCoefficients(a) => {
                Kind::Projected(Projection::new(kernel, a))
            }
            Way::Area(a) => Kind::Overlap(a),
            Way::Fourier(a) => Kind::Periodic(a),
            Way::Polynomial => Kind::Barycentric(barycentric(axis.source)),
            Way::Conserve => Kind::Cell(axis.step.abs(), Conserving::new(kernel, axis.source)),
        };
        Weigher { kernel: kernel.clone(), source: axis.source, extension, kind }
    }

    /// For free positions on a line (the gather pass): weights on samples, or on coefficients for an unstretched
    /// prefiltered kernel. `stretch` is 1 where pixels do not grow; a stretched cardinal kernel is cut below `cut`.
    pub fn free(kernel: &Kernel, extension: Extension, source: usize, stretch: f64, cut: f64) -> Self {
        let kind = match kernel.shape() {
            Shape::Sinc => Kind::Periodic(stretch),
            Shape::Polynomial => Kind::Barycentric(barycentric(source)),
            _ if stretch <= 1.0 => Kind::Plain,
            _ => match kernel.is_prefiltered().then(|| kernel.cardinal_pieces(cut)).flatten() {
                Some(pieces) => Kind::Cardinal { stretch, pieces },
                None => Kind::Stretched(stretch),
            },
        };
        Weigher { kernel: kernel.clone(), source, extension, kind }
    }

    /// The same with another stretch, for maps whose Jacobian varies.
    pub fn set_stretch(&mut self, to: f64) {
        match &mut self.kind {
            Kind::Stretched(a) | Kind::Periodic(a) | Kind::Cardinal { stretch: a, .. } => *a = to,
            _ => {}
        }
    }

    /// Samples on either side of a position that may get weight.
    pub fn radius(&self) -> f64 {
        match &self.kind {
            Kind::Plain => self.kernel.radius(),
            Kind::Stretched(a) => self.kernel.radius() * a,
            Kind::Cardinal { stretch, pieces } => (pieces.taps as f64 / 2.0 + pieces.centre.abs()) * stretch,
            Kind::Projected(p) => p.radius(),
            Kind::Overlap(a) => 0.5 * a + 0.5,
            Kind::Periodic(_) | Kind::Barycentric(_) => self.source as f64,
            Kind::Pick => 0.0,
            Kind::Cell(step, c) => c.radius() + 0.5 * step + 1.0,
        }
    }

    /// Whether weights fall on the whole line, wherever the position.
    pub fn is_whole_line(&self) -> bool {
        match &self.kind {
            Kind::Periodic(_) | Kind::Barycentric(_) => true,
            Kind::Cell(_, conserving) => conserving.is_whole_line(),
            _ => false,
        }
    }

    /// The weights at `x`, on the (extended) samples `first..first + out.len()`; they sum to 1. Empty where an open line has
    /// nothing within reach.
    pub fn weights(&self, x: f64, out: &mut Vec<f64>) -> i64 {
        out.clear();
        let first = match &self.kind {
            Kind::Pick => {
                out.push(1.0);
                x.round() as i64
            }
            Kind::Plain => self.kernel.weights_at(x, out),
            Kind::Stretched(a) => {
                let radius = self.kernel.radius() * a;
                self.sampled(x, radius, out, |t| self.kernel.weight(t / a))
            }
            Kind::Cardinal { stretch, pieces } => {
                let shrink = 1.0 / stretch;
                self.sampled(x, self.radius(), out, |t| pieces.value(t * shrink))
            }
            Kind::Projected(p) => self.sampled(x, p.radius(), out, |t| p.weight(t)),
            Kind::Overlap(a) => {
                // A cell of no length is a point: it still lies in one pixel.
                let half = 0.5 * a.max(1e-12);
                self.sampled(x, half + 0.5, out, |t| ((t + half).min(0.5) - (t - half).max(-0.5)).max(0.0))
            }
            Kind::Periodic(stretch) => {
                self.periodic(x, *stretch, out);
                0
            }
            Kind::Barycentric(nodes) => {
                whole_line_polynomial(x, nodes, out);
                0
            }
            Kind::Cell(step, conserving) => {
                // As a response to waves and noise: of a cell of unit total.
                let first = conserving.cell(x + 0.5 - 0.5 * step, x + 0.5 + 0.5 * step, out);
                normalise(out);
                first
            }
        };
        if self.extension == Extension::Open && !self.is_whole_line() {
            clip_open(first, self.source, out)
        } else {
            trim(first, out)
        }
    }

    /// The weights of output `o` of an axis; of a cell that keeps totals they sum to its length.
    pub fn of_output(&self, axis: &Axis, o: i64, out: &mut Vec<f64>) -> i64 {
        let Kind::Cell(_, conserving) = &self.kind else { return self.weights(axis.position(o), out) };
        let (low, high) = axis.cell(o);
        let first = conserving.cell(low, high, out);
        trim(first, out)
    }

    /// Samples `value(x - k)` over |x - k| <= radius, divided by the sum.
    fn sampled(&self, x: f64, radius: f64, out: &mut Vec<f64>, value: impl Fn(f64) -> f64) -> i64 {
        let (low, high) = ((x - radius).ceil() as i64, (x + radius).floor() as i64);
        out.extend((low..=high).map(|k| value(x - k as f64)));
        normalise(out);
        low
    }

    /// The periodic sinc on a periodic line, or folded on a mirrored one.
    fn periodic(&self, x: f64, stretch: f64, out: &mut Vec<f64>) {
        let n = self.source;
        let mirrored = self.extension != Extension::Periodic;
        let period = if mirrored { 2 * n } else { n };
        let (highest, halve) = band(period, stretch, mirrored);
        let kernel = |t: f64| dirichlet(t, period as f64, highest, halve);
        out.extend((0..n).map(|k| {
            let k = k as f64;
            if mirrored { kernel(x - k) + kernel(x + 1.0 + k) } else { kernel(x - k) }
        }));
    }
}

/// The highest harmonic kept on a line of this period, and whether it is the Nyquist term that is halved.
///
/// A mirrored line of 2 n samples has no energy at its Nyquist frequency, so nothing is halved there.
pub(super) fn band(period: usize, stretch: f64, mirrored: bool) -> (usize, bool) {
    let nyquist = period / 2;
    if stretch <= 1.0 {
        return if mirrored { (nyquist - 1, false) } else { (nyquist, period.is_multiple_of(2)) };
    }
    // Slack for factors such as 2 that should keep exactly half of the band; the output's own Nyquist term is dropped.
    let limit = period as f64 / (2.0 * stretch);
    let highest = (limit - 1e-9).ceil() as usize;
    (highest.saturating_sub(1).min(nyquist), false)
}

/// Weights of the polynomial through samples 0..n: `(-1)^k C(n - 1, k)`, the barycentric weights of equal spacing.
pub(super) fn barycentric(n: usize) -> Vec<f64> {
    let mut w = vec![1.0; n];
    for k in 1..n {
        w[k] = -w[k - 1] * (n - k) as f64 / k as f64;
    }
    w
}

pub(super) fn whole_line_polynomial(x: f64, nodes: &[f64], out: &mut Vec<f64>) {
    if x.fract() == 0.0 && x >= 0.0 && (x as usize) < nodes.len() {
        out.extend((0..nodes.len()).map(|k| if k == x as usize { 1.0 } else { 0.0 }));
        return;
    }
    out.extend(nodes.iter().enumerate().map(|(k, w)| w / (x - k as f64)));
    normalise(out);
}

fn normalise(w: &mut [f64]) {
    let sum: f64 = w.iter().sum();
    if sum != 0.0 {
        for v in w {
            *v /= sum;
        }
    }
}

/// Drops zeros at both ends, so that no sample is touched that has no say.
fn trim(first: i64, w: &mut Vec<f64>) -> i64 {
    while w.last() == Some(&0.0) {
        w.pop();
    }
    let lead = w.iter().position(|v| *v != 0.0).unwrap_or(0);
    w.drain(..lead);
    first + lead as i64
}

/// Keeps the weights on samples that exist and divides them by their sum; none where too little is left to divide by, or
/// where lobes cancel and the quotient would be noise.
fn clip_open(first: i64, n: usize, w: &mut Vec<f64>) -> i64 {
    const LEAST_MODULI: f64 = 1e-3;
    const LEAST_SHARE: f64 = 0.1;
    let first = trim(first, w);
    let keep_from = (-first).clamp(0, w.len() as i64);
    let keep_to = (n as i64 - first).clamp(keep_from, w.len() as i64);
    if (keep_from, keep_to) == (0, w.len() as i64) {
        return first;
    }
    w.truncate(keep_to as usize);
    w.drain(..keep_from as usize);
    let sum: f64 = w.iter().sum();
    let moduli: f64 = w.iter().map(|v| v.abs()).sum();
    if moduli < LEAST_MODULI || sum.abs() < LEAST_SHARE * moduli {
        w.clear();
    }
    normalise(w);
    first + keep_from
}

/// Weights of a range of outputs of one axis.
#[derive(Clone, Debug)]
pub struct Banded<T> {
    /// The first sample of each output.
    start: Vec<i64>,
    /// Where each output's weights begin; one more than there are outputs.
    at: Vec<usize>,
    weights: Vec<T>,
}

impl<T: Real> Banded<T> {
    /// Builds the weights of the outputs in `range`.
    pub fn build(axis: &Axis, weigher: &Weigher, range: Range<i64>) -> Self {
        Banded::from_rows(range, |o, w| weigher.of_output(axis, o, w))
    }

    /// From a function that fills in the weights of an output and tells the first sample.
    pub fn from_rows(range: Range<i64>, mut row: impl FnMut(i64, &mut Vec<f64>) -> i64) -> Self {
        let mut banded = Banded { start: Vec::new(), at: vec![0], weights: Vec::new() };
        let mut w = Vec::new();
        for o in range {
            banded.start.push(row(o, &mut w));
            banded.weights.extend(w.iter().map(|v| T::from_f64(*v)));
            banded.at.push(banded.weights.len());
        }
        banded
    }

    /// The samples that weights fall on; `None` if there are none.
    pub fn reach(&self) -> Option<Range<i64>> {
        (0..self.len())
            .map(|i| self.row(i))
            .filter(|(_, w)| !w.is_empty())
            .map(|(first, w)| first..first + w.len() as i64)
            .reduce(|a, b| a.start.min(b.start)..a.end.max(b.end))
    }

    /// The weights of some of the outputs.
    pub fn part(&self, outputs: Range<usize>) -> Self {
        let at = &self.at[outputs.start..=outputs.end];
        Banded {
            start: self.start[outputs].to_vec(),
            at: at.iter().map(|a| a - at[0]).collect(),
            weights: self.weights[at[0]..at[at.len() - 1]].to_vec(),
        }
    }

    /// First sample and weights of output `i` of the range.
    #[inline(always)]
    pub fn row(&self, i: usize) -> (i64, &[T]) {
        (self.start[i], &self.weights[self.at[i]..self.at[i + 1]])
    }

    /// Number of outputs.
    pub fn len(&self) -> usize {
        self.start.len()
    }

    /// Whether there are none.
    pub fn is_empty(&self) -> bool {
        self.start.is_empty()
    }

    /// Whether some weight is negative.
    pub fn has_negative(&self) -> bool {
        self.weights.iter().any(|w| *w < T::default())
    }

    /// The moduli of the weights, each output's divided by their sum.
    pub fn moduli(&self) -> Self {
        let mut out = self.clone();
        for i in 0..self.len() {
            let row = &mut out.weights[self.at[i]..self.at[i + 1]];
            let sum: f64 = row.iter().map(|w| w.magnitude().to_f64()).sum();
            for w in row {
                *w = T::from_f64(w.magnitude().to_f64() / sum);
            }
        }
        out
    }
}
