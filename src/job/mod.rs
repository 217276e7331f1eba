//! A job: what a command becomes. It is run, written into the ledger, and replayed from there.

mod account;
mod audit;
mod compared;
mod costs;
mod describe;
mod estimate;
mod fractions;
mod held;
mod onto;
mod planes;
mod report;
mod subtract;
mod windows;

pub use audit::{AuditRules, AuditValues, MAX_DISPLACEMENT, audit, audit_files, relate};
pub use describe::{BandStatistics, describe};
pub use estimate::Estimate;
pub use held::{Made, Wants};
pub use onto::{about, way_back};
pub use planes::SigmaFrom;
pub use report::{reduced, write_audit_report, write_report};
pub use subtract::{Difference, DifferenceLedger, Subtract};

use crate::error::{Error, Result};
use crate::grid::Grid;
use crate::map::Map;
use crate::raster::{
    self, CELL, Digest, Flags, Header, Masked, MissingCodes, SampleType, Sink, Source, Window, check_free,
    split_bits,
};
use crate::report::Ledger;
use crate::resample::{Counts, Engine, Extras, Noise, Outside, Plan, Rules, Shifted, Values};
use account::{Account, bands_of, inspect};
use compared::take_back;
use planes::Planes;
use serde::{Deserialize, Serialize};
use std::path::{Path, PathBuf};
use std::time::Instant;

/// One input resampled to one output: everything that is needed to do it again.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Job {
    /// The raster to resample.
    pub input: PathBuf,
    /// Where the result goes; the format follows the ending.
    pub output: PathBuf,
    /// The grid of the result.
    pub target: Grid,
    /// From a position in the output to the position in the input that it shows.
    pub back: Map,
    /// Kernel, extension and the other choices.
    pub rules: Rules,
    /// What is known of the noise of the samples.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub sigma: Option<SigmaFrom>,
    /// A raster of flags, `FILE` or `FILE:BITS`: samples with one of the bits (or any but 0) are missing.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub mask: Option<String>,
}

/// What a run may do beside its result.
#[derive(Clone, Debug, Default)]
pub struct Conduct {
    /// The command as it was typed, for the ledger.
    pub command: Vec<String>,
    /// Where the ledger goes; `None`: OUT + `.ledger.json`.
    pub ledger: Option<PathBuf>,
    /// Whether an output that exists is replaced.
    pub overwrite: bool,
    /// Where the standard uncertainty of the outputs goes; needs [`Job::sigma`].
    pub sigma_out: Option<PathBuf>,
    /// Where the share of each output's weights that found samples goes.
    pub coverage: Option<PathBuf>,
    /// Of class codes: where the share of each output's area that each class covers goes, one band a class.
    pub fractions: Option<PathBuf>,
}

/// Told how the work goes on; may stop it.
pub trait Progress: Sync {
    /// `done` of `total` pixels, those read through and those written, are finished. Called from one thread, in order.
    fn advance(&self, done: u64, total: u64);
    /// Asked now and then; `true` stops the run with [`Error::Stopped`].
    fn stopped(&self) -> bool {
        false
    }
}

/// Nobody watches.
impl Progress for () {
    fn advance(&self, _: u64, _: u64) {}
}

/// A job with its input opened and its plan made; nothing written yet.
struct Ready<'a> {
    job: &'a Job,
    source: Box<dyn Source + 'a>,
    plan: Plan,
    header: Header,
    codes: MissingCodes,
    fill: Option<f64>,
    noise: Option<Noise>,
}

impl Job {
    /// The default place of the ledger: the output's name + `.ledger.json`.
    pub fn ledger_path(&self) -> PathBuf {
        let mut name = self.output.file_name().unwrap_or_default().to_os_string();
        name.push(".ledger.json");
        self.output.with_file_name(name)
    }

    /// Opens the input and refuses what cannot be done, before any work. Writes nothing.
    ///
    /// # Errors
    /// Names the file or option, and the mend.
    pub fn check(&self, conduct: &Conduct) -> Result<()> {
        let ready = self.ready()?;
        ready.check_output(conduct)?;
        ready.check_missing(0)
    }

    /// Runs the job: writes the output and its ledger.
    ///
    /// # Errors
    /// Whatever stands in the way; then nothing is left under the output's name.
    pub fn run(&self, conduct: &Conduct, progress: &dyn Progress) -> Result<Ledger> {
        self.in_pool(|| {
            let ready = self.ready()?;
            ready.check_output(conduct)?;
            ready.check_missing(0)?;
            if let Some(path) = &conduct.fractions {
                ready.write_fractions(path, conduct.overwrite, progress)?;
            }
            let sink = raster::create(&self.output, &ready.header, conduct.overwrite)?;
            let planes = Planes::create(&ready.header, conduct)?;
            let ledger = ready.carry_out(Some((sink, planes)), None, &conduct.command, progress)?;
            ledger.write(&conduct.ledger.clone().unwrap_or_else(|| self.ledger_path()))?;
            Ok(ledger)
        })
    }

