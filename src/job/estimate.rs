//! What a job would take, without doing it.

use super::planes::Planes;
use super::{Conduct, Job, Ready, reading_windows};
use crate::error::Result;
use crate::raster::{CELL, SampleType, Source};
use crate::resample::Extras;
use serde::Serialize;
use std::path::PathBuf;
use std::time::Instant;

/// What a job would take.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Estimate {
    /// The raster that would go in.
    pub input: PathBuf,
    /// The raster that would come out.
    pub output: PathBuf,
    /// Rows, columns and bands that go in.
    pub from: [usize; 3],
    /// Rows, columns and bands that come out.
    pub to: [usize; 3],
    /// Type of the output's samples.
    #[serde(rename = "type")]
    pub sample_type: SampleType,
    /// The pass.
    pub method: String,
    /// Rows and columns of the blocks that it would be done in.
    pub block: [usize; 2],
    /// Bytes of the output's samples, before compression.
    pub output_bytes: u64,
    /// Bytes that blocks need at most at a time.
    pub memory_bytes: u64,
    /// Seconds, from a trial on a part of the raster; writing is not in it.
    pub seconds: f64,
}

/// Side of the part that is tried.
const TRIAL: usize = 512;

impl Job {
    /// Checks the job as [`Job::run`] would, tries a part of it, and tells what the whole would take. Writes nothing.
    /// `folder_comes`: the output's folder would be made first, so that nothing can be in the way there.
    ///
    /// # Errors
    /// As [`Job::check`], and when the part cannot be read.
    pub fn estimate(&self, conduct: &Conduct, folder_comes: bool) -> Result<Estimate> {
        self.in_pool(|| {
            let ready = self.ready()?;
            if !folder_comes {
                ready.check_output(conduct)?;
            }
            ready.check_missing(0)?;
            ready.estimate(conduct)
        })
    }
}

impl Ready<'_> {
    fn estimate(&self, conduct: &Conduct) -> Result<Estimate> {
        let source: &dyn Source = self.source.as_ref();
        let from = source.header();
        let target = (self.header.grid.rows, self.header.grid.columns);
        let engine = self.engine(Extras {
            coverage: conduct.coverage.is_some(),
            noise: conduct.sigma_out.as_ref().and(self.noise.clone()),
            ..Extras::default()
        });
        let ((height, width), memory) = engine.block_need(CELL)?;
        // One window of the input as it would be read through, and one part of the output from its middle.
        let started = Instant::now();
        let mut seconds = 0.0;
        if let Some(window) = reading_windows(from, self.job.rules.memory).first() {
            source.read(0..from.bands, window)?;
            // Sums and digest take about as long as reading.
            let share = from.grid.pixels() as f64 / window.area().max(1) as f64;
            seconds += 2.0 * started.elapsed().as_secs_f64() * share;
        }
        let part = |n: usize, block: usize| {
            let len = n.min(block).min(TRIAL);
            (n - len) / 2..(n - len) / 2 + len
        };
        let (rows, columns) = (part(target.0, height), part(target.1, width));
        let runner = engine.runner();
        let started = Instant::now();
        runner.window(&rows, &columns)?;
        let tried = (rows.len() * columns.len()).max(1) as f64;
        seconds += started.elapsed().as_secs_f64() * self.header.grid.pixels() as f64 / tried;
        let planes = Planes::bytes(&self.header, conduct);
        let samples = self.header.grid.pixels() as u64 * self.header.bands as u64;
        Ok(Estimate {
            input: self.job.input.clone(),
            output: self.job.output.clone(),
            from: [from.grid.rows, from.grid.columns, from.bands],
            to: [target.0, target.1, self.header.bands],
            sample_type: self.header.sample_type,
            method: self.plan.method().to_owned(),
            block: [height, width],
            output_bytes: samples * (self.header.sample_type.bytes() as u64 + planes),
            memory_bytes: memory as u64,
            seconds,
        })
    }
}

impl Estimate {
    /// The same in words.
    pub fn summary(&self) -> Vec<String> {
        let size = |s: &[usize; 3]| {
            let bands = if s[2] > 1 { format!(" x {} bands", s[2]) } else { String::new() };
            format!("{} x {} pixels{bands}", s[0], s[1])
        };
        let bytes = |b: u64| {
            if b >= 1 << 30 {
                format!("{:.1} GiB", b as f64 / f64::from(1 << 30))
            } else {
                format!("{:.1} MiB", b as f64 / f64::from(1 << 20))
            }
        };
        vec![
            format!(
                "{} ({}) would become {} ({} of {}), by {}",
                self.input.display(),
                size(&self.from),
                self.output.display(),
                size(&self.to),
                self.sample_type.name(),
                self.method.replace('-', " ")
            ),
            format!(
                "{} of samples before compression; blocks of {} x {} need {} of memory; about {:.1} s, from a trial",
                bytes(self.output_bytes),
                self.block[0],
                self.block[1],
                bytes(self.memory_bytes),
                self.seconds
            ),
        ]
    }
}
