//! Uncertainty follows: predicted sigma against the operator taken impulse by impulse, and against draws of noise.
#![allow(clippy::unwrap_used)]

mod common;

use common::{Memory, make, values};
use regauge::map::{Map, Motion};
use regauge::raster::{Header, MissingCodes, Raster, SampleType, Samples};
use regauge::resample::{Noise, Outside, Reduce, Rules, Values};
use std::sync::Arc;

/// Values and sigma of one resampling.
fn run(
    source: &Memory,
    target: (usize, usize),
    back: &Map,
    rules: &Rules,
    noise: Option<&Noise>,
    side: usize,
) -> (Vec<f64>, Vec<f64>) {
    let made = make(source, target, back, rules, noise, Some(side));
    (made.values, made.sigma)
}

/// sqrt(sum of squares of the operator's entries times variance), the operator taken impulse by impulse.
fn by_impulses(
    size: (usize, usize),
    sigma: &[f64],
    target: (usize, usize),
    back: &Map,
    rules: &Rules,
    gaps: &[usize],
) -> Vec<f64> {
    let base = |i: Option<usize>| -> Vec<f64> {
        let mut v = vec![0.0; size.0 * size.1];
        gaps.iter().for_each(|g| v[*g] = f64::NAN);
        if let Some(i) = i {
            v[i] = 1.0;
        }
        run(&Memory::new(size.0, size.1, v, SampleType::F64), target, back, rules, None, 64).0
    };
    let zero = base(None);
    let mut variance = vec![0.0; target.0 * target.1];
    for i in (0..size.0 * size.1).filter(|i| !gaps.contains(i)) {
        for ((sum, v), z) in variance.iter_mut().zip(base(Some(i))).zip(&zero) {
            *sum += (v - z) * (v - z) * sigma[i] * sigma[i];
        }
    }
    variance.iter().map(|v| v.sqrt()).collect()
}

fn plane(size: (usize, usize), sigma: &[f64]) -> Noise {
    let header = Header::new(regauge::grid::Grid::new(size.0, size.1), 1, SampleType::F64);
    Noise::Plane(
        Arc::new(Raster::new(header, Samples::F64(sigma.to_vec())).unwrap()),
        MissingCodes::default(),
    )
}

fn compare(
    name: &str,
    size: (usize, usize),
    target: (usize, usize),
    back: &Map,
    rules: &Rules,
    gaps: &[usize],
) {
    let sigma: Vec<f64> = values(size.0 * size.1, 11).iter().map(|v| 1.5 + v).collect();
    let want = by_impulses(size, &sigma, target, back, rules, gaps);
    let mut v = values(size.0 * size.1, 4);
    gaps.iter().for_each(|g| v[*g] = f64::NAN);
    let source = Memory::new(size.0, size.1, v, SampleType::F64);
    let (out, got) = run(&source, target, back, rules, Some(&plane(size, &sigma)), 64);
    let most = want.iter().copied().filter(|v| !v.is_nan()).fold(0.0, f64::max);
    let mut seen = 0;
    for ((g, w), v) in got.iter().zip(&want).zip(&out) {
        assert_eq!(g.is_nan(), v.is_nan(), "{name}: sigma where there is no value, or none where there is");
        if !v.is_nan() {
            seen += 1;
            assert!((g - w).abs() < 1e-6 * most, "{name}: {g} for {w}");
        }
    }
    assert!(seen > 20, "{name}: {seen}");
    let (_, cut) = run(&source, target, back, rules, Some(&plane(size, &sigma)), 5);
    for (i, (a, b)) in got.iter().zip(&cut).enumerate() {
        assert!(
            (a - b).abs() <= 1e-12 * most || (a.is_nan() && b.is_nan()),
            "{name}: {b} for {a} at {i} when cut"
        );
    }
}

const SIZE: (usize, usize) = (12, 11);

fn maps() -> Vec<(&'static str, (usize, usize), Map)> {
    let about = Motion::about_centre(SIZE.0, SIZE.1);
    let turn = |turn, scale| Motion { turn, scale, ..about }.map().unwrap().invert().unwrap();
    vec![
        ("shift", SIZE, Map::shift(0.37, -1.5)),
        ("grow", (20, 17), Map::axes((0.65, -0.2), (0.7, 0.1))),
        ("reduce", (6, 5), Map::axes((2.2, 0.6), (2.4, 0.7))),
        ("quarter turn and shift", (11, 12), Map::affine([[0.0, 1.0, 0.3], [-1.0, 0.0, 10.2]])),
        ("turn", SIZE, turn(23.0, 1.0)),
        ("turn and reduce", (9, 9), turn(23.0, 0.6)),
        ("projective", (9, 9), Map { matrix: [[1.1, 0.05, 0.3], [-0.04, 1.2, 0.4], [0.004, -0.003, 1.0]] }),
    ]
}

#[test]
fn sigma_is_that_of_the_operator() {
    for kernel in [
        "nearest",
        "linear",
        "keys",
        "lanczos:3",
        "bspline:2",
        "bspline:3",
        "bspline:5",
        "omoms:3",
        "shifted-linear",
        "area",
        "sinc",
    ] {
        for (name, target, back) in maps() {
            if kernel == "sinc" && matches!(name, "turn" | "turn and reduce" | "projective") {
                continue;
            }
            let rules = Rules { kernel: kernel.parse().unwrap(), ..Rules::default() };
            compare(&format!("{kernel}, {name}"), SIZE, target, &back, &rules, &[]);
        }
    }
}

