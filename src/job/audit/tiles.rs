//! Tiles of AFTER against BEFORE: displacement from small ones, spectra from large ones.

use super::super::Progress;
use super::read::{Bringer, Side};
use crate::error::{Error, Result};
use crate::kernel::Kernel;
use crate::map::Map;
use crate::measure::audit::{
    Aliasing, Curve, Estimator, Extent, Field, Kind, NoVote, Spectra, Verdict, Vote, fit, judge,
    predict_corner_centres,
};
use crate::raster::Window;
use crate::report::{DisplacementField, Tile};
use crate::resample::Reduce;
use ndarray::Array2;
use rayon::prelude::*;
use std::ops::Range;

/// AFTER against BEFORE in one band each.
pub struct Tiling<'a> {
    pub after: &'a Side<'a>,
    pub after_band: usize,
    pub bringer: Bringer<'a>,
    /// The map about AFTER's middle.
    local: Map,
    /// Pixels of AFTER per pixel of the coarser grid, along AFTER's rows and columns.
    unit: (f64, f64),
    /// AFTER's values are divided by this: the pixel's area for totals.
    scale: f64,
}

/// Tiles along one axis: their length and where they begin.
struct Cut {
    length: usize,
    starts: Vec<usize>,
}

impl Cut {
    /// Tiles of `length` over `range`, half overlapping, at most `most`, evenly spread.
    fn new(range: &Range<usize>, length: usize, step: usize, most: usize) -> Self {
        let room = range.len().saturating_sub(length);
        let count = (1 + room / step.max(1)).clamp(1, most.max(1));
        let starts = (0..count)
            .map(|i| range.start + if count == 1 { room / 2 } else { i * room / (count - 1) })
            .collect();
        Cut { length, starts }
    }
}

fn windows(rows: &Cut, columns: &Cut) -> Vec<Window> {
    rows.starts
        .iter()
        .flat_map(|r| {
            columns
                .starts
                .iter()
                .map(move |c| Window { rows: *r..r + rows.length, columns: *c..c + columns.length })
        })
        .collect()
}

impl<'a> Tiling<'a> {
    pub fn new(after: &'a Side<'a>, after_band: usize, bringer: Bringer<'a>, total: bool) -> Self {
        let size = after.size();
        let middle = ((size.0 as f64 - 1.0) / 2.0, (size.1 as f64 - 1.0) / 2.0);
        let j = bringer.back.jacobian(middle.0, middle.1);
        let at = bringer.back.apply(middle.0, middle.1);
        let offset = |row: [f64; 2], at: f64| at - row[0] * middle.0 - row[1] * middle.1;
        let local =
            Map::affine([[j[0][0], j[0][1], offset(j[0], at.0)], [j[1][0], j[1][1], offset(j[1], at.1)]]);
        let unit = |a: f64, b: f64| (1.0 / a.hypot(b).max(1e-6)).max(1.0);
        let area = (j[0][0] * j[1][1] - j[0][1] * j[1][0]).abs();
        Tiling {
            after,
            after_band,
            bringer,
            local,
            unit: (unit(j[0][0], j[1][0]), unit(j[0][1], j[1][1])),
            scale: if total { area } else { 1.0 },
        }
    }

    /// Rows and columns of AFTER that lie within BEFORE (for a turned map: that may).
    fn common(&self) -> Result<(Range<usize>, Range<usize>)> {
        let (n, m) = self.bringer.before.size();
        let b = self.local.invert()?.bounds((-0.5, n as f64 - 0.5), (-0.5, m as f64 - 0.5));
        let axis = |(low, high): (f64, f64), n: usize| {
            let start = (low - 0.5).ceil().clamp(0.0, n as f64) as usize;
            let end = ((high + 0.5).floor() + 1.0).clamp(start as f64, n as f64) as usize;
            start..end
        };
        let size = self.after.size();
        Ok((axis(b.rows, size.0), axis(b.columns, size.1)))
    }

    /// Input pixels per pixel of AFTER along the axis where they are more, at least 1.
    fn coarsest(&self) -> f64 {
        self.bringer.stretch.0.max(self.bringer.stretch.1)
    }

    /// Whether pixels grow by more than can be left out of account.
    fn grows(&self) -> bool {
        self.coarsest() > 1.05
    }

    fn after(&self, window: &Window) -> Result<Array2<f64>> {
        let mut patch = self.after.plane(self.after_band, window)?;
        if self.scale != 1.0 {
            patch.mapv_inplace(|v| v / self.scale);
        }
        Ok(patch)
    }