    /// Runs the job without writing anything: the ledger (with the output's digest) is all that comes out.
    ///
    /// # Errors
    /// As [`Job::run`].
    pub fn rehearse(&self, progress: &dyn Progress) -> Result<Ledger> {
        self.in_pool(|| {
            let ready = self.ready()?;
            ready.check_missing(0)?;
            ready.carry_out(None, None, &[], progress)
        })
    }

    /// Runs `work` on as many threads as the rules say.
    fn in_pool<R: Send>(&self, work: impl FnOnce() -> Result<R> + Send) -> Result<R> {
        let Some(threads) = self.rules.threads.filter(|t| *t > 0) else { return work() };
        let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build();
        pool.map_err(|e| Error::usage(format!("--threads {threads}: {e}"), "give fewer threads"))?
            .install(work)
    }

    /// Opens the input and makes the plan.
    fn ready(&self) -> Result<Ready<'_>> {
        let source = open_masked(&self.input, self.mask.as_deref(), self.rules.missing)?;
        let noise = self.sigma.as_ref().map(|s| s.open(source.header())).transpose()?;
        self.ready_on(source, noise)
    }

    /// Makes the plan for a source that is open.
    fn ready_on<'a>(&'a self, source: Box<dyn Source + 'a>, noise: Option<Noise>) -> Result<Ready<'a>> {
        self.rules.check()?;
        self.target.check()?;
        let from = source.header();
        check_tables(from, &self.target, self.rules.memory)?;
        let size = (from.grid.rows, from.grid.columns);
        let plan = Plan::new(size, (self.target.rows, self.target.columns), &self.back, &self.rules)?;
        // Parts of counts are no whole numbers: totals become f64 unless asked.
        let default_type =
            if self.rules.values == Values::Total { SampleType::F64 } else { from.sample_type };
        let sample_type = self.rules.sample_type.unwrap_or(default_type);
        let codes: Vec<f64> =
            from.missing.into_iter().chain(self.rules.missing).filter(|c| !c.is_nan()).collect();
        let declares = sample_type.integer_range().is_some() || raster::declares_float_codes(&self.output);
        let fill = codes.iter().copied().find(|c| declares && can_hold(sample_type, *c));
        if let (None, Some(code), Some(_)) = (fill, self.rules.missing, sample_type.integer_range()) {
            return Err(Error::usage(
                format!("--missing {code} cannot be stored as {}", sample_type.name()),
                "choose a code within the type's range, or --type f32",
            ));
        }
        let header = output_header(from, &self.target, sample_type, fill);
        if noise.is_some() && matches!(self.rules.values, Values::Label | Values::Cyclic(_)) {
            return Err(Error::usage(
                format!("--sigma has no meaning for --values {}", self.rules.values),
                "leave --sigma out",
            ));
        }
        Ok(Ready { job: self, plan, header, codes: MissingCodes { codes }, fill, source, noise })
    }
}

/// Opens a raster, with a mask of flags where one is given.
///
/// # Errors
/// When a file cannot be read, or the mask does not fit.
pub fn open_masked(path: &Path, mask: Option<&str>, missing: Option<f64>) -> Result<Box<dyn Source>> {
    let source = raster::open(path)?;
    let Some(text) = mask else { return Ok(source) };
    let (file, flags) = if Path::new(text).exists() { (text, Flags::Any) } else { split_bits(text) };
    let mask = raster::open(Path::new(file))?;
    let codes: Vec<f64> = missing.into_iter().collect();
    Ok(Box::new(Masked::new(source, mask, flags, &codes, file)?))
}

/// Refuses rasters whose tables alone (digests and places of tiles, shares of rows and columns) would not fit the memory.
fn check_tables(from: &Header, target: &Grid, memory: u64) -> Result<()> {
    let tables = |grid: &Grid| -> u128 {
        let cells =
            grid.rows.div_ceil(CELL) as u128 * grid.columns.div_ceil(CELL) as u128 * from.bands as u128;
        48 * cells + 16 * (grid.rows as u128 + grid.columns as u128)
    };
    let need = tables(&from.grid).saturating_add(tables(target));
    if need <= u128::from(memory / 2) {
        return Ok(());
    }
    Err(Error::Limit {
        what: format!("a raster of {} x {} pixels", target.rows, target.columns),
        needed: format!("{} MiB for its tables alone", need >> 20),
        limit: format!("half of --memory {} MiB", memory >> 20),
        mend: "choose a smaller output, or give more --memory".into(),
    })
}

