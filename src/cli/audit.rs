//! `regauge audit`: a resampling, whoever did it, measured against its original.

use super::common::{command_line, memory, say, say_notes};
use super::progress::Bar;
use super::{Outcome, print_json};
use crate::error::{Error, Result};
use crate::job::{AuditRules, AuditValues, about, audit_files, relate, way_back, write_audit_report};
use crate::map::MapFile;
use crate::raster;
use crate::report::Relation;
use clap::Args;
use std::path::PathBuf;

/// Checks a resampling done by anyone: closure, displacement, blur, aliasing, gaps, clipping.
#[derive(Args)]
#[command(after_help = "Examples:\n  \
        regauge audit dem.tif half.tif\n  \
        regauge audit frame.npy zoomed.npy --tolerance 1e-3 --max-displacement 0.05 --min-mtf50 0.2\n  \
        regauge audit round2.tif moved.tif --map 2to1.json --json\n\n\
        The grids are laid on each other by their georeference, or by their outer edges where they have none. Everything is\n\
        told in pixels of BEFORE, positive down and right. Exit code 3: content is displaced by more than the bound, or a\n\
        check that was asked for does not hold.")]
pub struct Arguments {
    /// The original raster
    #[arg(value_name = "BEFORE")]
    before: PathBuf,
    /// The resampled raster
    #[arg(value_name = "AFTER")]
    after: PathBuf,
    /// A map file that the resampling followed: BEFORE moves, AFTER is the reference
    #[arg(long, value_name = "FILE")]
    map: Option<PathBuf>,
    /// What a number is: density (a value per place) or total (a sum over the pixel)
    #[arg(long, value_name = "WHAT", default_value = "density", value_parser = ["density", "total"], hide_possible_values = true)]
    values: String,
    /// A code that means "no data", beside NaN and what the files declare
    #[arg(long, value_name = "V", allow_hyphen_values = true)]
    missing: Option<f64>,
    /// Fail (exit 3) if the signal over the common region changes by more than this share
    #[arg(long, value_name = "T")]
    tolerance: Option<f64>,
    /// Fail (exit 3) if content is displaced by more pixels of BEFORE anywhere [default: 0.1]
    #[arg(long, value_name = "PX")]
    max_displacement: Option<f64>,
    /// Fail (exit 3) if half the detail is lost below this frequency, cycles per pixel of BEFORE
    #[arg(long, value_name = "F")]
    min_mtf50: Option<f64>,
    /// Look at this band alone, counted from 1 [default: all; displacement and blur of the first]
    #[arg(long, value_name = "N")]
    band: Option<usize>,
    /// Memory to work in, such as 256MiB or 2GiB
    #[arg(long, value_name = "SIZE", default_value = "512MiB", value_parser = memory)]
    memory: u64,
    /// Say nothing but errors
    #[arg(long, short)]
    quiet: bool,
    /// Print the account as JSON on stdout
    #[arg(long)]
    json: bool,
    /// One self-contained page (HTML): both rasters, where signal went, displacement, detail
    #[arg(long, value_name = "FILE.html", help_heading = "Run")]
    report: Option<PathBuf>,
    /// Replace a report that exists
    #[arg(long, help_heading = "Run")]
    overwrite: bool,
}

pub fn run(a: &Arguments) -> Result<Outcome> {
    let rules = AuditRules {
        values: if a.values == "total" { AuditValues::Total } else { AuditValues::Density },
        missing: a.missing,
        tolerance: a.tolerance,
        max_displacement: a.max_displacement,
        min_mtf50: a.min_mtf50,
        band: match a.band {
            Some(0) => {
                return Err(Error::usage("--band 0: bands are counted from 1", "give 1 for the first band"));
            }
            other => other.map(|b| b - 1),
        },
        memory: a.memory,
    };
    rules.check()?;
    if let Some(path) = &a.report {
        raster::check_free(path, a.overwrite)?;
    }
    let relation = relation(a)?;
    let bar = Bar::new(&a.after.display().to_string(), a.quiet);
    let result = audit_files((&a.before, &a.after), relation, &rules, &command_line(), &bar);
    bar.clear();
    let made = result?;
    if !a.quiet {
        say(&made.summary());
    }
    if let Some(path) = &a.report {
        write_audit_report(path, &made, (&a.before, &a.after), a.missing)?;
        if !a.quiet {
            say(&[format!("report: {}", path.display())]);
        }
    }
    if a.json {
        print_json(&made)?;
    }
    Ok(if made.failed_a_check() { Outcome::CheckFailed } else { Outcome::Done })
}

/// How AFTER lies on BEFORE: by the map file, their worlds, or their outer edges.
fn relation(a: &Arguments) -> Result<Relation> {
    let (before, after) = (raster::open(&a.before)?, raster::open(&a.after)?);
    for (path, source) in [(&a.before, &before), (&a.after, &after)] {
        say_notes(path, &source.header().storage.notes, a.quiet);
    }
    let (b, r) = (before.header(), after.header());
    if let Some(path) = &a.map {
        let file = MapFile::read(path)?;
        let name = a.after.display().to_string();
        let back = way_back(&a.before, &b.grid, Some(&file), &r.grid, &name)?;
        return Ok(Relation { by: "map".into(), back });
    }
    let relation = relate((&a.before, b), (&a.after, r)).map_err(|e| about(&a.after, e))?;
    if !a.quiet && b.grid.world.is_some() != r.grid.world.is_some() {
        let lost = if r.grid.world.is_none() { &a.after } else { &a.before };
        say(&[format!(
            "note: {} has no place in the world: outer edges are laid on outer edges",
            lost.display()
        )]);
    }
    Ok(relation)
}
