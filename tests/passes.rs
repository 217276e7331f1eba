//! Every pass against the slow truth, and the promise that the cut into blocks does not matter.
#![allow(clippy::unwrap_used)]

mod common;
use common::{Memory, run, values, worst};
use regauge::kernel::{Extension, Kernel};
use regauge::map::{Map, Motion};
use regauge::raster::SampleType;
use regauge::resample::{Outside, Reduce, Rules};

const EXTENSIONS: [&str; 8] = [
    "open",
    "zero",
    "constant:3",
    "replicate",
    "half-symmetric",
    "whole-symmetric",
    "point-symmetric",
    "periodic",
];

const KERNELS: &[&str] = &[
    "nearest",
    "linear",
    "keys",
    "keys:-0.75",
    "keys6",
    "bc-spline:0.25,0.375",
    "quintic",
    "septic",
    "lagrange:3",
    "lagrange:4",
    "lagrange:8",
    "lanczos:2",
    "lanczos:3",
    "lanczos:8",
    "hann:6",
    "kaiser:8,6",
    "bspline:0",
    "bspline:1",
    "bspline:2",
    "bspline:3",
    "bspline:4",
    "bspline:5",
    "bspline:6",
    "bspline:7",
    "bspline:8",
    "bspline:9",
    "omoms:3",
    "omoms:5",
    "shifted-linear",
    "sinc",
    "polynomial",
    "area",
];

fn rules(kernel: &str, extension: &str) -> Rules {
    Rules {
        kernel: Kernel::parse(kernel).unwrap(),
        extension: extension.parse().unwrap(),
        ..Rules::default()
    }
}

/// Whether the kernel takes the extension.
fn goes(kernel: &str, extension: &str) -> bool {
    kernel != "sinc" || matches!(extension, "half-symmetric" | "periodic")
}

fn maps() -> Vec<(&'static str, (usize, usize), Map)> {
    let turn = |turn: f64, scale: f64| {
        let motion = Motion { turn, scale, shear: 0.05, ..Motion::about_centre(13, 17) };
        motion.map().unwrap().invert().unwrap()
    };
    let rescale = |r: f64, c: f64| Map::axes((r, 0.5 * (r - 1.0)), (c, 0.5 * (c - 1.0)));
    vec![
        ("shift", (13, 17), Map::shift(-0.37, 1.25)),
        ("one axis only", (13, 17), Map::shift(2.0, 0.5)),
        ("grow", (22, 29), rescale(13.0 / 22.0, 17.0 / 29.0)),
        ("reduce", (6, 7), rescale(13.0 / 6.0, 17.0 / 7.0)),
        ("mixed and mirrored", (5, 30), Map::axes((13.0 / 5.0, 0.8), (-17.0 / 30.0, 16.2))),
        ("quarter turn and shift", (17, 13), Map::affine([[0.0, 1.0, 0.3], [-1.0, 0.0, 15.8]])),
        ("turn", (13, 17), turn(17.3, 1.1)),
        ("turn and reduce", (9, 11), turn(-38.0, 0.55)),
        ("projective", (13, 17), Map { matrix: [[1.0, 0.05, 0.2], [-0.03, 0.95, 0.4], [0.002, 0.004, 1.0]] }),
        (
            "projective and reduce",
            (7, 8),
            Map { matrix: [[1.5, 0.05, 0.2], [-0.03, 1.7, 0.4], [0.002, 0.004, 1.0]] },
        ),
    ]
}

