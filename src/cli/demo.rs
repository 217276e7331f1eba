//! `regauge demo`: the sample survey, unified and subtracted, beside the known truth.

use super::common::say;
use super::progress::Bar;
use super::{Outcome, print};
use crate::error::{Error, Result};
use crate::grid::Grid;
use crate::job::{Conduct, Job};
use crate::pattern::peatland::{self, MISSING, Measurement};
use crate::raster::{self, Compression, Header, SampleType, Samples, Source, Window};
use crate::report::{Group, Ledger, MapOptions, Palette, Panel, Scale, draw_maps};
use crate::resample::Rules;
use clap::Args;
use std::path::{Path, PathBuf};

/// Make the sample survey, unify both years onto one grid, subtract them, and draw pictures beside the known truth.
#[derive(Args)]
#[command(after_help = "Examples:\n  regauge demo\n  regauge demo --out /data/demo\n\n\
    The peatland, its instruments and its sinking are invented, so the truth is known at every place.")]
pub struct Arguments {
    /// Folder for everything; files of an earlier demo are replaced
    #[arg(long, value_name = "DIR", default_value = "regauge-demo")]
    out: PathBuf,
    /// Make the two survey files only
    #[arg(long)]
    survey_only: bool,
}

pub fn run(a: &Arguments) -> Result<Outcome> {
    let survey = peatland::survey();
    let files = [("year1.tif", &survey.year_1), ("year2.tif", &survey.year_2)];
    std::fs::create_dir_all(&a.out).map_err(|e| Error::io(&a.out, "making the folder", e))?;
    for (name, year) in &files {
        write_year(&a.out.join(name), year)?;
    }
    if a.survey_only {
        return Ok(Outcome::Done);
    }
    let common = a.out.join("common");
    std::fs::create_dir_all(&common).map_err(|e| Error::io(&common, "making the folder", e))?;
    // The main job: the second year onto the first year's grid; the first is copied bit for bit.
    let target = survey.year_1.grid.clone();
    let mut ledgers = Vec::new();
    for (name, year) in &files {
        let job = Job {
            input: a.out.join(name),
            output: common.join(name),
            back: target.to(&year.grid)?,
            target: target.clone(),
            rules: Rules::default(),
            sigma: None,
            mask: None,
        };
        let conduct =
            Conduct { command: super::common::command_line(), overwrite: true, ..Conduct::default() };
        ledgers.push(job.run(&conduct, &Bar::new(name, false))?);
    }
    let (first, second) = (read(&common.join("year1.tif"))?, read(&common.join("year2.tif"))?);
    let measured: Vec<f64> = second.iter().zip(&first).map(|(b, a)| b - a).collect();
    let truth = peatland::true_change_on(&target)?;
    let error: Vec<f64> = measured.iter().zip(&truth).map(|(m, t)| m - t).collect();
    write_change(&a.out.join("change.tif"), &target, &measured)?;
    draw(&a.out, &target, &first, &second, (&measured, &truth, &error))?;
    tell(&a.out, &ledgers, &error, (survey.year_1.sigma, survey.year_2.sigma))?;
    Ok(Outcome::Done)
}

fn write_year(path: &Path, year: &Measurement) -> Result<()> {
    let mut header = Header::new(year.grid.clone(), 1, SampleType::F32);
    header.missing = Some(f64::from(MISSING));
    header.storage.compression = Compression::Deflate;
    header.storage.predictor = 3;
    write_raster(path, &header, &Samples::F32(year.samples.clone()))
}

fn write_change(path: &Path, grid: &Grid, values: &[f64]) -> Result<()> {
    let mut header = Header::new(grid.clone(), 1, SampleType::F32);
    header.missing = Some(f64::from(MISSING));
    header.storage.compression = Compression::Deflate;
    header.storage.predictor = 3;
    let stored = values.iter().map(|v| if v.is_nan() { MISSING } else { *v as f32 }).collect();
    write_raster(path, &header, &Samples::F32(stored))
}

