//! `regauge subtract`: the difference of two rasters on one grid.

use super::common::{
    OutsideOption, Planes, Resampling, Running, check_report, command_line, rules, say, say_notes,
    warn_of_kernel,
};
use super::progress::Bar;
use super::{Outcome, print_json};
use crate::error::{Error, Result};
use crate::grid::Grid;
use crate::job::{Conduct, Job, Subtract, reduced, way_back};
use crate::map::MapFile;
use crate::raster;
use crate::report::{difference_page, write_whole};
use crate::resample::Values;
use clap::Args;
use std::path::{Path, PathBuf};

/// A less B on one grid: each is resampled once (A not at all where the grid is its own), uncertainty is carried along.
#[derive(Args)]
#[command(after_help = "Examples:\n  \
    regauge subtract year2.tif year1.tif change.tif\n  \
    regauge subtract new.tif old.tif change.tif --sigma 0.05 --sigma 0.08 --sigma-out sigma.tif --significance z.tif\n\n\
    The grid is A's unless --onto says otherwise. A pixel is missing where either raster is. The difference is f32, or f64\n\
    where an input needs it; the noise of its neighbours is correlated as the ledger says.")]
pub struct Arguments {
    /// Raster that is subtracted from
    #[arg(value_name = "A")]
    a: PathBuf,
    /// Raster that is subtracted
    #[arg(value_name = "B")]
    b: PathBuf,
    /// Where the difference goes
    #[arg(value_name = "OUT")]
    output: PathBuf,
    /// The common grid: that of a raster, or a grid file (.json) [default: A's]
    #[arg(long, value_name = "FILE")]
    onto: Option<PathBuf>,
    /// A map file for A and then for B, - for none
    #[arg(long, value_name = "FILE", allow_hyphen_values = true)]
    map: Vec<PathBuf>,
    /// Where (difference / its standard uncertainty) goes
    #[arg(long, value_name = "FILE", help_heading = "Uncertainty and gaps")]
    significance: Option<PathBuf>,
    /// Where the ledger goes [default: OUT.ledger.json]
    #[arg(long, value_name = "FILE", help_heading = "Run")]
    ledger: Option<PathBuf>,
    #[command(flatten)]
    resampling: Resampling,
    #[command(flatten)]
    outside: OutsideOption,
    #[command(flatten)]
    planes: Planes,
    #[command(flatten)]
    running: Running,
}

pub fn run(a: &Arguments) -> Result<Outcome> {
    let rules = rules(&a.resampling, &a.running, a.outside.value())?;
    if rules.values == Values::Label {
        return Err(Error::usage("class codes cannot be subtracted", "unify them and compare the classes"));
    }
    if a.planes.coverage.is_some() || a.planes.fractions.is_some() {
        return Err(Error::usage(
            "a difference has no coverage and no classes of its own",
            "unify both rasters with --coverage first",
        ));
    }
    if a.map.len() > 2 {
        return Err(Error::usage("at most two maps: for A and for B", "give - for none"));
    }
    let (target, name) = match &a.onto {
        Some(path) if path.extension().is_some_and(|e| e.eq_ignore_ascii_case("json")) => {
            (Grid::read(path)?, path)
        }
        Some(path) => (raster::open(path)?.header().grid.clone(), path),
        None => (raster::open(&a.a)?.header().grid.clone(), &a.a),
    };
    let job = |i: usize, path: &PathBuf| -> Result<Job> {
        let source = raster::open(path)?;
        say_notes(path, &source.header().storage.notes, a.running.quiet);
        let map = match a.map.get(i).filter(|m| *m != Path::new("-")) {
            Some(file) => Some(MapFile::read(file)?),
            None => None,
        };
        let grid = &source.header().grid;
        let back = way_back(path, grid, map.as_ref(), &target, &name.display().to_string())?;
        warn_of_kernel(&rules, back.as_axes().is_none(), a.running.quiet);
        let (sigma, mask) = a.planes.of(i, 2)?;
        let (output, rules) = (a.output.clone(), rules.clone());
        Ok(Job { input: path.clone(), output, target: target.clone(), back, rules, sigma, mask })
    };
    let subtract = Subtract {
        a: job(0, &a.a)?,
        b: job(1, &a.b)?,
        output: a.output.clone(),
        significance: a.significance.clone(),
        sample_type: rules.sample_type,
    };
    let conduct = Conduct {
        command: command_line(),
        ledger: a.ledger.clone(),
        overwrite: a.running.overwrite,
        sigma_out: a.planes.sigma_out.clone(),
        coverage: None,
        fractions: None,
    };
    if a.running.dry_run {
        let one = Conduct { sigma_out: None, ..conduct };
        for job in [&subtract.a, &subtract.b] {
            say(&job.estimate(&one, false)?.summary());
        }
        return Ok(Outcome::Done);
    }
    check_report(&a.running, &[&a.a, &a.b, &a.output])?;
    let bar = Bar::new(&a.output.display().to_string(), a.running.quiet);
    let result = subtract.run(&conduct, &bar);
    bar.clear();
    let ledger = result?;
    if !a.running.quiet {
        say(&ledger.summary());
    }
    if let Some(path) = &a.running.report {
        let (values, columns, repeat) = reduced(&a.output)?;
        let account = serde_json::to_value(&ledger).unwrap_or_default();
        let page = difference_page(&ledger.summary(), &account, (&values, columns, repeat), &ledger.command)?;
        write_whole(path, page.as_bytes()).map_err(|e| Error::io(path, "writing the report", e))?;
    }
    if a.running.json {
        print_json(&ledger)?;
    }
    let failed = ledger.parts.iter().any(crate::report::Ledger::failed_a_check);
    Ok(if failed { Outcome::CheckFailed } else { Outcome::Done })
}
