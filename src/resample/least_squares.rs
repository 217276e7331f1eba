//! Least-squares reduction: the spline of a coarser pitch that is nearest to the interpolating spline.
//!
//! With the interpolant `sum c[k] beta^n(x - k)` and a coarser spline `sum d[m] beta^n(x/a - m)`, the normal equations are
//! `sum_m' beta^(2n+1)(m - m') d[m'] = xi[m]`, `xi[m] = sum_k c[k] g(a m - k)`, where g is the product integral below.
//! Unser, Aldroubi and Eden 1995, IEEE Trans. Image Process. 4(3):247-258.

use crate::kernel::{Kernel, Pieces};

/// The weights `g` of the projection for degree n and pitch a.
#[derive(Clone, Debug)]
pub struct Projection {
    spline: Pieces,
    pitch: f64,
    /// Nodes on (-1, 1) and weights of Gauss's rule, exact for the product of two pieces.
    rule: Vec<(f64, f64)>,
}

impl Projection {
    /// For a B-spline kernel; the degree is one less than its taps.
    pub fn new(kernel: &Kernel, pitch: f64) -> Self {
        let degree = kernel.taps().unwrap_or(1) - 1;
        Projection { spline: Pieces::b_spline(degree), pitch, rule: gauss_legendre(degree + 1) }
    }

    /// Half the support of `g`, in input samples.
    pub fn radius(&self) -> f64 {
        self.spline.taps as f64 / 2.0 * (1.0 + self.pitch)
    }

    /// `g(t) = (1/a) int beta^n(u) beta^n((u - t) / a) du`, piece by piece between the knots of both factors. The closed form
    /// by truncated powers loses seven digits at degree 5; this loses none.
    pub fn weight(&self, t: f64) -> f64 {
        let (a, taps) = (self.pitch, self.spline.taps);
        let half = taps as f64 / 2.0;
        let (low, high) = ((-half).max(t - a * half), half.min(t + a * half));
        if low >= high {
            return 0.0;
        }
        let mut knots: Vec<f64> = (0..=taps)
            .flat_map(|k| {
                let k = k as f64 - half;
                [k, t + a * k]
            })
            .filter(|k| (low..=high).contains(k))
            .collect();
        knots.sort_by(f64::total_cmp);
        let mut sum = 0.0;
        for w in knots.windows(2) {
            let (middle, h) = (0.5 * (w[0] + w[1]), 0.5 * (w[1] - w[0]));
            for (x, weight) in &self.rule {
                let u = middle + h * x;
                sum += h * weight * self.spline.value(u) * self.spline.value((u - t) / a);
            }
        }
        sum / a
    }

    /// The samples of the B-spline of degree 2n + 1, whose prefilter solves the normal equations.
    pub fn gram_symbol(kernel: &Kernel) -> Vec<f64> {
        let n = kernel.taps().unwrap_or(1) - 1;
        let spline = Pieces::b_spline(2 * n + 1);
        (-(n as i64)..=n as i64).map(|k| spline.value(k as f64)).collect()
    }
}

/// Nodes and weights of the Gauss-Legendre rule of `n` points: Newton's method on the Legendre polynomial from the
/// classic starting guess `cos(pi (i + 3/4) / (n + 1/2))`.
fn gauss_legendre(n: usize) -> Vec<(f64, f64)> {
    (0..n)
        .map(|i| {
            let mut x = (std::f64::consts::PI * (i as f64 + 0.75) / (n as f64 + 0.5)).cos();
            let mut slope = 1.0;
            for _ in 0..20 {
                let (mut p, mut before) = (1.0, 0.0);
                for k in 0..n {
                    let k = k as f64;
                    (p, before) = (((2.0 * k + 1.0) * x * p - k * before) / (k + 1.0), p);
                }
                slope = n as f64 * (x * p - before) / (x * x - 1.0);
                x -= p / slope;
            }
            (x, 2.0 / ((1.0 - x * x) * slope * slope))
        })
        .collect()
}
