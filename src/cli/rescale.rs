//! `regauge rescale`: a new pixel size.

use super::Outcome;
use super::common::{Planes, Resampling, Running, pair, rules, run_one, say_notes, size, warn_of_kernel};
use crate::error::Result;
use crate::job::{Job, about};
use crate::map::{Anchor, Rescale, rescaled};
use crate::raster;
use crate::resample::Outside;
use clap::Args;
use std::path::PathBuf;

/// A new pixel size. Outer edges stay where they are unless --anchor centre.
#[derive(Args)]
#[command(
    group = clap::ArgGroup::new("how").required(true).args(["factor", "pixel", "size"]),
    after_help = "Examples:\n  \
        regauge rescale dem.tif half.tif --factor 0.5\n  \
        regauge rescale dem.tif metre.tif --pixel 1 --anchor centre\n  \
        regauge rescale cells.ome.tif small.ome.tif --size 1024x1024 --kernel area\n\n\
        --factor and --pixel keep the pixel exact and round the number of pixels; --size keeps the extent exact.\n\
        Rows come before columns. No pixel becomes missing by a rescaling alone."
)]
pub struct Arguments {
    /// Raster to rescale
    #[arg(value_name = "IN")]
    input: PathBuf,
    /// Where the result goes (.tif, .fits, .npy, .png)
    #[arg(value_name = "OUT")]
    output: PathBuf,
    /// Output pixels per input pixel: F, or FR,FC for rows and columns
    #[arg(long, value_name = "F", value_parser = pair, allow_hyphen_values = true)]
    factor: Option<(f64, f64)>,
    /// Pixel size in world units: P, or PH,PW for height and width
    #[arg(long, value_name = "P", value_parser = pair, allow_hyphen_values = true)]
    pixel: Option<(f64, f64)>,
    /// Rows x columns of the output
    #[arg(long, value_name = "RxC", value_parser = size)]
    size: Option<(usize, usize)>,
    /// What stays: the outer edge, or the centre of the first pixel (elevation postings)
    #[arg(long, default_value = "edge", value_parser = ["edge", "centre"], value_name = "WHAT", hide_possible_values = true)]
    anchor: String,
    /// Where the ledger goes [default: OUT.ledger.json]
    #[arg(long, value_name = "FILE", help_heading = "Run")]
    ledger: Option<PathBuf>,
    #[command(flatten)]
    resampling: Resampling,
    #[command(flatten)]
    planes: Planes,
    #[command(flatten)]
    running: Running,
}

pub fn run(a: &Arguments) -> Result<Outcome> {
    let rules = rules(&a.resampling, &a.running, Outside::Extend)?;
    warn_of_kernel(&rules, false, a.running.quiet);
    let source = raster::open(&a.input)?;
    let header = source.header();
    say_notes(&a.input, &header.storage.notes, a.running.quiet);
    let how = match (a.factor, a.pixel, a.size) {
        (Some((r, c)), ..) => Rescale::Factor(r, c),
        (_, Some((h, w)), _) => Rescale::Pixel(h, w),
        // clap sees to it that one of the three is given.
        (.., s) => s.map_or(Rescale::Factor(1.0, 1.0), |(r, c)| Rescale::Size(r, c)),
    };
    let anchor = if a.anchor == "centre" { Anchor::Centre } else { Anchor::Edge };
    let (target, back) = rescaled(&header.grid, how, anchor).map_err(|e| about(&a.input, e))?;
    let (sigma, mask) = a.planes.of(0, 1)?;
    let job = Job { input: a.input.clone(), output: a.output.clone(), target, back, rules, sigma, mask };
    run_one(&job, a.ledger.clone(), &a.planes, &a.running)
}
