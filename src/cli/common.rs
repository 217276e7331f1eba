//! Options that several commands share, and how their values are read.

use super::progress::Bar;
use super::{Outcome, print_json};
use crate::error::{Error, Result};
use crate::job::{Conduct, Job, SigmaFrom, write_report};
use crate::kernel::{Extension, Kernel};
use crate::raster::SampleType;
use crate::report::Ledger;
use crate::resample::{Limit, Outside, Reduce, Rules, Values};
use clap::Args;
use std::io::Write;
use std::path::PathBuf;

/// How samples are resampled.
#[derive(Args, Clone)]
#[command(next_help_heading = "Resampling")]
pub struct Resampling {
    /// Kernel that weighs the samples; `regauge kernels` lists them [default: bspline:3; nearest for labels]
    #[arg(long, value_name = "K")]
    pub kernel: Option<String>,
    /// What a number is: density (a value per place), total (a sum over the pixel, such as counts), label (a class code),
    /// cyclic:PERIOD (an angle or phase)
    #[arg(long, value_name = "WHAT", default_value = "density")]
    pub values: String,
    /// Hold overshoot to the range of the samples around: none, neighbours
    #[arg(long, value_name = "HOW", default_value = "none", value_parser = ["none", "neighbours"], hide_possible_values = true)]
    pub limit: String,
    /// What stands beyond the edges: open, zero, constant:V, replicate, half-symmetric, whole-symmetric, point-symmetric, periodic
    #[arg(
        long,
        value_name = "E",
        default_value = "half-symmetric",
        hide_possible_values = true,
        allow_hyphen_values = true
    )]
    pub extend: String,
    /// Against aliasing where pixels grow: auto (= widen), none, widen, least-squares
    #[arg(long, value_name = "HOW", default_value = "auto", value_parser = ["auto", "none", "widen", "least-squares"], hide_possible_values = true)]
    pub reduce: String,
    /// A code that means "no data", beside NaN and what the file declares
    #[arg(long, value_name = "V", allow_hyphen_values = true)]
    pub missing: Option<f64>,
    /// Share of a pixel's weights that must find samples, or it is missing
    #[arg(long, value_name = "W", default_value_t = 0.5)]
    pub min_coverage: f64,
    /// Type of the output: u8, i8, u16, i16, u32, i32, f32, f64 [default: the input's]
    #[arg(long = "type", value_name = "TYPE", value_parser = sample_type)]
    pub sample_type: Option<SampleType>,
}

/// What becomes of pixels outside the input; apart, since `rescale` has none.
#[derive(Args, Clone)]
#[command(next_help_heading = "Resampling")]
pub struct OutsideOption {
    /// Output pixels whose centre lies outside the input: missing, or extend
    #[arg(long, value_name = "WHAT", default_value = "missing", value_parser = ["missing", "extend"], hide_possible_values = true)]
    pub outside: String,
}

impl OutsideOption {
    pub fn value(&self) -> Outside {
        if self.outside == "extend" { Outside::Extend } else { Outside::Missing }
    }
}

/// What is known of the samples, and the planes wanted beside them.
#[derive(Args, Clone)]
#[command(next_help_heading = "Uncertainty and gaps")]
pub struct Planes {
    /// Standard uncertainty of the input: a raster file, a number, or poisson:GAIN,READ (electrons a count, electrons)
    #[arg(long, value_name = "SIGMA", allow_hyphen_values = true)]
    pub sigma: Vec<String>,
    /// Where the standard uncertainty of the output goes
    #[arg(long, value_name = "FILE")]
    pub sigma_out: Option<PathBuf>,
    /// Where the share of each pixel's weights that found samples goes
    #[arg(long, value_name = "FILE")]
    pub coverage: Option<PathBuf>,
    /// Of class codes: where the share of each pixel that each class covers goes, one band a class
    #[arg(long, value_name = "FILE")]
    pub fractions: Option<PathBuf>,
    /// Quality flags: samples with any of the bits (or any flag but 0) are missing; FILE or FILE:BITS, such as dq.tif:0x11
    #[arg(long, value_name = "FILE[:BITS]")]
    pub mask: Vec<String>,
}

impl Planes {
    /// What is said of input `i` of `n`: once for all, or once for each.
    pub fn of(&self, i: usize, n: usize) -> Result<(Option<SigmaFrom>, Option<String>)> {
        let pick = |all: &[String], option: &str| -> Result<Option<String>> {
            match all {
                [] => Ok(None),
                [one] => Ok(Some(one.clone())),
                many if many.len() == n => Ok(Some(many[i].clone())),
                many => Err(Error::usage(
                    format!("{option} is given {} times for {n} inputs", many.len()),
                    "give it once for all, or once for each input in order",
                )),
            }
        };
        let none = |s: &String| s != "-";
        let sigma = pick(&self.sigma, "--sigma")?.filter(none).map(|s| s.parse::<SigmaFrom>()).transpose()?;
        Ok((sigma, pick(&self.mask, "--mask")?.filter(none)))
    }
}

