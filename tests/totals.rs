//! Totals: counts are kept whatever the kernel and the map.
#![allow(clippy::unwrap_used)]

mod common;

use common::{Memory, make, values, worst};
use regauge::grid::Grid;
use regauge::map::{Anchor, Frame, Map, Motion, Rescale, moved, polygon, rescaled};
use regauge::raster::SampleType;
use regauge::resample::{Outside, Plan, Rules, Shifted, Values};

const KERNELS: [&str; 6] = ["linear", "keys", "bspline:3", "bspline:5", "lanczos:3", "area"];

fn rules(kernel: &str) -> Rules {
    Rules { kernel: kernel.parse().unwrap(), values: Values::Total, ..Rules::default() }
}

/// Runs totals: the output and what happened beside it.
fn run(
    source: &Memory,
    target: (usize, usize),
    back: &Map,
    rules: &Rules,
    side: Option<usize>,
) -> (Vec<f64>, Shifted) {
    let made = make(source, target, back, rules, None, side);
    (made.values, made.shifted)
}

/// Compensated sum of what is there.
fn total(v: &[f64]) -> f64 {
    v.iter().copied().filter(|v| !v.is_nan()).collect::<regauge::measure::Sum>().value()
}

/// Counts of a star field: Gaussian stars on a background with noise, some of it negative.
fn stars(rows: usize, columns: usize) -> Vec<f64> {
    let noise = values(rows * columns, 5);
    let places = values(60, 9);
    (0..rows * columns)
        .map(|i| {
            let (r, c) = ((i / columns) as f64, (i % columns) as f64);
            let of_stars: f64 = places
                .chunks_exact(3)
                .map(|p| {
                    let (y, x) = ((p[0] + 1.0) * 0.5 * rows as f64, (p[1] + 1.0) * 0.5 * columns as f64);
                    let d = (r - y).powi(2) + (c - x).powi(2);
                    4000.0 * (p[2] + 1.1) * (-d / (2.0 * 1.3 * 1.3)).exp()
                })
                .sum();
            of_stars + 20.0 + 30.0 * noise[i]
        })
        .collect()
}

fn motions(rows: usize, columns: usize) -> Vec<(String, Grid, Map)> {
    let grid = Grid::new(rows, columns);
    let mut all = Vec::new();
    for (r, c) in [(0.37, 0.37), (1.7, 1.7), (0.9, 1.3)] {
        let (g, back) = rescaled(&grid, Rescale::Factor(r, c), Anchor::Edge).unwrap();
        all.push((format!("rescale {r},{c}"), g, back));
    }
    for shift in [(0.37, -1.25), (-40.5, 3.0), (2.0, -3.0)] {
        let motion = Motion { shift, ..Motion::about_centre(rows, columns) }.map().unwrap();
        for frame in [Frame::Keep, Frame::Fit] {
            let (g, back) = moved(&grid, &motion, frame).unwrap();
            all.push((format!("shift {shift:?} {frame:?}"), g, back));
        }
    }
    for turn in [17.3, -38.0, 140.0] {
        let motion = Motion { turn, scale: 0.8, ..Motion::about_centre(rows, columns) }.map().unwrap();
        for frame in [Frame::Keep, Frame::Fit] {
            let (g, back) = moved(&grid, &motion, frame).unwrap();
            all.push((format!("turn {turn} {frame:?}"), g, back));
        }
    }
    all
}

#[test]
fn totals_close_for_every_kernel_and_map() {
    let (rows, columns) = (61, 83);
    let source = Memory::new(rows, columns, stars(rows, columns), SampleType::F64);
    let before = total(&source.values);
    let scale: f64 = source.values.iter().map(|v| v.abs()).sum();
    for kernel in KERNELS {
        let rules = rules(kernel);
        for (name, grid, back) in motions(rows, columns) {
            let fits = name.contains("Fit");
            let (grid, back) =
                if fits { Plan::fit((rows, columns), grid, back, &rules).unwrap() } else { (grid, back) };
            let (out, beside) = run(&source, (grid.rows, grid.columns), &back, &rules, None);
            let closure = (total(&out) + beside.left_frame.value() - before) / scale;
            assert!(closure.abs() < 1e-12, "{kernel}, {name}: closure {closure:e}");
            if fits {
                assert!(
                    beside.left_frame.value().abs() <= 1e-12 * scale,
                    "{kernel}, {name} leaves something"
                );
                let alone = (total(&out) - before) / scale;
                assert!(alone.abs() < 1e-12, "{kernel}, {name}: {alone:e} without what left");
            }
            // The same bits however the output is cut.
            let (cut, again) = run(&source, (grid.rows, grid.columns), &back, &rules, Some(23));
            assert!(
                out.iter().zip(&cut).all(|(a, b)| a.to_bits() == b.to_bits() || (a.is_nan() && b.is_nan())),
                "{kernel}, {name}: cut"
            );
            assert!((beside.left_frame.value() - again.left_frame.value()).abs() <= 1e-12 * scale);
        }
    }
}

