//! The difference of two rasters on one grid, each resampled once, with its uncertainty.
//!
//! Both resamplings run side by side, in the same windows, and hand their samples over; nothing is stored between.

use super::planes::Planes;
use super::{Conduct, Job, Progress, Ready};
use crate::error::{Error, Result};
use crate::measure::Sum;
use crate::raster::{self, Digest, Header, Sample, SampleType, Samples, Sink, Window, check_free};
use crate::report::{Ledger, write_whole};
use crate::resample::Values;
use serde::Serialize;
use std::path::{Path, PathBuf};
use std::sync::mpsc::{Receiver, SyncSender, sync_channel};

/// What is subtracted from what: two jobs onto one grid. Their outputs' names are not used; neither is written.
#[derive(Clone, Debug)]
pub struct Subtract {
    /// What is subtracted from.
    pub a: Job,
    /// What is subtracted.
    pub b: Job,
    /// Where the difference goes.
    pub output: PathBuf,
    /// Where (difference / its standard uncertainty) goes.
    pub significance: Option<PathBuf>,
    /// Type of the difference; f64 where an input needs it, else f32, if `None`.
    pub sample_type: Option<SampleType>,
}

/// What the difference is like.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Difference {
    /// Pixels where both rasters are there.
    pub valid: u64,
    /// Pixels where one is missing.
    pub missing: u64,
    /// Mean of the difference; null where there is none.
    pub mean: Option<f64>,
    /// Standard deviation of the difference.
    pub std: Option<f64>,
    /// Root of the mean of its predicted variance; null without sigma.
    pub predicted: Option<f64>,
    /// Share of the pixels that differ by more than three standard uncertainties (0.0027 of Gaussian noise); null without sigma.
    pub beyond_3_sigma: Option<f64>,
    /// Correlation of the noise of a pixel with the next row's, both resamplings together.
    pub lag1_rows: f64,
    /// The same for the next column.
    pub lag1_columns: f64,
}

/// The account of a subtraction.
#[derive(Clone, Debug, Serialize)]
pub struct DifferenceLedger {
    /// Version that wrote it.
    pub regauge: String,
    /// The command as typed.
    pub command: Vec<String>,
    /// The difference, as a file.
    pub output: PathBuf,
    /// Digest of its samples and grid.
    pub sha256: String,
    /// What it is like.
    pub difference: Difference,
    /// What each resampling cost: of what was subtracted from, and of what was subtracted.
    pub parts: [Ledger; 2],
}

/// Samples and, if known, their standard uncertainties, of one window.
struct Piece {
    window: Window,
    values: Vec<f64>,
}

/// A sink that hands windows on.
struct Handing {
    to: SyncSender<Piece>,
}

impl Sink for Handing {
    fn alignment(&self) -> usize {
        1
    }

    fn write(&mut self, window: &Window, samples: &Samples) -> Result<()> {
        let values = match samples {
            Samples::F64(v) => v.clone(),
            other => crate::with_samples!(other, v => v.iter().map(|v| v.wide()).collect()),
        };
        // Nobody takes it any more: the other side has failed and tells why.
        self.to.send(Piece { window: window.clone(), values }).map_err(|_| Error::Stopped)
    }

    fn finish(self: Box<Self>) -> Result<()> {
        Ok(())
    }
}

/// Where one resampling's windows arrive.
struct Arriving {
    values: Receiver<Piece>,
    sigma: Option<Receiver<Piece>>,
}

impl Subtract {
    /// Opens both inputs and refuses what cannot be done, before any work.
    fn check(&self, conduct: &Conduct) -> Result<()> {
        let known = self.a.sigma.is_some() && self.b.sigma.is_some();
        if (conduct.sigma_out.is_some() || self.significance.is_some()) && !known {
            return Err(Error::usage(
                "the uncertainty of a difference needs that of both rasters",
                "give --sigma twice, for A and for B, or once for both",
            ));
        }
        let inputs = [&self.a.input, &self.b.input];
        let mut named: Vec<&Path> = Vec::new();
        let ledger = self.ledger_path(conduct);
        let planes = [conduct.sigma_out.as_deref(), self.significance.as_deref()];
        for path in [Some(self.output.as_path()), Some(ledger.as_path())].into_iter().chain(planes).flatten()
        {
            if named.contains(&path) || inputs.iter().any(|i| super::is_same_file(i, path)) {
                return Err(Error::usage(
                    format!("{} is named for two things", path.display()),
                    "give each file its own name: measurements are never overwritten by their difference",
                ));
            }
            check_free(path, conduct.overwrite)?;
            named.push(path);
        }
        Ok(())
    }

