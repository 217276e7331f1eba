//! The shift between two patches, to a hundredth of a pixel and better.
//!
//! First the peak of the cross-correlation of both (windowed, by the discrete Fourier transform) to a whole pixel; then
//! windowed least squares by Gauss and Newton on a spline, with gain, offset and a little blur along either axis (second
//! differences) free. Both patches are blurred alike first. A symmetric blur that only one of them suffered does not bias
//! the answer: at the true shift the errors that it leaves are even, and what the least squares look for is odd. Covariance
//! after Robinson and Milanfar 2004, IEEE Trans. Image
//! Process. 13(9):1185-1199, with the residuals' variance in the place of the noise's.

use super::patch::{Spline, Splines, TAPS, blur};
use super::solve::{invert, solve};
use crate::error::Result;
use ndarray::Array2;
use rustfft::num_complex::Complex64;
use rustfft::{Fft, FftPlanner};
use serde::Serialize;
use std::f64::consts::PI;
use std::ops::Range;
use std::sync::Arc;

/// How content of one patch lies relative to the same content of another.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Shift {
    /// Rows and columns, in pixels of the patch; positive: further down and right.
    pub by: (f64, f64),
    /// Covariance of both, squared pixels.
    pub covariance: [[f64; 2]; 2],
    /// Correlation coefficient of the patches at that shift.
    pub correlation: f64,
    /// Factor between the patches' contrasts.
    pub gain: f64,
}

/// Why a tile has no vote.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum NoVote {
    /// Samples are missing in it.
    Gap,
    /// It has too little texture to tell a shift along both axes.
    Flat,
    /// The two rasters do not show the same there.
    Unlike,
}

/// Measures shifts between patches of one size.
pub struct Estimator {
    size: (usize, usize),
    sigma: (f64, f64),
    /// Pixels at the rim that serve blur and spline alone.
    margin: (usize, usize),
    splines: Splines,
    forward: (Arc<dyn Fft<f64>>, Arc<dyn Fft<f64>>),
    inverse: (Arc<dyn Fft<f64>>, Arc<dyn Fft<f64>>),
}

/// Why no shift was found, and how far the search got where it was still on its way.
type Stuck = (NoVote, Option<(f64, f64)>);

/// Correlation below which two patches do not show the same.
const LEAST_CORRELATION: f64 = 0.5;

impl Estimator {
    /// Pixels at the rim that blur and spline need.
    pub fn margin(sigma: f64) -> usize {
        (4.0 * sigma).ceil() as usize + TAPS + 2
    }

    /// For patches of `size`, both blurred by `sigma` (rows, columns; pixels) before they are compared.
    ///
    /// # Errors
    /// When the spline's kernel is not known, which it is.
    pub fn new(size: (usize, usize), sigma: (f64, f64)) -> Result<Self> {
        let mut planner = FftPlanner::new();
        Ok(Estimator {
            size,
            sigma,
            margin: (Estimator::margin(sigma.0), Estimator::margin(sigma.1)),
            splines: Splines::new(size)?,
            forward: (planner.plan_fft_forward(size.0), planner.plan_fft_forward(size.1)),
            inverse: (planner.plan_fft_inverse(size.0), planner.plan_fft_inverse(size.1)),
        })
    }