#[test]
fn limits_hold_and_the_sum_stays() {
    let size = (60, 70);
    // Faint sharp stars on nothing: splines undershoot around each.
    let v: Vec<f64> =
        values(size.0 * size.1, 3).iter().map(|v| if *v > 0.985 { 500.0 * v } else { 0.0 }).collect();
    let source = Memory::new(size.0, size.1, v, SampleType::F64);
    let before = total(&source.values);
    let turn = Motion { turn: 17.3, ..Motion::about_centre(size.0, size.1) }.map().unwrap().invert().unwrap();
    for (back, target) in [
        (Map::axes((1.0, 0.4), (1.0, -0.3)), size),
        (Map::axes((0.6, -0.2), (0.7, 0.1)), (99, 99)),
        (turn, size),
    ] {
        let free = rules("bspline:3");
        let (out, _) = run(&source, target, &back, &free, None);
        let least = out.iter().copied().fold(0.0, f64::min);
        assert!(least < -1.0, "nothing to limit: {least}");
        let held = Rules { limit: regauge::resample::Limit::Neighbours, ..free };
        let (out, b) = run(&source, target, &back, &held, None);
        let closure = (total(&out) + b.left_frame.value() - before) / before;
        assert!(closure.abs() < 1e-12, "{closure:e}");
        assert!(b.moved.value() > 1.0 && b.limited > 10);
        let least_held = out.iter().copied().fold(0.0, f64::min);
        assert!(
            least_held > 0.03 * least,
            "{least_held} of {least}, {:?} beyond, {:?} moved",
            b.beyond_limits,
            b.moved
        );
        let (cut, again) = run(&source, target, &back, &held, Some(17));
        assert!(out.iter().zip(&cut).all(|(a, b)| a.to_bits() == b.to_bits() || (a.is_nan() && b.is_nan())));
        assert!((b.moved.value() / again.moved.value() - 1.0).abs() < 1e-12);
        assert_eq!(b.limited, again.limited);
    }
    // Densities are cut at the range of the samples around.
    let held =
        Rules { values: Values::Density, limit: regauge::resample::Limit::Neighbours, ..rules("bspline:5") };
    let (out, b) = run(&source, size, &Map::shift(0.4, -0.3), &held, None);
    assert!(out.iter().filter(|v| !v.is_nan()).all(|v| *v >= 0.0) && b.limited > 10);
}

#[test]
fn every_kernel_closes() {
    let (rows, columns) = (23, 31);
    let source = Memory::new(rows, columns, stars(rows, columns), SampleType::F64);
    let (before, scale) = (total(&source.values), source.values.iter().map(|v| v.abs()).sum::<f64>());
    let projective = Map { matrix: [[1.1, 0.05, -1.0], [-0.04, 0.9, 2.0], [0.002, -0.001, 1.0]] };
    for kernel in [
        "nearest",
        "linear",
        "keys",
        "keys:-0.75",
        "bc-spline:1,0",
        "bc-spline:0.33,0.33",
        "lanczos:2",
        "lanczos:8",
        "kaiser:8,6",
        "hann:6",
        "keys6",
        "quintic",
        "septic",
        "lagrange:2",
        "lagrange:5",
        "lagrange:12",
        "bspline:0",
        "bspline:1",
        "bspline:2",
        "bspline:4",
        "bspline:7",
        "bspline:9",
        "omoms:3",
        "omoms:5",
        "shifted-linear",
        "sinc",
        "polynomial",
        "area",
    ] {
        let rules = rules(kernel);
        let turn =
            Motion { turn: 20.0, ..Motion::about_centre(rows, columns) }.map().unwrap().invert().unwrap();
        let mirrored = Map::axes((-1.3, 24.1), (0.7, 3.3));
        for back in [Map::axes((0.7, 0.2), (1.9, -3.0)), mirrored, turn, projective] {
            let (out, beside) = run(&source, (28, 25), &back, &rules, None);
            // The one polynomial swings far beyond the samples: its rounding is that of its swings.
            let swing: f64 = out.iter().filter(|v| !v.is_nan()).map(|v| v.abs()).sum();
            let closure = (total(&out) + beside.left_frame.value() - before) / scale.max(swing);
            assert!(closure.abs() < 1e-12, "{kernel} under {back:?}: {closure:e}");
        }
    }
}

