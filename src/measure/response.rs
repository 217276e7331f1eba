//! The response of a resampling to waves and to noise, from its weights and prefilters.
//!
//! For a position x the effective weights have the transfer `H(f; x) = Q(f) sum_k w_k e^(2 pi i f (k - x))`, 1 where
//! nothing is lost; Q is the prefilters' part. Everything here follows from H: the variance gain is the integral of
//! |H|^2 over a period (Parseval), the correlation of two outputs that of H(x) conj H(y) e^(2 pi i f (x - y)).

use std::f64::consts::PI;

/// Weights at a position: fills the vector, returns the index of the first.
pub type WeightsAt<'a> = Box<dyn Fn(f64, &mut Vec<f64>) -> i64 + Sync + 'a>;

/// The operator of one axis.
pub struct AxisOperator<'a> {
    /// Weights at a position: fills the vector, returns the index of the first.
    pub weights: WeightsAt<'a>,
    /// Symbol phi(-b)..=phi(b) of a prefilter on the input's line.
    pub before: Option<Vec<f64>>,
    /// Symbol of a prefilter on the output's line.
    pub after: Option<Vec<f64>>,
    /// Symbol of values taken after that prefilter.
    pub finish: Option<Vec<f64>>,
    /// Input samples per output sample, for what happens on the output's line.
    pub pitch: f64,
    /// Whether samples are taken as they are.
    pub copied: bool,
}

/// One output pixel looked at: its position in the input, and those of its neighbours in the next row and column.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Pixel {
    /// Where the pixel looks.
    pub at: (f64, f64),
    /// Where the pixel one row on looks.
    pub next_row: (f64, f64),
    /// Where the pixel one column on looks.
    pub next_column: (f64, f64),
}

/// What a resampling costs, averaged over the pixels looked at.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Costs {
    /// Modulus of the transfer at 0.10, 0.25 and 0.40 cycles per input pixel, of the axis that loses more.
    pub transfer: [f64; 3],
    /// Frequency (cycles per input pixel) where the transfer first falls to 1/2, at most the coarser grid's Nyquist.
    pub mtf50: f64,
    /// Mean displacement of content along rows and columns, input pixels, positive down and right.
    pub displacement: (f64, f64),
    /// Its spread over sub-pixel phase.
    pub displacement_sigma: f64,
    /// Variance gain: mean, least, greatest.
    pub gain: [f64; 3],
    /// Correlation made between a pixel and the one in the next row.
    pub lag1_rows: f64,
    /// The same for the next column.
    pub lag1_columns: f64,
}

const FREQUENCIES: usize = 192;

/// The complex transfer at a set of frequencies.
type Transfer = Vec<(f64, f64)>;

struct Axis<'a> {
    operator: &'a AxisOperator<'a>,
    /// Q at the integration nodes.
    nodes: Transfer,
}

impl<'a> Axis<'a> {
    fn new(operator: &'a AxisOperator<'a>) -> Self {
        let nodes = (0..FREQUENCIES).map(|j| operator.filters(node(j))).collect();
        Axis { operator, nodes }
    }

    /// Weights on samples at `x`; a single 1 for a copied axis.
    fn weights(&self, x: f64) -> (i64, Vec<f64>) {
        if self.operator.copied {
            return (x.round() as i64, vec![1.0]);
        }
        let mut w = Vec::new();
        let first = (self.operator.weights)(x, &mut w);
        (first, w)
    }

    fn filtered(&self) -> bool {
        !self.operator.copied && (self.operator.before.is_some() || self.operator.after.is_some())
    }

    /// `sum_k w_k v_k` of the effective weights at two positions: the covariance of two outputs of white noise.
    fn covariance(&self, x: f64, y: f64) -> f64 {
        let ((i, v), (j, w)) = (self.weights(x), self.weights(y));
        if !self.filtered() {
            return v
                .iter()
                .enumerate()
                .filter_map(|(k, a)| Some(a * w.get(usize::try_from(i + k as i64 - j).ok()?)?))
                .sum();
        }
        let sum: f64 = (0..FREQUENCIES)
            .map(|n| {
                let f = node(n);
                let (a, b) = (wave(&v, i, 0.0, f), wave(&w, j, 0.0, f));
                let q = self.nodes[n];
                (q.0 * q.0 + q.1 * q.1) * (a.0 * b.0 + a.1 * b.1)
            })
            .sum();
        sum / FREQUENCIES as f64
    }

    fn transfer(&self, x: f64, f: f64) -> (f64, f64) {
        let (first, w) = self.weights(x);
        if self.operator.copied {
            return (1.0, 0.0);
        }
        times(self.operator.filters(f), wave(&w, first, x, f))
    }
}

impl AxisOperator<'_> {
    /// Q(f).
    fn filters(&self, f: f64) -> (f64, f64) {
        let mut q = (1.0, 0.0);
        if let Some(s) = &self.before {
            q = times(q, inverse(symbol(s, f)));
        }
        if let Some(s) = &self.after {
            q = times(q, inverse(symbol(s, f * self.pitch)));
        }
        if let Some(s) = &self.finish {
            q = times(q, symbol(s, f * self.pitch));
        }
        q
    }
}

/// Midpoints of (0, 1/2): the transfer of real weights at -f is the conjugate.
fn node(j: usize) -> f64 {
    (j as f64 + 0.5) / (2.0 * FREQUENCIES as f64)
}