    fn ledger_path(&self, conduct: &Conduct) -> PathBuf {
        let beside = Job { output: self.output.clone(), ..self.a.clone() }.ledger_path();
        conduct.ledger.clone().unwrap_or(beside)
    }

    /// Runs both resamplings and writes the difference, what goes beside it, and the ledger.
    ///
    /// # Errors
    /// Whatever stands in the way; then nothing is left under the outputs' names.
    pub fn run(&self, conduct: &Conduct, progress: &dyn Progress) -> Result<DifferenceLedger> {
        self.check(conduct)?;
        // Differences of large numbers: both parts are taken to f64, the difference is rounded once. Half the memory each.
        let part = |job: &Job| {
            let mut job = job.clone();
            job.rules.sample_type = Some(SampleType::F64);
            job.rules.memory = (job.rules.memory / 2).max(16 << 20);
            job
        };
        let jobs = [part(&self.a), part(&self.b)];
        let ready = [jobs[0].ready()?, jobs[1].ready()?];
        let bands = [ready[0].header.bands, ready[1].header.bands];
        if bands[0] != bands[1] {
            return Err(Error::unfit(
                format!(
                    "{} has {} bands, {} has {}",
                    self.a.input.display(),
                    bands[0],
                    self.b.input.display(),
                    bands[1]
                ),
                "give rasters with the same bands",
            ));
        }
        let needs_f64 = ready.iter().any(|r| {
            matches!(r.source.header().sample_type, SampleType::F64 | SampleType::I32 | SampleType::U32)
        });
        let sample_type =
            self.sample_type.unwrap_or(if needs_f64 { SampleType::F64 } else { SampleType::F32 });
        let header = difference_header(&ready[0], sample_type)?;
        raster::check_writable(&self.output, &header)?;
        let out = raster::create(&self.output, &header, conduct.overwrite)?;
        let sigma_wanted = self.a.sigma.is_some() && self.b.sigma.is_some();
        let own = Conduct { coverage: None, ..conduct.clone() };
        let mut sinks = Sinks {
            digest: Digest::new(&header),
            header: header.clone(),
            out,
            planes: Planes::create(&header, &own)?,
            significance: match &self.significance {
                Some(path) => Some(Planes::plane(path, &header, conduct.overwrite)?),
                None => None,
            },
            tally: Tally::default(),
            period: match self.a.rules.values {
                Values::Cyclic(period) => Some(period),
                _ => None,
            },
        };
        // Blocks of one size for both, so that windows come in step.
        let side = if jobs[0].rules.memory >= 256 << 20 { 1024 } else { 512 };
        let [first, second] = ready;
        let (a, b) = std::thread::scope(|scope| {
            let (send_a, arrive_a) = channels(sigma_wanted);
            let (send_b, arrive_b) = channels(sigma_wanted);
            let (of_a, of_b) = (first.job, second.job);
            let one = scope
                .spawn(move || of_a.in_pool(|| first.carry_out(Some(send_a), Some(side), &[], progress)));
            let two =
                scope.spawn(move || of_b.in_pool(|| second.carry_out(Some(send_b), Some(side), &[], &())));
            let merged = sinks.merge(&arrive_a, &arrive_b);
            // Dropped before joining: a sender that still waits must not wait for ever.
            drop((arrive_a, arrive_b));
            let ended = |t: std::thread::ScopedJoinHandle<Result<Ledger>>| {
                t.join().unwrap_or_else(|_| Err(Error::unfit("a resampling thread ended unexpectedly", "")))
            };
            let (one, two) = (ended(one), ended(two));
            // The first cause counts: one that stopped did so because another failed.
            match (merged, one, two) {
                (Ok(()), Ok(a), Ok(b)) => Ok((a, b)),
                (Err(e), ..) if !matches!(e, Error::Stopped) => Err(e),
                (_, Err(e), _) if !matches!(e, Error::Stopped) => Err(e),
                (.., Err(e)) | (_, Err(e), _) | (Err(e), ..) => Err(e),
            }
        })?;
        let (sha256, difference) = sinks.finish(&a, &b)?;
        let ledger = DifferenceLedger {
            regauge: env!("CARGO_PKG_VERSION").to_owned(),
            command: conduct.command.clone(),
            output: self.output.clone(),
            sha256,
            difference,
            parts: [a, b],
        };
        ledger.write(&self.ledger_path(conduct))?;
        Ok(ledger)
    }
}

