//! Labels and angles: what must never be mixed, and what must be mixed around the circle.
#![allow(clippy::unwrap_used)]

mod common;

use common::{Memory, run};
use regauge::grid::Grid;
use regauge::map::{Anchor, Map, Motion, Rescale, rescaled};
use regauge::raster::{MissingCodes, SampleType, Samples};
use regauge::resample::{Engine, Extras, Outside, Plan, Rules, Values};

fn labels(kernel: &str) -> Rules {
    Rules { kernel: kernel.parse().unwrap(), values: Values::Label, ..Rules::default() }
}

#[test]
fn labels_are_never_mixed() {
    let (rows, columns) = (37, 41);
    let classes = [3.0, 17.0, 200.0];
    let noise = common::values(rows * columns, 3);
    let v: Vec<f64> = (0..rows * columns)
        .map(|i| classes[((i / columns / 5 + i % columns / 7) + usize::from(noise[i] > 0.7)) % 3])
        .collect();
    let source = Memory::new(rows, columns, v, SampleType::U8);
    let turn = Motion { turn: 33.0, scale: 0.6, ..Motion::about_centre(rows, columns) }.map().unwrap();
    let maps = [
        Map::axes((0.4, -0.3), (0.7, 0.1)),
        Map::axes((2.3, 0.65), (3.1, 1.05)),
        turn.invert().unwrap(),
        Motion { turn: 12.0, ..Motion::about_centre(rows, columns) }.map().unwrap().invert().unwrap(),
        Map { matrix: [[1.1, 0.05, -1.0], [-0.04, 1.9, 2.0], [0.002, -0.001, 1.0]] },
    ];
    for kernel in ["nearest", "area"] {
        for outside in [Outside::Missing, Outside::Extend] {
            for back in maps {
                let rules = Rules { outside, missing: Some(0.0), ..labels(kernel) };
                let out = run_coded(&source, (30, 30), &back, &rules);
                let allowed = |v: &u8| *v == 0 || classes.contains(&f64::from(*v));
                assert!(out.iter().all(allowed), "{kernel} {back:?}: {out:?}");
                assert!(out.iter().filter(|v| **v != 0).count() > 50);
            }
        }
    }
    assert!(Plan::new((9, 9), (5, 5), &maps[0], &labels("bspline:3")).is_err());
}

/// u8 with 0 for missing.
fn run_coded(source: &Memory, target: (usize, usize), back: &Map, rules: &Rules) -> Vec<u8> {
    let size = (source.header.grid.rows, source.header.grid.columns);
    let engine = Engine {
        source,
        target,
        plan: Plan::new(size, target, back, rules).unwrap(),
        rules,
        codes: MissingCodes { codes: vec![0.0] },
        sample_type: SampleType::U8,
        fill: Some(0.0),
        extras: Extras::default(),
    };
    let mut out = Vec::new();
    engine
        .run(1, Some(64), &mut |block| {
            let Samples::U8(v) = &block.samples else { panic!() };
            out.extend_from_slice(v);
            Ok(())
        })
        .unwrap();
    out
}

#[test]
fn the_largest_share_wins_and_the_smallest_code_of_equal_ones() {
    #[rustfmt::skip]
    let v = vec![
        5.0, 5.0, 9.0, 9.0, 4.0, 2.0,
        5.0, 8.0, 9.0, 7.0, 2.0, 4.0,
    ];
    let source = Memory::new(2, 6, v, SampleType::F64);
    let (grid, back) = rescaled(&Grid::new(2, 6), Rescale::Size(1, 3), Anchor::Edge).unwrap();
    let out = run(&source, (grid.rows, grid.columns), &back, &labels("nearest"), None);
    assert_eq!(out, [5.0, 9.0, 2.0]);
    // Plain nearest when no reduction is asked for.
    let rules = Rules { reduce: regauge::resample::Reduce::None, ..labels("nearest") };
    let out = run(&source, (grid.rows, grid.columns), &back, &rules, None);
    assert_eq!(out, [8.0, 7.0, 4.0]);
    // A gap is no class: half of the pixel there is enough, a quarter is not.
    let n = f64::NAN;
    let source = Memory::new(2, 4, vec![n, n, n, 6.0, 3.0, 1.0, n, n], SampleType::F64);
    let (grid, back) = rescaled(&Grid::new(2, 4), Rescale::Size(1, 2), Anchor::Edge).unwrap();
    let out = run(&source, (grid.rows, grid.columns), &back, &labels("area"), None);
    assert_eq!(out[0], 1.0);
    assert!(out[1].is_nan());
}

#[test]
fn large_codes_survive() {
    let code = 4_294_967_295.0;
    let source = Memory::new(3, 3, vec![code; 9], SampleType::F64);
    let back = Motion { turn: 20.0, ..Motion::about_centre(3, 3) }.map().unwrap();
    let rules = Rules { outside: Outside::Extend, ..labels("nearest") };
    assert!(run(&source, (3, 3), &back, &rules, None).iter().all(|v| *v == code));
}

#[test]
fn angles_go_around_the_circle() {
    let cyclic = |period: f64, kernel: &str| Rules {
        kernel: kernel.parse().unwrap(),
        values: Values::Cyclic(period),
        outside: Outside::Extend,
        ..Rules::default()
    };
    let v = vec![359.0, 1.0, 359.0, 1.0, 359.0, 1.0];
    let source = Memory::new(1, 6, v, SampleType::F64);
    let half = Map::shift(0.0, 0.5);
    for kernel in ["linear", "keys", "bspline:3", "bspline:5", "lanczos:3"] {
        let out = run(&source, (1, 5), &half, &cyclic(360.0, kernel), None);
        let near = |v: f64| v.min(360.0 - v).abs();
        assert!(near(out[2]) < 1e-9, "{kernel}: {out:?}");
    }
    // To the dot for the linear kernel: 359 and 1 degree give 0, not 360 and not 180.
    let out = run(&source, (1, 5), &half, &cyclic(360.0, "linear"), None);
    assert!(out.iter().all(|v| v.abs() < 1e-12), "{out:?}");
    // Opposite angles have no mean.
    let source = Memory::new(1, 2, vec![0.0, std::f64::consts::PI], SampleType::F64);
    let out = run(&source, (1, 1), &half, &cyclic(2.0 * std::f64::consts::PI, "linear"), None);
    assert!(out[0].is_nan());
    // A turning field keeps its slope across the jump.
    let turning: Vec<f64> = (0..40).map(|i| (f64::from(i) * 23.0).rem_euclid(360.0)).collect();
    let source = Memory::new(1, 40, turning, SampleType::F64);
    let out = run(&source, (1, 30), &Map::shift(0.0, 5.25), &cyclic(360.0, "bspline:5"), None);
    for (o, v) in out.iter().enumerate() {
        let want = ((o as f64 + 5.25) * 23.0).rem_euclid(360.0);
        let off = (v - want + 180.0).rem_euclid(360.0) - 180.0;
        assert!(off.abs() < 0.05, "{o}: {v} for {want}");
    }
}
