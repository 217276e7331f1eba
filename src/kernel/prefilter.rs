//! The prefilter: from samples to the coefficients whose kernel sum goes through them.
//!
//! The coefficients solve `sum_l c[l] phi(k - l) = f[k]`, a band matrix. A line is cut into segments at fixed places of
//! the whole line; each is solved on its own over itself and [`WARM_UP`] samples on either side, taken from the
//! extended signal. What lies farther has an influence of |pole|^128 at most (below 1e-27 for every kernel here), so
//! that each segment is exact to rounding under every extension, and the same bits come out whether a whole raster
//! or one tile is computed. The band matrix is factored without pivoting: it is totally positive or triangular,
//! and its factors settle to the recursive filters of Unser, Aldroubi and Eden 1993 (IEEE Trans. Signal Process. 41(2))
//! after a few rows.

use crate::real::Real;
use std::ops::Range;

/// Samples that warm up the solution on either side of a segment.
pub const WARM_UP: usize = 128;

/// Length of a segment.
pub const SEGMENT: usize = 1024;

/// The first and last segment of a line reach this far beyond it, so that taps over the edge need no segment of their own.
const MARGIN: i64 = 16;

/// The factored band matrix of one kernel, ready for windows of up to a stated length.
#[derive(Clone, Debug)]
pub struct Prefilter<T> {
    /// phi(-b)..=phi(b).
    symbol: Vec<f64>,
    /// Sub-diagonals of L, `lower` to a row.
    l: Vec<T>,
    /// Super-diagonals of U, `upper` to a row.
    u: Vec<T>,
    /// One over the diagonal of U.
    inverse_diagonal: Vec<T>,
    lower: usize,
    upper: usize,
}

impl<T: Real> Prefilter<T> {
    /// Factors the matrix of `symbol` = phi(-b)..=phi(b) for windows of at most `len` samples.
    pub fn new(symbol: &[f64], len: usize) -> Self {
        let b = symbol.len() / 2;
        // Row k, column l holds phi(k - l): the sub-diagonals are phi(1), phi(2), ...
        let lower = (1..=b).rev().find(|d| symbol[b + d] != 0.0).unwrap_or(0);
        let upper = (1..=b).rev().find(|d| symbol[b - d] != 0.0).unwrap_or(0);
        let width = lower + upper + 1;
        // Doolittle: rows[i][d] holds entry (i, i - lower + d) of L (below the diagonal) and U.
        let mut rows: Vec<f64> = Vec::with_capacity(len * width);
        for i in 0..len {
            let mut row: Vec<f64> = (0..width).map(|d| symbol[b + lower - d]).collect();
            for d in 0..lower {
                let Some(j) = (i + d).checked_sub(lower) else {
                    row[d] = 0.0;
                    continue;
                };
                let pivot_row = &rows[j * width..(j + 1) * width];
                row[d] /= pivot_row[lower];
                let factor = row[d];
                for e in 1..=upper {
                    row[d + e] -= factor * pivot_row[lower + e];
                }
            }
            rows.extend_from_slice(&row);
        }
        let at = |i: usize, d: usize| rows[i * width + d];
        Prefilter {
            symbol: symbol.to_vec(),
            l: (0..len)
                .flat_map(|i| (0..lower).map(move |d| (i, d)))
                .map(|(i, d)| T::from_f64(at(i, d)))
                .collect(),
            u: (0..len)
                .flat_map(|i| (1..=upper).map(move |d| (i, d)))
                .map(|(i, d)| T::from_f64(at(i, lower + d)))
                .collect(),
            inverse_diagonal: (0..len).map(|i| T::from_f64(1.0 / at(i, lower))).collect(),
            lower,
            upper,
        }
    }

    /// A prefilter for the segments of [`segments`].
    pub fn for_segments(symbol: &[f64]) -> Self {
        Prefilter::new(symbol, 2 * SEGMENT + 2 * MARGIN as usize + 2 * WARM_UP)
    }

