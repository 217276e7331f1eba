//! Patches of a raster, ready to be compared: blurred, and sampled between pixels.

use crate::error::Result;
use crate::kernel::{Kernel, Prefilter};
use ndarray::Array2;

/// Pixels that a position looks at along one axis (the quintic spline).
pub const TAPS: usize = 6;

/// Makes splines of patches of one size.
pub struct Splines {
    quintic: Kernel,
    quartic: Kernel,
    rows: Prefilter<f64>,
    columns: Prefilter<f64>,
}

/// A patch as a quintic spline (B-spline coefficients).
pub struct Spline {
    coefficients: Array2<f64>,
}

/// Values of a moved patch and its derivatives along rows and columns, row after row.
pub struct Moved {
    /// The patch at `position - shift`.
    pub values: Vec<f64>,
    /// Derivative along rows.
    pub down: Vec<f64>,
    /// Derivative along columns.
    pub right: Vec<f64>,
}

impl Splines {
    /// For patches of `size` (rows, columns).
    ///
    /// # Errors
    /// When the kernels' names are not known, which they are.
    pub fn new(size: (usize, usize)) -> Result<Self> {
        let quintic = Kernel::parse("bspline:5")?;
        let symbol = quintic.symbol();
        Ok(Splines {
            rows: Prefilter::new(&symbol, size.0),
            columns: Prefilter::new(&symbol, size.1),
            quartic: Kernel::parse("bspline:4")?,
            quintic,
        })
    }

    /// The spline through the patch's samples. Near the rim (some 8 pixels) it feels that nothing is beyond.
    pub fn spline(&self, patch: &Array2<f64>) -> Spline {
        let (h, w) = patch.dim();
        let mut turned = patch.t().as_standard_layout().into_owned();
        if let Some(lines) = turned.as_slice_mut() {
            self.columns.solve(lines, h);
        }
        let mut coefficients = turned.t().as_standard_layout().into_owned();
        if let Some(lines) = coefficients.as_slice_mut() {
            self.rows.solve(lines, w);
        }
        Spline { coefficients }
    }

    /// Index of the first tap relative to the pixel, weights, and weights of the derivative, for a patch moved by `shift`.
    fn weights(&self, shift: f64) -> (i64, [f64; TAPS], [f64; TAPS]) {
        let whole = (-shift).floor();
        let part = -shift - whole;
        let at = |k: usize| part - (k as f64 - 2.0);
        // The derivative of a B-spline is the difference of two of the next lower degree, half a sample apart.
        let slope = |t: f64| self.quartic.weight(t + 0.5) - self.quartic.weight(t - 0.5);
        (
            whole as i64 - 2,
            std::array::from_fn(|k| self.quintic.weight(at(k))),
            std::array::from_fn(|k| slope(at(k))),
        )
    }

    /// The patch moved by `shift` (rows, columns; content goes down and right), over the pixels `rows` x `columns`. The
    /// caller leaves room for the taps: `None` where they would fall off the patch.
    pub fn moved(
        &self,
        spline: &Spline,
        shift: (f64, f64),
        rows: &std::ops::Range<usize>,
        columns: &std::ops::Range<usize>,
    ) -> Option<Moved> {
        let c = &spline.coefficients;
        let (h, w) = c.dim();
        let (top, wr, dr) = self.weights(shift.0);
        let (left, wc, dc) = self.weights(shift.1);
        let first = |range: &std::ops::Range<usize>, by: i64, n: usize| {
            let start = usize::try_from(range.start as i64 + by).ok()?;
            (start + range.len() + TAPS - 1 <= n).then_some(start)
        };
        let (row_start, column_start) = (first(rows, top, h)?, first(columns, left, w)?);
        let width = columns.len();
        let mut out = Moved { values: Vec::new(), down: Vec::new(), right: Vec::new() };
        let (mut line, mut slope) = (vec![0.0; width + TAPS - 1], vec![0.0; width + TAPS - 1]);
        for r in 0..rows.len() {
            line.fill(0.0);
            slope.fill(0.0);
            for k in 0..TAPS {
                let row = c.row(row_start + r + k);
                let part = row.as_slice()?.get(column_start..column_start + width + TAPS - 1)?;
                for ((l, s), v) in line.iter_mut().zip(&mut slope).zip(part) {
                    *l += wr[k] * v;
                    *s += dr[k] * v;
                }
            }
            let along = |from: &[f64], w: &[f64; TAPS], i: usize| -> f64 {
                w.iter().zip(&from[i..i + TAPS]).map(|(w, v)| w * v).sum()
            };
            for i in 0..width {
                out.values.push(along(&line, &wc, i));
                out.down.push(along(&slope, &wc, i));
                out.right.push(along(&line, &dc, i));
            }
        }
        Some(out)
    }
}

