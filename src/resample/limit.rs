//! Overshoot held to the range of the samples around; of totals the excess goes to the neighbours.
//!
//! The range of a pixel is that of the samples in the central 2 x 2 of its position and under its image; of totals times
//! the area of the image within the input's frame. A density beyond its range is set to its end. A total beyond its range
//! offers the excess to its neighbours (eight, or more where pixels shrink) in proportion to the room they have; a neighbour that is offered more
//! than its room takes the same share of every offer, the rest stays where it was. Some rounds of this depend on nothing
//! farther away than [`halo`] pixels, so that the same bits come out however the output is cut.

use super::blocks::Engine;
use super::passes::Span;
use super::values::Values;
use crate::error::Result;
use crate::map::Map;
use crate::map::polygon::{area, clip};
use crate::measure::Sum;
use crate::raster::{MissingCodes, Sample, Window};
use crate::real::Real;
use crate::with_samples;
use ndarray::Array2;
use std::ops::Range;

/// Rounds of handing over.
const ROUNDS: usize = 6;

/// How far a pixel hands over: its eight neighbours, or as many more as pixels shrink, since ripples grow with them.
fn reach(back: &Map, target: (usize, usize)) -> i64 {
    let (h, w) = (target.0 as f64 - 1.0, target.1 as f64 - 1.0);
    let step = |p: (f64, f64)| {
        let j = back.jacobian(p.0, p.1);
        j[0][0].hypot(j[1][0]).min(j[0][1].hypot(j[1][1]))
    };
    let least = [(0.0, 0.0), (0.0, w), (h, 0.0), (h, w)].map(step).into_iter().fold(1.0, f64::min);
    ((1.0 / least.max(0.25)) - 1e-9).ceil().max(1.0) as i64
}

/// Pixels around a block that have a say in it.
pub(super) fn halo(values: Values, back: &Map, target: (usize, usize)) -> i64 {
    // What a pixel can hand over depends on its takers, on who else offers to them, and on the room around those.
    if values == Values::Total { 3 * ROUNDS as i64 * reach(back, target) } else { 0 }
}

/// The range of each pixel of a block; NaN where no sample is there.
pub(super) struct Bounds {
    low: Array2<f64>,
    high: Array2<f64>,
    reach: i64,
}

/// What was moved or cut.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Held {
    /// Sum of moduli of what went from one pixel to another, or was cut off.
    pub moved: Sum,
    /// Pixels that were changed because they exceeded their range.
    pub pixels: u64,
    /// Sum of moduli of what still exceeds the ranges.
    pub beyond: Sum,
}

