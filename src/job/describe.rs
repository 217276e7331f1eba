//! Statistics of a raster, read once by windows.

use super::account::as_f64;
use super::{Progress, reading_windows};
use crate::error::{Error, Result};
use crate::measure::Sum;
use crate::raster::{Digest, MissingCodes, Source};
use crate::with_samples;
use serde::Serialize;

/// Statistics of one band; `null` where no sample is there.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct BandStatistics {
    /// Least sample.
    pub min: Option<f64>,
    /// Greatest sample.
    pub max: Option<f64>,
    /// Mean.
    pub mean: Option<f64>,
    /// Standard deviation of the samples (divided by their number).
    pub std: Option<f64>,
    /// Samples that are there.
    pub valid: u64,
    /// Samples that are missing.
    pub missing: u64,
}

/// Reads a raster once: statistics of every band, and the digest.
///
/// # Errors
/// When the source cannot be read, or the work is stopped.
pub fn describe(
    source: &dyn Source,
    missing: Option<f64>,
    progress: &dyn Progress,
) -> Result<(Vec<BandStatistics>, String)> {
    let header = source.header();
    let codes =
        MissingCodes { codes: header.missing.into_iter().chain(missing).filter(|c| !c.is_nan()).collect() };
    let mut digest = Digest::new(header);
    let mut bands: Vec<Moments> = (0..header.bands).map(|_| Moments::default()).collect();
    let (mut done, total) = (0, header.grid.pixels() as u64);
    for window in reading_windows(header, 256 << 20) {
        if progress.stopped() {
            return Err(Error::Stopped);
        }
        let samples = source.read(0..header.bands, &window)?;
        digest.feed(&window, &samples);
        let mut line = vec![0.0; window.area()];
        for (b, moments) in bands.iter_mut().enumerate() {
            let at = b * window.area();
            with_samples!(&samples, v => as_f64(&v[at..at + window.area()], &codes, &mut line));
            moments.add(&line);
        }
        done += window.area() as u64;
        progress.advance(done, total);
    }
    Ok((bands.iter().map(Moments::finish).collect(), digest.finish(header)))
}

/// Sums about a first guess of the mean, so that large offsets do not cancel in the variance.
#[derive(Default)]
struct Moments {
    about: Option<f64>,
    sum: Sum,
    squares: Sum,
    range: Option<(f64, f64)>,
    valid: u64,
    missing: u64,
}

impl Moments {
    fn add(&mut self, values: &[f64]) {
        for v in values {
            if v.is_nan() {
                self.missing += 1;
                continue;
            }
            let about = *self.about.get_or_insert(*v);
            self.valid += 1;
            self.sum.add(v - about);
            self.squares.add((v - about) * (v - about));
            let r = self.range.get_or_insert((*v, *v));
            *r = (r.0.min(*v), r.1.max(*v));
        }
    }

    fn finish(&self) -> BandStatistics {
        let n = self.valid as f64;
        let mean = self.about.map(|a| a + self.sum.value() / n);
        let variance = (self.squares.value() / n - (self.sum.value() / n).powi(2)).max(0.0);
        BandStatistics {
            min: self.range.map(|r| r.0),
            max: self.range.map(|r| r.1),
            mean,
            std: mean.map(|_| variance.sqrt()),
            valid: self.valid,
            missing: self.missing,
        }
    }
}