    /// By how much the content of `after` lies further down and right than that of `before`.
    ///
    /// # Errors
    /// Why the patches have no vote.
    pub fn measure(&self, after: &Array2<f64>, before: &Array2<f64>) -> Result<Shift, NoVote> {
        if after.iter().chain(before).any(|v| !v.is_finite()) {
            return Err(NoVote::Gap);
        }
        let soft = |patch: &Array2<f64>| {
            let mean = patch.mean().unwrap_or(0.0);
            blur(&patch.mapv(|v| v - mean), self.sigma)
        };
        let largest = before.iter().fold(0.0f64, |a, v| a.max(v.abs()));
        let (after, before) = (soft(after), soft(before));
        let power = before.iter().map(|v| v * v).sum::<f64>() / before.len() as f64;
        // Nothing but rounding.
        if !(power.sqrt() > 1e-9 * largest) {
            return Err(NoVote::Flat);
        }
        let mut from = self.coarse(&after, &before);
        let (mut after, mut before) = (after, before);
        let mut round = 0;
        let mut tries = 0;
        loop {
            match self.refine(&after, &self.splines_of(&before), from) {
                Ok((found, variance)) => {
                    let coarse = (self.sigma.0 / 0.8, self.sigma.1 / 0.8);
                    let differ =
                        (variance.0 / coarse.0.powi(2)).abs().max((variance.1 / coarse.1.powi(2)).abs());
                    if round == 2 || differ < 0.03 {
                        return Ok(found);
                    }
                    // Second differences tell little blurs alone: a larger one is done to the sharper patch, then asked again.
                    let part = |v: f64, unit: f64| v.max(0.0).min(9.0 * unit * unit).sqrt();
                    before = blur(&before, (part(variance.0, coarse.0), part(variance.1, coarse.1)));
                    after = blur(&after, (part(-variance.0, coarse.0), part(-variance.1, coarse.1)));
                    from = found.by;
                    round += 1;
                }
                // It ran out of the room around the guess: guess anew from where it got to.
                Err((NoVote::Unlike, Some(at))) if tries < 4 => {
                    from = at;
                    tries += 1;
                }
                Err((why, _)) => return Err(why),
            }
        }
    }

    /// The patch and its second differences along rows and columns, as splines.
    fn splines_of(&self, patch: &Array2<f64>) -> [Spline; 3] {
        let (h, w) = self.size;
        let curved = |axis: usize| {
            Array2::from_shape_fn(self.size, |(r, c)| {
                let at = |k: i64| {
                    let step = |i: usize, n: usize| (i as i64 + k).clamp(0, n as i64 - 1) as usize;
                    if axis == 0 { patch[(step(r, h), c)] } else { patch[(r, step(c, w))] }
                };
                at(1) + at(-1) - 2.0 * at(0)
            })
        };
        [self.splines.spline(patch), self.splines.spline(&curved(0)), self.splines.spline(&curved(1))]
    }

    /// The whole-pixel peak of the cross-correlation, at most a quarter of the patch away.
    fn coarse(&self, after: &Array2<f64>, before: &Array2<f64>) -> (f64, f64) {
        let (h, w) = self.size;
        let hann = |i: usize, n: usize| (PI * (i as f64 + 0.5) / n as f64).sin().powi(2);
        let spectrum = |patch: &Array2<f64>| {
            let mut s = Array2::from_shape_fn((h, w), |(r, c)| {
                Complex64::new(patch[(r, c)] * hann(r, h) * hann(c, w), 0.0)
            });
            transform(&mut s, &self.forward);
            s
        };
        let mut cross = spectrum(after);
        cross.zip_mut_with(&spectrum(before), |a, b| *a *= b.conj());
        transform(&mut cross, &self.inverse);
        let signed = |i: usize, n: usize| if i > n / 2 { i as i64 - n as i64 } else { i as i64 };
        let (mut best, mut at) = (f64::NEG_INFINITY, (0, 0));
        for ((r, c), v) in cross.indexed_iter() {
            let (dr, dc) = (signed(r, h), signed(c, w));
            if dr.unsigned_abs() as usize <= h / 4 && dc.unsigned_abs() as usize <= w / 4 && v.re > best {
                best = v.re;
                at = (dr, dc);
            }
        }
        (at.0 as f64, at.1 as f64)
    }

    /// Pixels along one axis that can be compared while the shift stays within 2 of `about`.
    fn room(&self, n: usize, margin: usize, about: f64) -> Range<usize> {
        let need = TAPS as f64 + 2.0;
        let low = (margin as f64).max(about.ceil() + need);
        let high = ((n - margin) as f64).min(n as f64 + about.floor() - need);
        if high > low { low as usize..high as usize } else { 0..0 }
    }

