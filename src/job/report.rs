//! What the pages show: rasters reduced to pictures on the output's grid, curves, phases.

use super::account::as_f64;
use super::{Job, costs, open_masked, windows};
use crate::error::Result;
use crate::map::Map;
use crate::measure::transfer_curve;
use crate::raster::{self, MissingCodes, Source, Window, codes_of};
use crate::report::{
    Audit, BandPictures, Display, Ledger, RunPictures, audit_page, ledger_page, write_whole,
};
use crate::resample::{Outside, Plan, Values};
use crate::with_samples;
use std::path::Path;

/// The longest side of a picture.
const SIDE: usize = 640;

/// Bands that a page shows.
const BANDS: usize = 4;

/// Places looked at in each cell of a picture, along an axis.
const PLACES: usize = 3;

/// Writes one page for some runs.
///
/// # Errors
/// When a raster cannot be read again, or the page cannot be written.
pub fn write_report(path: &Path, runs: &[(&Job, &Ledger)]) -> Result<()> {
    let runs =
        runs.iter().map(|(job, ledger)| Ok(((*ledger).clone(), of_run(job)?))).collect::<Result<Vec<_>>>()?;
    write(path, &ledger_page(&runs)?)
}

/// Writes the page of an audit of two raster files.
///
/// # Errors
/// When a raster cannot be read again, or the page cannot be written.
pub fn write_audit_report(
    path: &Path,
    audit: &Audit,
    paths: (&Path, &Path),
    missing: Option<f64>,
) -> Result<()> {
    let (before, after) = (raster::open(paths.0)?, raster::open(paths.1)?);
    let codes = (codes_of(before.header(), missing), codes_of(after.header(), missing));
    let area = match audit.values.as_str() {
        "total" => {
            let j = audit.relation.back.jacobian(0.0, 0.0);
            (j[0][0] * j[1][1] - j[0][1] * j[1][0]).abs()
        }
        _ => 1.0,
    };
    let pictures = pictures(
        (before.as_ref(), &codes.0),
        (after.as_ref(), &codes.1),
        &audit.relation.back,
        area,
        audit.band - 1,
        audit.values == "label",
    )?;
    write(path, &audit_page(audit, &pictures)?)
}

fn write(path: &Path, page: &str) -> Result<()> {
    write_whole(path, page.as_bytes()).map_err(|e| crate::Error::io(path, "writing the report", e))
}

/// Block means of a raster's first band for a page, their columns, and picture pixels each.
///
/// # Errors
/// When the raster cannot be read.
pub fn reduced(path: &Path) -> Result<(Vec<f64>, usize, usize)> {
    let source = raster::open(path)?;
    let codes = codes_of(source.header(), None);
    let grid = &source.header().grid;
    let display = Display::fit(grid.rows, grid.columns, grid.pixel_size(), SIDE);
    let columns = display.shown(grid.rows, grid.columns).1;
    Ok((reduce(source.as_ref(), &codes, 0, &display, false)?, columns, display.repeat.0))
}

fn of_run(job: &Job) -> Result<RunPictures> {
    let before = open_masked(&job.input, job.mask.as_deref(), job.rules.missing)?;
    let after = raster::open(&job.output)?;
    // NPY and PNG cannot declare the code that was written.
    let codes = (codes_of(before.header(), job.rules.missing), codes_of(after.header(), job.rules.missing));
    let area = if job.rules.values == Values::Total {
        let j = job.back.jacobian(0.0, 0.0);
        (j[0][0] * j[1][1] - j[0][1] * j[1][0]).abs()
    } else {
        1.0
    };
    let classes = job.rules.values == Values::Label;
    let count = after.header().bands;
    let mut bands = Vec::new();
    for band in 0..count.min(BANDS) {
        let (before, after) = ((before.as_ref(), &codes.0), (after.as_ref(), &codes.1));
        let mut shown = pictures(before, after, &job.back, area, band, classes)?;
        if count > 1 {
            let named = after.0.header().band_names.get(band).filter(|n| !n.is_empty());
            shown.name = named.cloned().unwrap_or_else(|| format!("band {}", band + 1));
        }
        if let Values::Cyclic(period) = job.rules.values {
            // Differences of angles go the short way round.
            shown
                .difference
                .iter_mut()
                .for_each(|d| *d = (*d + 0.5 * period).rem_euclid(period) - 0.5 * period);
        }
        bands.push(shown);
    }
    let size = (before.header().grid.rows, before.header().grid.columns);
    let target = (job.target.rows, job.target.columns);
    let plan = Plan::new(size, target, &job.back, &job.rules)?;
    let (rows, columns, pixels) = costs::operators(&plan, &job.rules, size, target, &job.back);
    Ok(RunPictures {
        bands,
        hidden: count.saturating_sub(BANDS),
        classes,
        transfer: transfer_curve(&rows, &columns, &pixels, 100),
        nyquist: 0.5 / rows.pitch.max(columns.pitch).max(1.0),
        step: windows::step_response(&plan, &job.rules, size),
        phases: phases(&job.back, size, target, job.rules.outside),
    })
}