/// Whether a type can hold a code for missing.
fn can_hold(sample_type: SampleType, code: f64) -> bool {
    match sample_type.integer_range() {
        Some((low, high)) => code.fract() == 0.0 && (low..=high).contains(&code),
        None => true,
    }
}

/// The input's header, corrected for the new grid and type.
fn output_header(from: &Header, target: &Grid, sample_type: SampleType, fill: Option<f64>) -> Header {
    let mut header = Header { grid: target.clone(), sample_type, missing: fill, ..from.clone() };
    if let Some((x, y, _)) = &mut header.storage.resolution {
        // Samples per inch or centimetre follow the pixel size; without a place in the world they follow the counts.
        let (old, new) = (from.grid.pixel_size(), target.pixel_size());
        let ratio = if from.grid.world.is_some() && target.world.is_some() {
            (old.0 / new.0, old.1 / new.1)
        } else {
            (target.rows as f64 / from.grid.rows as f64, target.columns as f64 / from.grid.columns as f64)
        };
        *x *= ratio.1;
        *y *= ratio.0;
    }
    if fill.is_none() && from.missing.is_some_and(f64::is_nan) && sample_type.integer_range().is_none() {
        header.missing = Some(f64::NAN);
    }
    header
}

/// Whether two paths name one file.
fn is_same_file(a: &Path, b: &Path) -> bool {
    match (a.canonicalize(), b.canonicalize()) {
        (Ok(a), Ok(b)) => a == b,
        _ => false,
    }
}

