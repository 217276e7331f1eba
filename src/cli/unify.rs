//! `regauge unify`: several rasters onto one grid.

use super::Outcome;
use super::common::{
    OutsideOption, Planes, Resampling, Running, check_report, command_line, conclude, pair, report, rules,
    run_job, say, say_notes, tell_estimate, warn_of_kernel,
};
use crate::error::{Error, Result};
use crate::grid::{Grid, Span, span};
use crate::job::{Conduct, Job, way_back};
use crate::map::MapFile;
use crate::raster;
use clap::Args;
use std::collections::HashMap;
use std::path::{Path, PathBuf};

/// Several rasters onto one grid, each under its own name in a folder. --sigma-out, --coverage and --fractions name folders as well.
#[derive(Args)]
#[command(
    group = clap::ArgGroup::new("grid").required(true).args(["onto", "span"]),
    after_help = "Examples:\n  \
        regauge unify year1.tif year2.tif --onto year1.tif --out common\n  \
        regauge unify a.tif b.tif c.tif --span overlap --pixel 2 --out common\n  \
        regauge unify round1.tif round2.tif --onto round1.tif --map - --map 2to1.json --out common\n\n\
        A map goes from its raster's pixels to the pixels of the reference that it names. Each raster is resampled once,\n\
        whatever lies between it and the common grid."
)]
pub struct Arguments {
    /// Rasters to bring together
    #[arg(value_name = "IN", required = true)]
    inputs: Vec<PathBuf>,
    /// Folder for the results; made if needed
    #[arg(long, value_name = "DIR")]
    out: PathBuf,
    /// The common grid: that of a raster, or a grid file (.json)
    #[arg(long, value_name = "FILE")]
    onto: Option<PathBuf>,
    /// The common grid spans all (union), or what all share (overlap)
    #[arg(long, value_name = "WHAT", value_parser = ["union", "overlap"], hide_possible_values = true)]
    span: Option<String>,
    /// Pixel size of the spanned grid in world units [default: the first input's]
    #[arg(long, value_name = "P", value_parser = pair, requires = "span")]
    pixel: Option<(f64, f64)>,
    /// A map file for each input in order, - for none; may be given several times
    #[arg(long, value_name = "FILE", allow_hyphen_values = true)]
    map: Vec<PathBuf>,
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
    if a.map.len() > a.inputs.len() {
        return Err(Error::usage(
            format!("{} maps for {} inputs", a.map.len(), a.inputs.len()),
            "give one --map per input in order, with - where there is none",
        ));
    }
    let mut grids = Vec::new();
    for path in &a.inputs {
        let source = raster::open(path)?;
        say_notes(path, &source.header().storage.notes, a.running.quiet);
        grids.push(source.header().grid.clone());
    }
    let maps: Vec<Option<MapFile>> = (0..a.inputs.len())
        .map(|i| match a.map.get(i).filter(|p| *p != Path::new("-")) {
            Some(path) => MapFile::read(path).map(Some),
            None => Ok(None),
        })
        .collect::<Result<_>>()?;
    let (target, name) = common_grid(a, &grids, &maps)?;
    let mut jobs = Vec::new();
    let mut names: HashMap<PathBuf, &Path> = HashMap::new();
    for ((path, grid), map) in a.inputs.iter().zip(&grids).zip(&maps) {
        let back = way_back(path, grid, map.as_ref(), &target, &name)?;
        let output = a.out.join(output_name(path, a.running.quiet)?);
        if let Some(other) = names.insert(output.clone(), path) {
            return Err(Error::usage(
                format!("{} and {} would both become {}", other.display(), path.display(), output.display()),
                "rename one of them, or unify them in two runs",
            ));
        }
        warn_of_kernel(&rules, back.as_axes().is_none(), a.running.quiet);
        let (sigma, mask) = a.planes.of(jobs.len(), a.inputs.len())?;
        let conduct = Conduct {
            command: command_line(),
            ledger: None,
            overwrite: a.running.overwrite,
            sigma_out: beside(a.planes.sigma_out.as_deref(), &output),
            coverage: beside(a.planes.coverage.as_deref(), &output),
            fractions: beside(a.planes.fractions.as_deref(), &output),
        };
        let job = Job {
            input: path.clone(),
            output,
            target: target.clone(),
            back,
            rules: rules.clone(),
            sigma,
            mask,
        };
        jobs.push((job, conduct));
    }
    let planes = [&a.planes.sigma_out, &a.planes.coverage, &a.planes.fractions];
    let folders = std::iter::once(&a.out).chain(planes.into_iter().flatten());
    if a.running.dry_run {
        // Nothing is written, not even a folder.
        for (job, conduct) in &jobs {
            tell_estimate(job, conduct, &a.running, !a.out.is_dir())?;
        }
        return Ok(Outcome::Done);
    }
    for folder in folders {
        std::fs::create_dir_all(folder).map_err(|e| Error::io(folder, "making the folder", e))?;
    }
    // All that can be refused is refused before the first raster is touched.
    for (job, conduct) in &jobs {
        job.check(conduct)?;
    }
    let taken: Vec<&Path> =
        jobs.iter().flat_map(|(job, _)| [job.input.as_path(), job.output.as_path()]).collect();
    check_report(&a.running, &taken)?;
    let ledgers =
        jobs.iter().map(|(job, conduct)| run_job(job, &a.running, conduct)).collect::<Result<Vec<_>>>()?;
    let runs: Vec<(&Job, &crate::report::Ledger)> = jobs.iter().map(|j| &j.0).zip(&ledgers).collect();
    report(&a.running, &runs)?;
    conclude(&ledgers, &a.running)
}

