//! Clipping: samples of AFTER at the end of their range, where BEFORE has none such.

use super::AuditValues;
use super::read::Side;
use super::sums::Pass;
use crate::error::Result;
use crate::raster::Window;
use crate::report::Clipping;

/// So many samples at one extreme make a plateau.
const PLATEAU: u64 = 4;

/// An end of AFTER's range that may have been cut.
#[derive(Clone, Copy)]
struct End {
    value: f64,
    high: bool,
}

impl Pass<'_> {
    /// The ends of a band that hold a plateau or the type's limit.
    fn ends(&self, band: usize) -> Vec<End> {
        let e = &self.extremes.1[band];
        if !(e.range() > 0.0) {
            return Vec::new();
        }
        let limits = self.after.source.header().sample_type.integer_range();
        let limit = |v: f64, high: bool| limits.is_some_and(|(a, b)| v == if high { b } else { a });
        let mut ends = Vec::new();
        if e.at_low >= PLATEAU || limit(e.low, false) {
            ends.push(End { value: e.low, high: false });
        }
        if e.at_high >= PLATEAU || limit(e.high, true) {
            ends.push(End { value: e.high, high: true });
        }
        ends
    }

    /// Counts clipped samples of a window of one band.
    pub(super) fn count_clipped(
        &self,
        clipping: &mut Clipping,
        window: &Window,
        band: usize,
        after: &[f64],
    ) -> Result<()> {
        for end in self.ends(band) {
            let width = window.columns.len();
            let found: Vec<(usize, usize)> = after
                .iter()
                .enumerate()
                .filter(|(_, v)| **v == end.value)
                .map(|(i, _)| (window.rows.start + i / width, window.columns.start + i % width))
                .collect();
            let n = self.clipped_among(&found, band, end)?;
            if end.high {
                clipping.high += n;
            } else {
                clipping.low += n;
            }
        }
        Ok(())
    }

    /// How many of these pixels stand at an end that BEFORE does not have there. Reads BEFORE in parts that fit.
    fn clipped_among(&self, pixels: &[(usize, usize)], band: usize, end: End) -> Result<u64> {
        let Some(around) = self.window_around(pixels) else { return Ok(0) };
        let most = (self.memory as usize / 128).max(1 << 16);
        if around.area() > most && pixels.len() > 1 {
            let (a, b) = pixels.split_at(pixels.len() / 2);
            return Ok(self.clipped_among(a, band, end)? + self.clipped_among(b, band, end)?);
        }
        let before = self.before.plane(self.before.bands.start + band, &around)?;
        let integer = self.after.source.header().sample_type.integer_range().is_some();
        let slack = if integer { 1.0 } else { 1e-6 * self.extremes.0[band].range() };
        let mut count = 0;
        for &(r, c) in pixels {
            let Some(w) = self.window_around(&[(r, c)]) else { continue };
            let mut extreme: Option<f64> = None;
            for row in w.rows.clone() {
                for column in w.columns.clone() {
                    let v = before[(row - around.rows.start, column - around.columns.start)];
                    if !v.is_nan() {
                        extreme = Some(match extreme {
                            None => v,
                            Some(e) => {
                                if end.high {
                                    e.max(v)
                                } else {
                                    e.min(v)
                                }
                            }
                        });
                    }
                }
            }
            let value = match self.values {
                AuditValues::Total => end.value / self.area(r, c),
                AuditValues::Density => end.value,
            };
            count += u64::from(extreme.is_some_and(|e| (e - value).abs() > slack));
        }
        Ok(count)
    }

    /// The window of BEFORE under some pixels of AFTER and a pixel and a half around them.
    fn window_around(&self, pixels: &[(usize, usize)]) -> Option<Window> {
        let first = pixels.first()?;
        let (mut low, mut high) = (*first, *first);
        for (r, c) in pixels {
            low = (low.0.min(*r), low.1.min(*c));
            high = (high.0.max(*r), high.1.max(*c));
        }
        let b = self
            .back
            .bounds((low.0 as f64 - 0.5, high.0 as f64 + 0.5), (low.1 as f64 - 0.5, high.1 as f64 + 0.5));
        let axis = |(low, high): (f64, f64), n: usize| {
            let start = (low - 1.5).ceil().clamp(0.0, n as f64) as usize;
            let end = ((high + 1.5).floor() + 1.0).clamp(start as f64, n as f64) as usize;
            (end > start).then_some(start..end)
        };
        let (n, m) = self.before.size();
        Some(Window { rows: axis(b.rows, n)?, columns: axis(b.columns, m)? })
    }

    /// Keeps counts only where they make a plateau: one sample is always the greatest.
    pub(super) fn settle_clipping(&self, clipping: &mut Clipping) {
        for (count, value, high) in [
            (&mut clipping.low, &mut clipping.low_value, false),
            (&mut clipping.high, &mut clipping.high_value, true),
        ] {
            if *count < PLATEAU {
                *count = 0;
                continue;
            }
            let ends = (0..self.after.bands.len()).flat_map(|b| self.ends(b)).filter(|e| e.high == high);
            *value = ends.map(|e| e.value).reduce(|a, b| if high { a.max(b) } else { a.min(b) });
        }
        clipping.samples = samples(self.after);
        clipping.at_type_limit =
            self.after.source.header().sample_type.integer_range().is_some_and(|(low, high)| {
                clipping.low_value == Some(low) || clipping.high_value == Some(high)
            });
    }
}

fn samples(side: &Side) -> u64 {
    let (n, m) = side.size();
    (n * m * side.bands.len()) as u64
}
