//! An invented survey: a peatland whose surface was measured in two years by two instruments.
//!
//! The place does not exist; its coordinates lie in open sea. Everything is a closed form of the world position, so
//! the truth is known everywhere, without a grid:
//!
//! - **Ground of year 1**, [`elevation`]: a gentle tilt, a raised dome and a lower one, a winding brook, parallel
//!   ditches and a dam across them, and hummocks: cosines of 12 to 60 m in hashed directions and phases. The narrowest
//!   things are Gaussian profiles with sigma 3 m, whose spectrum falls to 2e-5 at the limit of a 2 m grid.
//! - **Change**, [`true_change`], negative where the ground sank: between the ditches lie parcels, each of which sank
//!   by its own 5 to 40 cm or a tenth more (soft edges, 7 m from 12 to 88 %), the more the nearer to a ditch;
//!   the undrained bog sank by 1 cm; where ditches were blocked the peat swelled by up to 7 cm.
//! - **Year 2** is year 1 plus the change.
//!
//! An instrument sees the mean over the area of each of its pixels, with noise from integer hashing: the same survey
//! on every run. [`survey`] gives what both measured; the second has a gap where a cloud was.

use super::{normal, uniform};
use crate::error::{Error, Result};
use crate::grid::{Grid, Sampling, World};
use rayon::prelude::*;
use std::f64::consts::TAU;
use std::sync::OnceLock;

/// The coordinate reference system of the survey; metres.
pub const CRS: &str = "EPSG:32633";
/// World position of the middle of the place, in metres: (x, y).
pub const MIDDLE: (f64, f64) = (431_000.0, 8_185_000.0);
/// The code for a missing sample in year 2.
pub const MISSING: f32 = -9999.0;

/// The most pixels on which the truth is worked out at once.
pub const MAX_PIXELS: usize = 1 << 26;

/// Direction of the ditches, counter-clockwise from east, in radians.
const DITCHES: f64 = 0.42;
/// From ditch to ditch, and the length of a parcel along them, in metres.
const PARCEL: (f64, f64) = (64.0, 118.0);
/// Streams of the hash, one for each use.
const STREAM_WAVES: u64 = 0x51;
const STREAM_PARCELS: u64 = 0x52;
const STREAM_STRIPS: u64 = 0x53;
const STREAM_NOISE_1: u64 = 0x61;
const STREAM_NOISE_2: u64 = 0x62;

/// What one instrument measured in one year.
#[derive(Clone, Debug, PartialEq)]
pub struct Measurement {
    /// Where the samples lie; area samples.
    pub grid: Grid,
    /// Elevation in metres, rows x columns.
    pub samples: Vec<f32>,
    /// The code that means no data, if there is any.
    pub missing: Option<f32>,
    /// Standard deviation of the noise of a sample, in metres.
    pub sigma: f64,
}

/// Both years.
#[derive(Clone, Debug, PartialEq)]
pub struct Survey {
    /// 240 x 300 pixels of 2 m, north up, sigma 0.010 m.
    pub year_1: Measurement,
    /// 360 x 420 pixels of 1.5 m, turned by 6.5 degrees counter-clockwise, sigma 0.015 m, with a gap.
    pub year_2: Measurement,
}

/// The survey, the same on every call.
pub fn survey() -> Survey {
    let grid_1 = grid(240, 300, 2.0, 0.0, (0.0, 0.0));
    let grid_2 = grid(360, 420, 1.5, 6.5, (7.0, -4.0));
    let year_1 = measured(&grid_1, 0.010, STREAM_NOISE_1, elevation);
    let mut year_2 = measured(&grid_2, 0.015, STREAM_NOISE_2, |x, y| elevation(x, y) + true_change(x, y));
    let world = grid_2.world.unwrap_or_default();
    for (i, sample) in year_2.iter_mut().enumerate() {
        let (x, y) = position(&world, (i / grid_2.columns) as f64, (i % grid_2.columns) as f64);
        if under_cloud(x, y) {
            *sample = MISSING;
        }
    }
    Survey {
        year_1: Measurement { grid: grid_1, samples: year_1, missing: None, sigma: 0.010 },
        year_2: Measurement { grid: grid_2, samples: year_2, missing: Some(MISSING), sigma: 0.015 },
    }
}