fn write_raster(path: &Path, header: &Header, samples: &Samples) -> Result<()> {
    let mut sink = raster::create(path, header, true)?;
    sink.write(&Window::whole(&header.grid), samples)?;
    sink.finish()
}

/// A small raster of f32 as f64, NaN where it is missing.
fn read(path: &Path) -> Result<Vec<f64>> {
    let source: Box<dyn Source> = raster::open(path)?;
    let code = source.header().missing.map(|c| c as f32);
    match source.read(0..1, &Window::whole(&source.header().grid))? {
        Samples::F32(v) => {
            Ok(v.into_iter().map(|v| if Some(v) == code { f64::NAN } else { f64::from(v) }).collect())
        }
        other => Err(Error::unsupported(
            path,
            format!("samples of {}", other.sample_type().name()),
            "run the demo again",
        )),
    }
}

/// The pictures: both years, and the change beside the truth.
fn draw(
    out: &Path,
    grid: &Grid,
    first: &[f64],
    second: &[f64],
    (measured, truth, error): (&[f64], &[f64], &[f64]),
) -> Result<()> {
    let sheet = |title: &str, caption: &str| {
        MapOptions { title: title.into(), caption: caption.into(), panel_side: 420, ..MapOptions::default() }
            .place(grid, "m")
    };
    let write = |groups: &[Group], options: &MapOptions, name: &str| {
        draw_maps(groups, grid.rows, grid.columns, options)?.write_png(&out.join(name), true)
    };
    let scale = |palette, label: &str, range| Scale { palette, label: label.into(), range };
    let panel = |title: &str, values, surface| Panel { title: title.into(), values, surface };
    write(
        &[Group {
            scale: scale(Palette::Sequential, "elevation (m)", None),
            panels: vec![
                panel("Year 1", first, Some(first)),
                panel("Year 2, brought onto the grid of year 1", second, Some(second)),
            ],
        }],
        &sheet("The surface of a peatland in two years", "Invented survey."),
        "surfaces.png",
    )?;
    let change = Group {
        scale: scale(Palette::Diverging, "change in elevation (m)", None),
        panels: vec![
            panel("Measured change", measured, Some(first)),
            panel("True change", truth, Some(first)),
        ],
    };
    let error = Group {
        scale: scale(Palette::Diverging, "measured \u{2212} true (m)", Some((-0.05, 0.05))),
        panels: vec![panel("Error", error, None)],
    };
    let caption = "Invented survey. Both surfaces were brought onto the grid of year 1 before subtraction. \
                   Not a certified instrument; follow local codes and licensed practice.";
    write(&[change, error], &sheet("How far a peatland sank in two years", caption), "change.png")
}

/// How close the measurement came, in words.
fn tell(out: &Path, ledgers: &[Ledger], error: &[f64], sigma: (f64, f64)) -> Result<()> {
    let there: Vec<f64> = error.iter().copied().filter(|v| !v.is_nan()).collect();
    let n = there.len().max(1) as f64;
    let mean = there.iter().sum::<f64>() / n;
    let rms = (there.iter().map(|v| v * v).sum::<f64>() / n).sqrt();
    // The first year is copied with its noise; the second year's shrinks by the gain that its ledger tells.
    let expected =
        (sigma.0.powi(2) + sigma.1.powi(2) * ledgers.last().map_or(1.0, |l| l.noise.gain_mean)).sqrt();
    for ledger in ledgers {
        say(&ledger.summary());
    }
    let missing = error.len() - there.len();
    print(&format!(
        "change against the known truth, over {} pixels ({missing} missing under the cloud or outside year 2):\n  \
           rms error {:.2} cm, of which the instruments' noise explains {:.2} cm; mean error {:+.3} cm\n\
         pictures: {}, {}\n\
         rasters and ledgers: {}, {}\n\
         An invented survey. Not a certified instrument; follow local codes and licensed practice.\n",
        there.len(),
        100.0 * rms,
        100.0 * expected,
        100.0 * mean,
        out.join("change.png").display(),
        out.join("surfaces.png").display(),
        out.join("change.tif").display(),
        out.join("common").display(),
    ))
}