    /// Turns a window of samples into coefficients, in place. `window` holds `lanes` independent lines side by side:
    /// sample i of lane j at `i * lanes + j`.
    pub fn solve(&self, window: &mut [T], lanes: usize) {
        let len = window.len() / lanes;
        for i in 1..len {
            let (done, rest) = window.split_at_mut(i * lanes);
            let row = &mut rest[..lanes];
            for d in self.lower.saturating_sub(i)..self.lower {
                let factor = self.l[i * self.lower + d];
                let above = &done[(i + d - self.lower) * lanes..][..lanes];
                for (v, a) in row.iter_mut().zip(above) {
                    *v = *v - factor * *a;
                }
            }
        }
        for i in (0..len).rev() {
            let (head, below) = window.split_at_mut((i + 1) * lanes);
            let row = &mut head[i * lanes..];
            for d in 1..=self.upper.min(len - 1 - i) {
                let factor = self.u[i * self.upper + d - 1];
                let next = &below[(d - 1) * lanes..][..lanes];
                for (v, n) in row.iter_mut().zip(next) {
                    *v = *v - factor * *n;
                }
            }
            let scale = self.inverse_diagonal[i];
            for v in row.iter_mut() {
                *v = *v * scale;
            }
        }
    }

    /// The factor of sample `k` of an open line of `n`: the sum of the kernel over the coefficients that exist, so
    /// that `c` solves `sum_in c[l] phi(k - l) / sum_in phi(k - l) = f[k]`.
    pub fn open_factor(&self, k: usize, n: usize) -> f64 {
        let b = self.symbol.len() / 2;
        (0..self.symbol.len())
            .filter(|&d| {
                // Offset d - b = k - l.
                let l = k as i64 - (d as i64 - b as i64);
                (0..n as i64).contains(&l)
            })
            .map(|d| self.symbol[d])
            .sum()
    }
}

/// The segments of a line of `n` samples that hold the indices `wanted`: fixed places of the whole line, which do not
/// depend on what is wanted.
pub fn segments(n: usize, wanted: Range<i64>) -> Vec<Range<i64>> {
    let (n, len) = (n as i64, SEGMENT as i64);
    // Inner boundaries at multiples of the length, but none so near the end that a stub would be left.
    let last_cut = ((n - len / 2).max(0) / len) * len;
    let segment_at = |k: i64| -> Range<i64> {
        let (low_end, high_end) = (-MARGIN, n + MARGIN);
        if k < low_end {
            let j = (low_end - 1 - k) / len;
            low_end - (j + 1) * len..low_end - j * len
        } else if k >= high_end {
            let j = (k - high_end) / len;
            high_end + j * len..high_end + (j + 1) * len
        } else {
            let cut = (k.max(0) / len * len).min(last_cut);
            let start = if cut == 0 { low_end } else { cut };
            let end = if cut == last_cut { high_end } else { cut + len };
            start..end
        }
    };
    let mut out = Vec::new();
    let mut k = wanted.start;
    while k < wanted.end {
        let s = segment_at(k);
        k = s.end;
        out.push(s);
    }
    out
}

/// The window of samples that the segment is solved from; an open line has nothing beyond its ends.
pub fn segment_window(segment: &Range<i64>, n: usize, open: bool) -> Range<i64> {
    let w = segment.start - WARM_UP as i64..segment.end + WARM_UP as i64;
    if open { w.start.clamp(0, n as i64)..w.end.clamp(0, n as i64) } else { w }
}

/// The roots of `sum_k phi(k) z^-k` inside the unit circle, by bracketing on (-1, 0): every kernel here has only
/// negative, simple ones. Largest modulus first.
pub fn poles(symbol: &[f64]) -> Vec<f64> {
    // Times z^b, the constant term is phi(b).
    let symbol: Vec<f64> = symbol.iter().rev().copied().collect();
    let value = |z: f64| symbol.iter().rev().fold(0.0, |sum, c| sum * z + c);
    let slope =
        |z: f64| symbol.iter().enumerate().skip(1).rev().fold(0.0, |sum, (k, c)| sum * z + k as f64 * c);
    let mut found = Vec::new();
    // A geometric walk: the poles of one kernel are spread over several powers of ten.
    let (mut a, mut fa) = (-1.0f64, value(-1.0));
    while a < -1e-9 && found.len() < symbol.len() / 2 {
        let b = a * 0.99;
        let fb = value(b);
        if fa * fb < 0.0 {
            let (mut lo, mut hi) = (a, b);
            for _ in 0..60 {
                let mid = 0.5 * (lo + hi);
                if value(mid) * fa > 0.0 { lo = mid } else { hi = mid }
            }
            let mut z = 0.5 * (lo + hi);
            for _ in 0..2 {
                z -= value(z) / slope(z);
            }
            found.push(z);
        }
        (a, fa) = (b, fb);
    }
    found
}
