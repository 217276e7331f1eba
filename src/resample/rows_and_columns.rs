//! The pass for maps that keep rows and columns apart: along rows first, then along columns.

use super::chain::{Chain, LANES, Part, Scratch, Stretch};
use super::patch::Patch;
use crate::real::Real;
use ndarray::parallel::prelude::*;
use ndarray::{Array2, ArrayViewMut2, Axis as NdAxis, s};
use rayon::slice::ParallelSliceMut;

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
    if plane == Plane::Mask {
        return mask(patch, band, part, rows, columns);
    }
    let (height, width) = patch.size();
    let (out_height, out_width) = (rows.1.wanted.clone().count(), columns.1.wanted.clone().count());
    let mut between = Array2::<T>::default((height, out_width));
    between.axis_chunks_iter_mut(NdAxis(0), LANES).into_par_iter().enumerate().for_each_init(
        || (RowScratch::<T>::new(width, out_width), Scratch::default()),
        |(row, scratch), (group, mut out)| {
            row.load(patch, band, group, out.nrows(), plane);
            columns.0.apply(part, columns.1, &row.lanes, LANES, &mut row.out, scratch);
            row.store(&mut out);
        },
    );
    let mut result = Array2::<T>::default((out_height, out_width));
    result.axis_chunks_iter_mut(NdAxis(1), STRIP).into_par_iter().enumerate().for_each_init(
        || (Vec::new(), Vec::new(), Scratch::default()),
        |(strip, out_strip, scratch), (index, mut out)| {
            let lanes = load_strip(&between, index * STRIP, out.ncols(), strip);
            out_strip.clear();
            out_strip.resize(out_height * lanes, T::default());
            rows.0.apply(part, rows.1, strip, lanes, out_strip, scratch);
            store_strip(out_strip, lanes, &mut out);
        },
    );
    result
}

