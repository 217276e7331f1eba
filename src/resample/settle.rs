//! What becomes of resampled planes: gaps, cells of totals that receive nothing, and what was filled or dropped at gaps.

use crate::measure::Sum;
use crate::real::Real;
use ndarray::Array2;
use ndarray::parallel::prelude::*;
use std::ops::Range;

/// The planes of a masked resampling, or the values alone.
pub struct Resampled<T> {
    /// S[m f]; NaN where nothing is.
    pub values: Array2<T>,
    /// The responses to the mask, where some sample is missing.
    pub mask: Option<Mask<T>>,
}

/// The responses to the mask, as shares of the response to a raster without gaps.
pub struct Mask<T> {
    /// Of the whole chain.
    pub whole: Array2<T>,
    /// Of the kernel's own taps.
    pub taps: Option<Array2<T>>,
    /// Of the moduli of its taps, where some are negative.
    pub moduli: Option<Array2<T>>,
}

/// What happened to totals.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Shifted {
    /// Sum of what output cells outside the frame receive.
    pub left_frame: Sum,
    /// What cells near gaps were given for the part of them that is missing.
    pub filled: Sum,
    /// What fell into cells that are missing.
    pub dropped: Sum,
    /// Sum of moduli of what `--limit` moved from cell to cell.
    pub moved: Sum,
    /// Pixels that `--limit` changed because they exceeded their range.
    pub limited: u64,
    /// Sum of moduli of what still exceeds it.
    pub beyond_limits: Sum,
}

impl Shifted {
    /// Adds another part's sums.
    pub fn merge(&mut self, other: &Shifted) {
        self.left_frame.merge(&other.left_frame);
        self.filled.merge(&other.filled);
        self.dropped.merge(&other.dropped);
        self.moved.merge(&other.moved);
        self.limited += other.limited;
        self.beyond_limits.merge(&other.beyond_limits);
    }
}

/// A settled plane.
pub struct Settled<T> {
    /// NaN = missing.
    pub values: Array2<T>,
    /// Outputs that lean on missing samples by more than 1e-3 of their weight.
    pub near_gap: u64,
    /// What was filled and dropped at gaps.
    pub shifted: Shifted,
    /// The share of the weights that found samples; `None` where none is missing.
    pub(super) share: Option<Array2<T>>,
    /// What the values were divided by at gaps; `None` where none is missing.
    pub(super) divisor: Option<Array2<T>>,
}

impl<T: Real> Settled<T> {
    /// A block of which nothing is seen.
    pub fn of_nothing(values: Array2<T>) -> Self {
        Settled { values, near_gap: 0, shifted: Shifted::default(), share: None, divisor: None }
    }

    /// The share of each pixel's weights that found samples: 1 where none is missing, 0 where nothing is.
    pub fn coverage(&self) -> Vec<f32> {
        let share =
            |at: (usize, usize)| self.share.as_ref().map_or(1.0, |s| s[at].to_f64().clamp(0.0, 1.0) as f32);
        let outside = |at| self.share.as_ref().is_none_or(|s: &Array2<T>| s[at].to_f64().is_nan());
        self.values
            .indexed_iter()
            .map(|(at, v)| if v.to_f64().is_nan() && outside(at) { 0.0 } else { share(at) })
            .collect()
    }
}

/// Divides by the response to the mask and drops what finds too little.
///
/// The value is S[m f] / S[m], with S the whole resampling and m the mask. It is missing where the kernel's own taps, or
/// their moduli, find less than `min_coverage` of their weight, or S[m] less than half of that: a cardinal kernel
/// that stands almost wholly on a gap would have to be guessed from its ripples.
///
/// Counts and sums are those of the rows and columns of `inner`.
pub fn settle<T: Real>(
    resampled: Resampled<T>,
    min_coverage: f64,
    inner: &(Range<usize>, Range<usize>),
) -> Settled<T> {
    let Resampled { mut values, mask } = resampled;
    let Some(mask) = mask else { return Settled::of_nothing(values) };
    const NEAR_GAP: f64 = 1e-3;
    let least = min_coverage.max(1e-6);
    let rows: Vec<(u64, Shifted)> = values
        .axis_iter_mut(ndarray::Axis(0))
        .into_par_iter()
        .enumerate()
        .map(|(r, mut line)| {
            let (mut near, mut shifted) = (0, Shifted::default());
            for (c, v) in line.iter_mut().enumerate() {
                let counts = inner.0.contains(&r) && inner.1.contains(&c);
                let whole = mask.whole[(r, c)].to_f64();
                // Where no sample is missing the response is 1 but for rounding: the value stays as it is, to the bit.
                if (whole - 1.0).abs() <= T::UNITY_SLACK {
                    continue;
                }
                let before = v.to_f64();
                if before.is_nan() {
                    continue;
                }
                let taps = mask.taps.as_ref().map_or(whole, |m| m[(r, c)].to_f64());
                let moduli = mask.moduli.as_ref().map_or(taps, |m| m[(r, c)].to_f64());
                if !(taps >= least && moduli >= least && whole >= 0.5 * least) {
                    *v = T::from_f64(f64::NAN);
                    if counts {
                        shifted.dropped.add(before);
                    }
                    continue;
                }
                *v = *v / mask.whole[(r, c)];
                if counts {
                    near += u64::from((whole - 1.0).abs() > NEAR_GAP);
                    shifted.filled.add(v.to_f64() - before);
                }
            }
            (near, shifted)
        })
        .collect();
    let (mut near_gap, mut shifted) = (0, Shifted::default());
    for (near, part) in &rows {
        near_gap += near;
        shifted.merge(part);
    }
    Settled {
        values,
        near_gap,
        shifted,
        share: Some(mask.taps.unwrap_or_else(|| mask.whole.clone())),
        divisor: Some(mask.whole),
    }
}