fn check(kernel: &str, extension: &str, reduce: Reduce, outside: Outside) {
    let (n, m) = (13, 17);
    let source = Memory::new(n, m, values(n * m, 7), SampleType::F64);
    let rules = Rules { reduce, outside, ..rules(kernel, extension) };
    for (name, target, back) in maps() {
        let plan = regauge::resample::Plan::new((n, m), target, &back, &rules);
        if reduce == Reduce::LeastSquares && plan.is_err() {
            continue;
        }
        let fast = run(&source, target, &back, &rules, None);
        let slow = regauge::slow::resample(&source.values, (n, m), target, &back, &rules);
        // One polynomial through 17 samples amplifies without measure; values inside stay near 1e3.
        let scale = slow.iter().filter(|v| v.is_finite()).fold(1.0f64, |a, v| a.max(v.abs()));
        let worst = worst(&fast, &slow);
        assert!(
            worst <= 1e-12 * scale,
            "{kernel}, {extension}, {name}, {reduce:?}, {outside:?}: off by {worst:e} of {scale}"
        );
    }
}

#[test]
fn every_kernel_and_extension_agrees_with_the_slow_truth() {
    for kernel in KERNELS {
        for extension in EXTENSIONS {
            if goes(kernel, extension) {
                check(kernel, extension, Reduce::Auto, Outside::Missing);
            }
        }
    }
}

#[test]
fn beyond_the_edges_the_extension_goes_on() {
    for kernel in ["linear", "keys", "bspline:3", "lanczos:3"] {
        for extension in EXTENSIONS {
            check(kernel, extension, Reduce::Auto, Outside::Extend);
        }
    }
}

#[test]
fn reductions_agree_with_the_slow_truth() {
    for kernel in ["linear", "keys", "bspline:2", "bspline:3", "bspline:5", "lanczos:3"] {
        for extension in EXTENSIONS {
            check(kernel, extension, Reduce::None, Outside::Missing);
        }
    }
    for kernel in ["linear", "bspline:1", "bspline:2", "bspline:3", "bspline:5"] {
        for extension in ["half-symmetric", "zero", "periodic", "replicate", "open", "point-symmetric"] {
            check(kernel, extension, Reduce::LeastSquares, Outside::Missing);
        }
    }
}

#[test]
fn f32_keeps_two_millionths() {
    let (n, m) = (61, 47);
    let exact: Vec<f64> = values(n * m, 3).iter().map(|v| f64::from(*v as f32)).collect();
    let source = Memory::new(n, m, exact, SampleType::F32);
    for kernel in KERNELS.iter().filter(|k| **k != "polynomial") {
        for (name, back) in [
            ("shift", Map::shift(-0.37, 1.25)),
            ("turn", Motion { turn: 11.0, ..Motion::about_centre(n, m) }.map().unwrap()),
        ] {
            let rules = rules(kernel, "half-symmetric");
            let fast = run(&source, (n, m), &back, &rules, None);
            let slow = regauge::slow::resample(&source.values, (n, m), (n, m), &back, &rules);
            let worst = worst(&fast, &slow);
            assert!(worst <= 2e-6, "{kernel}, {name}: off by {worst:e}");
        }
    }
}

#[test]
fn blocks_threads_and_vectors_do_not_change_a_bit() {
    let (n, m) = (90, 75);
    let mut with_gaps = values(n * m, 11);
    for (i, v) in with_gaps.iter_mut().enumerate() {
        if (i / m).abs_diff(40) < 3 && (i % m).abs_diff(30) < 5 || i % 977 == 0 {
            *v = f64::NAN;
        }
    }
    for (sample_type, data) in [
        (SampleType::F64, with_gaps.clone()),
        (SampleType::F32, with_gaps),
        (SampleType::F32, values(n * m, 5)),
    ] {
        let source = Memory::new(n, m, data, sample_type);
        for kernel in ["keys", "bspline:3", "bspline:5", "lanczos:3", "sinc", "area"] {
            for (name, target, back) in [
                ("grow", (130, 111), Map::axes((90.0 / 130.0, -0.15), (75.0 / 111.0, -0.16))),
                ("reduce", (41, 33), Map::axes((90.0 / 41.0, 0.6), (75.0 / 33.0, 0.6))),
                ("turn", (90, 75), Motion { turn: 30.0, ..Motion::about_centre(n, m) }.map().unwrap()),
            ] {
                if kernel == "sinc" && name == "turn" {
                    continue;
                }
                let rules = rules(kernel, "half-symmetric");
                let whole = run(&source, target, &back, &rules, None);
                for side in [16, 37] {
                    let cut = run(&source, target, &back, &rules, Some(side));
                    assert!(
                        same_bits(&whole, &cut),
                        "{kernel} {name} {sample_type:?}: blocks of {side} differ"
                    );
                }
                for threads in [1, 2, 7] {
                    let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build().unwrap();
                    let other = pool.install(|| run(&source, target, &back, &rules, None));
                    assert!(same_bits(&whole, &other), "{kernel} {name}: {threads} threads differ");
                }
                regauge::simd::force_narrow(true);
                let narrow = run(&source, target, &back, &rules, None);
                regauge::simd::force_narrow(false);
                assert!(same_bits(&whole, &narrow), "{kernel} {name}: narrow vectors differ");
            }
        }
    }
}