/// The grid that all go onto, and what to call it in messages.
fn common_grid(a: &Arguments, grids: &[Grid], maps: &[Option<MapFile>]) -> Result<(Grid, String)> {
    if let Some(onto) = &a.onto {
        let is_json = onto.extension().is_some_and(|e| e.eq_ignore_ascii_case("json"));
        let grid = if is_json { Grid::read(onto)? } else { raster::open(onto)?.header().grid.clone() };
        return Ok((grid, onto.display().to_string()));
    }
    for (path, grid) in a.inputs.iter().zip(grids).skip(1) {
        grids[0].check_same_crs(grid, (&a.inputs[0].display().to_string(), &path.display().to_string()))?;
    }
    // A mapped raster lies where its map puts it: its frame on the reference's lattice, with its own pixels.
    let mut placed = Vec::new();
    for ((grid, map), path) in grids.iter().zip(maps).zip(&a.inputs) {
        placed.push(match map {
            None => grid.clone(),
            Some(m) => place_by_map(path, grid, m, &grids[0])?,
        });
    }
    if placed.iter().any(|g| g.world.is_some()) != placed.iter().all(|g| g.world.is_some()) {
        let lost = placed.iter().position(|g| g.world.is_none()).unwrap_or(0);
        return Err(Error::unfit(
            format!("{} has no place in the world, others have", a.inputs[lost].display()),
            "give it a --map, or a georeference",
        ));
    }
    let which = if a.span.as_deref() == Some("overlap") { Span::Overlap } else { Span::Union };
    Ok((span(&placed, which, a.pixel)?, "the common grid".into()))
}

/// The grid of a raster as its map places it in the reference's world. Only affine maps keep a grid a grid.
fn place_by_map(path: &Path, grid: &Grid, file: &MapFile, first: &Grid) -> Result<Grid> {
    let map = file.map();
    if !map.is_affine() {
        return Err(Error::usage(
            format!("{}: a projective map gives no grid to span", path.display()),
            "name the common grid with --onto",
        ));
    }
    let reference = file.reference.as_ref().unwrap_or(first);
    let at = |r: f64, c: f64| {
        let (r, c) = map.apply(r, c);
        reference.world_at(r, c)
    };
    let (o, right, down) = (at(0.0, 0.0), at(0.0, 1.0), at(1.0, 0.0));
    let world = [[right.0 - o.0, down.0 - o.0, o.0], [right.1 - o.1, down.1 - o.1, o.1]];
    // Without a world of its own the reference's pixels are the world.
    Ok(Grid { world: Some(world), crs: reference.crs.clone(), unit: reference.unit.clone(), ..grid.clone() })
}

/// The output's name in the folder of a plane.
fn beside(folder: Option<&Path>, output: &Path) -> Option<PathBuf> {
    Some(folder?.join(output.file_name()?))
}

/// The input's own name; with .tif where its format is only read.
fn output_name(path: &Path, quiet: bool) -> Result<PathBuf> {
    let name = path
        .file_name()
        .ok_or_else(|| Error::usage(format!("{} is no file", path.display()), "name a raster file"))?;
    let name = PathBuf::from(name);
    let ending = name.extension().map(|e| e.to_string_lossy().to_lowercase()).unwrap_or_default();
    if matches!(ending.as_str(), "tif" | "tiff" | "btf" | "gtiff" | "npy" | "png" | "fits" | "fit" | "fts") {
        return Ok(name);
    }
    let instead = name.with_extension("tif");
    if !quiet {
        say(&[format!("note: {} becomes {}: this format is only read", name.display(), instead.display())]);
    }
    Ok(instead)
}
