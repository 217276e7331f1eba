//! The pass over all pixels: where signal went, where gaps appeared or leaked, what was clipped.

use super::super::{Progress, reading_windows};
use super::AuditValues;
use super::read::{Extremes, Side, View, overlap};
use crate::error::{Error, Result};
use crate::map::Map;
use crate::measure::audit::ClosureMap;
use crate::measure::{Frame, Sum};
use crate::raster::{Header, SampleType, Window};
use crate::report::{Clipping, Gaps};

/// All that the pass over all pixels adds up.
pub struct Sums {
    pub map: ClosureMap,
    pub gaps: Gaps,
    pub clipping: Clipping,
    /// Signal times row and times column (input pixels), before and after.
    moments: [[Sum; 2]; 2],
    /// Samples of AFTER with a number.
    pub valid: u64,
    /// Those of them over a pixel that BEFORE fills with samples: what is compared.
    pub common: u64,
}

/// What does not change from window to window.
pub struct Pass<'a> {
    pub before: &'a Side<'a>,
    pub after: &'a Side<'a>,
    pub back: Map,
    pub values: AuditValues,
    pub memory: u64,
    pub extremes: (&'a [Extremes], &'a [Extremes]),
}

/// BEFORE on a window of AFTER's grid.
struct Under {
    window: Window,
    /// Mean of BEFORE's samples under each pixel, band by band.
    means: Vec<f64>,
    /// Share of each pixel's area that holds samples, and the least such share around it; `None` where nothing is missing.
    coverage: Option<(Vec<f64>, Vec<f64>)>,
}

/// A pixel is wholly covered from here on: f32 keeps 1e-7.
const WHOLE: f64 = 1.0 - 1e-5;