/// Where a resampling sends its windows, and where they arrive.
fn channels(sigma: bool) -> ((Box<dyn Sink>, Planes), Arriving) {
    let (to, values) = sync_channel(1);
    let (plane, sigma) = if sigma {
        let (to, from) = sync_channel(1);
        (Some(Box::new(Handing { to }) as Box<dyn Sink>), Some(from))
    } else {
        (None, None)
    };
    ((Box::new(Handing { to }), Planes::of_sigma(plane)), Arriving { values, sigma })
}

/// The header of the difference: the first raster's, with a code of its own for missing.
fn difference_header(first: &Ready, sample_type: SampleType) -> Result<Header> {
    let mut header = first.header.clone();
    header.sample_type = sample_type;
    header.storage.color_map.clear();
    header.storage.photometric = None;
    if sample_type.integer_range().is_some() {
        header.storage.predictor = header.storage.predictor.min(2);
        let code = header.missing.filter(|c| super::can_hold(sample_type, *c));
        header.missing = Some(code.ok_or_else(|| {
            Error::usage(
                format!("a difference of {} has no code for missing pixels", sample_type.name()),
                "give --missing V (a code that no difference has), or --type f32",
            )
        })?);
    } else {
        header.storage.predictor = 1;
        header.missing = header.missing.map(|_| f64::NAN);
    }
    Ok(header)
}

/// What the differences go into.
struct Sinks {
    header: Header,
    digest: Digest,
    out: Box<dyn Sink>,
    planes: Planes,
    significance: Option<Box<dyn Sink>>,
    tally: Tally,
    /// Of angles: differences are told from minus half a period to half a period.
    period: Option<f64>,
}

/// Sums over the difference.
#[derive(Default)]
struct Tally {
    valid: u64,
    missing: u64,
    sum: Sum,
    squares: Sum,
    variance: Sum,
    with_sigma: u64,
    beyond: u64,
}

impl Sinks {
    /// Subtracts windows as they arrive, until both are through.
    fn merge(&mut self, a: &Arriving, b: &Arriving) -> Result<()> {
        let area = self.header.grid.pixels();
        let mut done = 0;
        while done < area {
            let (Ok(x), Ok(y)) = (a.values.recv(), b.values.recv()) else { return Err(Error::Stopped) };
            let mut sigma = None;
            if let (Some(s), Some(t)) = (&a.sigma, &b.sigma) {
                let (Ok(s), Ok(t)) = (s.recv(), t.recv()) else { return Err(Error::Stopped) };
                sigma = Some(s.values.iter().zip(&t.values).map(|(s, t)| s.hypot(*t)).collect::<Vec<f64>>());
            }
            if x.window != y.window {
                return Err(Error::unfit("the two resamplings fell out of step", ""));
            }
            let less = |x: f64, y: f64| match self.period {
                Some(p) => (x - y + 0.5 * p).rem_euclid(p) - 0.5 * p,
                None => x - y,
            };
            let difference: Vec<f64> = x.values.iter().zip(&y.values).map(|(x, y)| less(*x, *y)).collect();
            self.tally.add(&difference, sigma.as_deref());
            self.write(&x.window, difference, sigma)?;
            done += x.window.area();
        }
        Ok(())
    }

