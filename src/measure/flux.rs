//! Flux: signal over the region that two grids have in common, pixel by pixel by the fraction of its area inside.

use super::sum::Sum;
use crate::map::Map;
use crate::map::polygon::{area, clip};
use crate::simd;
use std::ops::Range;

/// How one raster's pixels lie in the frame of another.
#[derive(Clone, Debug)]
pub struct Frame {
    /// From this raster's positions to the other's.
    map: Map,
    /// Rows and columns of the other.
    other: (f64, f64),
    /// Share of each row and of each column where the map keeps them apart; their product is the pixel's.
    shares: Option<(Vec<f64>, Vec<f64>)>,
    /// Half the extent of a pixel's image, for affine maps.
    half: (f64, f64),
}

impl Frame {
    /// `map` goes from positions of a raster of `own` (rows, columns) to positions in the frame of `other`.
    pub fn new(map: &Map, own: (usize, usize), other: (usize, usize)) -> Self {
        let shares = map.as_axes().map(|axes| {
            // The share of [o - 1/2, o + 1/2] whose image lies in [-1/2, n - 1/2].
            let along = |count: usize, (step, offset): (f64, f64), n: usize| -> Vec<f64> {
                (0..count)
                    .map(|o| {
                        let (a, b) = ((o as f64 - 0.5) * step + offset, (o as f64 + 0.5) * step + offset);
                        let (low, high) = (a.min(b), a.max(b));
                        let inside = high.min(n as f64 - 0.5) - low.max(-0.5);
                        let share = (inside / (high - low)).clamp(0.0, 1.0);
                        // Rounding must not shave 1e-16 off every pixel.
                        if share > 1.0 - 1e-12 { 1.0 } else { share }
                    })
                    .collect()
            };
            if axes.swapped {
                (along(own.0, axes.columns, other.1), along(own.1, axes.rows, other.0))
            } else {
                (along(own.0, axes.rows, other.0), along(own.1, axes.columns, other.1))
            }
        });
        let m = &map.matrix;
        let half = (0.5 * (m[0][0].abs() + m[0][1].abs()), 0.5 * (m[1][0].abs() + m[1][1].abs()));
        Frame { map: *map, other: (other.0 as f64, other.1 as f64), shares, half }
    }

    /// Every pixel of a raster of `own` counts whole.
    pub fn whole(own: (usize, usize)) -> Self {
        let size = (own.0 as f64, own.1 as f64);
        Frame { map: Map::IDENTITY, other: size, shares: None, half: (0.0, 0.0) }
    }

    /// The fraction of the pixel's area that lies inside the other frame.
    pub fn share(&self, row: usize, column: usize) -> f64 {
        if let Some((rows, columns)) = &self.shares {
            return rows[row] * columns[column];
        }
        let (r, c) = (row as f64, column as f64);
        if self.map.is_affine() {
            let (x, y) = self.map.apply(r, c);
            let (hx, hy) = self.half;
            let (n, m) = self.other;
            if x - hx >= -0.5 && x + hx <= n - 0.5 && y - hy >= -0.5 && y + hy <= m - 0.5 {
                return 1.0;
            }
            if x + hx <= -0.5 || x - hx >= n - 0.5 || y + hy <= -0.5 || y - hy >= m - 0.5 {
                return 0.0;
            }
        }
        let corner = |dr: f64, dc: f64| self.map.apply(r + dr, c + dc);
        let image = vec![corner(-0.5, -0.5), corner(-0.5, 0.5), corner(0.5, 0.5), corner(0.5, -0.5)];
        if image.iter().any(|p| !(p.0.is_finite() && p.1.is_finite())) {
            return 0.0;
        }
        let whole = area(&image);
        let (n, m) = self.other;
        let (mut part, mut spare) = (image, Vec::new());
        for side in [
            (|p: &(f64, f64), _: f64| p.0 + 0.5, n),
            (|p, n| n - 0.5 - p.0, n),
            (|p, _| p.1 + 0.5, m),
            (|p, m| m - 0.5 - p.1, m),
        ] as [(fn(&(f64, f64), f64) -> f64, f64); 4]
        {
            clip(&part, |p| side.0(p, side.1), &mut spare);
            std::mem::swap(&mut part, &mut spare);
        }
        if whole > 0.0 { (area(&part) / whole).clamp(0.0, 1.0) } else { 0.0 }
    }