impl Pass<'_> {
    pub fn run(&self, progress: &dyn Progress, done: &mut u64, total: u64) -> Result<Sums> {
        let size = self.after.size();
        let frame = Frame::new(&self.back, size, self.before.size());
        let mut sums = Sums {
            map: ClosureMap::new(size),
            gaps: Gaps::default(),
            clipping: Clipping::default(),
            moments: Default::default(),
            valid: 0,
            common: 0,
        };
        sums.gaps.missing_before = self.extremes.0.iter().map(|e| e.missing).sum();
        sums.gaps.missing_after = self.extremes.1.iter().map(|e| e.missing).sum();
        // Windows are held as f64 here, up to four times; most of the memory is the engine's.
        let wide = Header {
            sample_type: SampleType::F64,
            bands: self.after.bands.len(),
            ..self.after.source.header().clone()
        };
        for window in reading_windows(&wide, self.memory / 4) {
            if progress.stopped() {
                return Err(Error::Stopped);
            }
            let under = self.under(&window)?;
            for (b, band) in self.after.bands.clone().enumerate() {
                let after = self.after.plane(band, &window)?;
                self.add(&mut sums, &frame, &under, b, after.as_slice().unwrap_or_default());
                self.count_clipped(&mut sums.clipping, &window, b, after.as_slice().unwrap_or_default())?;
            }
            *done += window.area() as u64;
            progress.advance(*done, total);
        }
        self.settle_clipping(&mut sums.clipping);
        Ok(sums)
    }

    /// Pixels of AFTER around a pixel that lie within `input` input pixels of it.
    fn around(&self, input: f64) -> (usize, usize) {
        let j = self.back.jacobian(0.0, 0.0);
        let reach = |a: f64, b: f64| ((input / a.hypot(b).max(1e-9)).ceil() as usize).clamp(1, 32);
        (reach(j[0][0], j[1][0]), reach(j[0][1], j[1][1]))
    }

    fn under(&self, window: &Window) -> Result<Under> {
        let means = overlap(&View::new(self.before, false), window, &self.back, self.memory)?;
        let gapless = self.extremes.0.iter().all(|e| e.missing == 0);
        let coverage = if gapless {
            None
        } else {
            let (down, across) = self.around(4.0);
            let size = self.after.size();
            let halo = Window {
                rows: window.rows.start.saturating_sub(down)..(window.rows.end + down).min(size.0),
                columns: window.columns.start.saturating_sub(across)
                    ..(window.columns.end + across).min(size.1),
            };
            let wide = overlap(&View::new(self.before, true), &halo, &self.back, self.memory)?;
            let (mut own, mut least) = (Vec::new(), Vec::new());
            for band in wide.chunks(halo.area()) {
                let (o, l) = crop_and_least(band, &halo, window, (down, across));
                own.extend(o);
                least.extend(l);
            }
            Some((own, least))
        };
        Ok(Under { window: window.clone(), means, coverage })
    }

    fn add(&self, sums: &mut Sums, frame: &Frame, under: &Under, band: usize, after: &[f64]) {
        let window = &under.window;
        let (h, w) = (window.rows.len(), window.columns.len());
        let at = |r: usize, c: usize| (band * h + r) * w + c;
        let code = self.code_outside_range(band);
        let range = &self.extremes.0[band];
        let slack = 1e-9 * range.range();
        let parts = sums.map.column_parts(&window.columns);
        for r in 0..h {
            let row = window.rows.start + r;
            for (cell, columns) in &parts {
                let (mut before_sum, mut modulus, mut after_sum) = (0.0, 0.0, 0.0);
                for column in columns.clone() {
                    let c = column - window.columns.start;
                    let a = after[r * w + c];
                    let b = under.means[at(r, c)];
                    let (own, least) = under
                        .coverage
                        .as_ref()
                        .map_or((1.0, 1.0), |(own, least)| (own[at(r, c)], least[at(r, c)]));
                    let share = frame.share(row, column);
                    let (x, y) = self.back.apply(row as f64, column as f64);
                    if a.is_nan() {
                        self.count_missing(&mut sums.gaps, share, least, (x, y));
                        continue;
                    }
                    sums.valid += 1;
                    let area = self.area(row, column);
                    // A total is compared as the density that it stands for.
                    let density = if self.values == AuditValues::Total { a / area } else { a };
                    count_found(&mut sums.gaps, share, own, least, density, code, range);
                    // Without any sample BEFORE has no range.
                    if !(range.low <= range.high) {
                        continue;
                    }
                    if density > range.high + slack {
                        sums.clipping.above_range += 1;
                        sums.clipping.most_above = sums.clipping.most_above.max(density - range.high);
                    } else if density < range.low - slack {
                        sums.clipping.below_range += 1;
                        sums.clipping.most_below = sums.clipping.most_below.max(range.low - density);
                    }
                    if b.is_nan() || !(own > WHOLE) || !(share > 0.0) {
                        continue;
                    }
                    sums.common += 1;
                    let before = b * area * share;
                    let after = if self.values == AuditValues::Total { a } else { a * area * share };
                    before_sum += before;
                    modulus += before.abs();
                    after_sum += after;
                    for (moments, signal) in sums.moments.iter_mut().zip([before, after]) {
                        moments[0].add(signal * x);
                        moments[1].add(signal * y);
                    }
                }
                sums.map.add(row, *cell, before_sum, modulus, after_sum);
            }
        }
    }

    pub(super) fn area(&self, row: usize, column: usize) -> f64 {
        let j = self.back.jacobian(row as f64, column as f64);
        (j[0][0] * j[1][1] - j[0][1] * j[1][0]).abs()
    }

    /// A pixel of AFTER without a number: why?
    fn count_missing(&self, gaps: &mut Gaps, share: f64, least: f64, at: (f64, f64)) {
        let (n, m) = self.before.size();
        let deep = |x: f64, n: usize, reach: f64| x > reach - 0.5 && x < n as f64 - 0.5 - reach;
        let j = self.back.jacobian(0.0, 0.0);
        let reach = |row: [f64; 2]| 3.0 + 0.5 * (row[0].abs() + row[1].abs());
        if !(share > 0.0) {
            gaps.outside += 1;
        } else if !(least > WHOLE) {
            gaps.kept += 1;
        } else if deep(at.0, n, reach(j[0])) && deep(at.1, m, reach(j[1])) {
            gaps.appeared += 1;
        } else {
            gaps.at_border += 1;
        }
    }

    /// The code for missing, where it lies clear of the range of BEFORE's samples.
    fn code_outside_range(&self, band: usize) -> Option<f64> {
        let e = &self.extremes.0[band];
        self.before.codes.codes.iter().copied().find(|c| {
            let away = if *c < e.low { e.low - c } else { c - e.high };
            away > 0.5 * e.range() && away.is_finite()
        })
    }
}

