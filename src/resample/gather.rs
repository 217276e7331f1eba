//! The pass for turned and projective maps: the tensor product of both axes' weights at every position.

use super::axis::is_inside;
use super::passes::Span;
use super::rules::Outside;
use super::squares::Squares;
use super::weights::Weigher;
use crate::map::Map;
use crate::real::Real;
use crate::simd;
use ndarray::parallel::prelude::*;
use ndarray::{Array2, ArrayViewMut2, s};
use std::ops::Range;

/// Side of the squares of outputs whose mask is told at one look.
const TILE: usize = 16;

/// How a gather looks at each position.
#[derive(Clone, Debug)]
pub struct Look {
    /// From output to input positions.
    pub back: Map,
    /// From input positions to the nodes of the plane (the identity, but for a least-squares lattice).
    pub lattice: Map,
    /// Rows and columns of the input.
    pub source: (usize, usize),
    /// What lies outside.
    pub outside: Outside,
    /// Weights along rows (which rows) and along columns.
    pub weighers: (Weigher, Weigher),
    /// Where the stretch follows the local Jacobian pixel by pixel (projective maps that shrink): its largest values, which
    /// the plane was read for.
    pub local: Option<(f64, f64)>,
}

impl Look {
    /// Where an output pixel looks among the nodes; `None` if it looks outside. Sets the weighers to the stretch of the place.
    #[inline(always)]
    pub fn position(&self, row: f64, column: f64, weighers: &mut (Weigher, Weigher)) -> Option<(f64, f64)> {
        let (x, y) = self.back.apply(row, column);
        if !(x.abs() < 1e15 && y.abs() < 1e15) {
            return None;
        }
        if self.outside == Outside::Missing && !(is_inside(x, self.source.0) && is_inside(y, self.source.1)) {
            return None;
        }
        if let Some(most) = self.local {
            let (a, b) = stretch_at(&self.back, row, column);
            weighers.0.set_stretch(a.min(most.0));
            weighers.1.set_stretch(b.min(most.1));
        }
        Some(if self.lattice == Map::IDENTITY { (x, y) } else { self.lattice.apply(x, y) })
    }

    /// Whether all output pixels of a tile look inside, and only where a mask's plane is 1.
    fn sees_only(
        &self,
        plain: &Squares,
        origin: (i64, i64),
        rows: &Range<i64>,
        columns: &Range<i64>,
    ) -> bool {
        let ends = |r: &Range<i64>| (r.start as f64, r.end as f64 - 1.0);
        if !self.back.is_regular(ends(rows), ends(columns)) {
            return false;
        }
        let seen = self.back.bounds(ends(rows), ends(columns));
        let inside = |b: (f64, f64), n: usize| is_inside(b.0, n) && is_inside(b.1, n);
        if self.outside == Outside::Missing
            && !(inside(seen.rows, self.source.0) && inside(seen.columns, self.source.1))
        {
            return false;
        }
        let nodes = self.lattice.bounds(seen.rows, seen.columns);
        let around = |b: (f64, f64), radius: f64, origin: i64| {
            ((b.0 - radius).floor() as i64 - origin, (b.1 + radius).ceil() as i64 - origin)
        };
        plain.holds(
            around(nodes.rows, self.weighers.0.radius(), origin.0),
            around(nodes.columns, self.weighers.1.radius(), origin.1),
        )
    }
}

/// A plane of samples or coefficients over extended indices.
pub struct Nodes<'a, T> {
    /// Rows x columns.
    pub values: &'a Array2<T>,
    /// Extended index of the first row and column.
    pub origin: (i64, i64),
}

/// Where a mask's plane is 1.
pub fn squares_of_ones<T: Real>(plane: &Array2<T>) -> Squares {
    let one = |v: &T| (v.to_f64() - 1.0).abs() <= 0.1 * T::UNITY_SLACK;
    Squares::of(plane.dim(), plane.as_standard_layout().as_slice().unwrap_or_default(), one)
}

/// How the gather weighs: by the weights themselves or by their moduli.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum By {
    /// The weights.
    Weights,
    /// Their moduli, over their sum.
    Moduli,
}

/// The factors by which pixels grow along the input's axes: norms of the rows of the Jacobian, at least 1.
pub fn stretch_at(back: &Map, row: f64, column: f64) -> (f64, f64) {
    let j = back.jacobian(row, column);
    let norm = |v: [f64; 2]| {
        let n = v[0].hypot(v[1]);
        // A turn's rounding is no reduction.
        if n < 1.0 + 1e-9 || !n.is_finite() { 1.0 } else { n }
    };
    (norm(j[0]), norm(j[1]))
}

