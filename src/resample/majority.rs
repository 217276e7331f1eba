//! The class that covers most of each output pixel.
//!
//! The share of a class is the area of the pixel's image in the input that its samples cover. The largest share wins; of
//! equal shares (to 1e-9 of the pixel) the smallest code. Gaps are no class: where they leave less than
//! `min_coverage` of the pixel, it is missing.

use super::overlap::{Clip, Limits, corners};
use super::passes::Span;
use crate::map::Map;
use crate::real::Real;
use ndarray::Array2;
use ndarray::parallel::prelude::*;

/// The classes of a block; `plane` holds samples, their mask where some are missing, and the extended index of its
/// first row and column.
pub(super) fn majority<T: Real>(
    back: &Map,
    (values, mask, origin): (&Array2<T>, Option<&Array2<T>>, (i64, i64)),
    limits: Limits,
    span: &Span,
    min_coverage: f64,
    keep: impl Fn(f64, f64) -> bool + Sync,
) -> Array2<T> {
    let mut out = Array2::<T>::from_elem(span.size(), T::from_f64(f64::NAN));
    out.axis_iter_mut(ndarray::Axis(0)).into_par_iter().enumerate().for_each_init(
        || (Vec::new(), Clip::default(), Vec::<(f64, f64)>::new()),
        |(cells, clip, classes), (r, mut line)| {
            let row = (span.rows.start + r as i64) as f64;
            for (v, c) in line.iter_mut().zip(span.columns.clone()) {
                let column = c as f64;
                if !keep(row, column) {
                    continue;
                }
                clip.cells(&corners(back, row, column), limits, cells);
                classes.clear();
                let mut all = 0.0;
                for &(i, k, area) in cells.iter() {
                    let at = ((i - origin.0) as usize, (k - origin.1) as usize);
                    let Some(sample) = values.get(at) else { continue };
                    all += area;
                    if mask.is_some_and(|m| m.get(at).is_none_or(|m| m.to_f64() < 0.5)) {
                        continue;
                    }
                    let code = sample.to_f64();
                    match classes.iter_mut().find(|(known, _)| *known == code) {
                        Some((_, share)) => *share += area,
                        None => classes.push((code, area)),
                    }
                }
                let there: f64 = classes.iter().map(|c| c.1).sum();
                if classes.is_empty() || there < min_coverage * all * (1.0 - 1e-9) {
                    continue;
                }
                let most = classes.iter().map(|c| c.1).fold(0.0, f64::max);
                let winner = classes
                    .iter()
                    .filter(|c| c.1 >= most - 1e-9 * all)
                    .map(|c| c.0)
                    .fold(f64::INFINITY, f64::min);
                *v = T::from_f64(winner);
            }
        },
    );
    out
}