    /// Gauss-Newton from a guess: the shift, and by how much the variance of AFTER's blur along rows and columns is larger.
    /// Fails with the place it got to where that is too far from the guess.
    fn refine(
        &self,
        after: &Array2<f64>,
        splines: &[Spline; 3],
        guess: (f64, f64),
    ) -> Result<(Shift, (f64, f64)), Stuck> {
        let rows = self.room(self.size.0, self.margin.0, guess.0);
        let columns = self.room(self.size.1, self.margin.1, guess.1);
        if rows.len() * columns.len() < 64 {
            return Err((NoVote::Unlike, None));
        }
        let target: Vec<f64> =
            rows.clone().flat_map(|r| columns.clone().map(move |c| (r, c))).map(|p| after[p]).collect();
        // Under a Hann window what enters and leaves at the rim counts little.
        let hann = |n: usize| -> Vec<f64> {
            (0..n).map(|i| (PI * (i as f64 + 0.5) / n as f64).sin().powi(2)).collect()
        };
        let (down, across) = (hann(rows.len()), hann(columns.len()));
        let weights: Vec<f64> = down.iter().flat_map(|d| across.iter().map(move |a| d * a)).collect();
        let mut s = guess;
        // Gain, offset, and blur along rows and columns.
        let mut shape: Option<[f64; 4]> = None;
        for _ in 0..40 {
            let moved = |spline| self.splines.moved(spline, s, &rows, &columns).ok_or((NoVote::Unlike, None));
            let (m, rr, cc) = (moved(&splines[0])?, moved(&splines[1])?.values, moved(&splines[2])?.values);
            let [gain, offset, br, bc] = match shape {
                Some(shape) => shape,
                None => start(&target, &m.values, &weights).ok_or((NoVote::Flat, None))?,
            };
            // Unknowns: shift down, shift right, gain, offset, blur along rows, blur along columns.
            let mut sums = Normal::default();
            for (i, t) in target.iter().enumerate() {
                let slope = [-gain * m.down[i], -gain * m.right[i], m.values[i], 1.0, rr[i], cc[i]];
                sums.add(&slope, t - gain * m.values[i] - offset - br * rr[i] - bc * cc[i], weights[i]);
            }
            let mut sums = sums.whole();
            // A lean towards no blur, too weak to be seen: a single wave cannot tell blur from gain.
            for (k, blur) in [(4, br), (5, bc)] {
                let lean = 1e-4 * sums.matrix[k][k];
                sums.matrix[k][k] += lean;
                sums.right_side[k] -= lean * blur;
            }
            if !has_texture(&sums.matrix) {
                return Err((NoVote::Flat, None));
            }
            let Some(step) = solve(&sums.matrix, &sums.right_side) else { return Err((NoVote::Flat, None)) };
            let length = step[0].hypot(step[1]);
            if length < 1e-7 && shape.is_some() {
                // A Gaussian of variance v adds v / 2 of the second derivative.
                let variance = (2.0 * br / gain, 2.0 * bc / gain);
                return self.told(s, gain, &sums, &target, &weights).map(|shift| (shift, variance));
            }
            // Long steps go beyond what the slope tells.
            let damped = (1.0 / length).min(1.0);
            s = (s.0 + damped * step[0], s.1 + damped * step[1]);
            shape = Some([
                gain + damped * step[2],
                offset + damped * step[3],
                br + damped * step[4],
                bc + damped * step[5],
            ]);
            if (s.0 - guess.0).abs() > 1.9 || (s.1 - guess.1).abs() > 1.9 {
                return Err((NoVote::Unlike, Some(s)));
            }
        }
        Err((NoVote::Unlike, None))
    }

