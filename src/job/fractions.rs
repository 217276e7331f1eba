//! Of class codes, the share of each output pixel's area that each class covers: one band a class.

use super::account::as_f64;
use super::{Conduct, Progress, Ready, reading_windows};
use crate::error::{Error, Result};
use crate::kernel::Kernel;
use crate::raster::{self, CELL, Header, MissingCodes, SampleType, Samples, Source, Window};
use crate::resample::{Engine, Extras, Plan, Rules, Values};
use crate::with_samples;
use std::collections::BTreeSet;
use std::ops::Range;
use std::path::Path;

/// More classes than this are taken for measurements.
const MOST_CLASSES: usize = 256;

/// A raster of class codes as 0 and 1, one band a class (of each band), NaN where missing.
struct Indicator<'a> {
    header: Header,
    source: &'a dyn Source,
    codes: &'a MissingCodes,
    classes: Vec<f64>,
}

impl Source for Indicator<'_> {
    fn header(&self) -> &Header {
        &self.header
    }

    fn read(&self, bands: Range<usize>, window: &Window) -> Result<Samples> {
        let mut out = Vec::with_capacity(bands.len() * window.area());
        let mut known: Option<(usize, Vec<f64>)> = None;
        for b in bands {
            let (band, class) = (b / self.classes.len(), self.classes[b % self.classes.len()]);
            if known.as_ref().is_none_or(|k| k.0 != band) {
                known = Some((band, values(self.source, self.codes, band, window)?));
            }
            let of = |v: &f64| if v.is_nan() { f32::NAN } else { f32::from(u8::from(*v == class)) };
            out.extend(known.iter().flat_map(|k| k.1.iter().map(of)));
        }
        Ok(Samples::F32(out))
    }
}

fn values(source: &dyn Source, codes: &MissingCodes, band: usize, window: &Window) -> Result<Vec<f64>> {
    let stored = source.read(band..band + 1, window)?;
    let mut out = vec![0.0; window.area()];
    with_samples!(&stored, v => as_f64(v, codes, &mut out));
    Ok(out)
}

/// The classes of a raster, in order.
fn classes(source: &dyn Source, codes: &MissingCodes, memory: u64, path: &Path) -> Result<Vec<f64>> {
    // Codes are compared by their bits in order; -0 counts as 0.
    let mut found: BTreeSet<i64> = BTreeSet::new();
    let key = |v: f64| (v + 0.0).to_bits() as i64;
    for window in reading_windows(source.header(), memory) {
        for band in 0..source.header().bands {
            let mut last = f64::NAN;
            for v in values(source, codes, band, &window)? {
                if v != last && !v.is_nan() {
                    found.insert(key(v));
                    last = v;
                }
            }
            if found.len() > MOST_CLASSES {
                return Err(Error::unfit(
                    format!("{}: more than {MOST_CLASSES} different values are no classes", path.display()),
                    "leave --fractions out, or give a raster of class codes",
                ));
            }
        }
    }
    let mut classes: Vec<f64> = found.into_iter().map(|bits| f64::from_bits(bits as u64)).collect();
    classes.sort_by(f64::total_cmp);
    Ok(classes)
}

impl Ready<'_> {
    /// Refuses, before any work, fractions that mean nothing.
    pub(super) fn check_fractions(&self, conduct: &Conduct) -> Result<()> {
        let Some(path) = &conduct.fractions else { return Ok(()) };
        if self.job.rules.values != Values::Label {
            return Err(Error::usage(
                "--fractions tells the shares of classes",
                "give --values label with it",
            ));
        }
        raster::check_writable(
            path,
            &Header { sample_type: SampleType::F32, missing: None, ..self.header.clone() },
        )
    }

    /// Writes the shares of the classes.
    pub(super) fn write_fractions(
        &self,
        path: &Path,
        overwrite: bool,
        progress: &dyn Progress,
    ) -> Result<()> {
        let rules = &self.job.rules;
        let source = self.source.as_ref();
        let classes = classes(source, &self.codes, rules.memory, &self.job.input)?;
        if classes.is_empty() {
            return Err(Error::unfit(
                format!("{}: every sample is missing", self.job.input.display()),
                "leave --fractions out",
            ));
        }
        let from = source.header();
        let bands = from.bands * classes.len();
        let names: Vec<String> = (0..bands)
            .map(|b| match (b / classes.len(), classes[b % classes.len()]) {
                (0, class) if from.bands == 1 => format!("class {class}"),
                (band, class) => format!("band {} class {class}", band + 1),
            })
            .collect();
        let header = |grid: &crate::grid::Grid| {
            let mut own = Header::new(grid.clone(), bands, SampleType::F32);
            own.band_names = names.clone();
            own
        };
        let indicator = Indicator { header: header(&from.grid), source, codes: &self.codes, classes };
        let rules = Rules {
            kernel: Kernel::parse("area")?,
            values: Values::Density,
            sample_type: Some(SampleType::F32),
            missing: None,
            ..rules.clone()
        };
        let size = (from.grid.rows, from.grid.columns);
        let target = (self.header.grid.rows, self.header.grid.columns);
        let out = header(&self.header.grid);
        let mut sink = raster::create(path, &out, overwrite)?;
        let engine = Engine {
            source: &indicator,
            target,
            plan: Plan::new(size, target, &self.job.back, &rules)?,
            rules: &rules,
            codes: MissingCodes::default(),
            sample_type: SampleType::F32,
            fill: None,
            extras: Extras::default(),
        };
        engine.run(sink.alignment().max(CELL), None, &mut |block| {
            if progress.stopped() {
                return Err(Error::Stopped);
            }
            sink.write(&block.window, &block.samples)
        })?;
        sink.finish()
    }
}