    /// The frame over which displacement is told, input pixels: what both cover.
    fn extent(&self) -> Extent {
        let (size, own) = (self.after.size(), self.bringer.before.size());
        let b = self.bringer.back.bounds((-0.5, size.0 as f64 - 0.5), (-0.5, size.1 as f64 - 0.5));
        let axis = |(low, high): (f64, f64), n: usize| {
            let (low, high) = (low.max(-0.5), high.min(n as f64 - 0.5));
            (0.5 * (low + high), (0.5 * (high - low)).max(0.5))
        };
        let (r, c) = (axis(b.rows, own.0), axis(b.columns, own.1));
        Extent { middle: [r.0, c.0], half: [r.1, c.1] }
    }

    /// Displacement tile by tile, and the field through it.
    pub fn displacement(&self, progress: &dyn Progress) -> Result<DisplacementField> {
        let extent = self.extent();
        let mut out = DisplacementField {
            verdict: None,
            field: None,
            largest: None,
            extent,
            tiles: Vec::new(),
            voted: 0,
            with_gaps: 0,
            flat: 0,
            unlike: 0,
        };
        let (rows, columns) = self.common()?;
        // A blur of 0.8 pixels of the coarser grid leaves 4 % at its Nyquist frequency: what kernels do there counts little.
        let sigma = (0.8 * self.unit.0, 0.8 * self.unit.1);
        let (Some(r), Some(c)) =
            (small_cut(&rows, self.unit.0, sigma.0), small_cut(&columns, self.unit.1, sigma.1))
        else {
            return Ok(out);
        };
        self.bringer.check((r.length, c.length))?;
        let estimator = Estimator::new((r.length, c.length), sigma)?;
        let kernel = Kernel::parse("bspline:5")?;
        let tiles = windows(&r, &c);
        let look = |way: Reduce, undone: Option<&Field>| -> Result<Vec<Tile>> {
            let bringer = self.bringer.corrected(undone);
            let found: Vec<Result<Tile>> = tiles
                .par_iter()
                .map(|window| {
                    if progress.stopped() {
                        return Err(Error::Stopped);
                    }
                    self.tile(window, &estimator, (&kernel, way), &bringer, undone)
                })
                .collect();
            found.into_iter().collect()
        };
        // Where displacement changes within a tile, its texture decides which part of the tile is heard; and folded detail
        // is the same only where the same places were looked at. So the field is undone and what is left is measured again.
        out.tiles = look(Reduce::Auto, None)?;
        let mut best = likeness(&out.tiles);
        let (mut way, mut undone) = (Reduce::Auto, None);
        if self.grows() {
            // An unprotected reduction is best compared with one that folded the same: tried where such ones look.
            for start in self.starts(extent) {
                let found = look(Reduce::None, start.as_ref())?;
                if likeness(&found) > best {
                    best = likeness(&found);
                    (way, undone) = (Reduce::None, start);
                    out.tiles = found;
                }
            }
        }
        let mut field = fit(&votes(&out.tiles), extent);
        for _ in 0..6 {
            let Some(last) = field.filter(|f| f.is_uneven() || (self.grows() && f.is_displaced())) else {
                break;
            };
            let found = look(way, Some(&last))?;
            let Some(next) = fit(&votes(&found), extent) else { break };
            if way == Reduce::None && likeness(&found) < best {
                // Folded detail that kernels treat unlike leads astray: where both are most alike is the better answer.
                field = undone.map(|u: Field| u.told_by(&last)).or(field);
                break;
            }
            best = likeness(&found);
            undone = Some(last);
            out.tiles = found;
            field = Some(next);
            if next.differs_by(&last) < 2e-3 {
                break;
            }
        }
        let votes = votes(&out.tiles);
        let count = |why| out.tiles.iter().filter(|t| t.no_vote == Some(why)).count();
        (out.voted, out.with_gaps) = (votes.len(), count(NoVote::Gap));
        (out.flat, out.unlike) = (count(NoVote::Flat), count(NoVote::Unlike));
        out.field = field.filter(|_| !votes.is_empty());
        out.verdict =
            out.field.map(|f| judge(&f, &self.bringer.back, self.bringer.before.size(), self.after.size()));
        out.largest = out.field.map(|f| largest(&f, out.verdict.as_ref(), &votes));
        Ok(out)
    }