#[test]
fn long_lines_are_cut_into_the_same_segments_by_every_block() {
    let (n, m) = (3, 5000);
    let source = Memory::new(n, m, values(n * m, 23), SampleType::F64);
    for back in [Map::shift(0.0, 0.4), Map::axes((1.0, 0.0), (2.0, 0.5))] {
        let columns = if back.matrix[1][1] == 2.0 { 2500 } else { m };
        let rules = rules("bspline:5", "half-symmetric");
        let whole = run(&source, (n, columns), &back, &rules, None);
        for side in [700, 1024] {
            assert!(same_bits(&whole, &run(&source, (n, columns), &back, &rules, Some(side))), "{side}");
        }
    }
}

fn same_bits(a: &[f64], b: &[f64]) -> bool {
    a.len() == b.len()
        && a.iter().zip(b).all(|(a, b)| a.to_bits() == b.to_bits() || (a.is_nan() && b.is_nan()))
}

#[test]
fn nothing_is_done_where_nothing_need_be_done() {
    let (n, m) = (12, 17);
    let source = Memory::new(n, m, values(n * m, 9), SampleType::F32);
    let exact: Vec<f64> = source.values.iter().map(|v| f64::from(*v as f32)).collect();
    let at = |r: i64, c: i64| {
        if (0..n as i64).contains(&r) && (0..m as i64).contains(&c) {
            exact[r as usize * m + c as usize]
        } else {
            f64::NAN
        }
    };
    type From = fn(i64, i64) -> (i64, i64);
    let cases: [(&str, (usize, usize), Map, From); 5] = [
        ("same", (12, 17), Map::IDENTITY, |r, c| (r, c)),
        ("shift", (12, 17), Map::shift(-3.0, 2.0), |r, c| (r - 3, c + 2)),
        ("quarter turn", (17, 12), Map::affine([[0.0, 1.0, 0.0], [-1.0, 0.0, 16.0]]), |r, c| (c, 16 - r)),
        ("mirror", (12, 17), Map::axes((1.0, 0.0), (-1.0, 16.0)), |r, c| (r, 16 - c)),
        ("half turn", (12, 17), Map::axes((-1.0, 11.0), (-1.0, 16.0)), |r, c| (11 - r, 16 - c)),
    ];
    for kernel in
        ["nearest", "linear", "keys", "bspline:3", "bspline:9", "lanczos:3", "omoms:3", "sinc", "area"]
    {
        for (name, target, back, from) in &cases {
            let rules = rules(kernel, "half-symmetric");
            let out = run(&source, *target, back, &rules, None);
            for r in 0..target.0 {
                for c in 0..target.1 {
                    let (i, j) = from(r as i64, c as i64);
                    let (got, wanted) = (out[r * target.1 + c], at(i, j));
                    assert!(
                        got.to_bits() == wanted.to_bits() || got.is_nan() && wanted.is_nan(),
                        "{kernel} {name} ({r}, {c})"
                    );
                }
            }
        }
    }
}

