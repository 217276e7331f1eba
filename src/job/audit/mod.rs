//! An audit: a raster and its resampling, whoever did it, measured against each other.

mod clipping;
mod read;
mod sums;
mod tiles;

use super::Progress;
use crate::error::{Error, Result};
use crate::map::Map;
use crate::raster::{self, Header, MissingCodes, Source};
use crate::report::{
    Audit, AuditPixels, Centroid, Check, DisplacementField, Flux, MeasuredBlur, MeasuredDisplacement,
    MeasuredTransfer, RasterEntry, Relation, Spectrum, Time, peak_memory_bytes,
};
use read::{Bringer, Side, survey};
use serde::{Deserialize, Serialize};
use std::path::{Path, PathBuf};
use std::time::Instant;
use sums::Pass;
use tiles::Tiling;

/// What a number is, for an audit.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum AuditValues {
    /// A value per place.
    #[default]
    Density,
    /// A sum over the pixel.
    Total,
}

/// The default bound on displacement, input pixels.
pub const MAX_DISPLACEMENT: f64 = 0.1;

/// The choices of an audit. [`AuditRules::default`] gives the documented defaults.
#[derive(Clone, Debug, PartialEq)]
pub struct AuditRules {
    /// Default density.
    pub values: AuditValues,
    /// A code that means "no data", beside NaN and what the files declare.
    pub missing: Option<f64>,
    /// Bound on |closure|; `None`: not checked.
    pub tolerance: Option<f64>,
    /// Bound on the largest displacement, input pixels; `None`: [`MAX_DISPLACEMENT`], which is not held against rasters
    /// without texture.
    pub max_displacement: Option<f64>,
    /// Least mtf50, cycles per input pixel; `None`: not checked.
    pub min_mtf50: Option<f64>,
    /// The band to look at, counted from 0; `None`: all for signal, gaps and clipping, the first for the rest.
    pub band: Option<usize>,
    /// Bytes that the run may use at its peak; default 512 MiB.
    pub memory: u64,
}

impl Default for AuditRules {
    fn default() -> Self {
        AuditRules {
            values: AuditValues::Density,
            missing: None,
            tolerance: None,
            max_displacement: None,
            min_mtf50: None,
            band: None,
            memory: 512 << 20,
        }
    }
}

impl AuditRules {
    /// Refuses numbers out of range.
    ///
    /// # Errors
    /// Names the option.
    pub fn check(&self) -> Result<()> {
        for (name, bound, such) in [
            ("--tolerance", self.tolerance, "1e-3"),
            ("--max-displacement", self.max_displacement, "0.05"),
            ("--min-mtf50", self.min_mtf50, "0.3"),
        ] {
            if bound.is_some_and(|b| !(b >= 0.0)) {
                return Err(Error::usage(format!("{name} must not be negative"), format!("such as {such}")));
            }
        }
        if self.memory < 16 << 20 {
            return Err(Error::usage(
                format!("--memory of {} bytes is too little to work in", self.memory),
                "give at least 16MiB",
            ));
        }
        Ok(())
    }
}

/// How AFTER's grid lies on BEFORE's where no map says so: by their worlds if both have one, else outer edges on outer edges.
///
/// # Errors
/// When the grids are in different reference systems, or a world affine has no inverse.
pub fn relate(before: (&Path, &Header), after: (&Path, &Header)) -> Result<Relation> {
    let (b, a) = (&before.1.grid, &after.1.grid);
    if b.world.is_some() && a.world.is_some() {
        a.check_same_crs(b, (&after.0.display().to_string(), &before.0.display().to_string()))?;
        return Ok(Relation { by: "world".into(), back: a.to(b)? });
    }
    // in = (out + 1/2) n / m - 1/2 along each axis.
    let axis = |n: usize, m: usize| {
        let step = n as f64 / m as f64;
        (step, 0.5 * (step - 1.0))
    };
    let back = Map::axes(axis(b.rows, a.rows), axis(b.columns, a.columns));
    Ok(Relation { by: "outer-edges".into(), back })
}

/// Audits two raster files. `paths` are BEFORE and AFTER; `relation` comes from [`relate`] or a map.
///
/// # Errors
/// When a file cannot be read, the rasters have nothing in common, or the memory does not suffice.
pub fn audit_files(
    paths: (&Path, &Path),
    relation: Relation,
    rules: &AuditRules,
    command: &[String],
    progress: &dyn Progress,
) -> Result<Audit> {
    let (before, after) = (raster::open(paths.0)?, raster::open(paths.1)?);
    let mut made = audit((before.as_ref(), paths.0), (after.as_ref(), paths.1), relation, rules, progress)?;
    made.command = command.to_vec();
    Ok(made)
}

