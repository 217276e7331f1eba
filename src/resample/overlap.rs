//! Exact overlap under a turned map: each output pixel's mean over its image in the input, by polygon clipping.
//!
//! The image is clipped against the rows and then the columns of the input's cells.

use super::gather::Nodes;
use super::passes::Span;
use crate::map::Map;
use crate::map::polygon::{area as polygon_area, clip};
use crate::real::Real;
use ndarray::Array2;
use ndarray::parallel::prelude::*;

/// Which cells count: of a raster of this size, those inside; `None`: all that the plane holds.
pub type Limits = Option<(usize, usize)>;

/// What is given of an output pixel's image.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Give {
    /// The mean of the samples by area.
    Mean,
    /// The sum of the samples, each with the share of it that the image covers.
    Sum,
}

/// What each output pixel's image holds; NaN where `keep` says that there is nothing, or the image covers no cell.
pub(super) fn overlap<T: Real>(
    back: &Map,
    plane: &Nodes<T>,
    limits: Limits,
    span: &Span,
    give: Give,
    keep: impl Fn(f64, f64) -> bool + Sync,
) -> Array2<T> {
    let mut out = Array2::<T>::from_elem(span.size(), T::from_f64(f64::NAN));
    out.axis_chunks_iter_mut(ndarray::Axis(0), 4).into_par_iter().enumerate().for_each_init(
        || (Vec::new(), Clip::default()),
        |(cells, clip), (group, mut lines)| {
            for (j, mut line) in lines.rows_mut().into_iter().enumerate() {
                let r = (span.rows.start + (4 * group + j) as i64) as f64;
                for (v, c) in line.iter_mut().zip(span.columns.clone()) {
                    let c = c as f64;
                    if !keep(r, c) {
                        continue;
                    }
                    clip.cells(&corners(back, r, c), limits, cells);
                    let (mut sum, mut area) = (0.0, 0.0);
                    for &(row, column, a) in cells.iter() {
                        let at = (row - plane.origin.0, column - plane.origin.1);
                        if let Some(sample) = plane.values.get((at.0 as usize, at.1 as usize)) {
                            sum += a * sample.to_f64();
                            area += a;
                        }
                    }
                    if area > 0.0 {
                        *v = T::from_f64(if give == Give::Mean { sum / area } else { sum });
                    }
                }
            }
        },
    );
    out
}

/// The image of an output pixel in the input: its four corners in order.
pub fn corners(back: &Map, row: f64, column: f64) -> [(f64, f64); 4] {
    [(-0.5, -0.5), (-0.5, 0.5), (0.5, 0.5), (0.5, -0.5)].map(|(r, c)| back.apply(row + r, column + c))
}

/// Finds the pixels of a raster under polygons; keeps its buffers.
#[derive(Default)]
pub struct Cells {
    clip: Clip,
    found: Vec<(i64, i64, f64)>,
}

impl Cells {
    /// Calls `each` with row, column and covered area of every pixel that a convex polygon covers, of those within `limits`.
    pub fn under(&mut self, polygon: &[(f64, f64); 4], limits: Limits, mut each: impl FnMut(i64, i64, f64)) {
        let [a, b, c, d] = polygon;
        // Upright images need no clipping.
        if a.0 == b.0 && c.0 == d.0 && a.1 == d.1 && b.1 == c.1 {
            let part = |low: f64, high: f64, n: Option<usize>| {
                let (low, high) = (low.min(high) + 0.5, low.max(high) + 0.5);
                let (mut first, mut last) =
                    (low.floor().clamp(-9e15, 9e15) as i64, high.ceil().clamp(-9e15, 9e15) as i64);
                if let Some(n) = n {
                    (first, last) = (first.max(0), last.min(n as i64));
                }
                (first..last).map(move |i| (i, (high.min(i as f64 + 1.0) - low.max(i as f64)).max(0.0)))
            };
            for (i, down) in part(a.0, c.0, limits.map(|l| l.0)) {
                for (k, across) in part(a.1, c.1, limits.map(|l| l.1)) {
                    if down * across > 0.0 {
                        each(i, k, down * across);
                    }
                }
            }
            return;
        }
        self.clip.cells(polygon, limits, &mut self.found);
        self.found.iter().for_each(|(i, k, area)| each(*i, *k, *area));
    }
}

/// Clips polygons against cells; keeps its buffers.
#[derive(Default)]
pub struct Clip {
    row_part: Vec<(f64, f64)>,
    cell_part: Vec<(f64, f64)>,
    spare: Vec<(f64, f64)>,
}

impl Clip {
    /// The cells (row, column, area) that a convex polygon covers.
    pub fn cells(&mut self, polygon: &[(f64, f64)], limits: Limits, out: &mut Vec<(i64, i64, f64)>) {
        out.clear();
        let span = |part: &[(f64, f64)], axis: fn(&(f64, f64)) -> f64, limit: Option<usize>| {
            let low = part.iter().map(axis).fold(f64::INFINITY, f64::min);
            let high = part.iter().map(axis).fold(f64::NEG_INFINITY, f64::max);
            let (low, high) = ((low + 0.5).floor(), (high + 0.5).floor());
            let (low, high) = (low.max(-9e15) as i64, high.min(9e15) as i64);
            match limit {
                Some(n) => low.max(0)..=high.min(n as i64 - 1),
                None => low..=high,
            }
        };
        for row in span(polygon, |p| p.0, limits.map(|l| l.0)) {
            let edge = row as f64 - 0.5;
            clip_band(polygon, |p| p.0, edge, &mut self.spare, &mut self.row_part);
            if self.row_part.len() < 3 {
                continue;
            }
            for column in span(&self.row_part, |p| p.1, limits.map(|l| l.1)) {
                let edge = column as f64 - 0.5;
                clip_band(&self.row_part, |p| p.1, edge, &mut self.spare, &mut self.cell_part);
                let area = polygon_area(&self.cell_part);
                if area > 0.0 {
                    out.push((row, column, area));
                }
            }
        }
    }
}

/// Keeps the part of a polygon between `edge` and `edge + 1` along one coordinate.
fn clip_band(
    polygon: &[(f64, f64)],
    axis: fn(&(f64, f64)) -> f64,
    edge: f64,
    spare: &mut Vec<(f64, f64)>,
    out: &mut Vec<(f64, f64)>,
) {
    clip(polygon, |p| axis(p) - edge, spare);
    clip(spare, |p| edge + 1.0 - axis(p), out);
}