/// Elevation of the ground in year 1, in metres, at a world position.
pub fn elevation(x: f64, y: f64) -> f64 {
    let (e, n) = (x - MIDDLE.0, y - MIDDLE.1);
    let tilt = 14.0 + 0.0016 * e - 0.0011 * n;
    let domes = 2.7 * bell(e + 165.0, 150.0) * bell(n - 95.0, 125.0)
        + 0.8 * bell(e - 190.0, 110.0) * bell(n - 150.0, 90.0);
    let brook = -1.15 * bell(brook_distance(e, n), 9.0) - 0.55 * bell(brook_distance(e, n), 34.0);
    let (along, across) = ditch_axes(e, n);
    // Ditches stop short of the brook and where nothing was drained.
    let ditches = -0.62 * ditch_profile(across) * drained(e, n) * (1.0 - bell(brook_distance(e, n), 30.0));
    let dam = 0.55 * bell(along + 34.0, 4.0) * drained(e, n);
    tilt + domes + brook + ditches + dam + hummocks(e, n)
}

/// Change of elevation from year 1 to year 2, in metres, at a world position; negative where the ground sank.
pub fn true_change(x: f64, y: f64) -> f64 {
    let (e, n) = (x - MIDDLE.0, y - MIDDLE.1);
    let (along, across) = ditch_axes(e, n);
    // Near a ditch the peat dries deeper; sigma 11 m leaves the middle of a parcel nearly alone.
    let near_ditch = bell(to_ditch(across), 11.0);
    let sank = 0.012 + drained(e, n) * parcels(along, across) * (0.88 + 0.24 * near_ditch);
    0.072 * rewetted(e, n) - sank * (1.0 - rewetted(e, n))
}

/// The true change as an instrument with this grid would see it: the mean over each pixel's area, or the value at its
/// centre for point samples. Metres, rows x columns.
///
/// # Errors
/// When the grid has no place in the world, or more than [`MAX_PIXELS`] pixels.
pub fn true_change_on(grid: &Grid) -> Result<Vec<f64>> {
    let world = grid.world.ok_or_else(|| {
        Error::usage(
            "the true change is known by world position, and the grid has none",
            "give the grid its world affine",
        )
    })?;
    if grid.rows.checked_mul(grid.columns).is_none_or(|n| n > MAX_PIXELS) {
        return Err(Error::Limit {
            what: "the true change on a grid".into(),
            needed: format!("{} x {} pixels", grid.rows, grid.columns),
            limit: format!("{MAX_PIXELS} pixels"),
            mend: "give a smaller grid: the place is 0.6 km wide".into(),
        });
    }
    Ok(means(grid, &world, true_change))
}

/// Whether the cloud hid a world position in year 2: two blobs whose radius waves with the direction.
pub fn under_cloud(x: f64, y: f64) -> bool {
    let (e, n) = (x - MIDDLE.0, y - MIDDLE.1);
    [(128.0, -62.0, 62.0, 0.4), (52.0, -112.0, 30.0, 2.1)].iter().any(|&(e0, n0, radius, phase)| {
        let (de, dn) = (e - e0, n - n0);
        let turn = dn.atan2(de);
        let waves = 0.20 * (2.0 * turn + phase).cos()
            + 0.13 * (3.0 * turn - 2.0 * phase).cos()
            + 0.08 * (5.0 * turn + 3.0 * phase).cos()
            + 0.05 * (9.0 * turn + phase).cos();
        de.hypot(dn) < radius * (1.0 + waves)
    })
}

/// A Gaussian profile, 1 at 0.
fn bell(distance: f64, sigma: f64) -> f64 {
    let t = distance / sigma;
    (-0.5 * t * t).exp()
}

/// A soft step from 0 to 1 about 0; `softness` is the distance from 50 to 88 %.
fn step(distance: f64, softness: f64) -> f64 {
    0.5 + 0.5 * (distance / softness).tanh()
}

/// Distance from the brook's line, near enough to the shortest where it winds gently.
fn brook_distance(e: f64, n: f64) -> f64 {
    n + 172.0 - 22.0 * (e / 74.0 + 0.6).sin() - 9.0 * (e / 31.0).sin() - 0.10 * e
}

/// Position along and across the ditches.
fn ditch_axes(e: f64, n: f64) -> (f64, f64) {
    let (sin, cos) = DITCHES.sin_cos();
    (e * cos + n * sin, n * cos - e * sin)
}

/// Signed distance across to the nearest ditch.
fn to_ditch(across: f64) -> f64 {
    across - (across / PARCEL.0).round() * PARCEL.0
}

/// A ditch: 1 on its line, 7 m wide at half its depth.
fn ditch_profile(across: f64) -> f64 {
    bell(to_ditch(across), 3.0)
}

/// How far a place was drained: 1 south and east of a soft line, 0 on the raised dome.
fn drained(e: f64, n: f64) -> f64 {
    let dome = ((e + 185.0) / 150.0).hypot((n - 120.0) / 128.0);
    step((dome - 1.0) * 130.0, 14.0)
}