    fn write(&mut self, window: &Window, difference: Vec<f64>, sigma: Option<Vec<f64>>) -> Result<()> {
        if let (Some(sink), Some(sigma)) = (&mut self.significance, &sigma) {
            let ratio =
                difference.iter().zip(sigma).map(|(d, s)| if *s > 0.0 { (d / s) as f32 } else { f32::NAN });
            sink.write(window, &Samples::F32(ratio.collect()))?;
        }
        if let Some(sigma) = sigma {
            self.planes.write_sigma(window, &sigma)?;
        }
        let bands = self.header.bands;
        let plane =
            ndarray::Array2::from_shape_vec((bands * window.rows.len(), window.columns.len()), difference)
                .map_err(|_| Error::unfit("a window changed its size on the way", ""))?;
        let code = self.header.missing.filter(|c| !c.is_nan());
        let (samples, _) = crate::resample::convert(plane.view(), self.header.sample_type, code);
        self.digest.feed(window, &samples);
        self.out.write(window, &samples)
    }

    fn finish(self, a: &Ledger, b: &Ledger) -> Result<(String, Difference)> {
        if let Some(sink) = self.significance {
            sink.finish()?;
        }
        self.planes.finish()?;
        self.out.finish()?;
        Ok((self.digest.finish(&self.header), self.tally.difference(a, b)))
    }
}

impl Tally {
    fn add(&mut self, difference: &[f64], sigma: Option<&[f64]>) {
        for (i, d) in difference.iter().enumerate() {
            if d.is_nan() {
                self.missing += 1;
                continue;
            }
            self.valid += 1;
            self.sum.add(*d);
            self.squares.add(d * d);
            if let Some(s) = sigma.map(|s| s[i]).filter(|s| !s.is_nan()) {
                self.with_sigma += 1;
                self.variance.add(s * s);
                self.beyond += u64::from(d.abs() > 3.0 * s);
            }
        }
    }

    fn difference(&self, a: &Ledger, b: &Ledger) -> Difference {
        let n = self.valid as f64;
        let mean = (self.valid > 0).then(|| self.sum.value() / n);
        let of_sigma = |v: f64| (self.with_sigma > 0).then(|| v / self.with_sigma as f64);
        // Each part's noise counts by its variance; without sigma the inputs are taken for equally noisy.
        let weights = (a.noise.gain_mean, b.noise.gain_mean);
        let both = |x: f64, y: f64| (weights.0 * x + weights.1 * y) / (weights.0 + weights.1).max(1e-300);
        Difference {
            valid: self.valid,
            missing: self.missing,
            mean,
            std: mean.map(|m| (self.squares.value() / n - m * m).max(0.0).sqrt()),
            predicted: of_sigma(self.variance.value()).map(f64::sqrt),
            beyond_3_sigma: of_sigma(self.beyond as f64),
            lag1_rows: both(a.noise.lag1_rows, b.noise.lag1_rows),
            lag1_columns: both(a.noise.lag1_columns, b.noise.lag1_columns),
        }
    }
}

impl DifferenceLedger {
    fn write(&self, path: &Path) -> Result<()> {
        let text = serde_json::to_string_pretty(self)
            .map_err(|e| Error::io(path, "writing the ledger", std::io::Error::other(e)))?;
        write_whole(path, (text + "\n").as_bytes()).map_err(|e| Error::io(path, "writing the ledger", e))
    }

    /// The same in words.
    pub fn summary(&self) -> Vec<String> {
        let d = &self.difference;
        let [a, b] = &self.parts;
        let mut lines = vec![format!(
            "{}: {} less {}, {} pixels compared, {} missing",
            self.output.display(),
            a.inputs.first().map_or(String::new(), |i| i.path.display().to_string()),
            b.inputs.first().map_or(String::new(), |i| i.path.display().to_string()),
            d.valid,
            d.missing
        )];
        if let (Some(mean), Some(std)) = (d.mean, d.std) {
            lines.push(format!("mean {mean:.6}, standard deviation {std:.6}"));
        }
        if let (Some(predicted), Some(beyond)) = (d.predicted, d.beyond_3_sigma) {
            lines.push(format!(
                "of which the stated uncertainties explain {predicted:.6}; {:.2} % of the pixels differ by more than three \
                 of them (0.27 % would by chance)",
                100.0 * beyond
            ));
        }
        lines.push(format!(
            "noise of neighbours is correlated by {:.2} (next row) and {:.2} (next column): sums over regions are less certain \
             than their pixels say",
            d.lag1_rows, d.lag1_columns
        ));
        lines
    }
}