/// A Gaussian of standard deviation `sigma` (rows, columns; pixels), over the patch with its rim repeated outwards.
pub fn blur(patch: &Array2<f64>, sigma: (f64, f64)) -> Array2<f64> {
    let once = |from: &Array2<f64>, sigma: f64| -> Array2<f64> {
        if !(sigma > 1e-3) {
            return from.clone();
        }
        let reach = (4.0 * sigma).ceil() as i64;
        let weights: Vec<f64> = (-reach..=reach).map(|k| (-0.5 * (k as f64 / sigma).powi(2)).exp()).collect();
        let sum: f64 = weights.iter().sum();
        let (h, w) = from.dim();
        let mut out = Array2::zeros((h, w));
        for r in 0..h {
            let mut line = out.row_mut(r);
            for (weight, k) in weights.iter().zip(-reach..) {
                let source = (r as i64 + k).clamp(0, h as i64 - 1) as usize;
                line.scaled_add(weight / sum, &from.row(source));
            }
        }
        out
    };
    let down = once(patch, sigma.0).t().as_standard_layout().into_owned();
    once(&down, sigma.1).t().as_standard_layout().into_owned()
}

#[cfg(test)]
mod tests {
    use super::*;

    fn wave(r: f64, c: f64) -> f64 {
        (0.7 * r + 0.3 * c).sin() + (0.2 * r - 0.9 * c).cos()
    }

    #[test]
    fn a_moved_spline_shows_what_stood_there_and_its_slope() {
        let patch = Array2::from_shape_fn((48, 40), |(r, c)| wave(r as f64, c as f64));
        let Ok(splines) = Splines::new((48, 40)) else { panic!("kernels") };
        let spline = splines.spline(&patch);
        let (rows, columns) = (16..32, 15..25);
        let Some(m) = splines.moved(&spline, (0.4, -1.3), &rows, &columns) else { panic!("room") };
        let step = 1e-5;
        for (i, (r, c)) in rows.flat_map(|r| columns.clone().map(move |c| (r, c))).enumerate() {
            let (r, c) = (r as f64 - 0.4, c as f64 + 1.3);
            assert!((m.values[i] - wave(r, c)).abs() < 1e-3);
            let down = (wave(r + step, c) - wave(r - step, c)) / (2.0 * step);
            let right = (wave(r, c + step) - wave(r, c - step)) / (2.0 * step);
            assert!((m.down[i] - down).abs() < 3e-3 && (m.right[i] - right).abs() < 3e-3);
        }
        assert!(splines.moved(&spline, (20.0, 0.0), &(16..32), &columns).is_none());
    }

    #[test]
    fn a_gaussian_damps_a_wave_by_its_transfer() {
        let f = 0.1;
        let patch = Array2::from_shape_fn((80, 70), |(r, _)| (std::f64::consts::TAU * f * r as f64).cos());
        let soft = blur(&patch, (1.5, 0.5));
        let wanted = (-2.0 * (std::f64::consts::PI * f * 1.5).powi(2)).exp();
        assert!((soft[(40, 35)] / patch[(40, 35)] - wanted).abs() < 1e-3);
    }
}
