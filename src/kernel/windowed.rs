//! The sinc under a window, and the periodic sinc.

use std::f64::consts::PI;

/// A window on [-1, 1].
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Window {
    /// The central lobe of a stretched sinc: Lanczos' sigma factors; Duchon 1979, J. Appl. Meteorol. 18:1016-1022.
    Lanczos,
    /// `(1 + cos(pi u)) / 2`; Harris 1978, Proc. IEEE 66(1):51-83.
    Hann,
    /// `I0(beta sqrt(1 - u^2)) / I0(beta)`; Kaiser 1974, IEEE Int. Symp. Circuits and Systems.
    Kaiser(f64),
}

impl Window {
    /// The window at `u`, 0 outside [-1, 1].
    pub fn value(self, u: f64) -> f64 {
        if u.abs() > 1.0 {
            return 0.0;
        }
        match self {
            Window::Lanczos => sinc(u),
            Window::Hann => 0.5 + 0.5 * (PI * u).cos(),
            Window::Kaiser(beta) => bessel_i0(beta * (1.0 - u * u).max(0.0).sqrt()) / bessel_i0(beta),
        }
    }
}

/// `sin(pi t) / (pi t)`, exactly 0 at whole numbers other than 0.
pub fn sinc(t: f64) -> f64 {
    if t == 0.0 {
        return 1.0;
    }
    sin_pi(t) / (PI * t)
}

/// `sin(pi t)` by way of the distance to the nearest whole number, which keeps zeros exact and large arguments good.
pub fn sin_pi(t: f64) -> f64 {
    let whole = t.round();
    let s = (PI * (t - whole)).sin();
    if whole.rem_euclid(2.0) == 0.0 { s } else { -s }
}

/// The modified Bessel function I0 by its power series; all terms are positive, so nothing cancels.
fn bessel_i0(x: f64) -> f64 {
    let q = x * x / 4.0;
    let (mut sum, mut term, mut k) = (1.0, 1.0, 1.0);
    while term > sum * 1e-18 && k < 1000.0 {
        term *= q / (k * k);
        sum += term;
        k += 1.0;
    }
    sum
}

/// `1 + 2 sum_{1 <= k <= highest} cos(2 pi k t / period)` over the period, with the last term halved if `halve`:
/// the band-limited delta of a signal of that period.
pub fn dirichlet(t: f64, period: f64, highest: usize, halve: bool) -> f64 {
    let turn = t / period;
    let turn = turn - turn.round();
    let h = highest as f64;
    let below = sin_pi(turn);
    // Both closed forms are 0/0 at t = 0 (mod period).
    if below.abs() < 1e-300 {
        return (1.0 + 2.0 * h - if halve { 1.0 } else { 0.0 }) / period;
    }
    let value = if halve {
        // sin(2 pi h u) / tan(pi u)
        sin_pi(2.0 * h * turn) * (PI * turn).cos() / below
    } else {
        sin_pi((2.0 * h + 1.0) * turn) / below
    };
    value / period
}