impl Ready<'_> {
    /// The engine of the plan.
    fn engine(&self, extras: Extras) -> Engine<'_> {
        Engine {
            source: self.source.as_ref(),
            target: (self.header.grid.rows, self.header.grid.columns),
            plan: self.plan.clone(),
            rules: &self.job.rules,
            codes: self.codes.clone(),
            sample_type: self.header.sample_type,
            fill: self.fill,
            extras,
        }
    }

    fn check_output(&self, conduct: &Conduct) -> Result<()> {
        let job = self.job;
        if is_same_file(&job.input, &job.output) {
            return Err(Error::usage(
                format!("{} is input and output at once", job.output.display()),
                "name another output: measurements are never overwritten by their own resampling",
            ));
        }
        let ledger = conduct.ledger.clone().unwrap_or_else(|| job.ledger_path());
        if is_same_file(&job.input, &ledger) || ledger == job.output {
            return Err(Error::usage(
                format!("{} cannot be the ledger as well", ledger.display()),
                "name another ledger",
            ));
        }
        self.check_fractions(conduct)?;
        let beside: Vec<&PathBuf> =
            [&conduct.sigma_out, &conduct.coverage, &conduct.fractions].into_iter().flatten().collect();
        if conduct.sigma_out.is_some() && self.noise.is_none() {
            return Err(Error::usage(
                "--sigma-out needs to know the noise of the input",
                "give --sigma FILE, a number, or poisson:GAIN,READ",
            ));
        }
        for (i, path) in beside.iter().enumerate() {
            let taken = [&job.output, &ledger].contains(path) || beside[..i].contains(path);
            if taken || is_same_file(&job.input, path) {
                return Err(Error::usage(
                    format!("{} is named for two things", path.display()),
                    "give each file its own name",
                ));
            }
            check_free(path, conduct.overwrite)?;
            Planes::check(path, &self.header)?;
        }
        check_free(&job.output, conduct.overwrite)?;
        check_free(&ledger, conduct.overwrite)?;
        raster::check_writable(&job.output, &self.header)
    }

    /// Refuses an integer output that would need a code for missing and has none.
    fn check_missing(&self, missing_in_input: u64) -> Result<()> {
        if self.header.sample_type.integer_range().is_none() || self.fill.is_some() {
            return Ok(());
        }
        let grid = &self.source.header().grid;
        let looks_outside = self
            .plan
            .looks_outside((grid.rows, grid.columns), (self.header.grid.rows, self.header.grid.columns));
        let open = self.job.rules.edges() == crate::kernel::Extension::Open;
        let why = if looks_outside && (self.job.rules.outside == Outside::Missing || open) {
            "some output pixels lie outside the input"
        } else if missing_in_input > 0 {
            "some input samples are missing"
        } else {
            return Ok(());
        };
        let name = self.header.sample_type.name();
        Err(Error::usage(
            format!(
                "{}: {why}, and an output of {name} without a no-data code cannot say so",
                self.job.input.display()
            ),
            "give --missing V (a code that no measurement has), --type f32, or --outside extend",
        ))
    }

    fn carry_out(
        self,
        mut sink: Option<(Box<dyn Sink>, Planes)>,
        side: Option<usize>,
        command: &[String],
        progress: &dyn Progress,
    ) -> Result<Ledger> {
        let started = Instant::now();
        let job = self.job;
        let source = self.source.as_ref();
        let from = source.header();
        let (size, target) =
            ((from.grid.rows, from.grid.columns), (self.header.grid.rows, self.header.grid.columns));
        let mut before = inspect(source, &job.back, target, &self.codes, &job.rules, progress)?;
        if !sink.as_ref().is_some_and(|s| s.1.wants_missing()) {
            self.check_missing(before.account.missing())?;
        }
        let gaps = before.account.missing() > 0;
        let engine = self.engine(Extras {
            signed_angles: before.account.has_negative(),
            coverage: sink.as_ref().is_some_and(|s| s.1.wants_coverage()),
            missing: sink.as_ref().is_some_and(|s| s.1.wants_missing()),
            noise: sink.as_ref().filter(|s| s.1.wants_sigma()).and_then(|_| self.noise.clone()),
        });
        let alignment = sink.as_ref().map_or(1, |s| s.0.alignment().max(s.1.alignment())).max(CELL);
        let mut digest = Digest::new(&self.header);
        let total_values = job.rules.values == Values::Total;
        let mut after = Account::new(&job.back, target, size, self.header.bands, total_values);
        let out_codes = MissingCodes { codes: self.fill.into_iter().collect() };
        let (mut counts, mut near_gap, mut done) = (Counts::default(), 0, from.grid.pixels() as u64);
        let mut shifted = Shifted::default();
        let total = done + self.header.grid.pixels() as u64 + engine.cells_beyond();
        engine.run(alignment, side, &mut |block| {
            if progress.stopped() {
                return Err(Error::Stopped);
            }
            digest.feed(&block.window, &block.samples);
            after.add(&block.window, &block.samples, &out_codes, Some(&before.account));
            let window = &block.window;
            let values: Vec<Vec<f64>> =
                bands_of(&block.samples, window, self.header.bands, &out_codes).collect();
            for band in &values {
                before.local.add_after(after.frame(), &window.rows, &window.columns, band);
            }
            if gaps || block.counts.missing > 0 {
                let accounts = (&mut before.account, &mut after);
                let back = &job.back;
                take_back(source, &self.codes, back, window, &values, accounts, &mut before.local)?;
            }
            counts.add(&block.counts);
            near_gap += block.near_gap;
            shifted.merge(&block.shifted);
            if let Some((sink, planes)) = &mut sink {
                sink.write(&block.window, &block.samples)?;
                planes.write(&block)?;
            }
            done += block.window.area() as u64;
            progress.advance(done, total);
            Ok(())
        })?;
        shifted.merge(&engine.beyond(alignment, side, &mut |cells| {
            done += cells;
            progress.advance(done, total);
            if progress.stopped() { Err(Error::Stopped) } else { Ok(()) }
        })?);
        if progress.stopped() {
            return Err(Error::Stopped);
        }
        if let Some((sink, planes)) = sink {
            planes.finish()?;
            sink.finish()?;
        }
        let digests = (before.sha256.clone(), digest.finish(&self.header));
        let costs = costs::costs(&self.plan, &job.rules, size, target, &job.back);
        let run = account::Run {
            job,
            command,
            plan: &self.plan,
            from,
            to: &self.header,
            digests,
            before: &before.account,
            after: &after,
            counts,
            near_gap,
            shifted,
            local: &before.local,
            costs,
            underestimates: windows::underestimates(&self.plan, &job.rules, size, target),
            seconds: started.elapsed().as_secs_f64(),
        };
        Ok(run.ledger())
    }
}

/// The windows in which a raster is read once from end to end: aligned to cells, within a share of the memory.
fn reading_windows(header: &Header, memory: u64) -> Vec<Window> {
    let per_pixel = (header.bands * header.sample_type.bytes()).max(1);
    let budget = (memory as usize / 8 / per_pixel).max(CELL * CELL);
    let width = if header.grid.columns * CELL <= budget {
        header.grid.columns
    } else {
        (budget / CELL / CELL * CELL).max(CELL)
    };
    let height = (budget / width / CELL * CELL).clamp(CELL, 16 * CELL);
    let mut windows = Vec::new();
    for r in (0..header.grid.rows).step_by(height) {
        for c in (0..header.grid.columns).step_by(width) {
            windows.push(Window {
                rows: r..(r + height).min(header.grid.rows),
                columns: c..(c + width).min(header.grid.columns),
            });
        }
    }
    windows
}