    /// Where an unprotected reduction may have looked: where it should; at the first centres; with corner centres aligned.
    fn starts(&self, extent: Extent) -> Vec<Option<Field>> {
        let mut out = vec![None];
        let (before, after) = (self.bringer.before.size(), self.after.size());
        let back = &self.bringer.back;
        if let Some(axes) = back.as_axes().filter(|a| !a.swapped) {
            let slip = [0.5 * (axes.rows.0.abs() - 1.0), 0.5 * (axes.columns.0.abs() - 1.0)];
            out.push(Some(Field::assumed(slip, [0.0; 2], extent)));
        }
        if let Some(first) = predict_corner_centres(back, before, after) {
            let at = back.apply(0.0, 0.0);
            let growth = |k: usize, at: f64| first[k] * extent.half[k] / (at - extent.middle[k]);
            out.push(Some(Field::assumed([0.0; 2], [growth(0, at.0), growth(1, at.1)], extent)));
        }
        out
    }

    /// One tile; `bringer` undoes `undone`, which is added again to what is left.
    fn tile(
        &self,
        window: &Window,
        estimator: &Estimator,
        way: (&Kernel, Reduce),
        bringer: &Bringer,
        undone: Option<&Field>,
    ) -> Result<Tile> {
        let middle = |r: &Range<usize>| 0.5 * (r.start as f64 + r.end as f64 - 1.0);
        let (row, column) = (middle(&window.rows), middle(&window.columns));
        let at = self.bringer.back.apply(row, column);
        let known = undone.map_or((0.0, 0.0), |f| f.undone_at(at.0, at.1));
        let known = [known.0, known.1];
        let measured = match bringer.patches(window, &[way])?.as_deref() {
            Some([before]) => estimator.measure(&self.after(window)?, before),
            _ => Err(NoVote::Gap),
        };
        // From pixels of AFTER to those of BEFORE: d = J s, cov = J cov J^T.
        let j = self.bringer.back.jacobian(row, column);
        let shift = measured.as_ref().ok();
        Ok(Tile {
            at: [at.0, at.1],
            after_rows: [window.rows.start, window.rows.end],
            after_columns: [window.columns.start, window.columns.end],
            displacement: shift.map(|s| [0, 1].map(|k| known[k] + j[k][0] * s.by.0 + j[k][1] * s.by.1)),
            sigma: shift.map(|s| {
                let c = &s.covariance;
                [0, 1].map(|k| {
                    let v =
                        j[k][0] * (j[k][0] * c[0][0] + 2.0 * j[k][1] * c[0][1]) + j[k][1] * j[k][1] * c[1][1];
                    v.max(0.0).sqrt()
                })
            }),
            correlation: shift.map(|s| s.correlation),
            no_vote: measured.err(),
        })
    }

    /// The transfer over frequency and what was folded; `None` where no patch could be looked at.
    pub fn spectra(
        &self,
        field: Option<&Field>,
        progress: &dyn Progress,
    ) -> Result<Option<(Curve, Option<Aliasing>, usize)>> {
        // Between gaps there may be room for smaller patches alone.
        for length in [128.0, 64.0, 32.0] {
            let found = self.spectra_of(length, field, progress)?;
            if found.is_some() {
                return Ok(found);
            }
        }
        Ok(None)
    }

    /// The same with patches of some coarser pixels.
    fn spectra_of(
        &self,
        length: f64,
        field: Option<&Field>,
        progress: &dyn Progress,
    ) -> Result<Option<(Curve, Option<Aliasing>, usize)>> {
        let (rows, columns) = self.common()?;
        let cut = |range: &Range<usize>, unit: f64| large_cut(range, unit, length);
        let (Some(r), Some(c)) = (cut(&rows, self.unit.0), cut(&columns, self.unit.1)) else {
            return Ok(None);
        };
        self.bringer.check((r.length, c.length))?;
        let mut spectra = Spectra::new((r.length, c.length), &self.local)?;
        let kernel = Kernel::parse("bspline:9")?;
        let grows = self.grows();
        let ways = [(&kernel, Reduce::Auto), (&kernel, Reduce::None)];
        let ways = &ways[..if grows { 2 } else { 1 }];
        let inverse = self.local.invert()?;
        // A displacement that changes within a patch, or that decides what is folded, is undone on the way; otherwise by phase.
        let undone = field.filter(|f| f.is_uneven() || (grows && f.is_displaced()));
        let bringer = self.bringer.corrected(undone);
        let even = field.filter(|_| undone.is_none());
        // Some patches at a time in parallel, added in order: the same sums for any number of threads.
        for group in windows(&r, &c).chunks(8) {
            let looked: Vec<Result<_>> = group
                .par_iter()
                .map(|window| {
                    if progress.stopped() {
                        return Err(Error::Stopped);
                    }
                    let Some(before) = bringer.patches(window, ways)? else { return Ok(None) };
                    let (whole, rest) = self.slip(window, even, &inverse);
                    let after = self.after(&whole)?;
                    if after.iter().any(|v| !v.is_finite()) {
                        return Ok(None);
                    }
                    let before: Vec<_> = before.iter().map(|b| spectra.transform(b)).collect();
                    Ok(Some((spectra.transform(&after), before, rest)))
                })
                .collect();
            for patch in looked {
                if let Some((after, before, rest)) = patch?
                    && let Some(b) = before.first()
                {
                    spectra.add(after, b, before.get(1), rest);
                }
            }
        }
        if spectra.patches() == 0 {
            return Ok(None);
        }
        let known = bringer.known(&kernel);
        let curve = spectra.curve(&known, 0.5 / self.coarsest());
        let aliasing = spectra.aliasing(&known, &curve, grows);
        Ok(Some((curve, aliasing, spectra.patches())))
    }