    /// The shares of a stretch of one row; `None` where all are 1.
    fn row_shares(&self, row: usize, columns: &Range<usize>, out: &mut Vec<f64>) -> bool {
        if self.map == Map::IDENTITY && self.half == (0.0, 0.0) {
            return false;
        }
        if let Some((r, c)) = &self.shares
            && r[row] == 1.0
            && c[columns.clone()].iter().all(|s| *s == 1.0)
        {
            return false;
        }
        out.clear();
        out.extend(columns.clone().map(|c| self.share(row, c)));
        out.iter().any(|s| *s != 1.0)
    }
}

/// What was added up over pixels: signal times area, its modulus, its first moments, and what was seen.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Balance {
    /// Signal x area (in input pixels) inside the other frame.
    pub signal: Sum,
    /// |signal| x area inside the other frame.
    pub modulus: Sum,
    /// Signal x area x row, in input positions.
    row_moment: Sum,
    /// Signal x area x column, in input positions.
    column_moment: Sum,
    /// Samples that are there.
    pub valid: u64,
    /// Samples that are missing.
    pub missing: u64,
    /// Least and greatest valid sample.
    pub range: (f64, f64),
}

impl Default for Balance {
    fn default() -> Self {
        Balance {
            signal: Sum::default(),
            modulus: Sum::default(),
            row_moment: Sum::default(),
            column_moment: Sum::default(),
            valid: 0,
            missing: 0,
            range: (f64::INFINITY, f64::NEG_INFINITY),
        }
    }
}

impl Balance {
    /// Adds a stretch of one row; NaN is missing. `back` takes this raster's positions to input positions (the identity
    /// for the input itself) and, by its Jacobian, tells the pixel's area there; totals are not multiplied by it.
    #[allow(clippy::too_many_arguments)]
    pub fn add_row(
        &mut self,
        frame: &Frame,
        back: &Map,
        by_area: bool,
        row: usize,
        columns: &Range<usize>,
        values: &[f64],
        shares: &mut Vec<f64>,
    ) {
        let partial = frame.row_shares(row, columns, shares);
        let shares = partial.then_some(&shares[..]);
        if !back.is_affine() {
            return self.add_local(back, by_area, row, columns, values, shares);
        }
        // Row and column in the input are affine in the column: moments need only the sum of signal times column.
        let m = &back.matrix;
        let area = if by_area { (m[0][0] * m[1][1] - m[0][1] * m[1][0]).abs() } else { 1.0 };
        let mut totals = Totals::default();
        const PART: usize = 32 * LANES;
        for (p, part) in values.chunks(PART).enumerate() {
            let shares = shares.map(|s| &s[p * PART..][..part.len()]);
            let t = simd::wide(|| Totals::of(part, shares));
            // Short plain sums, compensated between them: as exact as need be, and fast.
            let (r, c) = (row as f64, (columns.start + p * PART) as f64);
            let (signal, column) = (t.signal * area, t.column * area);
            self.signal.add(signal);
            self.modulus.add(t.modulus * area);
            self.row_moment.add((m[0][0] * r + m[0][1] * c + m[0][2]) * signal + m[0][1] * column);
            self.column_moment.add((m[1][0] * r + m[1][1] * c + m[1][2]) * signal + m[1][1] * column);
            totals.valid += t.valid;
            totals.range = (totals.range.0.min(t.range.0), totals.range.1.max(t.range.1));
        }
        self.valid += totals.valid;
        self.missing += values.len() as u64 - totals.valid;
        self.range = (self.range.0.min(totals.range.0), self.range.1.max(totals.range.1));
    }

    /// The same where area and position follow a projective map from pixel to pixel.
    fn add_local(
        &mut self,
        back: &Map,
        by_area: bool,
        row: usize,
        columns: &Range<usize>,
        values: &[f64],
        shares: Option<&[f64]>,
    ) {
        for (i, v) in values.iter().enumerate() {
            if v.is_nan() {
                self.missing += 1;
                continue;
            }
            let (r, c) = (row as f64, (columns.start + i) as f64);
            let j = back.jacobian(r, c);
            let area = if by_area { (j[0][0] * j[1][1] - j[0][1] * j[1][0]).abs() } else { 1.0 };
            let s = v * shares.map_or(1.0, |s| s[i]) * area;
            let (x, y) = back.apply(r, c);
            self.valid += 1;
            self.range = (self.range.0.min(*v), self.range.1.max(*v));
            self.signal.add(s);
            self.modulus.add(s.abs());
            self.row_moment.add(s * x);
            self.column_moment.add(s * y);
        }
    }

