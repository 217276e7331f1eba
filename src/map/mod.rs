//! Maps: how content moves from one raster's pixels to another's.
//!
//! A map is a 3 x 3 matrix on (row, column, 1). As a *motion* it carries input positions to output positions; the
//! passes ask for the way *back*, from an output position to the input position that it shows. Files store maps as
//! moving -> reference, with both grids named ([`MapFile`]).

mod file;
mod frame;
mod motion;
pub mod polygon;

pub use file::MapFile;
pub use frame::{Anchor, Frame, Rescale, moved, rescaled};
pub use motion::Motion;

use crate::error::{Error, Result};
use serde::{Deserialize, Serialize};

/// A projective map of positions (row, column), with an affine map as the common case.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
#[serde(transparent)]
pub struct Map {
    /// Rows of the matrix that acts on (row, column, 1).
    pub matrix: [[f64; 3]; 3],
}

impl Map {
    /// Nothing moves.
    pub const IDENTITY: Map = Map { matrix: [[1.0, 0.0, 0.0], [0.0, 1.0, 0.0], [0.0, 0.0, 1.0]] };

    /// The affine map `(a r + b c + t, d r + e c + u)`.
    pub fn affine(rows: [[f64; 3]; 2]) -> Self {
        Map { matrix: [rows[0], rows[1], [0.0, 0.0, 1.0]] }
    }

    /// A map along rows and columns on their own: `(step_r r + offset_r, step_c c + offset_c)`.
    pub fn axes(rows: (f64, f64), columns: (f64, f64)) -> Self {
        Map::affine([[rows.0, 0.0, rows.1], [0.0, columns.0, columns.1]])
    }

    /// Content moved by whole or broken pixels, positive down and right.
    pub fn shift(rows: f64, columns: f64) -> Self {
        Map::axes((1.0, rows), (1.0, columns))
    }

    /// Whether lines that are parallel stay so.
    pub fn is_affine(&self) -> bool {
        self.matrix[2] == [0.0, 0.0, 1.0]
    }

    /// Where (row, column) goes; NaN beyond the horizon of a projective map.
    #[inline(always)]
    pub fn apply(&self, row: f64, column: f64) -> (f64, f64) {
        let m = &self.matrix;
        let r = m[0][0] * row + m[0][1] * column + m[0][2];
        let c = m[1][0] * row + m[1][1] * column + m[1][2];
        if self.is_affine() {
            return (r, c);
        }
        let w = m[2][0] * row + m[2][1] * column + m[2][2];
        // Behind the horizon there is nothing to see; the sign of w is fixed by `checked`.
        if w > 0.0 { (r / w, c / w) } else { (f64::NAN, f64::NAN) }
    }

    /// First this map, then `next`.
    pub fn then(&self, next: &Map) -> Map {
        let (a, b) = (&next.matrix, &self.matrix);
        let mut m = [[0.0; 3]; 3];
        for i in 0..3 {
            for j in 0..3 {
                m[i][j] = a[i][0] * b[0][j] + a[i][1] * b[1][j] + a[i][2] * b[2][j];
            }
        }
        if self.is_affine() && next.is_affine() {
            m[2] = [0.0, 0.0, 1.0];
        }
        Map { matrix: m }
    }

    /// The map that undoes this one.
    ///
    /// # Errors
    /// When the map squeezes the plane onto a line or a point, or holds numbers that are not finite.
    pub fn invert(&self) -> Result<Map> {
        let m = &self.matrix;
        let bad = |what: &str| {
            Error::unfit(
                format!("the map {what}, so no way back exists"),
                "check the map's matrix or the grid's world affine",
            )
        };
        if m.iter().flatten().any(|v| !v.is_finite()) {
            return Err(bad("holds numbers that are not finite"));
        }
        if self.is_affine() {
            let det = m[0][0] * m[1][1] - m[0][1] * m[1][0];
            let size = m[0][0].hypot(m[1][0]) * m[0][1].hypot(m[1][1]);
            if !(det.abs() > 1e-12 * size) {
                return Err(bad("squeezes the plane onto a line"));
            }
            let (a, b) = (m[1][1] / det, -m[0][1] / det);
            let (d, e) = (-m[1][0] / det, m[0][0] / det);
            let back = |p: f64, q: f64| -(p * m[0][2] + q * m[1][2]);
            // `+ 0.0` turns a -0.0 into 0.0, which keeps files and messages tidy.
            let tidy = |v: f64| v + 0.0;
            return Ok(Map::affine([
                [tidy(a), tidy(b), tidy(back(a, b))],
                [tidy(d), tidy(e), tidy(back(d, e))],
            ]));
        }
        let minor = |i: usize, j: usize| {
            let (r0, r1) = ((i + 1) % 3, (i + 2) % 3);
            let (c0, c1) = ((j + 1) % 3, (j + 2) % 3);
            m[r0][c0] * m[r1][c1] - m[r0][c1] * m[r1][c0]
        };
        let det = m[0][0] * minor(0, 0) + m[0][1] * minor(0, 1) + m[0][2] * minor(0, 2);
        let scale = m.iter().flatten().fold(0.0f64, |a, v| a.max(v.abs()));
        if !(det.abs() > 1e-14 * scale * scale * scale) {
            return Err(bad("squeezes the plane onto a line"));
        }
        let mut inverse = [[0.0; 3]; 3];
        for i in 0..3 {
            for j in 0..3 {
                inverse[i][j] = minor(j, i) / det;
            }
        }
        Ok(Map { matrix: inverse })
    }