fn wave(w: &[f64], first: i64, x: f64, f: f64) -> (f64, f64) {
    w.iter().enumerate().fold((0.0, 0.0), |s, (k, w)| {
        let (sin, cos) = (2.0 * PI * f * (first as f64 + k as f64 - x)).sin_cos();
        (s.0 + w * cos, s.1 + w * sin)
    })
}

fn symbol(s: &[f64], f: f64) -> (f64, f64) {
    let b = s.len() as i64 / 2;
    s.iter().enumerate().fold((0.0, 0.0), |t, (k, v)| {
        let (sin, cos) = (2.0 * PI * f * (k as i64 - b) as f64).sin_cos();
        (t.0 + v * cos, t.1 - v * sin)
    })
}

fn times(a: (f64, f64), b: (f64, f64)) -> (f64, f64) {
    (a.0 * b.0 - a.1 * b.1, a.0 * b.1 + a.1 * b.0)
}

fn inverse(a: (f64, f64)) -> (f64, f64) {
    let n = a.0 * a.0 + a.1 * a.1;
    (a.0 / n, -a.1 / n)
}

/// Measures a resampling at the given pixels. `rows` and `columns` are the operators that act on input rows and columns.
pub fn measure_costs(rows: &AxisOperator, columns: &AxisOperator, pixels: &[Pixel]) -> Costs {
    let axes = (Axis::new(rows), Axis::new(columns));
    let count = pixels.len().max(1) as f64;
    let modulus = |f: f64| {
        let mean = |axis: &Axis, pick: fn(&Pixel) -> f64| {
            pixels.iter().map(|p| axis.transfer(pick(p), f)).map(|h| h.0.hypot(h.1)).sum::<f64>() / count
        };
        mean(&axes.0, |p| p.at.0).min(mean(&axes.1, |p| p.at.1))
    };
    let moment = |axis: &Axis, x: f64| {
        const STEP: f64 = 1e-4;
        -axis.transfer(x, STEP).1 / (2.0 * PI * STEP) + 0.0
    };
    let moved: Vec<(f64, f64)> =
        pixels.iter().map(|p| (moment(&axes.0, p.at.0), moment(&axes.1, p.at.1))).collect();
    let mean =
        (moved.iter().map(|m| m.0).sum::<f64>() / count, moved.iter().map(|m| m.1).sum::<f64>() / count);
    let spread = moved.iter().map(|m| (m.0 - mean.0).powi(2) + (m.1 - mean.1).powi(2)).sum::<f64>() / count;
    let mut gain = [0.0, f64::INFINITY, 0.0f64];
    let (mut lag_r, mut lag_c) = (0.0, 0.0);
    for p in pixels {
        let pair = |q: (f64, f64)| axes.0.covariance(p.at.0, q.0) * axes.1.covariance(p.at.1, q.1);
        let own = |q: (f64, f64)| axes.0.covariance(q.0, q.0) * axes.1.covariance(q.1, q.1);
        let g = own(p.at);
        gain = [gain[0] + g / count, gain[1].min(g), gain[2].max(g)];
        lag_r += pair(p.next_row) / (g * own(p.next_row)).sqrt() / count;
        lag_c += pair(p.next_column) / (g * own(p.next_column)).sqrt() / count;
    }
    let nyquist = 0.5 / rows.pitch.max(columns.pitch).max(1.0);
    Costs {
        transfer: [0.10, 0.25, 0.40].map(modulus),
        mtf50: half_power(modulus, nyquist),
        displacement: mean,
        displacement_sigma: spread.sqrt(),
        gain,
        lag1_rows: lag_r,
        lag1_columns: lag_c,
    }
}

/// Frequency (cycles per input pixel, 0 to 1/2 in `steps` steps), and the modulus of the transfer there: its mean over the
/// pixels and its least, of the axis that loses more.
pub fn transfer_curve(
    rows: &AxisOperator,
    columns: &AxisOperator,
    pixels: &[Pixel],
    steps: usize,
) -> Vec<[f64; 3]> {
    let axes = (Axis::new(rows), Axis::new(columns));
    (0..=steps)
        .map(|i| {
            let f = 0.5 * i as f64 / steps.max(1) as f64;
            let along = |axis: &Axis, pick: fn(&Pixel) -> f64| {
                let (mut sum, mut least) = (0.0, f64::INFINITY);
                for p in pixels {
                    let h = axis.transfer(pick(p), f);
                    let modulus = h.0.hypot(h.1);
                    sum += modulus;
                    least = f64::min(least, modulus);
                }
                (sum / pixels.len().max(1) as f64, least)
            };
            let (a, b) = (along(&axes.0, |p| p.at.0), along(&axes.1, |p| p.at.1));
            [f, a.0.min(b.0), a.1.min(b.1)]
        })
        .collect()
}

/// Where a falling modulus first reaches 1/2, by a walk and a bisection; `limit` if it does not.
fn half_power(modulus: impl Fn(f64) -> f64, limit: f64) -> f64 {
    const STEPS: usize = 32;
    let at = |i: usize| limit * i as f64 / STEPS as f64;
    let Some(i) = (1..=STEPS).find(|i| modulus(at(*i)) < 0.5) else { return limit };
    let (mut low, mut high) = (at(i - 1), at(i));
    for _ in 0..30 {
        let middle = 0.5 * (low + high);
        if modulus(middle) < 0.5 { high = middle } else { low = middle }
    }
    0.5 * (low + high)
}