#[test]
fn open_is_the_only_extension_that_may_leave_holes() {
    let source = Memory::new(4, 4, values(16, 2), SampleType::F64);
    for extension in EXTENSIONS {
        let rules = Rules { outside: Outside::Extend, ..rules("keys", extension) };
        let out = run(&source, (4, 4), &Map::shift(-20.3, 0.2), &rules, None);
        assert_eq!(out.iter().any(|v| v.is_nan()), extension == "open", "{extension}");
    }
    assert_eq!(Extension::default().to_string(), "half-symmetric");
}

#[test]
fn a_constant_with_gaps_stays_that_constant() {
    let (rows, columns) = (40, 44);
    let noise = values(rows * columns, 77);
    // A quarter of the samples is missing.
    let v: Vec<f64> = noise.iter().map(|n| if *n < -0.5 { f64::NAN } else { 7.3 }).collect();
    let source = Memory::new(rows, columns, v, SampleType::F64);
    let turn = |turn, scale| {
        let about = Motion::about_centre(rows, columns);
        Motion { turn, scale, ..about }.map().unwrap().invert().unwrap()
    };
    let maps = [
        Map::shift(0.37, -1.25),
        Map::axes((0.6, -0.2), (1.7, 0.35)),
        Map::axes((2.4, 0.7), (3.1, 1.0)),
        turn(17.3, 1.0),
        turn(-38.0, 0.5),
        Map { matrix: [[1.1, 0.05, -1.0], [-0.04, 0.9, 2.0], [0.002, -0.001, 1.0]] },
    ];
    for kernel in KERNELS {
        for back in maps {
            if matches!(*kernel, "polynomial" | "sinc") {
                // Both lean on whole lines: nothing near a gap is left of them.
                continue;
            }
            let rules = Rules { kernel: kernel.parse().unwrap(), ..Rules::default() };
            let out = run(&source, (30, 30), &back, &rules, None);
            let there: Vec<f64> = out.into_iter().filter(|v| !v.is_nan()).collect();
            assert!(there.len() > 100, "{kernel}, {back:?}: {} left", there.len());
            let worst = there.iter().fold(0.0f64, |m, v| m.max((v / 7.3 - 1.0).abs()));
            assert!(worst < 1e-12, "{kernel}, {back:?}: {worst:e}");
        }
    }
}

#[test]
fn one_gap_harms_no_more_than_the_taps_reach() {
    let n = 64;
    let mut v = values(n * n, 78);
    let whole = Memory::new(n, n, v.clone(), SampleType::F64);
    v[30 * n + 33] = f64::NAN;
    let source = Memory::new(n, n, v, SampleType::F64);
    // Where the cardinal weight of a sample is below 1e-3: 4.8 pixels for bspline:3, 7.5 for bspline:5 (|pole|^d).
    for (kernel, taps, reach) in [("bspline:3", 4, 4.8), ("bspline:5", 6, 7.5)] {
        let rules = Rules { kernel: kernel.parse().unwrap(), outside: Outside::Extend, ..Rules::default() };
        let back = Map::shift(0.4, -0.3);
        let (with, without) =
            (run(&source, (n, n), &back, &rules, None), run(&whole, (n, n), &back, &rules, None));
        let lost = with.iter().filter(|v| v.is_nan()).count();
        assert!(lost <= taps * taps, "{kernel}: {lost} lost");
        for (i, (a, b)) in with.iter().zip(&without).enumerate().filter(|(_, (a, _))| !a.is_nan()) {
            let (r, c) = back.apply((i / n) as f64, (i % n) as f64);
            let far = (r - 30.0).abs().max((c - 33.0).abs());
            if far > reach {
                // What a gap changes there is below its weight.
                assert!((a - b).abs() < 2e-3, "{kernel} at {r},{c}: {a} for {b}");
            }
        }
    }
}