/// Both rasters on the second one's grid, reduced to a picture; `back` goes from its positions to the first one's.
fn pictures(
    before: (&dyn Source, &MissingCodes),
    after: (&dyn Source, &MissingCodes),
    back: &Map,
    area: f64,
    band: usize,
    classes: bool,
) -> Result<BandPictures> {
    let grid = &after.0.header().grid;
    let display = Display::fit(grid.rows, grid.columns, (1.0, 1.0), SIDE);
    let (_, columns) = display.shown(grid.rows, grid.columns);
    let shown = reduce(after.0, after.1, band.min(after.0.header().bands - 1), &display, classes)?;
    // Small rasters are drawn with several picture pixels to a pixel: the input is looked at as finely.
    let fine = display.repeat.0.min(4);
    let places = if display.block == (1, 1) || classes { 1 } else { PLACES };
    let (nearest, linear) =
        looked_at(before, back, (grid.rows, grid.columns), &display, (fine, places), area, band)?;
    let (wide, repeat) = (columns * fine, (display.repeat.0 / fine).max(1));
    let enlarged = |v: &[f64]| -> Vec<f64> {
        let rows = v.len() / columns.max(1) * fine;
        (0..rows * wide).map(|i| v[(i / wide / fine) * columns + (i % wide) / fine]).collect()
    };
    let after = enlarged(&shown);
    // Class codes have no difference.
    let difference =
        if classes { Vec::new() } else { after.iter().zip(&linear).map(|(a, b)| a - b).collect() };
    Ok(BandPictures {
        name: String::new(),
        columns: wide,
        repeat,
        before: nearest,
        after,
        difference,
        note: if classes && display.block != (1, 1) {
            format!("Of each {} × {} pixels the middle one is drawn", display.block.0, display.block.1)
        } else {
            display.note().map(|n| n[..1].to_uppercase() + &n[1..]).unwrap_or_default()
        },
    })
}

/// Means of blocks of one band, of class codes the middle ones, read by bands of rows.
fn reduce(
    source: &dyn Source,
    codes: &MissingCodes,
    band: usize,
    display: &Display,
    classes: bool,
) -> Result<Vec<f64>> {
    let grid = &source.header().grid;
    let mut out = Vec::new();
    // Some million samples at a time, in whole blocks.
    let rows = ((1usize << 22) / grid.columns.max(1)).max(1).next_multiple_of(display.block.0);
    for start in (0..grid.rows).step_by(rows) {
        let end = (start + rows).min(grid.rows);
        let window = Window { rows: start..end, columns: 0..grid.columns };
        let values = one_band(source, codes, band, &window)?;
        let (rows, columns) = (end - start, grid.columns);
        out.extend(if classes {
            display.pick(&values, rows, columns)
        } else {
            display.reduce(&values, rows, columns)
        });
    }
    Ok(out)
}

fn one_band(source: &dyn Source, codes: &MissingCodes, band: usize, window: &Window) -> Result<Vec<f64>> {
    let stored = source.read(band..band + 1, window)?;
    let mut values = vec![0.0; window.area()];
    with_samples!(&stored, v => as_f64(v, codes, &mut values));
    Ok(values)
}