/// Audits two rasters, each with the name it goes by.
///
/// # Errors
/// When a raster cannot be read, the two have nothing in common, or the memory does not suffice.
pub fn audit(
    before: (&dyn Source, &Path),
    after: (&dyn Source, &Path),
    relation: Relation,
    rules: &AuditRules,
    progress: &dyn Progress,
) -> Result<Audit> {
    let started = Instant::now();
    rules.check()?;
    let back = relation.back.checked(after.0.header().grid.rows, after.0.header().grid.columns)?;
    check_common(before.0.header(), after.0.header(), &back)?;
    let (b, a) = sides(before, after, rules)?;
    let pixels = |s: &Side| (s.size().0 * s.size().1) as u64;
    let total = pixels(&b) + 2 * pixels(&a);
    let mut done = 0;
    let (extremes_before, digest_before) = survey(&b, rules.memory, progress, &mut done, total)?;
    let (extremes_after, digest_after) = survey(&a, rules.memory, progress, &mut done, total)?;
    let pass = Pass {
        before: &b,
        after: &a,
        back,
        values: rules.values,
        memory: rules.memory,
        extremes: (&extremes_before, &extremes_after),
    };
    let mut sums = pass.run(progress, &mut done, total)?;
    let norm = |row: [f64; 2]| {
        let n = row[0].hypot(row[1]);
        if n > 1.0 + 1e-9 { n } else { 1.0 }
    };
    let j = back.jacobian((a.size().0 as f64 - 1.0) / 2.0, (a.size().1 as f64 - 1.0) / 2.0);
    let stretch = (norm(j[0]), norm(j[1]));
    let bringer = Bringer { before: &b, band: b.bands.start, back, memory: rules.memory, stretch };
    let tiling = Tiling::new(&a, a.bands.start, bringer, rules.values == AuditValues::Total);
    let displacement_field = tiling.displacement(progress)?;
    let spectra = tiling.spectra(displacement_field.field.as_ref(), progress)?;
    let nyquist = 0.5 / stretch.0.max(stretch.1);
    let (spectrum, aliasing) = match spectra {
        None => (None, None),
        Some((curve, aliasing, patches)) => {
            let sharpness = curve.sharpness();
            (Some(Spectrum { curve, sharpness, patches }), aliasing)
        }
    };
    let sharp = spectrum.as_ref().and_then(|s| s.sharpness.as_ref());
    let transfer = sharp.map_or([None; 3], |s| s.transfer);
    let blur = MeasuredBlur {
        transfer: MeasuredTransfer { at_010: transfer[0], at_025: transfer[1], at_040: transfer[2] },
        mtf50: sharp.map_or(nyquist, |s| s.mtf50),
    };
    let loss = sums.map.finish();
    let closure = sums.map.total_closure().filter(|c| c.is_finite());
    let [sum_before, _, sum_after] = sums.map.totals();
    let [centroid_before, centroid_after] = sums.centroids();
    let all = pixels(&a) * a.bands.len() as u64;
    let clipping = sums.clipping.clone();
    let checks = checks(rules, closure, |t| sums.closes(t), &displacement_field, sharp.map(|s| s.mtf50));
    let middle = displacement_field.field.map(|f| (f.at_centre, f.sigma));
    let seconds = started.elapsed().as_secs_f64();
    Ok(Audit {
        regauge: env!("CARGO_PKG_VERSION").to_owned(),
        command: Vec::new(),
        inputs: vec![entry(before, &digest_before), entry(after, &digest_after)],
        relation,
        values: match rules.values {
            AuditValues::Density => "density".into(),
            AuditValues::Total => "total".into(),
        },
        bands: b.bands.clone().map(|k| k + 1).collect(),
        band: b.bands.start + 1,
        pixels: AuditPixels {
            total: all,
            valid: sums.valid,
            missing: all - sums.valid,
            clipped_low: clipping.low,
            clipped_high: clipping.high,
            overshoot: clipping.above_range + clipping.below_range,
            near_gap: sums.gaps.near_gap,
        },
        flux: Flux {
            before: Some(sum_before).filter(|v| v.is_finite()),
            after: Some(sum_after).filter(|v| v.is_finite()),
            left_frame: None,
            rounding: None,
            closure,
            tolerance: rules.tolerance,
            closed: rules.tolerance.map(|t| sums.closes(t)),
            ..Flux::default()
        },
        centroid: Centroid { before: centroid_before, after: centroid_after },
        closure_map: sums.map,
        loss,
        displacement: MeasuredDisplacement {
            rows: middle.map(|m| m.0[0]),
            columns: middle.map(|m| m.0[1]),
            sigma: middle.map(|m| m.1),
            how: "correlation".into(),
        },
        displacement_field,
        blur,
        spectra: spectrum,
        aliasing,
        gaps: sums.gaps,
        clipping,
        checks,
        time: Time {
            seconds,
            megapixels_per_second: all as f64 / 1e6 / seconds.max(1e-9),
            peak_memory_bytes: peak_memory_bytes(),
        },
    })
}