    fn told(
        &self,
        by: (f64, f64),
        gain: f64,
        sums: &Normal,
        target: &[f64],
        weights: &[f64],
    ) -> Result<Shift, Stuck> {
        let total = weights.iter().sum::<f64>();
        let mean = target.iter().zip(weights).map(|(t, w)| t * w).sum::<f64>() / total;
        let power: f64 = target.iter().zip(weights).map(|(t, w)| w * (t - mean) * (t - mean)).sum();
        let correlation = (1.0 - sums.squares / power.max(f64::MIN_POSITIVE)).max(0.0).sqrt();
        if !(correlation > LEAST_CORRELATION) || gain <= 0.0 {
            return Err((NoVote::Unlike, None));
        }
        let inverse = invert(&sums.matrix).ok_or((NoVote::Flat, None))?;
        // The blur ties neighbouring residuals together: so many fewer of them speak for themselves.
        let tied = (4.0 * PI * self.sigma.0 * self.sigma.1).max(1.0);
        let variance = sums.squares / total * tied;
        // Least squares with weights that are a window and no inverse variances: N^-1 (sum w^2 j j^T) N^-1.
        let covariance: [[f64; 2]; 2] = std::array::from_fn(|a| {
            std::array::from_fn(|b| {
                let mut sum = 0.0;
                for i in 0..UNKNOWNS {
                    for j in 0..UNKNOWNS {
                        sum += inverse[a][i] * sums.squared[i][j] * inverse[j][b];
                    }
                }
                variance * sum
            })
        });
        // Along an axis without texture the error is as large as what is asked for.
        let coarse = (self.sigma.0 / 0.8, self.sigma.1 / 0.8);
        if covariance[0][0].sqrt() > 0.25 * coarse.0 || covariance[1][1].sqrt() > 0.25 * coarse.1 {
            return Err((NoVote::Flat, None));
        }
        Ok(Shift { by, covariance, correlation, gain })
    }
}

/// Shift (2), gain, offset, blur (2).
const UNKNOWNS: usize = 6;

/// The normal equations of windowed least squares.
#[derive(Default)]
struct Normal {
    matrix: [[f64; UNKNOWNS]; UNKNOWNS],
    /// The same with squared weights.
    squared: [[f64; UNKNOWNS]; UNKNOWNS],
    right_side: [f64; UNKNOWNS],
    /// Weighted sum of squared residuals.
    squares: f64,
}

impl Normal {
    #[inline(always)]
    fn add(&mut self, slope: &[f64; UNKNOWNS], residual: f64, weight: f64) {
        self.squares += weight * residual * residual;
        for a in 0..UNKNOWNS {
            let scaled = weight * slope[a];
            self.right_side[a] += scaled * residual;
            for b in a..UNKNOWNS {
                let product = scaled * slope[b];
                self.matrix[a][b] += product;
                self.squared[a][b] += weight * product;
            }
        }
    }

    /// With the lower triangles filled in.
    fn whole(mut self) -> Self {
        for a in 0..UNKNOWNS {
            for b in 0..a {
                self.matrix[a][b] = self.matrix[b][a];
                self.squared[a][b] = self.squared[b][a];
            }
        }
        self
    }
}

/// Gain and offset before the first step: a wrong contrast would send it astray. `None` where the patch is flat.
fn start(target: &[f64], values: &[f64], weights: &[f64]) -> Option<[f64; 4]> {
    let total: f64 = weights.iter().sum();
    let mean = |v: &[f64]| v.iter().zip(weights).map(|(v, w)| v * w).sum::<f64>() / total;
    let (mt, mv) = (mean(target), mean(values));
    let (mut cross, mut own) = (0.0, 0.0);
    for ((t, v), w) in target.iter().zip(values).zip(weights) {
        cross += w * (t - mt) * (v - mv);
        own += w * (v - mv) * (v - mv);
    }
    let gain = if cross > 0.0 { cross / own } else { 1.0 };
    (own > 0.0).then_some([gain, mt - gain * mv, 0.0, 0.0])
}

/// Whether a shift along either axis changes the patch in a way that no gain and no offset does: the weaker direction must
/// hold more than rounding of all slopes.
fn has_texture(normal: &[[f64; UNKNOWNS]; UNKNOWNS]) -> bool {
    const LEAST: f64 = 1e-8;
    let Some(inverse) = invert(normal) else { return false };
    let (a, b, d) = (inverse[0][0], inverse[0][1], inverse[1][1]);
    let widest = 0.5 * (a + d) + (0.25 * (a - d) * (a - d) + b * b).sqrt();
    widest * LEAST * (normal[0][0] + normal[1][1]) < 1.0
}