impl Bounds {
    /// Looks at the samples of one band.
    ///
    /// # Errors
    /// When the source cannot be read.
    pub fn of(engine: &Engine, back: &Map, span: &Span, band: usize) -> Result<Self> {
        let mut bounds = Bounds {
            low: Array2::from_elem(span.size(), f64::NAN),
            high: Array2::from_elem(span.size(), f64::NAN),
            reach: reach(back, engine.target),
        };
        let size = engine.source_size();
        let edges = |r: &Range<i64>| (r.start as f64 - 0.5, r.end as f64 - 0.5);
        let b = back.bounds(edges(&span.rows), edges(&span.columns));
        let reach = |(low, high): (f64, f64), n: usize| {
            let range =
                (low.floor() - 1.0).max(0.0) as usize..((high.ceil() + 2.0).clamp(0.0, n as f64) as usize);
            (range.start < range.end).then_some(range)
        };
        let (Some(rows), Some(columns)) = (reach(b.rows, size.0), reach(b.columns, size.1)) else {
            return Ok(bounds);
        };
        let window = Window { rows, columns };
        let stored = engine.source.read(band..band + 1, &window)?;
        let samples = with_samples!(&stored, v => wide(v, &engine.codes));
        let total = engine.rules.values == Values::Total;
        for ((i, k), low) in bounds.low.indexed_iter_mut() {
            let (r, c) = ((span.rows.start + i as i64) as f64, (span.columns.start + k as i64) as f64);
            let (x, y) = back.apply(r, c);
            let j = back.jacobian(r, c);
            let half = |v: [f64; 2]| 0.5 * (v[0].abs() + v[1].abs());
            let around = |x: f64, half: f64, window: &Range<usize>| {
                let first = x.floor().min((x - half + 0.5).floor());
                let last = (x.floor() + 1.0).max((x + half - 0.5).ceil());
                let clamp =
                    |v: f64| v.clamp(window.start as f64, window.end as f64 - 1.0) as usize - window.start;
                clamp(first)..clamp(last) + 1
            };
            let (is, ks) = (around(x, half(j[0]), &window.rows), around(y, half(j[1]), &window.columns));
            let (mut least, mut most) = (f64::INFINITY, f64::NEG_INFINITY);
            for i in is {
                for v in &samples[i * window.columns.len()..][ks.clone()] {
                    // A comparison with NaN is false: gaps have no say.
                    least = if *v < least { *v } else { least };
                    most = if *v > most { *v } else { most };
                }
            }
            if least <= most {
                let unit = if total { covered(back, r, c, size) } else { 1.0 };
                (*low, bounds.high[(i, k)]) = (least * unit, most * unit);
            }
        }
        Ok(bounds)
    }

    /// Cuts values off at the ends of their ranges.
    pub fn cut<T: Real>(&self, values: &mut Array2<T>) -> Held {
        let mut held = Held::default();
        for (at, v) in values.indexed_iter_mut() {
            let (old, low, high) = (v.to_f64(), self.low[at], self.high[at]);
            if old < low || old > high {
                let new = T::from_f64(old.clamp(low, high));
                held.moved.add((old - new.to_f64()).abs());
                held.pixels += 1;
                *v = new;
            }
        }
        held
    }

