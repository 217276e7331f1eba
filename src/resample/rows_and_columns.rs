//! The pass for maps that keep rows and columns apart: along rows first, then along columns.

use super::chain::{Chain, LANES, Part, Scratch, Stretch};
use super::patch::Patch;
use crate::real::Real;
use ndarray::parallel::prelude::*;
use ndarray::{Array2, Axis as NdAxis};

/// Columns that the second pass takes at a time: a strip of some thousand rows stays in the cache of one core.
const STRIP: usize = 4 * LANES;

/// What of the patch is resampled.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Plane {
    /// The samples, missing ones as 0.
    Values,
    /// 1 where a sample is there, 0 where not.
    Mask,
    /// 1 everywhere.
    Ones,
    /// The cosine of samples with this period, 0 where missing.
    Cosine(f64),
    /// The sine.
    Sine(f64),
}

impl Plane {
    /// Writes one extended row of a patch; `mask` is a buffer of the same length.
    pub fn load<T: Real>(self, patch: &Patch, band: usize, row: usize, out: &mut [T], mask: &mut [T]) {
        let circle = |out: &mut [T], mask: &[T], period: f64, of: fn(f64) -> f64| {
            let turn = 2.0 * std::f64::consts::PI / period;
            out.iter_mut().zip(mask).for_each(|(v, m)| *v = *m * T::from_f64(of(v.to_f64() * turn)));
        };
        match self {
            Plane::Values => patch.row(band, row, out, None),
            Plane::Ones => out.fill(T::ONE),
            Plane::Mask => patch.row(band, row, mask, Some(out)),
            Plane::Cosine(period) => {
                patch.row(band, row, out, Some(mask));
                circle(out, mask, period, f64::cos);
            }
            Plane::Sine(period) => {
                patch.row(band, row, out, Some(mask));
                circle(out, mask, period, f64::sin);
            }
        }
    }
}

/// Resamples one band of a patch. `rows` and `columns` come with the stretches they are wanted for, whose sample ranges are
/// the patch's. The result has the rows and columns wanted.
pub fn resample<T: Real>(
    patch: &Patch,
    band: usize,
    plane: Plane,
    part: Part,
    rows: (&Chain<T>, &Stretch<T>),
    columns: (&Chain<T>, &Stretch<T>),
) -> Array2<T> {
    let (height, width) = patch.size();
    let (out_height, out_width) = (rows.1.wanted.clone().count(), columns.1.wanted.clone().count());
    // A mask is 1 nearly everywhere: lines without gaps all give what a line of ones gives.
    let ones = (plane == Plane::Mask).then(|| (unit(part, columns), unit(part, rows)));
    let mut between = Array2::<T>::default((height, out_width));
    between.axis_chunks_iter_mut(NdAxis(0), LANES).into_par_iter().enumerate().for_each_init(
        || (RowScratch::<T>::new(width, out_width), Scratch::default()),
        |(row, scratch), (group, mut out)| {
            if let Some((line, _)) = &ones
                && (0..out.nrows()).all(|j| patch.is_whole_row(band, group * LANES + j))
            {
                out.rows_mut()
                    .into_iter()
                    .for_each(|mut r| r.iter_mut().zip(line).for_each(|(v, w)| *v = *w));
                return;
            }
            for j in 0..out.nrows() {
                row.load(patch, band, group * LANES + j, j, plane);
            }
            columns.0.apply(part, columns.1, &row.lanes, LANES, &mut row.out, scratch);
            for (j, mut line) in out.rows_mut().into_iter().enumerate() {
                line.iter_mut().zip(row.out.chunks_exact(LANES)).for_each(|(v, lanes)| *v = lanes[j]);
            }
        },
    );
    let mut result = Array2::<T>::default((out_height, out_width));
    result.axis_chunks_iter_mut(NdAxis(1), STRIP).into_par_iter().enumerate().for_each_init(
        || (Vec::new(), Vec::new(), Scratch::default()),
        |(strip, out_strip, scratch), (index, mut out)| {
            let (start, used) = (index * STRIP, out.ncols());
            if let Some((across, down)) = &ones {
                let across = &across[start..start + used];
                let plain =
                    |r: usize| between.row(r).as_slice().is_some_and(|l| &l[start..start + used] == across);
                if (0..height).all(plain) {
                    for (mut line, d) in out.rows_mut().into_iter().zip(down) {
                        line.iter_mut().zip(across).for_each(|(v, a)| *v = *d * *a);
                    }
                    return;
                }
            }
            let lanes = used.next_multiple_of(LANES);
            strip.clear();
            strip.resize(height * lanes, T::default());
            for (r, row) in strip.chunks_exact_mut(lanes).enumerate() {
                if let Some(line) = between.row(r).as_slice() {
                    row[..used].copy_from_slice(&line[start..start + used]);
                }
            }
            out_strip.clear();
            out_strip.resize(out_height * lanes, T::default());
            rows.0.apply(part, rows.1, strip, lanes, out_strip, scratch);
            for (mut line, row) in out.rows_mut().into_iter().zip(out_strip.chunks_exact(lanes)) {
                line.iter_mut().zip(row).for_each(|(v, w)| *v = *w);
            }
        },
    );
    result
}

/// What an axis makes of a line of ones.
fn unit<T: Real>(part: Part, axis: (&Chain<T>, &Stretch<T>)) -> Vec<T> {
    let samples = vec![T::ONE; axis.1.reach.samples.clone().count() * LANES];
    let mut out = vec![T::default(); axis.1.wanted.clone().count() * LANES];
    axis.0.apply(part, axis.1, &samples, LANES, &mut out, &mut Scratch::default());
    out.chunks_exact(LANES).map(|lanes| lanes[0]).collect()
}

/// Sixteen rows side by side.
struct RowScratch<T> {
    line: Vec<T>,
    mask: Vec<T>,
    lanes: Vec<T>,
    out: Vec<T>,
}

impl<T: Real> RowScratch<T> {
    fn new(width: usize, out_width: usize) -> Self {
        RowScratch {
            line: vec![T::default(); width],
            mask: vec![T::default(); width],
            lanes: vec![T::default(); width * LANES],
            out: vec![T::default(); out_width * LANES],
        }
    }

    /// Puts row `row` of the patch into lane `lane`.
    fn load(&mut self, patch: &Patch, band: usize, row: usize, lane: usize, plane: Plane) {
        plane.load(patch, band, row, &mut self.line, &mut self.mask);
        self.lanes.chunks_exact_mut(LANES).zip(&self.line).for_each(|(lanes, v)| lanes[lane] = *v);
    }
}
