//! A job on samples that a caller holds: no files.

use super::account::bands_of;
use super::planes::Planes;
use super::{Job, Progress, Ready};
use crate::error::{Error, Result};
use crate::raster::{
    Collected, Header, MemorySink, MissingCodes, Pieces, Raster, SampleType, Samples, Sink, Source, Window,
};
use crate::report::Ledger;
use crate::resample::{Extras, Noise, Ranges, Values};

/// What is wanted of a job in memory beside its samples.
#[derive(Clone, Debug, Default)]
pub struct Wants {
    /// The standard uncertainty of the outputs, from this noise of the samples.
    pub noise: Option<Noise>,
    /// The share of each output's weights that found samples.
    pub coverage: bool,
    /// The ledger.
    pub ledger: bool,
    /// Whether angles are told from minus half a period on, as in an input that has negative ones; `None`: the input is looked
    /// through for them (of a window: no).
    pub signed_angles: Option<bool>,
}

/// What a job in memory gives. Planes are band by band, of the output's size.
pub struct Made {
    /// The output.
    pub samples: Samples,
    /// What it is.
    pub header: Header,
    /// 1 where an output is missing, for integers that have no code; in floating point those are NaN.
    pub missing: Option<Samples>,
    /// The standard uncertainty, if wanted: f64 where the output is, else f32.
    pub sigma: Option<Samples>,
    /// The coverage, if wanted: f32.
    pub coverage: Option<Samples>,
    /// The ledger, if wanted.
    pub ledger: Option<Ledger>,
}

impl Job {
    /// Runs the job on samples in memory; its paths are names in the ledger and nothing more. Outputs in floating point
    /// have NaN for missing, integers the code that [`Job::rules`] name, or else a plane that tells.
    ///
    /// # Errors
    /// Whatever stands in the way.
    pub fn run_on<'a>(
        &'a self,
        source: Box<dyn Source + 'a>,
        wants: &Wants,
        progress: &dyn Progress,
    ) -> Result<Made> {
        self.in_pool(move || {
            let ready = self.ready_in_memory(source, wants)?;
            let header = ready.header.clone();
            let (sink, found) = MemorySink::new(header.clone());
            let wanted = (wants.noise.is_some(), wants.coverage, ready.tells_missing());
            let (mut planes, [sigma, coverage, missing]) = Planes::in_memory(&header, wanted);
            let mut sink: Box<dyn Sink> = Box::new(sink);
            let ledger = if wants.ledger {
                Some(ready.carry_out(Some((sink, planes)), None, &[], progress)?)
            } else {
                let (mut done, total) = (0, header.grid.pixels() as u64);
                let mut extras = ready.extras(wants);
                if wants.signed_angles.is_none() && matches!(self.rules.values, Values::Cyclic(_)) {
                    extras.signed_angles = has_negative(ready.source.as_ref(), &ready.codes)?;
                }
                ready.engine(extras).run(1, None, &mut |block| {
                    sink.write(&block.window, &block.samples)?;
                    planes.write(&block)?;
                    done += block.window.area() as u64;
                    progress.advance(done, total);
                    if progress.stopped() { Err(Error::Stopped) } else { Ok(()) }
                })?;
                planes.finish()?;
                sink.finish()?;
                None
            };
            let samples = |found: Option<Collected>| found.and_then(|f| f.take()).map(Raster::into_samples);
            Ok(Made {
                samples: samples(Some(found)).unwrap_or(Samples::zeros(header.sample_type, 0)),
                header,
                missing: samples(missing),
                sigma: samples(sigma),
                coverage: samples(coverage),
                ledger,
            })
        })
    }

    /// Resamples one window of the output; the samples are those of [`Job::run_on`].
    ///
    /// # Errors
    /// Whatever stands in the way.
    pub fn window_on<'a>(
        &'a self,
        source: Box<dyn Source + 'a>,
        wants: &Wants,
        window: &Window,
    ) -> Result<Made> {
        self.in_pool(move || {
            let ready = self.ready_in_memory(source, wants)?;
            let mut header = ready.header.clone();
            check_inside(&header, window)?;
            let origin = (window.rows.start as f64, window.columns.start as f64);
            header.grid = header.grid.stepped(window.rows.len(), window.columns.len(), (1.0, 1.0), origin);
            let engine = ready.engine(ready.extras(wants));
            let block = engine.runner().window(&window.rows, &window.columns)?;
            let narrow = header.sample_type != SampleType::F64;
            Ok(Made {
                samples: block.samples,
                header,
                missing: block.missing.map(|m| Samples::U8(m.into_iter().map(u8::from).collect())),
                sigma: block.sigma.map(|s| {
                    if narrow { Samples::F32(s.iter().map(|v| *v as f32).collect()) } else { Samples::F64(s) }
                }),
                coverage: block.coverage.map(Samples::F32),
                ledger: None,
            })
        })
    }

    /// The rows and the columns of an input of that header which a window of the output needs, every combination of them;
    /// `None` if it sees nothing. What its ledger compares, and the noise of its samples, lie within as well.
    ///
    /// # Errors
    /// When the job cannot be done.
    pub fn needs(&self, from: &Header, window: &Window) -> Result<Option<(Ranges, Ranges)>> {
        let ready = self.ready_on(Box::new(Pieces::new(from.clone(), Vec::new())?), None)?;
        check_inside(&ready.header, window)?;
        Ok(ready.engine(Extras::default()).needs(&window.rows, &window.columns))
    }

    /// What the output of an input of that header is.
    ///
    /// # Errors
    /// When the job cannot be done.
    pub fn output_of(&self, from: &Header) -> Result<Header> {
        Ok(self.ready_in_memory(Box::new(Pieces::new(from.clone(), Vec::new())?), &Wants::default())?.header)
    }

    fn ready_in_memory<'a>(&'a self, source: Box<dyn Source + 'a>, wants: &Wants) -> Result<Ready<'a>> {
        let mut ready = self.ready_on(source, wants.noise.clone())?;
        if ready.header.sample_type.integer_range().is_none() {
            (ready.fill, ready.header.missing) = (None, None);
        }
        Ok(ready)
    }
}

impl Ready<'_> {
    /// Whether a plane has to tell what is missing.
    fn tells_missing(&self) -> bool {
        self.header.sample_type.integer_range().is_some() && self.fill.is_none()
    }

    fn extras(&self, wants: &Wants) -> Extras {
        Extras {
            signed_angles: wants.signed_angles.unwrap_or(false),
            coverage: wants.coverage,
            missing: self.tells_missing(),
            noise: wants.noise.clone(),
        }
    }
}

fn check_inside(header: &Header, window: &Window) -> Result<()> {
    let inside = |r: &std::ops::Range<usize>, n: usize| r.start < r.end && r.end <= n;
    if inside(&window.rows, header.grid.rows) && inside(&window.columns, header.grid.columns) {
        return Ok(());
    }
    Err(Error::usage(
        format!(
            "rows {:?}, columns {:?} are no window of {} x {} pixels",
            window.rows, window.columns, header.grid.rows, header.grid.columns
        ),
        "",
    ))
}

/// Whether some sample that is there is below 0.
fn has_negative(source: &dyn Source, codes: &MissingCodes) -> Result<bool> {
    let header = source.header();
    let window = Window::whole(&header.grid);
    let all = source.read(0..header.bands, &window)?;
    Ok(bands_of(&all, &window, header.bands, codes).any(|band| band.iter().any(|v| *v < 0.0)))
}