/// A pixel of AFTER with a number: was there anything under it?
fn count_found(
    gaps: &mut Gaps,
    share: f64,
    own: f64,
    least: f64,
    value: f64,
    code: Option<f64>,
    range: &Extremes,
) {
    if !(share > 0.0) {
        gaps.invented_outside += 1;
    } else if own < 1e-6 || own.is_nan() {
        gaps.leaked += 1;
    } else if own < WHOLE {
        gaps.near_gap += 1;
    }
    if let (Some(code), true) = (code, least < WHOLE) {
        // Kernels overshoot by a quarter of the range at most; what lies farther towards the code was mixed with it.
        let margin = 0.25 * range.range();
        let mixed = if code < range.low {
            value < range.low - margin && value > code
        } else {
            value > range.high + margin && value < code
        };
        gaps.mixed_with_code += u64::from(mixed);
    }
}

/// The part of `halo` that is `window`, and the least value around each of its pixels; NaN (nothing there) counts as 1 around
/// and as 0 itself.
fn crop_and_least(
    plane: &[f64],
    halo: &Window,
    window: &Window,
    reach: (usize, usize),
) -> (Vec<f64>, Vec<f64>) {
    let (h, w) = (halo.rows.len(), halo.columns.len());
    let known = |v: f64| if v.is_nan() { 1.0 } else { v };
    // Along rows first, then along columns.
    let mut along = vec![1.0f64; h * w];
    for r in 0..h {
        for c in 0..w {
            let span = c.saturating_sub(reach.1)..(c + reach.1 + 1).min(w);
            along[r * w + c] = plane[r * w..][span].iter().fold(1.0f64, |a, v| a.min(known(*v)));
        }
    }
    let (mut own, mut least) = (Vec::new(), Vec::new());
    for row in window.rows.clone() {
        let r = row - halo.rows.start;
        let span = r.saturating_sub(reach.0)..(r + reach.0 + 1).min(h);
        for column in window.columns.clone() {
            let c = column - halo.columns.start;
            let v = plane[r * w + c];
            own.push(if v.is_nan() { 0.0 } else { v });
            least.push(span.clone().fold(1.0f64, |a, r| a.min(along[r * w + c])));
        }
    }
    (own, least)
}

impl Sums {
    /// Whether the signal closes within a bound. Where both sides are 0 there is nothing to be off; where nothing is there to
    /// be compared, or sums are not finite, it does not close.
    pub fn closes(&self, bound: f64) -> bool {
        let [before, modulus, after] = self.map.totals();
        match self.map.total_closure() {
            Some(c) => c.abs() <= bound,
            None => self.common > 0 && modulus == 0.0 && before == 0.0 && after == 0.0,
        }
    }

    /// Centre of the signal (row, column), input pixels, before and after; `None` where the signal cancels.
    pub fn centroids(&self) -> [Option<[f64; 2]>; 2] {
        let [before, modulus, after] = self.map.totals();
        let centre = |signal: f64, m: &[Sum; 2]| {
            (signal.abs() > 1e-12 * modulus && signal != 0.0)
                .then(|| [m[0].value() / signal, m[1].value() / signal])
        };
        [centre(before, &self.moments[0]), centre(after, &self.moments[1])]
    }
}