    /// The window of AFTER that shows what belongs in `window`, by whole pixels, and what is left of the displacement.
    fn slip(&self, window: &Window, field: Option<&Field>, inverse: &Map) -> (Window, (f64, f64)) {
        let Some(field) = field else { return (window.clone(), (0.0, 0.0)) };
        let middle = |r: &Range<usize>| 0.5 * (r.start as f64 + r.end as f64 - 1.0);
        let at = self.local.apply(middle(&window.rows), middle(&window.columns));
        let d = field.at(at.0, at.1);
        let k = inverse.jacobian(0.0, 0.0);
        let s = (k[0][0] * d.0 + k[0][1] * d.1, k[1][0] * d.0 + k[1][1] * d.1);
        let moved = |r: &Range<usize>, by: f64, n: usize| {
            let by = by.round() as i64;
            let (start, end) = (r.start as i64 + by, r.end as i64 + by);
            (start >= 0 && end <= n as i64).then_some((start as usize..end as usize, by as f64))
        };
        let size = self.after.size();
        match (moved(&window.rows, s.0, size.0), moved(&window.columns, s.1, size.1)) {
            (Some((rows, r)), Some((columns, c))) => (Window { rows, columns }, (s.0 - r, s.1 - c)),
            _ => (window.clone(), s),
        }
    }
}

/// How alike both rasters are over all tiles.
fn likeness(tiles: &[Tile]) -> f64 {
    tiles.iter().filter_map(|t| t.correlation).sum()
}

/// The votes among tiles.
fn votes(tiles: &[Tile]) -> Vec<Vote> {
    let vote = |t: &Tile| {
        let (d, s) = (t.displacement?, t.sigma?);
        Some(Vote { at: (t.at[0], t.at[1]), by: (d[0], d[1]), variance: (s[0] * s[0], s[1] * s[1]) })
    };
    tiles.iter().filter_map(vote).collect()
}

/// Small tiles: 48 coarser pixels and the rim, half overlapping; in small rasters as many as fit three times.
fn small_cut(range: &Range<usize>, unit: f64, sigma: f64) -> Option<Cut> {
    let margin = Estimator::margin(sigma);
    let room = range.len().checked_sub(2 * margin)?;
    let units = |n: f64| (n * unit).ceil() as usize;
    if room < units(12.0) {
        return None;
    }
    let inner = (room / 2).clamp(units(20.0), units(48.0)).min(room);
    // Tiles of finely sampled rasters are large; fewer of them tell as much.
    let most = ((6000.0 / (inner + 2 * margin) as f64) as usize).clamp(3, 12);
    Some(Cut::new(range, inner + 2 * margin, inner / 2, most))
}

/// Patches for spectra: so many coarser pixels, half overlapping; less in small rasters.
fn large_cut(range: &Range<usize>, unit: f64, wanted: f64) -> Option<Cut> {
    let n = range.len();
    let units = |k: f64| (k * unit).ceil() as usize;
    if n < units(24.0) {
        return None;
    }
    let length =
        if n >= units(1.5 * wanted) { units(wanted) } else { (2 * n / 3).max(units(0.5 * wanted)) }.min(n);
    let most = ((3000.0 / length as f64) as usize).clamp(2, 8);
    Some(Cut::new(range, length, length / 2, most))
}

/// The largest displacement: of the field at the frame's corners, or of the ninth of ten tiles of an irregular one.
fn largest(field: &Field, verdict: Option<&Verdict>, votes: &[Vote]) -> f64 {
    if verdict.is_none_or(|v| v.kind != Kind::Irregular) {
        return field.largest();
    }
    let mut lengths: Vec<f64> = votes.iter().map(|v| v.by.0.hypot(v.by.1)).collect();
    lengths.sort_by(f64::total_cmp);
    lengths.get(lengths.len() * 9 / 10).copied().unwrap_or(field.largest()).max(field.largest())
}