/// How the run goes and what it leaves.
#[derive(Args, Clone)]
#[command(next_help_heading = "Run")]
pub struct Running {
    /// Fail (exit 3) if the signal over the common region changes by more than this share
    #[arg(long, value_name = "T")]
    pub tolerance: Option<f64>,
    /// Memory to work in, such as 256MiB or 2GiB
    #[arg(long, value_name = "SIZE", default_value = "512MiB", value_parser = memory)]
    pub memory: u64,
    /// Threads [default: all cores]
    #[arg(long, value_name = "N")]
    pub threads: Option<usize>,
    /// One self-contained page (HTML): before and after, where signal went, what the kernel does
    #[arg(long, value_name = "FILE.html")]
    pub report: Option<PathBuf>,
    /// Replace outputs that exist
    #[arg(long)]
    pub overwrite: bool,
    /// Tell what would come out, the memory and the time it would take; write nothing
    #[arg(long)]
    pub dry_run: bool,
    /// Say nothing but errors
    #[arg(long, short)]
    pub quiet: bool,
    /// Print the ledger as JSON on stdout
    #[arg(long)]
    pub json: bool,
}

/// The choices of a run.
pub fn rules(resampling: &Resampling, running: &Running, outside: Outside) -> Result<Rules> {
    let values = resampling.values.parse::<Values>()?;
    let usual = if values == Values::Label { "nearest" } else { "bspline:3" };
    let rules = Rules {
        kernel: Kernel::parse(resampling.kernel.as_deref().unwrap_or(usual))?,
        values,
        limit: if resampling.limit == "neighbours" { Limit::Neighbours } else { Limit::None },
        extension: resampling.extend.parse::<Extension>()?,
        outside,
        reduce: match resampling.reduce.as_str() {
            "none" => Reduce::None,
            "widen" => Reduce::Widen,
            "least-squares" => Reduce::LeastSquares,
            _ => Reduce::Auto,
        },
        missing: resampling.missing,
        min_coverage: resampling.min_coverage,
        sample_type: resampling.sample_type,
        tolerance: running.tolerance,
        memory: running.memory,
        threads: running.threads,
    };
    rules.check()?;
    Ok(rules)
}

fn sample_type(text: &str) -> Result<SampleType, String> {
    use SampleType::{F32, F64, I8, I16, I32, U8, U16, U32};
    [U8, I8, U16, I16, U32, I32, F32, F64]
        .into_iter()
        .find(|t| t.name() == text)
        .ok_or_else(|| "use one of u8, i8, u16, i16, u32, i32, f32, f64".into())
}

/// A size in bytes, with a decimal or binary unit.
pub(super) fn memory(text: &str) -> Result<u64, String> {
    let split = text.find(|c: char| !(c.is_ascii_digit() || c == '.')).unwrap_or(text.len());
    let (number, unit) = text.split_at(split);
    let factor: f64 = match unit.trim().to_ascii_lowercase().as_str() {
        "" | "b" => 1.0,
        "kb" | "k" => 1e3,
        "mb" | "m" => 1e6,
        "gb" | "g" => 1e9,
        "tb" | "t" => 1e12,
        "kib" => 1024.0,
        "mib" => 1_048_576.0,
        "gib" => 1_073_741_824.0,
        "tib" => 1_099_511_627_776.0,
        _ => return Err("give a number with MB, GB, MiB or GiB, such as 256MiB".into()),
    };
    let n: f64 = number.parse().map_err(|_| "give a number with its unit, such as 256MiB".to_owned())?;
    Ok((n * factor) as u64)
}

/// One number, or two with a comma between: the same for both axes, or rows first.
pub fn pair(text: &str) -> Result<(f64, f64), String> {
    let both = two(text, ',')?;
    Ok((both.0, both.1.unwrap_or(both.0)))
}

/// Exactly two numbers with a comma between, rows first.
pub fn row_and_column(text: &str) -> Result<(f64, f64), String> {
    match two(text, ',')? {
        (r, Some(c)) => Ok((r, c)),
        _ => Err("give two numbers, rows first, such as 1.5,-0.25".into()),
    }
}

fn two(text: &str, separator: char) -> Result<(f64, Option<f64>), String> {
    let number = |t: &str| match t.trim().parse::<f64>() {
        Ok(v) if v.is_finite() => Ok(v),
        _ => Err(format!("\"{t}\" is no number")),
    };
    match text.split_once(separator) {
        Some((a, b)) => Ok((number(a)?, Some(number(b)?))),
        None => Ok((number(text)?, None)),
    }
}

