//! `regauge move`: shift, turn, scale, shear, or a map file.

use super::Outcome;
use super::common::{
    OutsideOption, Planes, Resampling, Running, row_and_column, rules, run_one, say_notes, warn_of_kernel,
};
use crate::error::{Error, Result};
use crate::job::{Job, about};
use crate::map::{Frame, Map, MapFile, Motion, moved};
use crate::raster;
use crate::resample::Plan;
use clap::Args;
use std::path::PathBuf;

/// Shift, turn, scale or shear the content, or apply map files; all that is asked for is composed and resampled once.
#[derive(Args)]
#[command(after_help = "Examples:\n  \
    regauge move frame.tif moved.tif --shift 1.25,-0.4\n  \
    regauge move dem.tif turned.tif --turn 12.5 --frame fit\n  \
    regauge move round2.tif onto1.tif --map round2-to-1.json\n\n\
    out = about + turn (scale (shear (in - about))) + shift. Positive shifts move content down and right, positive turns\n\
    counter-clockwise as displayed. Map files come first, in the order given. Quarter turns are copies.")]
pub struct Arguments {
    /// Raster to move
    #[arg(value_name = "IN")]
    input: PathBuf,
    /// Where the result goes (.tif, .fits, .npy, .png)
    #[arg(value_name = "OUT")]
    output: PathBuf,
    /// Pixels down and right
    #[arg(long, value_name = "DR,DC", value_parser = row_and_column, allow_hyphen_values = true)]
    shift: Option<(f64, f64)>,
    /// Degrees, counter-clockwise as displayed
    #[arg(long, value_name = "DEG", allow_hyphen_values = true)]
    turn: Option<f64>,
    /// Content grows by this factor
    #[arg(long, value_name = "S", allow_hyphen_values = true)]
    scale: Option<f64>,
    /// Content moves right by this many pixels per row
    #[arg(long, value_name = "K", allow_hyphen_values = true)]
    shear: Option<f64>,
    /// The place that turn, scale and shear leave alone [default: the centre]
    #[arg(long, value_name = "ROW,COL", value_parser = row_and_column, allow_hyphen_values = true)]
    about: Option<(f64, f64)>,
    /// A map file whose map is the motion; may be given several times
    #[arg(long, value_name = "FILE")]
    map: Vec<PathBuf>,
    /// keep the frame, or fit it so that nothing is cut off
    #[arg(long, default_value = "keep", value_parser = ["keep", "fit"], value_name = "HOW", hide_possible_values = true)]
    frame: String,
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
    let source = raster::open(&a.input)?;
    let grid = &source.header().grid;
    say_notes(&a.input, &source.header().storage.notes, a.running.quiet);
    let asked = a.shift.is_some() || a.turn.is_some() || a.scale.is_some() || a.shear.is_some();
    if !asked && a.map.is_empty() {
        return Err(Error::usage(
            "nothing to do: no motion was given",
            "give --shift, --turn, --scale, --shear or --map",
        ));
    }
    let mut motion = Map::IDENTITY;
    for file in &a.map {
        motion = motion.then(&MapFile::read(file)?.map());
    }
    let defaults = Motion::about_centre(grid.rows, grid.columns);
    let options = Motion {
        shift: a.shift.unwrap_or((0.0, 0.0)),
        turn: a.turn.unwrap_or(0.0),
        scale: a.scale.unwrap_or(1.0),
        shear: a.shear.unwrap_or(0.0),
        about: a.about.unwrap_or(defaults.about),
        pixel: grid.pixel_size(),
    };
    motion = motion.then(&options.map()?);
    let frame = if a.frame == "fit" { Frame::Fit } else { Frame::Keep };
    let (mut target, mut back) = moved(grid, &motion, frame).map_err(|e| about(&a.input, e))?;
    if frame == Frame::Fit {
        (target, back) = Plan::fit((grid.rows, grid.columns), target, back, &rules)?;
    }
    warn_of_kernel(&rules, back.as_axes().is_none(), a.running.quiet);
    let (sigma, mask) = a.planes.of(0, 1)?;
    let job = Job { input: a.input.clone(), output: a.output.clone(), target, back, rules, sigma, mask };
    run_one(&job, a.ledger.clone(), &a.planes, &a.running)
}