/// Evaluates the block of outputs `rows` x `columns`; NaN where there is nothing: outside, or out of an open raster's
/// reach.
pub(super) fn gather<T: Real>(
    look: &Look,
    plane: &Nodes<T>,
    by: By,
    span: &Span,
    plain: Option<&Squares>,
) -> Array2<T> {
    let mut out = Array2::<T>::from_elem(span.size(), T::from_f64(f64::NAN));
    let tiles = (0..out.ncols()).step_by(TILE).map(|c| c..(c + TILE).min(out.ncols()));
    let tiles: Vec<Range<usize>> = tiles.collect();
    let height = if plain.is_some() { TILE } else { 4 };
    out.axis_chunks_iter_mut(ndarray::Axis(0), height).into_par_iter().enumerate().for_each_init(
        || Local::new(look),
        |local, (group, mut lines)| {
            let top = span.rows.start + (height * group) as i64;
            let rows = top..top + lines.nrows() as i64;
            if let Some(plain) = plain {
                for tile in &tiles {
                    let left = span.columns.start + tile.start as i64;
                    let columns = left..left + tile.len() as i64;
                    let mut out = lines.slice_mut(s![.., tile.clone()]);
                    if look.sees_only(plain, plane.origin, &rows, &columns) {
                        out.fill(T::ONE);
                    } else {
                        local.block(look, plane, by, (&rows, &columns), &mut out);
                    }
                }
            } else {
                local.block(look, plane, by, (&rows, &span.columns), &mut lines.view_mut());
            }
        },
    );
    out
}

/// What one thread needs.
struct Local<T> {
    weighers: (Weigher, Weigher),
    exact: (Vec<f64>, Vec<f64>),
    cast: (Vec<T>, Vec<T>),
    sums: Vec<T>,
}

impl<T: Real> Local<T> {
    fn new(look: &Look) -> Self {
        Local {
            weighers: look.weighers.clone(),
            exact: Default::default(),
            cast: Default::default(),
            sums: Vec::new(),
        }
    }

    fn block(
        &mut self,
        look: &Look,
        plane: &Nodes<T>,
        by: By,
        span: (&Range<i64>, &Range<i64>),
        out: &mut ArrayViewMut2<T>,
    ) {
        for (mut line, r) in out.rows_mut().into_iter().zip(span.0.clone()) {
            for (v, c) in line.iter_mut().zip(span.1.clone()) {
                self.pixel(look, plane, by, r as f64, c as f64, v);
            }
        }
    }

    fn pixel(&mut self, look: &Look, plane: &Nodes<T>, by: By, row: f64, column: f64, out: &mut T) {
        let Some((x, y)) = look.position(row, column, &mut self.weighers) else { return };
        let top = self.weighers.0.weights(x, &mut self.exact.0) - plane.origin.0;
        let left = self.weighers.1.weights(y, &mut self.exact.1) - plane.origin.1;
        if self.exact.0.is_empty() || self.exact.1.is_empty() {
            return;
        }
        if by == By::Moduli {
            moduli(&mut self.exact.0);
            moduli(&mut self.exact.1);
        }
        cast(&self.exact.0, &mut self.cast.0);
        cast(&self.exact.1, &mut self.cast.1);
        let (Ok(top), Ok(left)) = (usize::try_from(top), usize::try_from(left)) else { return };
        let width = plane.values.ncols();
        let Some(values) = plane.values.as_slice() else { return };
        let (wr, wc) = (&self.cast.0, &self.cast.1);
        *out = if wr.len() == 4 && wc.len() == 4 {
            product_4x4(wr, wc, &values[top * width + left..], width)
        } else {
            self.sums.resize(wc.len(), T::default());
            let sums = &mut self.sums;
            simd::wide(|| product(wr, wc, &values[top * width + left..], width, sums))
        };
    }
}

/// Down the columns first (vectorised across columns), then along the row of sums, each in order of the taps.
#[inline(always)]
fn product<T: Real>(wr: &[T], wc: &[T], values: &[T], width: usize, sums: &mut [T]) -> T {
    for (i, w) in wr.iter().enumerate() {
        let line = &values[i * width..][..wc.len()];
        if i == 0 {
            sums.iter_mut().zip(line).for_each(|(s, v)| *s = *w * *v);
        } else {
            sums.iter_mut().zip(line).for_each(|(s, v)| *s = *s + *w * *v);
        }
    }
    let mut total = wc[0] * sums[0];
    for k in 1..wc.len() {
        total = total + wc[k] * sums[k];
    }
    total
}

/// [`product`] for the commonest size, the same operations in the same order.
#[inline(always)]
fn product_4x4<T: Real>(wr: &[T], wc: &[T], values: &[T], width: usize) -> T {
    let mut sums = [T::default(); 4];
    for i in 0..4 {
        let line = &values[i * width..i * width + 4];
        for j in 0..4 {
            sums[j] = if i == 0 { wr[0] * line[j] } else { sums[j] + wr[i] * line[j] };
        }
    }
    let mut total = wc[0] * sums[0];
    for k in 1..4 {
        total = total + wc[k] * sums[k];
    }
    total
}

fn moduli(w: &mut [f64]) {
    let sum: f64 = w.iter().map(|v| v.abs()).sum();
    w.iter_mut().for_each(|v| *v = v.abs() / sum);
}

fn cast<T: Real>(from: &[f64], to: &mut Vec<T>) {
    to.clear();
    to.extend(from.iter().map(|v| T::from_f64(*v)));
}