/// Cells at least `reach` input pixels from the raster's edge.
fn inner(back: &Map, size: (usize, usize), reach: f64, r: usize, c: usize) -> bool {
    let corners = [(-0.5, -0.5), (-0.5, 0.5), (0.5, 0.5), (0.5, -0.5)];
    corners.iter().all(|(dr, dc)| {
        let (x, y) = back.apply(r as f64 + dr, c as f64 + dc);
        x > reach && y > reach && x < size.0 as f64 - 1.0 - reach && y < size.1 as f64 - 1.0 - reach
    })
}

#[test]
fn flat_counts_stay_flat() {
    let size = (130, 120);
    let source = Memory::new(size.0, size.1, vec![7.0; size.0 * size.1], SampleType::F64);
    for kernel in KERNELS.iter().chain(&["kaiser:8,6", "keys:-0.75", "lanczos:2", "sinc"]) {
        let rules = rules(kernel);
        for (name, grid, back) in motions(size.0, size.1) {
            if name.contains("turn") && *kernel == "sinc" {
                // A turned outline rings through a sinc without end.
                continue;
            }
            let (out, _) = run(&source, (grid.rows, grid.columns), &back, &rules, None);
            // What rings from a turned outline has died away: |pole|^40 for bspline:5.
            let reach = if name.contains("turn") { 40.0 } else { -0.5 };
            let j = back.jacobian(0.0, 0.0);
            let flat = 7.0 * (j[0][0] * j[1][1] - j[0][1] * j[1][0]).abs();
            let mut seen = 0;
            for r in 0..grid.rows {
                for c in 0..grid.columns {
                    if inner(&back, size, reach, r, c) {
                        seen += 1;
                        let v = out[r * grid.columns + c];
                        assert!(
                            (v / flat - 1.0).abs() < 1e-10,
                            "{kernel}, {name} at {r},{c}: {v} for {flat}"
                        );
                    }
                }
            }
            assert!(seen > 300, "{name}: {seen}");
        }
    }
}

/// The counts of each output cell by clipping the image of every input pixel against the cell: written from the definition.
fn by_clipping(values: &[f64], size: (usize, usize), onward: &Map, target: (usize, usize)) -> Vec<f64> {
    let mut out = vec![0.0; target.0 * target.1];
    for i in 0..size.0 {
        for k in 0..size.1 {
            let image: Vec<(f64, f64)> = [(-0.5, -0.5), (-0.5, 0.5), (0.5, 0.5), (0.5, -0.5)]
                .iter()
                .map(|(r, c)| onward.apply(i as f64 + r, k as f64 + c))
                .collect();
            let whole = polygon::area(&image);
            let span = |pick: fn(&(f64, f64)) -> f64, n: usize| {
                let low = image.iter().map(pick).fold(f64::INFINITY, f64::min);
                let high = image.iter().map(pick).fold(f64::NEG_INFINITY, f64::max);
                (low.round().max(0.0) as usize)..((high.round() + 1.0).clamp(0.0, n as f64) as usize)
            };
            for r in span(|p| p.0, target.0) {
                for c in span(|p| p.1, target.1) {
                    let (r0, c0) = (r as f64, c as f64);
                    let (mut a, mut b) = (image.clone(), Vec::new());
                    polygon::clip(&a, |p| p.0 - r0 + 0.5, &mut b);
                    polygon::clip(&b, |p| r0 + 0.5 - p.0, &mut a);
                    polygon::clip(&a, |p| p.1 - c0 + 0.5, &mut b);
                    polygon::clip(&b, |p| c0 + 0.5 - p.1, &mut a);
                    out[r * target.1 + c] += values[i * size.1 + k] * polygon::area(&a) / whole;
                }
            }
        }
    }
    out
}

#[test]
fn linear_and_area_are_exact_overlap() {
    let size = (40, 47);
    let source = Memory::new(size.0, size.1, stars(size.0, size.1), SampleType::F64);
    let most = source.values.iter().fold(0.0f64, |m, v| m.max(v.abs()));
    for (name, grid, back) in motions(size.0, size.1) {
        let want = by_clipping(&source.values, size, &back.invert().unwrap(), (grid.rows, grid.columns));
        for kernel in ["linear", "area"] {
            if kernel == "linear" && name.contains("turn") {
                // Turned linear totals go through shears: another second-order scheme.
                continue;
            }
            let rules = Rules { outside: Outside::Extend, ..rules(kernel) };
            let (out, _) = run(&source, (grid.rows, grid.columns), &back, &rules, None);
            let worst = worst(&out, &want) / most;
            assert!(worst < 1e-12, "{kernel}, {name}: {worst:e}");
        }
    }
}