/// Resamples the mask of one band: the same numbers as by [`resample`], but where all samples in reach are there, which a
/// mask is nearly everywhere, what a line of ones gives is put down without any sums.
fn mask<T: Real>(
    patch: &Patch,
    band: usize,
    part: Part,
    rows: (&Chain<T>, &Stretch<T>),
    columns: (&Chain<T>, &Stretch<T>),
) -> Array2<T> {
    let (height, width) = patch.size();
    let (out_height, out_width) = (rows.1.wanted.clone().count(), columns.1.wanted.clone().count());
    let (across, down) = (unit(part, columns), unit(part, rows));
    let pieces = |axis: (&Chain<T>, &Stretch<T>)| axis.0.pieces(part, axis.1);
    let (column_pieces, row_pieces) = (pieces(columns), pieces(rows));
    let mut between = Array2::<T>::default((height, out_width));
    let mut whole_rows = vec![false; height];
    let groups = between.axis_chunks_iter_mut(NdAxis(0), LANES).into_par_iter();
    groups.zip(whole_rows.par_chunks_mut(LANES)).enumerate().for_each_init(
        || (RowScratch::<T>::new(width, out_width), Vec::new(), Scratch::default()),
        |(row, plain, scratch), (group, (mut out, whole))| {
            plain.clear();
            for (lane, whole) in whole.iter_mut().enumerate() {
                *whole = patch.is_whole_row(band, group * LANES + lane);
            }
            if whole.iter().all(|w| *w) {
                out.rows_mut().into_iter().for_each(|mut r| {
                    r.iter_mut().zip(&across).for_each(|(v, w)| *v = *w);
                });
                return;
            }
            row.load(patch, band, group, out.nrows(), Plane::Mask);
            let used = out.nrows();
            plain.extend(row.lanes.chunks_exact(LANES).map(|l| l[..used].iter().all(|v| *v == T::ONE)));
            for piece in &column_pieces {
                let (from, to) = piece.places(columns.1);
                if plain[from.clone()].iter().all(|p| *p) {
                    for (lanes, w) in row.out[to.start * LANES..].chunks_exact_mut(LANES).zip(&across[to]) {
                        lanes.fill(*w);
                    }
                } else {
                    let samples = &row.lanes[from.start * LANES..from.end * LANES];
                    let out = &mut row.out[to.start * LANES..to.end * LANES];
                    columns.0.apply(part, piece, samples, LANES, out, scratch);
                }
            }
            row.store(&mut out);
        },
    );
    let mut result = Array2::<T>::default((out_height, out_width));
    result.axis_chunks_iter_mut(NdAxis(1), LANES).into_par_iter().enumerate().for_each_init(
        || (Vec::new(), Vec::new(), Vec::new(), Scratch::default()),
        |(strip, out_strip, plain, scratch), (index, mut out)| {
            let start = index * LANES;
            let across = &across[start..start + out.ncols()];
            // Far from a gap a recursion comes back to its course but for a rounding.
            let near =
                |v: &T, a: &T| (v.to_f64() - a.to_f64()).abs() <= 0.1 * T::UNITY_SLACK * a.to_f64().abs();
            plain.clear();
            plain.extend(between.rows().into_iter().zip(&whole_rows).map(|(r, whole)| {
                *whole || r.slice(s![start..start + across.len()]).iter().zip(across).all(|(v, a)| near(v, a))
            }));
            if !plain.iter().all(|p| *p) {
                load_strip(&between, start, out.ncols(), strip);
            }
            for piece in &row_pieces {
                let (from, to) = piece.places(rows.1);
                let mut out = out.slice_mut(s![to.clone(), ..]);
                if plain[from.clone()].iter().all(|p| *p) {
                    for (mut line, d) in out.rows_mut().into_iter().zip(&down[to]) {
                        line.iter_mut().zip(across).for_each(|(v, a)| *v = *d * *a);
                    }
                } else {
                    out_strip.clear();
                    out_strip.resize(to.len() * LANES, T::default());
                    let samples = &strip[from.start * LANES..from.end * LANES];
                    rows.0.apply(part, piece, samples, LANES, out_strip, scratch);
                    store_strip(out_strip, LANES, &mut out);
                }
            }
        },
    );
    result
}

/// Copies the columns from `start` on into a strip, padded to whole lanes; returns how many.
fn load_strip<T: Real>(plane: &Array2<T>, start: usize, columns: usize, strip: &mut Vec<T>) -> usize {
    let lanes = columns.next_multiple_of(LANES);
    strip.clear();
    strip.resize(plane.nrows() * lanes, T::default());
    for (row, line) in strip.chunks_exact_mut(lanes).zip(plane.rows()) {
        if let Some(line) = line.to_slice() {
            row[..columns].copy_from_slice(&line[start..start + columns]);
        }
    }
    lanes
}

/// Copies a strip back.
fn store_strip<T: Real>(strip: &[T], lanes: usize, out: &mut ArrayViewMut2<T>) {
    for (mut line, row) in out.rows_mut().into_iter().zip(strip.chunks_exact(lanes)) {
        line.iter_mut().zip(row).for_each(|(v, w)| *v = *w);
    }
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

    /// Puts the first `used` rows of a group of rows side by side.
    fn load(&mut self, patch: &Patch, band: usize, group: usize, used: usize, plane: Plane) {
        for lane in 0..used {
            plane.load(patch, band, group * LANES + lane, &mut self.line, &mut self.mask);
            self.lanes.chunks_exact_mut(LANES).zip(&self.line).for_each(|(lanes, v)| lanes[lane] = *v);
        }
    }

    /// Writes the result's rows.
    fn store(&self, out: &mut ArrayViewMut2<T>) {
        for (lane, mut line) in out.rows_mut().into_iter().enumerate() {
            line.iter_mut().zip(self.out.chunks_exact(LANES)).for_each(|(v, lanes)| *v = lanes[lane]);
        }
    }
}