/// Where ditches were blocked and the peat swelled again: an ellipse in the east.
fn rewetted(e: f64, n: f64) -> f64 {
    let ellipse = ((e - 205.0) / 66.0).hypot((n - 118.0) / 74.0);
    step((1.0 - ellipse) * 68.0, 12.0)
}

/// Subsidence of the parcels in metres: each its own, 0.05 to 0.40, with soft edges. The soft boxes of all parcels
/// add up to 1 everywhere, so between two equal parcels there is no seam.
fn parcels(along: f64, across: f64) -> f64 {
    let row = (across / PARCEL.0 - 0.5).round();
    let mut sum = 0.0;
    for j in -1..=1 {
        let strip = row + f64::from(j);
        let low = strip * PARCEL.0;
        let weight = step(across - low, 3.5) - step(across - low - PARCEL.0, 3.5);
        // Each strip is set off by its own length: fields do not line up across ditches.
        let shift = uniform(STREAM_STRIPS, strip as i64 as u64);
        let field = (along / PARCEL.1 - shift - 0.5).round();
        for i in -1..=1 {
            let left = field + f64::from(i);
            let from = (left + shift) * PARCEL.1;
            let share = step(along - from, 3.5) - step(along - from - PARCEL.1, 3.5);
            sum += weight * share * parcel_sank(strip as i64, left as i64);
        }
    }
    sum
}

/// Subsidence of one parcel in metres, 0.05 to 0.40.
fn parcel_sank(strip: i64, field: i64) -> f64 {
    // Far outside the place the numbers wrap; they stay the same on every call.
    let counter = (strip as u64).wrapping_mul(1 << 20).wrapping_add(field as u64);
    0.05 + 0.35 * uniform(STREAM_PARCELS, counter)
}

/// Number of the hummocks' cosines.
const WAVES: usize = 40;

/// Hummocks and hollows: cosines with wavelengths from 12 to 60 m, the longer the higher.
fn hummocks(e: f64, n: f64) -> f64 {
    // Wave numbers east and north (radians a metre), phase, amplitude (m); fixed by the hash.
    static TABLE: OnceLock<[[f64; 4]; WAVES]> = OnceLock::new();
    let table = TABLE.get_or_init(|| {
        std::array::from_fn(|i| {
            let draw = |k: u64| uniform(STREAM_WAVES, 4 * i as u64 + k);
            let length = 12.0 * 5f64.powf((i as f64 + draw(0)) / WAVES as f64);
            let (sin, cos) = (TAU * draw(1)).sin_cos();
            [TAU / length * cos, TAU / length * sin, TAU * draw(2), 0.0055 * (length / 12.0).powf(0.75)]
        })
    });
    table.iter().map(|[ke, kn, phase, height]| height * (ke * e + kn * n + phase).cos()).sum()
}

/// A grid of square pixels about a point near [`MIDDLE`], turned counter-clockwise by `degrees`.
fn grid(rows: usize, columns: usize, pixel: f64, degrees: f64, offset: (f64, f64)) -> Grid {
    // Not turned means not turned: no rounding of a cosine in the affine.
    let (sin, cos) = if degrees == 0.0 { (0.0, 1.0) } else { degrees.to_radians().sin_cos() };
    let (right, down) = ((pixel * cos, pixel * sin), (pixel * sin, -pixel * cos));
    let (c, r) = (0.5 * (columns as f64 - 1.0), 0.5 * (rows as f64 - 1.0));
    let origin =
        (MIDDLE.0 + offset.0 - c * right.0 - r * down.0, MIDDLE.1 + offset.1 - c * right.1 - r * down.1);
    Grid {
        rows,
        columns,
        world: Some([[right.0, down.0, origin.0], [right.1, down.1, origin.1]]),
        sample: Sampling::Area,
        unit: None,
        crs: Some(CRS.to_owned()),
    }
}

/// World position of a pixel position.
fn position(world: &World, row: f64, column: f64) -> (f64, f64) {
    let [[a, b, c], [d, e, f]] = world;
    (a * column + b * row + c, d * column + e * row + f)
}

/// Area means with noise, as stored.
fn measured(grid: &Grid, sigma: f64, stream: u64, ground: impl Fn(f64, f64) -> f64 + Sync) -> Vec<f32> {
    let world = grid.world.unwrap_or_default();
    means(grid, &world, ground)
        .iter()
        .enumerate()
        .map(|(i, mean)| (mean + sigma * normal(stream, i as u64)) as f32)
        .collect()
}