    /// Partial derivatives at a place: `[[dr/drow, dr/dcolumn], [dc/drow, dc/dcolumn]]`.
    pub fn jacobian(&self, row: f64, column: f64) -> [[f64; 2]; 2] {
        let m = &self.matrix;
        if self.is_affine() {
            return [[m[0][0], m[0][1]], [m[1][0], m[1][1]]];
        }
        let w = m[2][0] * row + m[2][1] * column + m[2][2];
        let (r, c) = self.apply(row, column);
        let d = |i: usize, j: usize, p: f64| (m[i][j] - p * m[2][j]) / w;
        [[d(0, 0, r), d(0, 1, r)], [d(1, 0, c), d(1, 1, c)]]
    }

    /// For a map that keeps rows and columns apart: whether it swaps them, and `(step, offset)` of the row and of the
    /// column that it gives. A swapped map takes its row from the column.
    pub fn as_axes(&self) -> Option<Axes> {
        if !self.is_affine() {
            return None;
        }
        let m = &self.matrix;
        if m[0][1] == 0.0 && m[1][0] == 0.0 {
            Some(Axes { swapped: false, rows: (m[0][0], m[0][2]), columns: (m[1][1], m[1][2]) })
        } else if m[0][0] == 0.0 && m[1][1] == 0.0 {
            Some(Axes { swapped: true, rows: (m[0][1], m[0][2]), columns: (m[1][0], m[1][2]) })
        } else {
            None
        }
    }

    /// Pulls steps and offsets that miss a whole number only by rounding onto it. World coordinates of some millions
    /// carry an error of 1e-9 pixels; without this, equal grids would be resampled instead of copied.
    pub fn snapped(&self, rows: usize, columns: usize) -> Map {
        const SLACK_PX: f64 = 1e-6;
        if !self.is_affine() {
            return *self;
        }
        let snap = |v: f64, extent: f64| {
            let whole = v.round();
            if (v - whole).abs() * extent < SLACK_PX { whole + 0.0 } else { v }
        };
        let (h, w) = (rows.max(1) as f64, columns.max(1) as f64);
        let m = &self.matrix;
        let mut out = Map::affine([
            [snap(m[0][0], h), snap(m[0][1], w), m[0][2]],
            [snap(m[1][0], h), snap(m[1][1], w), m[1][2]],
        ]);
        for i in 0..2 {
            let linear_is_whole = out.matrix[i][..2].iter().all(|v| v.fract() == 0.0);
            if linear_is_whole {
                out.matrix[i][2] = snap(m[i][2], 1.0);
            }
        }
        out
    }

    /// Refuses a projective map whose horizon crosses the frame of `rows` x `columns` pixels; otherwise turns its sign
    /// so that the inside is in front.
    pub fn checked(&self, rows: usize, columns: usize) -> Result<Map> {
        if self.matrix.iter().flatten().any(|v| !v.is_finite()) {
            return Err(Error::unfit("the map holds numbers that are not finite", "check the map's matrix"));
        }
        if self.is_affine() {
            return Ok(*self);
        }
        let m = &self.matrix;
        let w = |r: f64, c: f64| m[2][0] * r + m[2][1] * c + m[2][2];
        let (h, b) = (rows as f64 - 0.5, columns as f64 - 0.5);
        let corners = [w(-0.5, -0.5), w(-0.5, b), w(h, -0.5), w(h, b)];
        if corners.iter().all(|v| *v > 0.0) {
            Ok(*self)
        } else if corners.iter().all(|v| *v < 0.0) {
            Ok(Map { matrix: m.map(|row| row.map(|v| -v)) })
        } else {
            Err(Error::unfit(
                "the horizon of the projective map crosses the output's frame",
                "choose a smaller frame, or check the map's last row",
            ))
        }
    }

    /// Whether nothing between these outer positions is sent to infinity.
    pub fn is_regular(&self, rows: (f64, f64), columns: (f64, f64)) -> bool {
        let [a, b, c] = self.matrix[2];
        let corners = [(rows.0, columns.0), (rows.0, columns.1), (rows.1, columns.0), (rows.1, columns.1)];
        let mut divisors = corners.iter().map(|(row, column)| a * row + b * column + c);
        divisors.clone().all(|d| d > 0.0) || divisors.all(|d| d < 0.0)
    }

    /// The box (rows low, rows high, columns low, columns high) that the frame with outer edges
    /// `rows.0..rows.1`, `columns.0..columns.1` maps into.
    pub fn bounds(&self, rows: (f64, f64), columns: (f64, f64)) -> Bounds {
        let corners = [(rows.0, columns.0), (rows.0, columns.1), (rows.1, columns.0), (rows.1, columns.1)];
        let mut b =
            Bounds { rows: (f64::INFINITY, f64::NEG_INFINITY), columns: (f64::INFINITY, f64::NEG_INFINITY) };
        for (r, c) in corners {
            let (r, c) = self.apply(r, c);
            b.rows = (b.rows.0.min(r), b.rows.1.max(r));
            b.columns = (b.columns.0.min(c), b.columns.1.max(c));
        }
        b
    }
}

/// A map that acts on rows and columns on their own.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Axes {
    /// Whether rows come from columns and columns from rows (a quarter turn).
    pub swapped: bool,
    /// `(step, offset)` that gives the row.
    pub rows: (f64, f64),
    /// `(step, offset)` that gives the column.
    pub columns: (f64, f64),
}

/// A box in (row, column).
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Bounds {
    /// Lowest and highest row.
    pub rows: (f64, f64),
    /// Lowest and highest column.
    pub columns: (f64, f64),
}
