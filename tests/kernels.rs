//! Kernels against published formulas and the tables in tests/reference (their heads name the sources).
#![allow(clippy::unwrap_used)]

#[path = "common/reference.rs"]
mod reference;

use proptest::prelude::*;
use reference::{our_name, rows};
use regauge::kernel::{Extension, Kernel, Place, Prefilter, WARM_UP, segment_window, segments};

#[test]
fn values_agree_with_the_table() {
    let mut seen = 0;
    for row in rows("kernel_samples.csv") {
        let Some(name) = our_name(&row[0], &row[1]).filter(|n| n != "sinc") else { continue };
        let kernel = Kernel::parse(&name).unwrap();
        let (t, wanted): (f64, f64) = (row[3].parse().unwrap(), row[4].parse().unwrap());
        let got = if row[2] == "phi" { kernel.weight(t) } else { kernel.cardinal(t) };
        assert!((got - wanted).abs() <= 4e-15, "{name} {} at {t}: {got} instead of {wanted}", row[2]);
        seen += 1;
    }
    assert!(seen > 550, "only {seen} rows were compared");
}

#[test]
fn poles_agree_with_the_published_ones() {
    let mut seen = 0;
    for row in rows("bspline_poles.csv") {
        let name = match row[0].as_str() {
            "bspline" => format!("bspline:{}", row[1]),
            _ => format!("omoms:{}", row[1]),
        };
        let Ok(kernel) = Kernel::parse(&name) else { continue };
        let poles = kernel.poles();
        let wanted: f64 = row[3].parse().unwrap();
        let nearest = poles.iter().map(|p| (p - wanted).abs()).fold(f64::INFINITY, f64::min);
        assert!(nearest <= 1e-14 * wanted.abs().max(1e-1), "{name}: no pole at {wanted}, but {poles:?}");
        seen += 1;
    }
    assert!(seen >= 20, "only {seen} poles were compared");
    // Blu, Thevenaz and Unser 2004: -tau / (1 - tau) = sqrt 3 - 2.
    let pole = Kernel::parse("shifted-linear").unwrap().poles()[0];
    assert!((pole - (3f64.sqrt() - 2.0)).abs() < 1e-14);
}

#[test]
fn lagrange_for_three_points_has_its_textbook_basis_and_nears_the_sinc() {
    // Common practice, no source: 1 - t^2, (t^2 + t)/2, (t^2 - t)/2 at the samples 0, 1, -1.
    let kernel = Kernel::parse("lagrange:3").unwrap();
    for t in [-0.5, -0.25, 0.0, 0.125, 0.375] {
        let mut w = Vec::new();
        assert_eq!(kernel.weights_at(t, &mut w), -1);
        let wanted = [(t * t - t) / 2.0, 1.0 - t * t, (t * t + t) / 2.0];
        for (got, wanted) in w.iter().zip(wanted) {
            assert!((got - wanted).abs() < 1e-15);
        }
    }
    // Product formula of the sinc: the distance to it shrinks as points are added.
    let distance = |n: usize| {
        let kernel = Kernel::parse(&format!("lagrange:{n}")).unwrap();
        (0..50)
            .map(|i| i as f64 / 100.0)
            .map(|t| (kernel.weight(t) - regauge::kernel::windowed::sinc(t)).abs())
            .fold(0.0, f64::max)
    };
    let steps: Vec<f64> = [3, 5, 7, 9, 11].map(distance).to_vec();
    assert!(steps.windows(2).all(|w| w[1] < w[0]), "{steps:?}");
    assert!(steps[4] < 0.05, "{steps:?}");
}

#[test]
fn weights_sum_to_one_and_reproduce_polynomials_to_the_order() {
    for family in regauge::kernel::FAMILIES {
        for name in family.listed {
            let kernel = Kernel::parse(name).unwrap();
            if kernel.taps().is_none() {
                continue;
            }
            let order = kernel.order().unwrap();
            for i in 0..=64 {
                let x = 7.0 + i as f64 / 64.0 + 1e-3;
                let mut w = Vec::new();
                let first = kernel.weights_at(x, &mut w);
                let sum: f64 = w.iter().sum();
                assert!((sum - 1.0).abs() < 1e-14, "{name} at {x}: weights sum to {sum}");
                if kernel.is_prefiltered() {
                    continue;
                }
                for power in 1..order.min(8) {
                    let moment: f64 = w
                        .iter()
                        .enumerate()
                        .map(|(m, w)| w * (first as f64 + m as f64 - x).powi(power as i32))
                        .sum();
                    assert!(moment.abs() < 1e-11, "{name} at {x}: moment {power} is {moment}");
                }
            }
        }
    }
}