#[test]
fn sigma_under_every_extension() {
    for extend in [
        "open",
        "zero",
        "constant:3",
        "replicate",
        "half-symmetric",
        "whole-symmetric",
        "point-symmetric",
        "periodic",
    ] {
        for kernel in ["bspline:3", "area"] {
            for (name, target, back) in maps() {
                if name == "projective" {
                    continue;
                }
                let rules = Rules {
                    kernel: kernel.parse().unwrap(),
                    extension: extend.parse().unwrap(),
                    outside: Outside::Extend,
                    ..Rules::default()
                };
                compare(&format!("{extend}, {kernel}, {name}"), SIZE, target, &back, &rules, &[]);
            }
        }
    }
}

#[test]
fn sigma_of_totals_gaps_and_least_squares() {
    for kernel in ["linear", "keys", "bspline:3", "area"] {
        for (name, target, back) in maps() {
            let rules = Rules { kernel: kernel.parse().unwrap(), values: Values::Total, ..Rules::default() };
            compare(&format!("totals, {kernel}, {name}"), SIZE, target, &back, &rules, &[]);
            let gaps = [40, 41, 77, 100];
            compare(&format!("totals with gaps, {kernel}, {name}"), SIZE, target, &back, &rules, &gaps);
            let rules = Rules { values: Values::Density, ..rules };
            compare(&format!("gaps, {kernel}, {name}"), SIZE, target, &back, &rules, &gaps);
        }
    }
    for kernel in ["linear", "bspline:3"] {
        for (name, target, back) in maps().into_iter().filter(|m| m.0 == "reduce" || m.0 == "turn and reduce")
        {
            let rules =
                Rules { kernel: kernel.parse().unwrap(), reduce: Reduce::LeastSquares, ..Rules::default() };
            compare(&format!("least squares, {kernel}, {name}"), SIZE, target, &back, &rules, &[]);
        }
    }
}

#[test]
fn a_thousand_draws_agree_within_two_percent() {
    let size = (24, 26);
    let turn = Motion { turn: 12.5, ..Motion::about_centre(size.0, size.1) }.map().unwrap().invert().unwrap();
    let flat = Memory::new(size.0, size.1, vec![400.0; size.0 * size.1], SampleType::F64);
    // Poisson counts at a gain of 2 electrons a count with 5 electrons of reading noise: variance 400/2 + 2.5^2.
    let noise = Noise::Poisson { gain: 2.0, read: 5.0 };
    let of_sample = (400.0f64 / 2.0 + 2.5 * 2.5).sqrt();
    for back in [Map::shift(0.5, 0.25), turn] {
        let rules = Rules { kernel: "bspline:3".parse().unwrap(), ..Rules::default() };
        let (_, predicted) = run(&flat, size, &back, &rules, Some(&noise), 64);
        let mut sums = vec![(0.0, 0.0); size.0 * size.1];
        let draws = 1000;
        for d in 0..draws {
            // Sums of twelve even numbers less six: Gaussian enough, of variance 1 when the numbers span 1.
            let even = values(12 * size.0 * size.1, 1000 + d);
            let v = even.chunks_exact(12).map(|p| of_sample * 0.5 * p.iter().sum::<f64>()).collect();
            let (out, _) =
                run(&Memory::new(size.0, size.1, v, SampleType::F64), size, &back, &rules, None, 64);
            for (s, v) in sums.iter_mut().zip(out) {
                s.0 += v;
                s.1 += v * v;
            }
        }
        // Single pixels of a thousand draws scatter by 2.2 %: the mean ratio over all pixels must not.
        let n = draws as f64;
        let ratios: Vec<f64> = sums
            .iter()
            .zip(&predicted)
            .filter(|(_, p)| !p.is_nan())
            .map(|(s, p)| ((s.1 / n - (s.0 / n).powi(2)) * n / (n - 1.0)).sqrt() / p)
            .collect();
        let mean = ratios.iter().sum::<f64>() / ratios.len() as f64;
        assert!((mean - 1.0).abs() < 0.005, "{mean}");
        let within = ratios.iter().filter(|r| (**r - 1.0).abs() < 0.05).count();
        assert!(within as f64 > 0.95 * ratios.len() as f64, "{within} of {}", ratios.len());
    }
}

#[test]
fn half_a_pixel_of_linear_halves_the_variance() {
    // common practice, no source: the mean of two independent samples.
    let source = Memory::new(1, 40, vec![0.0; 40], SampleType::F64);
    for (kernel, want) in [("linear", 0.5), ("bspline:3", 0.7561)] {
        let rules = Rules { kernel: kernel.parse().unwrap(), ..Rules::default() };
        let (_, sigma) = run(&source, (1, 39), &Map::shift(0.0, 0.5), &rules, Some(&Noise::Even(1.0)), 64);
        let middle = sigma[19] * sigma[19];
        // 0.7561: least noise gain of the cubic spline in kernel_properties.csv, which stands at half a pixel.
        assert!((middle - want).abs() < 2e-4, "{kernel}: {middle}");
    }
}