/// Flux, centre and mean second moment about it, of what is there.
fn moments(v: &[f64], columns: usize) -> (f64, (f64, f64), f64) {
    let sum = |f: &dyn Fn(f64, f64) -> f64| -> f64 {
        v.iter()
            .enumerate()
            .filter(|(_, v)| !v.is_nan())
            .map(|(i, v)| v * f((i / columns) as f64, (i % columns) as f64))
            .sum()
    };
    let flux = sum(&|_, _| 1.0);
    let centre = (sum(&|r, _| r) / flux, sum(&|_, c| c) / flux);
    let second = sum(&|r, c| (r - centre.0).powi(2) + (c - centre.1).powi(2)) / (2.0 * flux);
    (flux, centre, second)
}

#[test]
fn a_star_survives_twenty_four_turns() {
    let n = 101;
    let (y, x, sigma) = (50.0 + 7.3, 50.0 - 4.6, 2.0f64);
    let star: Vec<f64> = (0..n * n)
        .map(|i| {
            let d = ((i / n) as f64 - y).powi(2) + ((i % n) as f64 - x).powi(2);
            1e5 * (-d / (2.0 * sigma * sigma)).exp()
        })
        .collect();
    let before = moments(&star, n);
    let back = Motion { turn: 15.0, ..Motion::about_centre(n, n) }.map().unwrap().invert().unwrap();
    let turned = |kernel: &str| {
        let rules = Rules { outside: Outside::Extend, ..rules(kernel) };
        let (mut v, mut left) = (star.clone(), 0.0);
        for _ in 0..24 {
            let source = Memory::new(n, n, v, SampleType::F64);
            let (out, beside) = run(&source, (n, n), &back, &rules, None);
            left += beside.left_frame.value();
            v = out;
        }
        (moments(&v, n), left)
    };
    let ((flux, centre, second), left) = turned("bspline:5");
    assert!(((flux + left) / before.0 - 1.0).abs() < 1e-11, "flux {:e}", (flux + left) / before.0 - 1.0);
    assert!((flux / before.0 - 1.0).abs() < 1e-11, "flux in the frame {:e}", flux / before.0 - 1.0);
    assert!((centre.0 - before.1.0).hypot(centre.1 - before.1.1) < 1e-3, "{centre:?} for {:?}", before.1);
    let ((_, _, by_area), _) = turned("area");
    let (ours, theirs) = ((second - before.2).abs(), (by_area - before.2).abs());
    assert!(ours * 10.0 < theirs, "second moment off by {ours:e}, area overlap by {theirs:e}");
}

#[test]
fn gaps_in_totals_are_accounted_for() {
    let size = (40, 50);
    let mut v = stars(size.0, size.1);
    for i in [203, 204, 205, 254, 900, 1501] {
        v[i] = f64::NAN;
    }
    let source = Memory::new(size.0, size.1, v, SampleType::F64);
    let before = total(&source.values);
    let scale: f64 = source.values.iter().filter(|v| !v.is_nan()).map(|v| v.abs()).sum();
    for kernel in KERNELS {
        for (name, grid, back) in motions(size.0, size.1) {
            let (out, b) = run(&source, (grid.rows, grid.columns), &back, &rules(kernel), None);
            let after = total(&out) + b.left_frame.value() + b.dropped.value() - b.filled.value();
            assert!(
                ((after - before) / scale).abs() < 1e-12,
                "{kernel}, {name}: {:e}",
                (after - before) / scale
            );
        }
    }
    // Flat counts with gaps stay flat: what is there of a pixel stands for all of it.
    let flat: Vec<f64> = source.values.iter().map(|v| if v.is_nan() { *v } else { 3.0 }).collect();
    let source = Memory::new(size.0, size.1, flat, SampleType::F64);
    let back = Map::axes((0.6, -0.2), (1.7, 0.35));
    let (out, _) = run(&source, (60, 28), &back, &rules("bspline:3"), None);
    for (i, v) in out.iter().enumerate().filter(|(_, v)| !v.is_nan()) {
        assert!((v / (3.0 * 0.6 * 1.7) - 1.0).abs() < 1e-10, "{i}: {v}");
    }
}