    /// Adds another part.
    pub fn merge(&mut self, other: &Balance) {
        self.signal.merge(&other.signal);
        self.modulus.merge(&other.modulus);
        self.row_moment.merge(&other.row_moment);
        self.column_moment.merge(&other.column_moment);
        self.valid += other.valid;
        self.missing += other.missing;
        self.range = (self.range.0.min(other.range.0), self.range.1.max(other.range.1));
    }

    /// Takes back signal (times area), its modulus and its first moments.
    pub fn take(&mut self, signal: f64, modulus: f64, moments: (f64, f64)) {
        self.signal.add(-signal);
        self.modulus.add(-modulus);
        self.row_moment.add(-moments.0);
        self.column_moment.add(-moments.1);
    }

    /// Centre of the signal (row, column) in input positions; `None` where the signal cancels.
    pub fn centroid(&self) -> Option<[f64; 2]> {
        let s = self.signal.value();
        (s.abs() > 1e-12 * self.modulus.value() && s != 0.0)
            .then(|| [self.row_moment.value() / s, self.column_moment.value() / s])
    }
}

/// Sums over some neighbouring samples.
struct Totals {
    signal: f64,
    modulus: f64,
    /// Signal times the column counted from the first sample.
    column: f64,
    valid: u64,
    range: (f64, f64),
}

impl Default for Totals {
    fn default() -> Self {
        Totals { signal: 0.0, modulus: 0.0, column: 0.0, valid: 0, range: (f64::INFINITY, f64::NEG_INFINITY) }
    }
}

/// Sums run in so many lanes, added in a fixed order at the end: vectors, and the same bits on all of them.
const LANES: usize = 8;

impl Totals {
    #[inline(always)]
    fn of(values: &[f64], shares: Option<&[f64]>) -> Self {
        let mut signal = [0.0; LANES];
        let mut modulus = [0.0; LANES];
        let mut column = [0.0; LANES];
        let mut valid = [0u64; LANES];
        let (mut low, mut high) = ([f64::INFINITY; LANES], [f64::NEG_INFINITY; LANES]);
        let mut add = |lane: usize, v: f64, share: f64, at: f64| {
            let there = !v.is_nan();
            let s = if there { v * share } else { 0.0 };
            signal[lane] += s;
            modulus[lane] += s.abs();
            column[lane] += s * at;
            valid[lane] += u64::from(there);
            // A comparison with NaN is false: the range stays.
            low[lane] = if v < low[lane] { v } else { low[lane] };
            high[lane] = if v > high[lane] { v } else { high[lane] };
        };
        let (whole, rest) = values.as_chunks::<LANES>();
        match shares {
            None => {
                for (i, v) in whole.iter().enumerate() {
                    for lane in 0..LANES {
                        add(lane, v[lane], 1.0, (i * LANES + lane) as f64);
                    }
                }
            }
            Some(shares) => {
                for (i, (v, s)) in whole.iter().zip(shares.as_chunks::<LANES>().0).enumerate() {
                    for lane in 0..LANES {
                        add(lane, v[lane], s[lane], (i * LANES + lane) as f64);
                    }
                }
            }
        }
        for (lane, v) in rest.iter().enumerate() {
            let at = whole.len() * LANES + lane;
            add(lane, *v, shares.map_or(1.0, |s| s[at]), at as f64);
        }
        let sum = |v: [f64; LANES]| v.iter().sum();
        Totals {
            signal: sum(signal),
            modulus: sum(modulus),
            column: sum(column),
            valid: valid.iter().sum(),
            range: (
                low.iter().copied().fold(f64::INFINITY, f64::min),
                high.iter().copied().fold(f64::NEG_INFINITY, f64::max),
            ),
        }
    }
}

/// (after + beyond - before) / sum of |before|, with what is accounted for `beyond` the output; `None` if that is 0.
pub fn closure(before: &Balance, after: &Balance, beyond: &Sum) -> Option<f64> {
    let scale = before.modulus.value();
    let mut change = after.signal;
    change.merge(beyond);
    change.add(-before.signal.value());
    (scale > 0.0 && scale.is_finite()).then(|| change.value() / scale)
}