#[test]
fn spline_coefficients_agree_with_the_dense_solution() {
    let f = [1.0, -2.0, 3.5, 0.25, 4.0, -1.5, 2.0, 7.0, -3.0];
    let mut seen = 0;
    for row in rows("spline_coeffs_1d.csv") {
        let extension: Extension = row[0].replace('_', "-").parse().unwrap();
        let kernel = Kernel::parse(&format!("bspline:{}", row[1])).unwrap();
        let (k, wanted): (i64, f64) = (row[2].parse().unwrap(), row[3].parse().unwrap());
        let c = coefficients(&f, extension, &kernel, k..k + 1);
        assert!(
            (c[0] - wanted).abs() < 2e-13 * 40.0,
            "{} degree {} c[{k}] = {} instead of {wanted}",
            row[0],
            row[1],
            c[0]
        );
        seen += 1;
    }
    assert!(seen > 350);
}

/// The coefficients of a line in a range, by the segments of the library.
fn coefficients(f: &[f64], extension: Extension, kernel: &Kernel, wanted: std::ops::Range<i64>) -> Vec<f64> {
    let prefilter = Prefilter::<f64>::for_segments(&kernel.symbol());
    let n = f.len();
    let open = extension == Extension::Open;
    let mut out = Vec::new();
    for segment in segments(n, wanted.clone()) {
        let window = segment_window(&segment, n, open);
        let mut line: Vec<f64> = window
            .clone()
            .map(|k| match extension.place(k, n) {
                Place::Sample(i) if open => f[i] * prefilter.open_factor(i, n),
                Place::Sample(i) => f[i],
                Place::Constant(v) => v,
                Place::Absent => 0.0,
                Place::Turned { index, sign, first, last } => {
                    sign * f[index] + first * f[0] + last * f[n - 1]
                }
            })
            .collect();
        prefilter.solve(&mut line, 1);
        for k in segment.start.max(wanted.start)..segment.end.min(wanted.end) {
            let at = k - window.start;
            out.push(if at >= 0 && k < window.end { line[at as usize] } else { 0.0 });
        }
    }
    out
}

#[test]
fn segments_do_not_depend_on_what_is_wanted_and_cover_it() {
    for n in [1usize, 5, 1000, 1500, 1536, 2048, 5000] {
        let whole = segments(n, -2000..n as i64 + 2000);
        assert!(whole.windows(2).all(|w| w[0].end == w[1].start));
        for k in (-1990..n as i64 + 1990).step_by(7) {
            let one = segments(n, k..k + 1);
            assert_eq!(one.len(), 1);
            assert!(one[0].contains(&k) && whole.contains(&one[0]), "{n} {k} {one:?}");
        }
    }
}

#[test]
fn extensions_follow_their_four_sample_rows() {
    let f = [10.0, 20.0, 40.0, 70.0];
    let at = |e: Extension, k: i64, f: &[f64]| match e.place(k, f.len()) {
        Place::Sample(i) => f[i],
        Place::Constant(v) => v,
        Place::Absent => f64::NAN,
        Place::Turned { index, sign, first, last } => sign * f[index] + first * f[0] + last * f[f.len() - 1],
    };
    let row = |e: &str| -> Vec<f64> { (-5..9).map(|k| at(e.parse().unwrap(), k, &f)).collect() };
    assert_eq!(row("half-symmetric"), [70., 70., 40., 20., 10., 10., 20., 40., 70., 70., 40., 20., 10., 10.]);
    assert_eq!(
        row("whole-symmetric"),
        [20., 40., 70., 40., 20., 10., 20., 40., 70., 40., 20., 10., 20., 40.]
    );
    assert_eq!(row("periodic"), [70., 10., 20., 40., 70., 10., 20., 40., 70., 10., 20., 40., 70., 10.]);
    assert_eq!(row("replicate"), [10., 10., 10., 10., 10., 10., 20., 40., 70., 70., 70., 70., 70., 70.]);
    assert_eq!(row("zero"), [0., 0., 0., 0., 0., 10., 20., 40., 70., 0., 0., 0., 0., 0.]);
    assert_eq!(row("constant:-9"), [-9., -9., -9., -9., -9., 10., 20., 40., 70., -9., -9., -9., -9., -9.]);
    // 2 a - f about each end: ... 2*10-40, 2*10-20 | 10 20 40 70 | 2*70-40, 2*70-20, ...
    assert_eq!(
        row("point-symmetric"),
        [-100., -80., -50., -20., 0., 10., 20., 40., 70., 100., 120., 130., 140., 160.]
    );
    assert!(at(Extension::Open, -1, &f).is_nan());
    for e in ["replicate", "half-symmetric", "whole-symmetric", "point-symmetric", "periodic"] {
        for k in [-7, -1, 1, 9] {
            assert_eq!(at(e.parse().unwrap(), k, &[3.0]), 3.0, "{e} with one sample");
        }
    }
}