/// A plane transform: along columns of each row, then along rows.
pub(super) fn transform(plane: &mut Array2<Complex64>, fft: &(Arc<dyn Fft<f64>>, Arc<dyn Fft<f64>>)) {
    if let Some(lines) = plane.as_slice_mut() {
        fft.1.process(lines);
    }
    let mut turned = plane.t().as_standard_layout().into_owned();
    if let Some(lines) = turned.as_slice_mut() {
        fft.0.process(lines);
    }
    plane.assign(&turned.t());
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::pattern::normal;

    /// Band-limited texture: a sum of waves with fixed random phases, damped as a Gaussian of `blur` pixels would.
    fn texture(r: f64, c: f64, blur: f64) -> f64 {
        (0..60u64)
            .map(|i| {
                let (fr, fc) = (0.1 * normal(1, i), 0.1 * normal(2, i));
                let damp = (-2.0 * PI * PI * blur * blur * (fr * fr + fc * fc)).exp();
                damp * (2.0 * PI * (fr * r + fc * c) + 6.0 * normal(3, i)).cos()
            })
            .sum()
    }

    #[test]
    fn shifts_are_found_to_a_thousandth_and_blur_and_gain_do_not_bias_them() {
        let size = (64, 72);
        let Ok(estimator) = Estimator::new(size, (0.8, 0.8)) else { panic!("kernels") };
        let before = Array2::from_shape_fn(size, |(r, c)| 1000.0 + texture(r as f64, c as f64, 0.0));
        for (dr, dc) in [(0.0, 0.0), (0.5, -0.5), (-0.25, 3.4), (-7.6, 5.1)] {
            let after =
                Array2::from_shape_fn(size, |(r, c)| 40.0 + 0.7 * texture(r as f64 - dr, c as f64 - dc, 1.2));
            let s = estimator.measure(&after, &before).unwrap_or(Shift {
                by: (f64::NAN, 0.0),
                covariance: [[0.0; 2]; 2],
                correlation: 0.0,
                gain: 0.0,
            });
            assert!((s.by.0 - dr).abs() < 4e-3 && (s.by.1 - dc).abs() < 4e-3, "{dr} {dc}: {s:?}");
        }
    }

    #[test]
    fn the_error_told_is_the_error_made() {
        // White noise in one patch: the spread over repetitions against the mean of what is told.
        let size = (48, 48);
        let Ok(estimator) = Estimator::new(size, (0.8, 0.8)) else { panic!("kernels") };
        let before = Array2::from_shape_fn(size, |(r, c)| texture(r as f64, c as f64, 0.0));
        let (mut spread, mut told, mut n) = (0.0, 0.0, 0.0);
        for k in 0..60u64 {
            let after = Array2::from_shape_fn(size, |(r, c)| {
                before[(r, c)] + 1.5 * normal(100 + k, (r * 64 + c) as u64)
            });
            if let Ok(s) = estimator.measure(&after, &before) {
                spread += s.by.0 * s.by.0 + s.by.1 * s.by.1;
                told += s.covariance[0][0] + s.covariance[1][1];
                n += 1.0;
            }
        }
        // What is told is an upper bound for smooth texture, and no more than three times too careful.
        assert!(n == 60.0 && spread < 1.3 * told && told < 9.0 * spread, "{n} {spread} {told}");
    }

    #[test]
    fn patches_without_texture_or_without_likeness_have_no_vote() {
        let size = (48, 48);
        let Ok(estimator) = Estimator::new(size, (0.8, 0.8)) else { panic!("kernels") };
        let flat = Array2::from_elem(size, 7.0);
        let ramp = Array2::from_shape_fn(size, |(r, c)| 3.0 * r as f64 + c as f64);
        let stripes = Array2::from_shape_fn(size, |(r, _)| (0.5 * r as f64).sin());
        for patch in [&flat, &ramp, &stripes] {
            assert_eq!(estimator.measure(patch, patch), Err(NoVote::Flat));
        }
        let noise = |seed| Array2::from_shape_fn(size, |(r, c)| normal(seed, (r * 64 + c) as u64));
        assert_eq!(estimator.measure(&noise(1), &noise(2)), Err(NoVote::Unlike));
        let mut holed = noise(1);
        holed[(20, 20)] = f64::NAN;
        assert_eq!(estimator.measure(&holed, &noise(1)), Err(NoVote::Gap));
    }
}
