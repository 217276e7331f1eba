//! The exact periodic sinc along a line: discrete Fourier transform, then evaluation at evenly spaced positions.
//!
//! The spectrum of the line (of period N, or 2N for the half-symmetric line, whose transform is the cosine transform)
//! is summed at positions `offset + o * step` by the chirp transform of Bluestein 1970 (IEEE Trans. Audio
//! Electroacoust. 18(4):451-455), which needs no relation between step and length.

use super::axis::Axis;
use super::weights::band;
use crate::kernel::Extension;
use rustfft::num_complex::Complex64;
use rustfft::{Fft, FftPlanner};
use std::f64::consts::PI;
use std::sync::Arc;

/// The transform of one axis, prepared once.
pub struct LineSinc {
    source: usize,
    target: usize,
    mirrored: bool,
    forward: Arc<dyn Fft<f64>>,
    chirp_forward: Arc<dyn Fft<f64>>,
    chirp_inverse: Arc<dyn Fft<f64>>,
    /// Factor of harmonic k: its weight and its phase at the first position, times the chirp.
    lead: Vec<Complex64>,
    /// Transform of the conjugate chirp.
    kernel: Vec<Complex64>,
    /// Chirp at output o.
    tail: Vec<Complex64>,
}

impl LineSinc {
    /// Prepares an axis; `stretch` narrows the band to 1 / (2 stretch).
    pub fn new(axis: &Axis, extension: Extension, stretch: f64) -> Self {
        let (n, m) = (axis.source, axis.target);
        let mirrored = extension != Extension::Periodic;
        let period = if mirrored { 2 * n } else { n };
        let (highest, halve) = band(period, stretch, mirrored);
        let turn = axis.step / period as f64;
        let start = axis.offset / period as f64;
        // exp(2 pi i k o turn) = chirp(k) chirp(o) / chirp(o - k), chirp(j) = exp(pi i j^2 turn).
        let chirp = |j: f64| unit(product_mod(j * j, turn, 2.0) / 2.0);
        let lead = (0..=highest)
            .map(|k| {
                let weight = match k {
                    0 => 1.0,
                    _ if halve && k == highest => 1.0,
                    _ => 2.0,
                } / period as f64;
                chirp(k as f64) * unit(product_mod(k as f64, start, 1.0)) * weight
            })
            .collect::<Vec<_>>();
        let len = (highest + 1 + m).next_power_of_two();
        let mut planner = FftPlanner::new();
        let chirp_forward = planner.plan_fft_forward(len);
        let chirp_inverse = planner.plan_fft_inverse(len);
        let mut kernel = vec![Complex64::default(); len];
        for j in 0..m {
            kernel[j] = chirp(j as f64).conj();
        }
        for j in 1..=highest {
            kernel[len - j] = chirp(j as f64).conj();
        }
        chirp_forward.process(&mut kernel);
        for v in &mut kernel {
            *v /= len as f64;
        }
        LineSinc {
            source: n,
            target: m,
            mirrored,
            forward: planner.plan_fft_forward(period),
            chirp_forward,
            chirp_inverse,
            lead,
            kernel,
            tail: (0..m).map(|o| chirp(o as f64)).collect(),
        }
    }

    /// Resamples one line: `line(k)` gives sample k, `put(o, v)` takes output o.
    pub fn apply(&self, line: impl Fn(usize) -> f64, mut put: impl FnMut(usize, f64)) {
        let n = self.source;
        let mut spectrum: Vec<Complex64> = (0..n).map(|k| Complex64::new(line(k), 0.0)).collect();
        if self.mirrored {
            spectrum.extend((0..n).rev().map(|k| Complex64::new(line(k), 0.0)));
        }
        self.forward.process(&mut spectrum);
        let mut work = vec![Complex64::default(); self.kernel.len()];
        for ((w, s), lead) in work.iter_mut().zip(&spectrum).zip(&self.lead) {
            *w = s * lead;
        }
        self.chirp_forward.process(&mut work);
        for (w, k) in work.iter_mut().zip(&self.kernel) {
            *w *= k;
        }
        self.chirp_inverse.process(&mut work);
        for o in 0..self.target {
            // Real lines have real values: of each pair of harmonics only the one above 0 was summed, doubled.
            put(o, (work[o] * self.tail[o]).re);
        }
    }
}

/// `exp(2 pi i turns)`.
fn unit(turns: f64) -> Complex64 {
    let t = turns - turns.round();
    Complex64::from_polar(1.0, 2.0 * PI * t)
}

/// `(a * b) mod m` with the product's rounding error kept: phases of long lines would lose their last digits otherwise.
fn product_mod(a: f64, b: f64, m: f64) -> f64 {
    let high = a * b;
    let low = a.mul_add(b, -high);
    (high % m) + low
}