/// Nodes and weights of Gauss and Legendre's rule of three points on -1/2 to 1/2 (Abramowitz and Stegun, table 25.4).
const NODES: [(f64, f64); 3] =
    [(-0.387_298_334_620_741_7, 5.0 / 18.0), (0.0, 8.0 / 18.0), (0.387_298_334_620_741_7, 5.0 / 18.0)];

/// Means of a closed form over the pixels of a grid, by 3 x 3 Gauss points on each 2 m of a pixel; values at the
/// centres for point samples.
fn means(grid: &Grid, world: &World, form: impl Fn(f64, f64) -> f64 + Sync) -> Vec<f64> {
    let [[a, b, _], [d, e, _]] = world;
    // Pixels of more than 128 m get no more than 64 pieces a side: nothing in the place is seen at that size.
    let pieces = |size: f64| (size / 2.0 - 1e-9).ceil().clamp(1.0, 64.0) as usize;
    let (down, right) = (pieces(b.hypot(*e)), pieces(a.hypot(*d)));
    let along = |pieces: usize| -> Vec<(f64, f64)> {
        if grid.sample == Sampling::Point {
            return vec![(0.0, 1.0)];
        }
        let n = pieces as f64;
        (0..pieces)
            .flat_map(|i| NODES.map(|(node, weight)| ((i as f64 + 0.5 + node) / n - 0.5, weight / n)))
            .collect()
    };
    let (rows, columns) = (along(down), along(right));
    (0..grid.rows * grid.columns)
        .into_par_iter()
        .map(|i| {
            let (row, column) = ((i / grid.columns) as f64, (i % grid.columns) as f64);
            let mut mean = 0.0;
            for (dr, wr) in &rows {
                for (dc, wc) in &columns {
                    let (x, y) = position(world, row + dr, column + dc);
                    mean += wr * wc * form(x, y);
                }
            }
            mean
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Worked out once for all tests.
    fn shared() -> &'static Survey {
        static SURVEY: OnceLock<Survey> = OnceLock::new();
        SURVEY.get_or_init(survey)
    }

    /// Mean over a pixel by n x n midpoints: slow, and right in the limit.
    fn brute(world: &World, row: f64, column: f64, n: usize, form: fn(f64, f64) -> f64) -> f64 {
        let mut sum = 0.0;
        for i in 0..n * n {
            let (dr, dc) = (((i / n) as f64 + 0.5) / n as f64 - 0.5, ((i % n) as f64 + 0.5) / n as f64 - 0.5);
            let (x, y) = position(world, row + dr, column + dc);
            sum += form(x, y);
        }
        sum / (n * n) as f64
    }

    #[test]
    fn area_means_agree_with_brute_force() {
        // 9.1 x 5.3 m pixels, turned: several pieces a side.
        let coarse = Grid {
            rows: 11,
            columns: 13,
            world: Some([[5.2, 3.1, MIDDLE.0 - 60.0], [1.0, -8.5, MIDDLE.1 + 30.0]]),
            ..grid(1, 1, 1.0, 0.0, (0.0, 0.0))
        };
        for grid in [coarse, grid(23, 19, 2.0, 0.0, (40.0, -30.0)), grid(21, 25, 1.5, 6.5, (-9.0, 33.0))] {
            let world = grid.world.unwrap();
            for form in [elevation as fn(f64, f64) -> f64, true_change] {
                let got = means(&grid, &world, form);
                for i in (0..got.len()).step_by(17) {
                    let (row, column) = ((i / grid.columns) as f64, (i % grid.columns) as f64);
                    let wanted = brute(&world, row, column, 48, form);
                    assert!((got[i] - wanted).abs() < 6e-5, "{i}: {} {wanted}", got[i]);
                }
            }
        }
    }

    #[test]
    fn means_are_not_centres_and_points_are() {
        let area = grid(40, 40, 2.0, 0.0, (31.0, -17.0));
        let point = Grid { sample: Sampling::Point, ..area.clone() };
        let (means, centres) = (true_change_on(&area).unwrap(), true_change_on(&point).unwrap());
        let world = area.world.unwrap();
        for i in [0, 39, 777, 1599] {
            let (x, y) = position(&world, (i / 40) as f64, (i % 40) as f64);
            assert_eq!(centres[i], true_change(x, y));
        }
        assert!(means.iter().zip(&centres).any(|(m, c)| (m - c).abs() > 1e-4));
        assert!(true_change_on(&Grid { world: None, ..area }).is_err());
    }

    #[test]
    fn the_survey_is_as_described() {
        let survey = shared();
        let (one, two) = (&survey.year_1, &survey.year_2);
        assert_eq!((one.grid.rows, one.grid.columns, one.samples.len()), (240, 300, 72_000));
        assert_eq!((two.grid.rows, two.grid.columns, two.samples.len()), (360, 420, 151_200));
        assert_eq!(one.grid.world, Some([[2.0, 0.0, 430_701.0], [0.0, -2.0, 8_185_239.0]]));
        // Turned by 6.5 degrees: the columns' axis rises to the north; square pixels of 1.5 m.
        let [[a, b, _], [d, e, _]] = two.grid.world.unwrap();
        assert!((d.atan2(a).to_degrees() - 6.5).abs() < 1e-12 && (a * e - b * d + 2.25).abs() < 1e-12);
        assert!((a * b + d * e).abs() < 1e-12);
        let gone = two.samples.iter().filter(|v| **v == MISSING).count() as f64 / 151_200.0;
        assert!((0.02..0.08).contains(&gone), "{gone}");
        assert!(one.samples.iter().chain(&two.samples).all(|v| *v == MISSING || (8.0..22.0).contains(v)));
    }

    #[test]
    fn the_second_grid_covers_most_of_the_first_but_not_all() {
        let survey = shared();
        let (one, two) = (&survey.year_1.grid, &survey.year_2.grid);
        let [[a, b, c], [d, e, f]] = two.world.unwrap();
        let area = a * e - b * d;
        let covered = (0..72_000)
            .filter(|i| {
                let (x, y) = position(&one.world.unwrap(), (i / 300) as f64, (i % 300) as f64);
                let (x, y) = (x - c, y - f);
                let (column, row) = ((x * e - b * y) / area, (a * y - d * x) / area);
                (-0.5..=419.5).contains(&column) && (-0.5..=359.5).contains(&row)
            })
            .count() as f64
            / 72_000.0;
        assert!((0.95..1.0).contains(&covered), "{covered}");
    }

    #[test]
    fn noise_has_its_sigma_and_both_years_their_own() {
        let survey = shared();
        for (measured, form, sigma) in [
            (&survey.year_1, elevation as fn(f64, f64) -> f64, 0.010),
            (&survey.year_2, |x: f64, y: f64| elevation(x, y) + true_change(x, y), 0.015),
        ] {
            let world = measured.grid.world.unwrap();
            let truth = means(&measured.grid, &world, form);
            let off: Vec<f64> = measured
                .samples
                .iter()
                .zip(&truth)
                .filter(|(v, _)| **v != MISSING)
                .map(|(v, t)| f64::from(*v) - t)
                .collect();
            let n = off.len() as f64;
            let mean = off.iter().sum::<f64>() / n;
            let deviation = (off.iter().map(|v| v * v).sum::<f64>() / n).sqrt();
            assert!(mean.abs() < 4.0 * sigma / n.sqrt(), "{mean}");
            assert!((deviation / sigma - 1.0).abs() < 0.015, "{deviation}");
        }
    }

    #[test]
    fn the_change_is_plausible() {
        let change = true_change_on(&shared().year_1.grid).unwrap();
        let (low, high) =
            change.iter().fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), v| (l.min(*v), h.max(*v)));
        assert!((-0.48..-0.33).contains(&low) && (0.04..0.08).contains(&high), "{low} {high}");
        let share = |test: &dyn Fn(f64) -> bool| {
            change.iter().filter(|v| test(**v)).count() as f64 / change.len() as f64
        };
        assert!(share(&|v| v < -0.05) > 0.4 && share(&|v| v > 0.02) > 0.02, "{}", share(&|v| v > 0.02));
        assert!(share(&|v| v.abs() < 0.03) > 0.1);
    }

    #[test]
    fn smooth_enough_for_the_grids() {
        // Second differences over 1 m bound the curvature; a jump or a crease anywhere would show.
        for i in 0..6000 {
            let (x, y) = (MIDDLE.0 + 580.0 * (uniform(1, i) - 0.5), MIDDLE.1 + 460.0 * (uniform(2, i) - 0.5));
            for form in [elevation as fn(f64, f64) -> f64, true_change] {
                let bend = form(x - 1.0, y) - 2.0 * form(x, y) + form(x + 1.0, y);
                assert!(bend.abs() < 0.1, "{x} {y}: {bend}");
            }
        }
    }

    #[test]
    fn the_same_on_every_call_and_any_number_of_threads() {
        let first = shared();
        let pool = rayon::ThreadPoolBuilder::new().num_threads(1).build().unwrap();
        assert_eq!(*first, pool.install(survey));
    }
}
