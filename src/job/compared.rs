//! What gaps keep from being compared: signal counts on both sides or on neither.
//!
//! The region that both rasters cover is where a sample that is there lies under an output pixel that is there. Sums over
//! frames count more: input under missing output pixels, and the part of output pixels that lies over missing input.
//! Both are taken back here, pixel by pixel by area.

use super::account::{Account, as_f64};
use crate::error::Result;
use crate::map::{Map, polygon};
use crate::measure::Local;
use crate::raster::{MissingCodes, Source, Window};
use crate::resample::{Cells, Squares, corners};
use crate::with_samples;
use rayon::prelude::*;
use std::ops::Range;

/// One output pixel's part in neither sum.
struct Part {
    row: usize,
    column: usize,
    /// Input signal under it, its modulus, and its first moments, if the pixel is missing.
    before: [f64; 4],
    /// Its value times the area over missing input.
    after: f64,
}

/// Output pixels of a row that are looked at together.
const TILE: usize = 16;

/// Samples of the input that are looked at at a time.
const AT_A_TIME: usize = 1 << 22;

/// Takes back what does not count on both sides, for one block of all bands. `values` gives a band's rows, NaN = missing.
///
/// # Errors
/// When the source cannot be read.
pub(super) fn take_back(
    source: &dyn Source,
    codes: &MissingCodes,
    back: &Map,
    window: &Window,
    values: &[Vec<f64>],
    (before, after): (&mut Account, &mut Account),
    local: &mut Local,
) -> Result<()> {
    // Where one output pixel covers many samples, few rows of a block cover much of the input.
    let j = back.jacobian(window.rows.start as f64, window.columns.start as f64);
    let extent = |v: [f64; 2]| v[0].abs() + v[1].abs() + 1.0;
    let under_row = window.columns.len() as f64 * extent(j[0]) * extent(j[1]);
    let rows = ((AT_A_TIME as f64 / under_row) as usize).clamp(1, window.rows.len().max(1));
    let width = window.columns.len();
    for start in window.rows.clone().step_by(rows) {
        let part =
            Window { rows: start..(start + rows).min(window.rows.end), columns: window.columns.clone() };
        let at = (start - window.rows.start) * width..(part.rows.end - window.rows.start) * width;
        let values: Vec<&[f64]> = values.iter().map(|v| &v[at.clone()]).collect();
        take_back_rows(source, codes, back, &part, &values, (&mut *before, &mut *after), local)?;
    }
    Ok(())
}

fn take_back_rows(
    source: &dyn Source,
    codes: &MissingCodes,
    back: &Map,
    window: &Window,
    values: &[&[f64]],
    accounts: (&mut Account, &mut Account),
    local: &mut Local,
) -> Result<()> {
    let header = source.header();
    let total = local.is_total();
    let (n, m) = (header.grid.rows, header.grid.columns);
    let edges = |r: &Range<usize>| (r.start as f64 - 0.5, r.end as f64 - 0.5);
    let b = back.bounds(edges(&window.rows), edges(&window.columns));
    let reach = |(low, high): (f64, f64), n: usize| {
        let range = low.floor().max(0.0) as usize..((high.ceil() + 1.0).clamp(0.0, n as f64) as usize);
        (range.start < range.end).then_some(range)
    };
    let (Some(rows), Some(columns)) = (reach(b.rows, n), reach(b.columns, m)) else { return Ok(()) };
    let under = Window { rows, columns };
    let width = window.columns.len();
    for (band, out) in values.iter().enumerate() {
        let stored = source.read(band..band + 1, &under)?;
        let mut samples = vec![0.0; under.area()];
        with_samples!(&stored, v => as_f64(v, codes, &mut samples));
        let there = Squares::of((under.rows.len(), under.columns.len()), &samples, |v| !v.is_nan());
        let parts: Vec<Vec<Part>> = out
            .par_chunks(width)
            .zip(window.rows.clone())
            .map_init(Cells::default, |cells, (line, row)| {
                let mut found = Vec::new();
                // What a tile of pixels lies over tells for all of them, mostly.
                let tiles = line.chunks(TILE).zip(window.columns.clone().step_by(TILE));
                let pixels = tiles.flat_map(|(values, start)| {
                    let over_gaps = sees_gap(&there, back, &under, row, start..start + values.len());
                    let counts = move |v: &f64| over_gaps || v.is_nan();
                    values.iter().zip(start..).filter(move |(v, _)| counts(v))
                });
                for (v, column) in pixels {
                    let image = corners(back, row as f64, column as f64);
                    // A total counts with the share of its pixel, a density with the area.
                    let whole = if total { polygon::area(&image) } else { 1.0 };
                    let mut part = Part { row, column, before: [0.0; 4], after: 0.0 };
                    cells.under(&image, Some((n, m)), |i, k, area| {
                        let (i, k) = (i as usize, k as usize);
                        let s =
                            samples[(i - under.rows.start) * under.columns.len() + k - under.columns.start];
                        if v.is_nan() && !s.is_nan() {
                            let s = s * area;
                            part.before[0] += s;
                            part.before[1] += s.abs();
                            part.before[2] += s * i as f64;
                            part.before[3] += s * k as f64;
                        } else if !v.is_nan() && s.is_nan() {
                            part.after += v * area / whole;
                        }
                    });
                    if part.before[1] != 0.0 || part.after != 0.0 {
                        found.push(part);
                    }
                }
                found
            })
            .collect();
        for part in parts.iter().flatten() {
            let [signal, modulus, r, c] = part.before;
            accounts.0.take(band, signal, modulus, (r, c));
            let at = back.apply(part.row as f64, part.column as f64);
            accounts.1.take(band, part.after, part.after.abs(), (part.after * at.0, part.after * at.1));
            local.take(part.row, part.column, signal, modulus, part.after);
        }
    }
    Ok(())
}

/// Whether some of a row's pixels may lie over a missing sample.
fn sees_gap(there: &Squares, back: &Map, under: &Window, row: usize, columns: Range<usize>) -> bool {
    let rows = (row as f64 - 0.5, row as f64 + 0.5);
    let columns = (columns.start as f64 - 0.5, columns.end as f64 - 0.5);
    if !back.is_regular(rows, columns) {
        return true;
    }
    let b = back.bounds(rows, columns);
    let among = |(low, high): (f64, f64), start: usize| {
        ((low.floor() as i64).saturating_sub(start as i64), (high.ceil() as i64).saturating_sub(start as i64))
    };
    !there.holds_within(among(b.rows, under.rows.start), among(b.columns, under.columns.start))
}