/// ROWSxCOLUMNS.
pub fn size(text: &str) -> Result<(usize, usize), String> {
    let wrong = || "give rows x columns, such as 600x800".to_owned();
    let (r, c) = text.split_once(['x', 'X']).ok_or_else(wrong)?;
    Ok((r.trim().parse().map_err(|_| wrong())?, c.trim().parse().map_err(|_| wrong())?))
}

/// The command as typed, for the ledger.
pub fn command_line() -> Vec<String> {
    std::env::args_os()
        .map(|a| a.to_string_lossy().into_owned())
        .enumerate()
        .map(|(i, a)| if i == 0 { "regauge".into() } else { a })
        .collect()
}

/// Runs the one job of a command from end to end: estimate or run, report, ledger.
pub fn run_one(job: &Job, ledger: Option<PathBuf>, planes: &Planes, running: &Running) -> Result<Outcome> {
    let conduct = Conduct {
        command: command_line(),
        ledger,
        overwrite: running.overwrite,
        sigma_out: planes.sigma_out.clone(),
        coverage: planes.coverage.clone(),
        fractions: planes.fractions.clone(),
    };
    if running.dry_run {
        return tell_estimate(job, &conduct, running, false);
    }
    check_report(running, &[&job.input, &job.output, &job.ledger_path()])?;
    let ledger = run_job(job, running, &conduct)?;
    report(running, &[(job, &ledger)])?;
    conclude(&[ledger], running)
}

/// Runs one job with a progress bar, notes and a summary.
pub fn run_job(job: &Job, running: &Running, conduct: &Conduct) -> Result<Ledger> {
    let bar = Bar::new(&job.output.display().to_string(), running.quiet);
    let result = job.run(conduct, &bar);
    bar.clear();
    let made = result?;
    if !running.quiet {
        say(&made.summary());
        let path = conduct.ledger.clone().unwrap_or_else(|| job.ledger_path());
        say(&[format!("ledger: {}", path.display())]);
    }
    Ok(made)
}

/// Refuses, before any work, a report's name that is taken or named for something else as well.
pub fn check_report(running: &Running, others: &[&std::path::Path]) -> Result<()> {
    let Some(path) = &running.report else { return Ok(()) };
    if others
        .iter()
        .any(|o| *o == path || o.canonicalize().is_ok_and(|o| path.canonicalize().is_ok_and(|p| o == p)))
    {
        return Err(Error::usage(
            format!("{} is named for two things", path.display()),
            "give the report a name of its own, such as run.html",
        ));
    }
    crate::raster::check_free(path, running.overwrite)
}

/// Writes the page of some runs, if one is wanted.
pub fn report(running: &Running, runs: &[(&Job, &Ledger)]) -> Result<()> {
    let Some(path) = &running.report else { return Ok(()) };
    write_report(path, runs)?;
    if !running.quiet {
        say(&[format!("report: {}", path.display())]);
    }
    Ok(())
}

/// Tells what a job would take.
pub fn tell_estimate(job: &Job, conduct: &Conduct, running: &Running, folder_comes: bool) -> Result<Outcome> {
    let estimate = job.estimate(conduct, folder_comes)?;
    if running.json {
        print_json(&estimate)?;
    }
    if !running.quiet {
        say(&estimate.summary());
    }
    Ok(Outcome::Done)
}

/// Prints lines to stderr.
pub fn say(lines: &[String]) {
    let mut err = std::io::stderr().lock();
    for line in lines {
        // Without stderr there is nobody to tell.
        let _ = writeln!(err, "{line}");
    }
}

/// Tells what the input file holds that is not carried over, and warns of kernels that need it.
pub fn say_notes(path: &std::path::Path, notes: &[String], quiet: bool) {
    if !quiet {
        say(&notes.iter().map(|n| format!("note: {}: {n}", path.display())).collect::<Vec<_>>());
    }
}

/// Warnings that a kernel deserves before it is used.
pub fn warn_of_kernel(rules: &Rules, gathers: bool, quiet: bool) {
    let warning = match rules.kernel.name() {
        "polynomial" => {
            Some("one polynomial through a whole line swings towards its ends (Runge's phenomenon)")
        }
        "sinc" if gathers => {
            Some("the sinc looks at every sample for every pixel of a turned raster: this takes long")
        }
        _ => None,
    };
    if let (Some(w), false) = (warning, quiet) {
        say(&[format!("warning: {w}")]);
    }
}

/// Prints ledgers if asked, and says whether their checks held.
pub fn conclude(ledgers: &[Ledger], running: &Running) -> Result<Outcome> {
    if running.json {
        match ledgers {
            [one] => print_json(one)?,
            many => print_json(&serde_json::json!({ "ledgers": many }))?,
        }
    }
    let failed = ledgers.iter().any(Ledger::failed_a_check);
    Ok(if failed { Outcome::CheckFailed } else { Outcome::Done })
}
