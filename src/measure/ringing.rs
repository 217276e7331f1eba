//! Ringing: what a kernel makes of a step.

use crate::kernel::{Kernel, Shape};

/// Overshoot of the sinc's step response, `max_x sum_{k >= 0} sinc(x - k) - 1` (tests/reference/kernel_properties.csv).
const SINC_OVERSHOOT: f64 = 0.141_1;

/// The overshoot of a unit step, as a fraction of its height: the greatest `sum_{k >= 0} h(x - k)` minus 1, with h the
/// cardinal kernel as used. `None` for the polynomial through a whole line, which has no bound.
pub fn step_overshoot(kernel: &Kernel) -> Option<f64> {
    match kernel.shape() {
        Shape::Sinc => return Some(SINC_OVERSHOOT),
        Shape::Polynomial => return None,
        _ => {}
    }
    // Coefficients of the step: running sums of the prefilter's response.
    let (step, middle) = if kernel.is_prefiltered() {
        let (inverse, middle) = kernel.inverse_symbol();
        let mut total = 0.0;
        let sums: Vec<f64> = inverse
            .iter()
            .map(|q| {
                total += q;
                total
            })
            .collect();
        (sums, middle)
    } else {
        (Vec::new(), 0)
    };
    let coefficient = |k: i64| match step.len() {
        0 => {
            if k >= 0 {
                1.0
            } else {
                0.0
            }
        }
        n => step[(k + middle).clamp(0, n as i64 - 1) as usize],
    };
    let mut weights = Vec::new();
    let mut response = |x: f64| {
        let first = kernel.weights_at(x, &mut weights);
        weights.iter().enumerate().map(|(m, w)| w * coefficient(first + m as i64)).sum::<f64>()
    };
    let reach = kernel.radius().ceil() + if kernel.is_prefiltered() { 6.0 } else { 1.0 };
    const PER_PIXEL: usize = 64;
    let count = (2.0 * reach) as usize * PER_PIXEL;
    let (mut best, mut greatest) = (0.0, f64::NEG_INFINITY);
    for i in 0..count {
        let x = i as f64 / PER_PIXEL as f64 - reach;
        let v = response(x);
        if v > greatest {
            (best, greatest) = (x, v);
        }
    }
    // The peak may lie between the comb's teeth; between its neighbours there is but one.
    let (mut low, mut high) = (best - 1.0 / PER_PIXEL as f64, best + 1.0 / PER_PIXEL as f64);
    for _ in 0..60 {
        let (p, q) = (low + (high - low) / 3.0, high - (high - low) / 3.0);
        let (v, w) = (response(p), response(q));
        greatest = greatest.max(v).max(w);
        if v < w { low = p } else { high = q }
    }
    let over = greatest - 1.0;
    Some(if over < 1e-9 { 0.0 } else { over })
}