    /// Hands what exceeds the ranges to neighbours; counts what happens within `inner`.
    pub fn hand_over<T: Real>(&self, values: &mut Array2<T>, inner: &(Range<usize>, Range<usize>)) -> Held {
        let (rows, columns) = values.dim();
        let mut held = Held::default();
        let excess = |at: (usize, usize), v: f64| {
            let over = (v - self.high[at]).max(0.0) + (v - self.low[at]).min(0.0);
            if over.is_nan() { 0.0 } else { over }
        };
        let mut v: Array2<f64> = values.mapv(T::to_f64);
        let counts = |at: (usize, usize)| inner.0.contains(&at.0) && inner.1.contains(&at.1);
        held.pixels =
            v.indexed_iter().filter(|(at, v)| counts(*at) && excess(*at, **v) != 0.0).count() as u64;
        if v.indexed_iter().all(|(at, v)| excess(at, *v) == 0.0) {
            return held;
        }
        let reach = self.reach;
        let neighbours = |(r, c): (usize, usize)| {
            (-reach..=reach)
                .flat_map(move |dr| (-reach..=reach).map(move |dc| (dr, dc)))
                .filter(|d| *d != (0, 0))
                .filter_map(move |(dr, dc)| {
                    let (r, c) = (usize::try_from(r as i64 + dr).ok()?, usize::try_from(c as i64 + dc).ok()?);
                    (r < rows && c < columns).then_some((r, c))
                })
        };
        // Room for what has the sign of `excess`.
        let room = |v: &Array2<f64>, at: (usize, usize), excess: f64| {
            let room = if excess > 0.0 { self.high[at] - v[at] } else { v[at] - self.low[at] };
            if room > 0.0 { room } else { 0.0 }
        };
        for _ in 0..ROUNDS {
            let over = fill((rows, columns), |at| excess(at, v[at]));
            // The room around each giver, and what each taker is offered of either sign.
            let around = fill((rows, columns), |at| {
                let e = over[at];
                if e == 0.0 { 0.0 } else { neighbours(at).map(|n| room(&v, n, e)).sum::<f64>() }
            });
            let offer = |giver: (usize, usize), taker_room: f64| {
                if around[giver] > 0.0 { over[giver] * (taker_room / around[giver]).min(1.0) } else { 0.0 }
            };
            // Givers offer no more than the room around them.
            let offer = |giver: (usize, usize), taker: (usize, usize)| {
                let part = offer(giver, room(&v, taker, over[giver]));
                part * (around[giver] / over[giver].abs()).min(1.0)
            };
            let share: Array2<(f64, f64)> = fill((rows, columns), |taker| {
                let (mut up, mut down) = (0.0, 0.0);
                for giver in neighbours(taker).filter(|g| over[*g] != 0.0) {
                    let o = offer(giver, taker);
                    if o > 0.0 { up += o } else { down -= o }
                }
                let take = |offered: f64, sign: f64| {
                    if offered > 0.0 { (room(&v, taker, sign) / offered).min(1.0) } else { 0.0 }
                };
                (take(up, 1.0), take(down, -1.0))
            });
            let given = fill((rows, columns), |at| {
                if over[at] == 0.0 {
                    return 0.0;
                }
                let taken = |taker| {
                    let o: f64 = offer(at, taker);
                    o * if o > 0.0 { share[taker].0 } else { share[taker].1 }
                };
                neighbours(at).map(taken).sum::<f64>()
            });
            v = fill((rows, columns), |at| {
                let taken = |giver| {
                    let o: f64 = offer(giver, at);
                    o * if o > 0.0 { share[at].0 } else { share[at].1 }
                };
                let change: f64 = neighbours(at).filter(|g| over[*g] != 0.0).map(taken).sum();
                v[at] - given[at] + change
            });
            given.indexed_iter().filter(|(at, _)| counts(*at)).for_each(|(_, g)| held.moved.add(g.abs()));
        }
        held.beyond =
            v.indexed_iter().filter(|(at, _)| counts(*at)).map(|(at, v)| excess(at, *v).abs()).collect();
        values.zip_mut_with(&v, |old, new| *old = T::from_f64(*new));
        held
    }
}

/// A plane filled place by place, in parallel.
fn fill<A: Default + Copy + Send + Sync>(
    size: (usize, usize),
    value: impl Fn((usize, usize)) -> A + Sync + Send,
) -> Array2<A> {
    let mut out = Array2::from_elem(size, A::default());
    ndarray::Zip::indexed(&mut out).par_for_each(|at, v| *v = value(at));
    out
}

fn wide<S: Sample>(stored: &[S], codes: &MissingCodes) -> Vec<f64> {
    let codes: Vec<S> = codes.of();
    let there = |v: S| !codes.iter().any(|c| v.is(*c));
    stored.iter().map(|v| if there(*v) { v.wide() } else { f64::NAN }).collect()
}

/// The area of a pixel's image within the input's frame, in input pixels.
fn covered(back: &Map, row: f64, column: f64, size: (usize, usize)) -> f64 {
    let corners =
        [(-0.5, -0.5), (-0.5, 0.5), (0.5, 0.5), (0.5, -0.5)].map(|(r, c)| back.apply(row + r, column + c));
    let (n, m) = (size.0 as f64 - 0.5, size.1 as f64 - 0.5);
    let inside = |p: &(f64, f64)| p.0 >= -0.5 && p.0 <= n && p.1 >= -0.5 && p.1 <= m;
    if corners.iter().all(inside) {
        return area(&corners);
    }
    let (mut a, mut b) = (corners.to_vec(), Vec::new());
    clip(&a, |p| p.0 + 0.5, &mut b);
    clip(&b, |p| n - p.0, &mut a);
    clip(&a, |p| p.1 + 0.5, &mut b);
    clip(&b, |p| m - p.1, &mut a);
    area(&a)
}