fn entry((source, path): (&dyn Source, &Path), sha256: &str) -> RasterEntry {
    let header = source.header();
    RasterEntry {
        path: PathBuf::from(path),
        sha256: sha256.to_owned(),
        rows: header.grid.rows,
        columns: header.grid.columns,
        bands: header.bands,
        sample_type: header.sample_type,
        grid: header.grid.clone(),
    }
}

/// Refuses rasters that do not touch, and pixels beyond all measure.
fn check_common(before: &Header, after: &Header, back: &Map) -> Result<()> {
    let (n, m) = (after.grid.rows as f64, after.grid.columns as f64);
    let b = back.bounds((-0.5, n - 0.5), (-0.5, m - 0.5));
    let apart = |(low, high): (f64, f64), n: usize| !(high > -0.5 && low < n as f64 - 0.5);
    if apart(b.rows, before.grid.rows) || apart(b.columns, before.grid.columns) {
        return Err(Error::unfit(
            "BEFORE and AFTER have no region in common",
            "check their georeference, or give --map FILE",
        ));
    }
    Ok(())
}

/// Both sides with their codes and bands.
fn sides<'a>(
    before: (&'a dyn Source, &Path),
    after: (&'a dyn Source, &Path),
    rules: &AuditRules,
) -> Result<(Side<'a>, Side<'a>)> {
    let (hb, ha) = (before.0.header(), after.0.header());
    let bands = match rules.band {
        Some(b) => {
            let fewest = hb.bands.min(ha.bands);
            if b >= fewest {
                return Err(Error::usage(
                    format!("--band {}: the rasters have {} and {} bands", b + 1, hb.bands, ha.bands),
                    format!("give a band from 1 to {fewest}"),
                ));
            }
            b..b + 1
        }
        None if hb.bands != ha.bands => {
            return Err(Error::unfit(
                format!(
                    "{} has {} bands, {} has {}",
                    before.1.display(),
                    hb.bands,
                    after.1.display(),
                    ha.bands
                ),
                "name the band to compare with --band N",
            ));
        }
        None => 0..hb.bands,
    };
    // What BEFORE calls missing is missing in AFTER too: a resampling by others may have lost the declaration.
    let codes = |all: &[Option<f64>]| MissingCodes {
        codes: all.iter().flatten().copied().filter(|c| !c.is_nan()).collect(),
    };
    Ok((
        Side { source: before.0, codes: codes(&[hb.missing, rules.missing]), bands: bands.clone() },
        Side { source: after.0, codes: codes(&[ha.missing, hb.missing, rules.missing]), bands },
    ))
}

fn checks(
    rules: &AuditRules,
    closure: Option<f64>,
    closes: impl Fn(f64) -> bool,
    displacement: &DisplacementField,
    mtf50: Option<f64>,
) -> Vec<Check> {
    let mut out = Vec::new();
    if let Some(bound) = rules.tolerance {
        let held = Some(closes(bound));
        out.push(Check { name: "closure".into(), value: closure, bound, asked: true, held });
    }
    let asked = rules.max_displacement.is_some();
    let bound = rules.max_displacement.unwrap_or(MAX_DISPLACEMENT);
    // Where most tiles that could tell find nothing alike, content is anywhere but where it should be.
    let lost = displacement.unlike > displacement.voted;
    let value = displacement.largest.filter(|_| !lost);
    let held = value.map(|d| d <= bound).or((asked || lost).then_some(false));
    out.push(Check { name: "displacement".into(), value, bound, asked, held });
    if let Some(bound) = rules.min_mtf50 {
        let held = Some(mtf50.is_some_and(|m| m >= bound));
        out.push(Check { name: "mtf50".into(), value: mtf50, bound, asked: true, held });
    }
    out
}