#[test]
fn unknown_kernels_suggest_the_near_one() {
    let message = Kernel::parse("bspilne:3").unwrap_err();
    assert!(message.mend().contains("bspline:DEGREE"), "{}", message.mend());
    assert!(Kernel::parse("lanczos:99").unwrap_err().to_string().contains("2 to 8"));
    assert!(
        Kernel::parse("keys:x").is_err() && Kernel::parse("linear:2").is_err() && Kernel::parse("").is_err()
    );
}

proptest! {
    #[test]
    fn coefficients_solve_their_equations(
        f in prop::collection::vec(-100.0f64..100.0, 1..40),
        degree in 2usize..=9,
        which in 0usize..8,
    ) {
        let names = ["open", "zero", "constant:3", "replicate", "half-symmetric", "whole-symmetric", "point-symmetric", "periodic"];
        let extension: Extension = names[which].parse().unwrap();
        let kernel = Kernel::parse(&format!("bspline:{degree}")).unwrap();
        let (n, b) = (f.len() as i64, (degree / 2) as i64);
        let c = coefficients(&f, extension, &kernel, -b..n + b);
        let open = extension == Extension::Open;
        for k in 0..n {
            let (mut sum, mut weights) = (0.0, 0.0);
            for l in k - b..=k + b {
                if open && !(0..n).contains(&l) {
                    continue;
                }
                let phi = kernel.weight((k - l) as f64);
                sum += c[(l + b) as usize] * phi;
                weights += phi;
            }
            let got = if open { sum / weights } else { sum };
            prop_assert!((got - f[k as usize]).abs() < 1e-10, "{} degree {degree} at {k}: {got} for {}", names[which], f[k as usize]);
        }
    }

    #[test]
    fn places_stay_inside_the_line(k in -5000i64..5000, n in 1usize..60, which in 0usize..8) {
        let names = ["open", "zero", "constant:3", "replicate", "half-symmetric", "whole-symmetric", "point-symmetric", "periodic"];
        match names[which].parse::<Extension>().unwrap().place(k, n) {
            Place::Sample(i) | Place::Turned { index: i, .. } => prop_assert!(i < n),
            Place::Constant(_) | Place::Absent => prop_assert!(k < 0 || k >= n as i64),
        }
    }

    #[test]
    fn weights_have_the_kernel_s_taps(x in -1e6f64..1e6) {
        for name in ["nearest", "linear", "keys", "lanczos:3", "bspline:5", "lagrange:5", "hann:6"] {
            let kernel = Kernel::parse(name).unwrap();
            let mut w = Vec::new();
            let first = kernel.weights_at(x, &mut w);
            prop_assert_eq!(w.len(), kernel.taps().unwrap());
            prop_assert!((first as f64 - x).abs() <= kernel.radius() + 1e-9);
        }
    }
}

#[test]
fn the_warm_up_is_long_enough_for_every_pole() {
    for family in regauge::kernel::FAMILIES {
        for name in family.listed {
            for pole in Kernel::parse(name).unwrap().poles() {
                assert!(pole.abs().powi(WARM_UP as i32) < 1e-25, "{name}: pole {pole}");
            }
        }
    }
}

#[test]
fn the_default_kernel_is_the_one_of_that_name() {
    assert_eq!(Kernel::default(), Kernel::parse("bspline:3").unwrap());
}