/// The first raster at places spread over each cell of the picture: its nearest samples, and linearly between samples.
fn looked_at(
    source: (&dyn Source, &MissingCodes),
    back: &Map,
    target: (usize, usize),
    display: &Display,
    (fine, places): (usize, usize),
    area: f64,
    band: usize,
) -> Result<(Vec<f64>, Vec<f64>)> {
    let shown = display.shown(target.0, target.1);
    let (rows, columns) = (shown.0 * fine, shown.1 * fine);
    let (n, m) = (source.0.header().grid.rows, source.0.header().grid.columns);
    let step = (display.block.0 as f64 / fine as f64, display.block.1 as f64 / fine as f64);
    let (mut nearest, mut linear) = (vec![f64::NAN; rows * columns], vec![f64::NAN; rows * columns]);
    const TILE: usize = 64;
    for r0 in (0..rows).step_by(TILE) {
        for c0 in (0..columns).step_by(TILE) {
            let (r1, c1) = ((r0 + TILE).min(rows), (c0 + TILE).min(columns));
            let edge = |i: usize, step: f64, n: usize| (i as f64 * step).min(n as f64) - 0.5;
            let b = back.bounds(
                (edge(r0, step.0, target.0), edge(r1, step.0, target.0)),
                (edge(c0, step.1, target.1), edge(c1, step.1, target.1)),
            );
            let reach = |(low, high): (f64, f64), n: usize| {
                let range = (low.floor() - 1.0).max(0.0) as usize
                    ..((high.ceil() + 2.0).clamp(0.0, n as f64) as usize);
                (range.start < range.end).then_some(range)
            };
            let (Some(wr), Some(wc)) = (reach(b.rows, n), reach(b.columns, m)) else { continue };
            let window = Window { rows: wr, columns: wc };
            let values = one_band(source.0, source.1, band.min(source.0.header().bands - 1), &window)?;
            let at = |i: i64, k: i64| -> f64 {
                let i = i.clamp(0, n as i64 - 1) - window.rows.start as i64;
                let k = k.clamp(0, m as i64 - 1) - window.columns.start as i64;
                let inside = (0..window.rows.len() as i64).contains(&i)
                    && (0..window.columns.len() as i64).contains(&k);
                if inside { values[i as usize * window.columns.len() + k as usize] } else { f64::NAN }
            };
            for r in r0..r1 {
                for c in c0..c1 {
                    let (mut near, mut between) = (Mean::default(), Mean::default());
                    for p in 0..places * places {
                        let part = |i: usize| (i as f64 + 0.5) / places as f64;
                        let row = (r as f64 + part(p / places)) * step.0 - 0.5;
                        let column = (c as f64 + part(p % places)) * step.1 - 0.5;
                        let (x, y) = back.apply(row, column);
                        if !(x >= -0.5 && y >= -0.5 && x <= n as f64 - 0.5 && y <= m as f64 - 0.5) {
                            continue;
                        }
                        near.add(at((x + 0.5).floor() as i64, (y + 0.5).floor() as i64));
                        // The output's own pixel shows one value all over: compare with the input at its centre.
                        let centre = if places == 1 {
                            back.apply((row + 0.5).floor(), (column + 0.5).floor())
                        } else {
                            (x, y)
                        };
                        let (i, k) = (centre.0.floor(), centre.1.floor());
                        let (s, t) = (centre.0 - i, centre.1 - k);
                        let (i, k) = (i as i64, k as i64);
                        let line = |i: i64| at(i, k) * (1.0 - t) + at(i, k + 1) * t;
                        between.add(line(i) * (1.0 - s) + line(i + 1) * s);
                    }
                    nearest[r * columns + c] = near.value() * area;
                    linear[r * columns + c] = between.value() * area;
                }
            }
        }
    }
    Ok((nearest, linear))
}

/// A mean of what is there.
#[derive(Default)]
struct Mean {
    sum: f64,
    count: usize,
}

impl Mean {
    fn add(&mut self, v: f64) {
        if !v.is_nan() {
            self.sum += v;
            self.count += 1;
        }
    }

    fn value(&self) -> f64 {
        if self.count > 0 { self.sum / self.count as f64 } else { f64::NAN }
    }
}

/// Shares of output pixels by the sub-pixel phase of their centres, along rows and along columns.
fn phases(back: &Map, source: (usize, usize), target: (usize, usize), outside: Outside) -> [Vec<f64>; 2] {
    const BINS: usize = 20;
    let mut bins = [vec![0.0; BINS], vec![0.0; BINS]];
    let mut count = 0.0;
    let places = (spread(target.0), spread(target.1));
    for r in &places.0 {
        for c in &places.1 {
            let (x, y) = back.apply(*r as f64, *c as f64);
            let inside = |x: f64, n: usize| x >= -0.5 && x <= n as f64 - 0.5;
            if outside == Outside::Missing && !(inside(x, source.0) && inside(y, source.1)) {
                continue;
            }
            count += 1.0;
            for (bins, v) in bins.iter_mut().zip([x, y]) {
                // A rounding below a sample is on it.
                let phase = (v - (v + 1e-9).floor()).max(0.0);
                bins[((phase * BINS as f64) as usize).min(BINS - 1)] += 1.0;
            }
        }
    }
    bins.map(|b| b.iter().map(|v| v / f64::max(count, 1.0)).collect())
}

/// Some of `n` places, spread by the golden ratio: no even stride, which could beat with a pattern of phases.
fn spread(n: usize) -> Vec<usize> {
    const MOST: usize = 144;
    if n <= MOST {
        return (0..n).collect();
    }
    (0..MOST).map(|i| ((i as f64 * 0.618_033_988_749_895).fract() * n as f64) as usize).collect()
}
