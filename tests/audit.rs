//! Audits: what a resampling did is known in closed form, and must be found and named. Rasters are sums of Gaussian blobs:
//! moved, blurred and scaled ones are known at any position without any resampling.
#![allow(clippy::unwrap_used)]

#[path = "common/cli.rs"]
mod cli;
use cli::{Folder, write_npy};
use regauge::grid::Grid;
use regauge::job::{AuditRules, audit, relate};
use regauge::pattern::{normal, uniform};
use regauge::raster::{Header, Raster, SampleType, Samples, Source};
use regauge::report::Audit;
use serde_json::Value;
use std::path::Path;

/// Blobs of random place, size and height on a ground of 1.
struct Blobs(Vec<[f64; 4]>);

impl Blobs {
    /// `count` blobs over `rows` x `columns` pixels, of 1.2 pixels and more.
    fn new(rows: f64, columns: f64, count: u64) -> Self {
        let span = |stream: u64, i: u64, low: f64, high: f64| low + (high - low) * uniform(stream, i);
        Blobs(
            (0..count)
                .map(|i| {
                    [
                        span(11, i, -8.0, rows + 8.0),
                        span(12, i, -8.0, columns + 8.0),
                        span(13, i, 1.2, 3.5),
                        span(14, i, 0.2, 1.0),
                    ]
                })
                .collect(),
        )
    }

    /// On a grid whose pixel (r, c) looks at (r, c) * step + offset, blurred by a Gaussian of `blur` pixels.
    fn on(&self, size: (usize, usize), rows: (f64, f64), columns: (f64, f64), blur: f64) -> Vec<f64> {
        let mut out = vec![1.0; size.0 * size.1];
        for [r0, c0, sigma, height] in &self.0 {
            let wide = sigma * sigma + blur * blur;
            let line = |n: usize, (step, offset): (f64, f64), at: f64| -> Vec<f64> {
                (0..n).map(|i| (-0.5 * (i as f64 * step + offset - at).powi(2) / wide).exp()).collect()
            };
            let (down, across) = (line(size.0, rows, *r0), line(size.1, columns, *c0));
            // A blur keeps a blob's sum.
            let height = height * sigma * sigma / wide;
            for (r, d) in down.iter().enumerate().filter(|(_, d)| **d > 1e-12) {
                for (c, a) in across.iter().enumerate() {
                    out[r * size.1 + c] += height * d * a;
                }
            }
        }
        out
    }
}

const SIZE: (usize, usize) = (160, 190);
const SAME: (f64, f64) = (1.0, 0.0);

fn blobs() -> Blobs {
    Blobs::new(160.0, 190.0, 500)
}

fn before() -> Vec<f64> {
    blobs().on(SIZE, SAME, SAME, 0.0)
}

fn raster(size: (usize, usize), values: Vec<f64>) -> Raster {
    Raster::new(Header::new(Grid::new(size.0, size.1), 1, SampleType::F64), Samples::F64(values)).unwrap()
}

/// Audits rasters in memory, laid on each other by their outer edges.
fn judge(before: &Raster, after: &Raster, rules: &AuditRules) -> Audit {
    let (b, a) = (Path::new("before"), Path::new("after"));
    let relation = relate((b, before.header()), (a, after.header())).unwrap();
    audit((before, b), (after, a), relation, rules, &()).unwrap()
}

fn judge_plain(after: Vec<f64>) -> Audit {
    judge(&raster(SIZE, before()), &raster(SIZE, after), &AuditRules::default())
}

fn words(audit: &Audit) -> String {
    audit.summary().join("\n")
}

#[test]
fn a_constant_half_pixel_slip_is_found_with_its_sign_on_each_axis() {
    for (dr, dc, name) in [
        (0.5, 0.0, "half an input pixel along rows only"),
        (-0.5, 0.0, "half an input pixel along rows only"),
        (0.0, 0.5, "half an input pixel along columns only"),
        (0.0, -0.5, "half an input pixel along columns only"),
        (0.5, -0.5, "half an input pixel on both axes"),
    ] {
        // out[r] = in[r - dr]: content lies further down.
        let found = judge_plain(blobs().on(SIZE, (1.0, -dr), (1.0, -dc), 0.0));
        let d = &found.displacement;
        assert!((d.rows.unwrap() - dr).abs() < 0.02 && (d.columns.unwrap() - dc).abs() < 0.02, "{d:?}");
        assert!(d.sigma.unwrap() < 0.01 && d.how == "correlation");
        assert!(words(&found).contains(name) && words(&found).contains("centres"), "{}", words(&found));
        assert!(found.failed_a_check());
        // Blur and noise on top do not bias it.
        let mut soft = blobs().on(SIZE, (1.0, -dr), (1.0, -dc), 1.0);
        soft.iter_mut().enumerate().for_each(|(i, v)| *v = 0.8 * *v + 0.02 * normal(5, i as u64));
        let d = judge_plain(soft).displacement;
        assert!((d.rows.unwrap() - dr).abs() < 0.02 && (d.columns.unwrap() - dc).abs() < 0.02, "{d:?}");
    }
}

#[test]
fn slips_of_an_output_pixel_and_of_first_centres_are_told_from_each_other() {
    // Twice as many pixels; in = (out + 1/2) / 2 - 1/2 would be right.
    let fine = (320, 380);
    let half_output = blobs().on(fine, (0.5, -0.25 - 0.25), (0.5, -0.25), 0.0);
    let found = judge(&raster(SIZE, before()), &raster(fine, half_output), &AuditRules::default());
    assert!((found.displacement.rows.unwrap() - 0.25).abs() < 0.02, "{:?}", found.displacement);
    assert!(words(&found).contains("half an output pixel along rows only"), "{}", words(&found));
    // Every third sample: first centres on each other, not outer edges: (3 - 1) / 2 = 1 pixel.
    let (rows, columns) = (156, 189);
    let all = raster((rows, columns), blobs().on((rows, columns), SAME, SAME, 1.0));
    let third = raster((52, 63), blobs().on((52, 63), (3.0, 0.0), (3.0, 0.0), 1.0));
    let found = judge(&all, &third, &AuditRules::default());
    let d = &found.displacement;
    assert!((d.rows.unwrap() - 1.0).abs() < 0.02 && (d.columns.unwrap() - 1.0).abs() < 0.02, "{d:?}");
    assert!(words(&found).contains("first pixels' centres"), "{}", words(&found));
}

#[test]
fn aligned_corner_centres_are_a_scale_error_and_not_a_slip() {
    for (size, name) in [((320, 380), "enlarged"), ((100, 120), "reduced")] {
        let step = |n: usize, m: usize| ((n as f64 - 1.0) / (m as f64 - 1.0), 0.0);
        let after = blobs().on(size, step(SIZE.0, size.0), step(SIZE.1, size.1), 0.7);
        let found = judge(&raster(SIZE, before()), &raster(size, after), &AuditRules::default());
        assert!(words(&found).contains("a scale error"), "{name}: {}", words(&found));
        assert!(words(&found).contains("corner pixels were aligned"), "{name}: {}", words(&found));
        let field = found.displacement_field.field.unwrap();
        // At the first pixel's centre: what lies at 0 should lie at (n / m - 1) / 2.
        let first = 0.5 * (SIZE.0 as f64 / size.0 as f64 - 1.0);
        let second = 0.5 * (SIZE.1 as f64 / size.1 as f64 - 1.0);
        let at = field.at(first, second);
        assert!(
            (at.0 - first).abs() < 0.02 && (at.1 - second).abs() < 0.02,
            "{name} {at:?} {first} {second}"
        );
        assert!(found.displacement.rows.unwrap().abs() < 0.02, "{:?}", found.displacement);
        assert!(found.failed_a_check());
    }
}

#[test]
fn an_even_loss_is_told_from_a_local_one() {
    let lost: Vec<f64> = before().iter().map(|v| 0.97 * v).collect();
    let rules = AuditRules { tolerance: Some(1e-3), ..AuditRules::default() };
    let found = judge(&raster(SIZE, before()), &raster(SIZE, lost), &rules);
    assert!((found.flux.closure.unwrap() + 0.03).abs() < 1e-12 && found.flux.closed == Some(false));
    assert!(words(&found).contains("an even loss of 3.00 %") && found.failed_a_check(), "{}", words(&found));
    assert_eq!(found.displacement_field.verdict.as_ref().unwrap().words, "no displacement");

    let mut holed = before();
    let (mut all, mut gone) = (0.0, 0.0);
    for (i, v) in holed.iter_mut().enumerate() {
        let (r, c) = (i / SIZE.1, i % SIZE.1);
        all += *v;
        if (60..80).contains(&r) && (100..120).contains(&c) {
            gone += 0.5 * *v;
            *v *= 0.5;
        }
    }
    let found = judge(&raster(SIZE, before()), &raster(SIZE, holed), &rules);
    assert!((found.flux.closure.unwrap() + gone / all).abs() < 1e-12);
    assert!(words(&found).contains("local: ") && found.failed_a_check(), "{}", words(&found));
    let map = &found.closure_map;
    for [r, c] in &found.loss.cells {
        assert!(map.row_edges[*r] < 80 && map.row_edges[r + 1] > 60, "{:?}", found.loss);
        assert!(map.column_edges[*c] < 120 && map.column_edges[c + 1] > 100, "{:?}", found.loss);
    }
}

#[test]
fn a_blur_of_one_and_a_half_pixels_is_seen_as_such() {
    for gain in [1.0, 0.9] {
        let after = blobs().on(SIZE, SAME, SAME, 1.5).iter().map(|v| gain * v).collect();
        let rules = AuditRules { min_mtf50: Some(0.2), ..AuditRules::default() };
        let found = judge(&raster(SIZE, before()), &raster(SIZE, after), &rules);
        let s = found.spectra.as_ref().unwrap().sharpness.as_ref().unwrap();
        assert!((s.gaussian_sigma / 1.5 - 1.0).abs() < 0.05 && s.is_gaussian, "{s:?}");
        // exp(-2 pi^2 sigma^2 f^2), and where it is 1/2.
        let gauss = |f: f64| (-2.0 * (std::f64::consts::PI * 1.5 * f).powi(2)).exp();
        let t = &found.blur.transfer;
        assert!((t.at_010.unwrap() - gauss(0.10)).abs() < 0.02, "{t:?}");
        assert!((t.at_025.unwrap() - gauss(0.25)).abs() < 0.02, "{t:?}");
        assert!((found.blur.mtf50 - 0.1249).abs() < 0.005, "{:?}", found.blur);
        assert!(words(&found).contains("as by a Gaussian of sigma 1.") && found.failed_a_check());
    }
    let sharp = judge_plain(before());
    assert!(sharp.blur.mtf50 == 0.5 && (sharp.blur.transfer.at_025.unwrap() - 1.0).abs() < 1e-3);
}

#[test]
fn folded_detail_is_told_from_noise_and_from_a_protected_reduction() {
    // White noise: half of its power, amply, lies above the Nyquist frequency of half the pixels.
    let (n, m) = (256, 256);
    let white: Vec<f64> = (0..n * m).map(|i| normal(21, i as u64)).collect();
    let half = |pick: &dyn Fn(usize, usize) -> f64| -> Vec<f64> {
        (0..n / 2).flat_map(|r| (0..m / 2).map(move |c| (r, c))).map(|(r, c)| pick(2 * r, 2 * c)).collect()
    };
    let at = |r: usize, c: usize| white[r * m + c];
    let every_second = half(&|r, c| at(r, c));
    let averaged = half(&|r, c| 0.25 * (at(r, c) + at(r + 1, c) + at(r, c + 1) + at(r + 1, c + 1)));
    let judged =
        |after| judge(&raster((n, m), white.clone()), &raster((n / 2, m / 2), after), &AuditRules::default());
    let found = judged(every_second);
    assert!(words(&found).contains("reduced without anti-aliasing"), "{}", words(&found));
    assert!((found.aliasing.unwrap().folded_fraction.unwrap() - 1.0).abs() < 0.1, "{:?}", found.aliasing);
    assert!((found.displacement.rows.unwrap() - 0.5).abs() < 0.02, "{:?}", found.displacement);
    let found = judged(averaged);
    assert!(words(&found).contains("weakly protected"), "{}", words(&found));
    assert!(!found.failed_a_check() && found.blur.mtf50 <= 0.25);
    // The same noise with other noise on top is not folded.
    let noisy = white.iter().enumerate().map(|(i, v)| v + 0.5 * normal(22, i as u64)).collect();
    let found = judge(&raster((n, m), white.clone()), &raster((n, m), noisy), &AuditRules::default());
    let share = found.aliasing.unwrap();
    // 0.25 / (1 + 0.25)
    assert!((share.other_share - 0.2).abs() < 0.03 && share.folded_share.is_none(), "{share:?}");
}

#[test]
fn gaps_that_appear_leak_or_are_mixed_with_their_code_are_counted() {
    let gap = |r: usize, c: usize| (61..82).contains(&r) && (41..62).contains(&c);
    let holed = |value: f64, inside: &dyn Fn(usize, usize) -> bool| -> Vec<f64> {
        before()
            .iter()
            .enumerate()
            .map(|(i, v)| if inside(i / SIZE.1, i % SIZE.1) { value } else { *v })
            .collect()
    };
    let whole = raster(SIZE, before());
    let with_gap = raster(SIZE, holed(f64::NAN, &gap));
    let found = judge(&whole, &with_gap, &AuditRules::default());
    assert_eq!((found.gaps.appeared, found.gaps.leaked, found.pixels.missing), (441, 0, 441));
    assert!(words(&found).contains("became missing"));
    // What is missing is compared on neither side.
    assert!(found.flux.closure.unwrap().abs() < 1e-15);
    let found = judge(&with_gap, &whole, &AuditRules::default());
    assert_eq!((found.gaps.appeared, found.gaps.leaked), (0, 441));
    assert!(words(&found).contains("a gap was filled"));
    assert!(found.flux.closure.unwrap().abs() < 1e-15);
    // A code averaged over 2 x 2 pixels as if it were a number.
    let coded = holed(-9999.0, &gap);
    let at = |r: usize, c: usize| coded[r * SIZE.1 + c];
    let mean: Vec<f64> = (0..80)
        .flat_map(|r| (0..95).map(move |c| (2 * r, 2 * c)))
        .map(|(r, c)| 0.25 * (at(r, c) + at(r + 1, c) + at(r, c + 1) + at(r + 1, c + 1)))
        .collect();
    // Blocks that hold a part of the gap, which begins at odd pixels: 11 + 11 - 1 of them.
    let rules = AuditRules { missing: Some(-9999.0), ..AuditRules::default() };
    let found = judge(&raster(SIZE, coded.clone()), &raster((80, 95), mean), &rules);
    assert_eq!(found.gaps.mixed_with_code, 21, "{:?}", found.gaps);
    assert_eq!(found.gaps.kept, 100);
    assert!(words(&found).contains("averaged into them"), "{}", words(&found));
    // Nothing left to compare is no closure.
    let nothing = raster(SIZE, vec![f64::NAN; SIZE.0 * SIZE.1]);
    let asked = AuditRules { tolerance: Some(1.0), ..AuditRules::default() };
    let found = judge(&whole, &nothing, &asked);
    assert!(found.failed_a_check() && found.pixels.valid == 0, "{}", words(&found));
    // A copy that kept its gap has nothing to be told of.
    let found = judge(&with_gap, &with_gap, &AuditRules::default());
    let g = &found.gaps;
    assert_eq!((g.appeared, g.leaked, g.near_gap, g.mixed_with_code, g.kept), (0, 0, 0, 0, 441));
}

#[test]
fn clipping_and_overshoot_are_counted() {
    let top = before().iter().copied().fold(f64::NEG_INFINITY, f64::max);
    let cut = 0.6 * top;
    let over = before().iter().filter(|v| **v > cut + 1e-6).count() as u64;
    let found = judge_plain(before().iter().map(|v| v.min(cut)).collect());
    // Those whose neighbours stand above the cut are cut too; the count is of the samples at the plateau.
    assert_eq!(found.pixels.clipped_high, over);
    assert_eq!((found.pixels.clipped_low, found.pixels.overshoot), (0, 0));
    assert!(words(&found).contains("cut off above"));
    let found = judge_plain(before());
    assert_eq!((found.pixels.clipped_high, found.pixels.clipped_low, found.pixels.overshoot), (0, 0, 0));
    // A plateau that BEFORE has itself is not the resampling's.
    let flat = raster(SIZE, before().iter().map(|v| v.min(cut)).collect());
    assert_eq!(judge(&flat, &flat, &AuditRules::default()).pixels.clipped_high, 0);
    let mut spiked = before();
    spiked[5000] = 2.0 * top;
    spiked[9000] = -top;
    let found = judge_plain(spiked);
    assert_eq!(found.pixels.overshoot, 2);
    assert!((found.clipping.most_above - top).abs() < 1e-9);
}

#[test]
fn too_little_texture_says_so_and_unlike_rasters_do_not_pass() {
    let flat = raster(SIZE, vec![4.0; SIZE.0 * SIZE.1]);
    let ramp = raster(SIZE, (0..SIZE.0 * SIZE.1).map(|i| (i % SIZE.1) as f64).collect());
    for plain in [&flat, &ramp] {
        let found = judge(plain, plain, &AuditRules::default());
        assert!(words(&found).contains("too little texture"), "{}", words(&found));
        assert!(found.displacement.rows.is_none() && found.displacement_field.voted == 0);
        assert!(found.blur.mtf50 == 0.5 && !found.failed_a_check());
        // A bound that was asked for and cannot be judged does not hold.
        let asked = AuditRules { max_displacement: Some(0.5), ..AuditRules::default() };
        assert!(judge(plain, plain, &asked).failed_a_check());
    }
    // Half the raster flat: only the other half has votes.
    let half: Vec<f64> =
        before().iter().enumerate().map(|(i, v)| if i % SIZE.1 < 95 { 1.0 } else { *v }).collect();
    let half = raster(SIZE, half);
    let found = judge(&half, &half, &AuditRules::default());
    assert!(found.displacement_field.flat > 5 && found.displacement_field.voted > 5);
    assert!(words(&found).contains("too little texture") && words(&found).contains("have a vote"));
    let other = Blobs(blobs().0.iter().map(|b| [b[1] * 0.8, b[0] * 1.1, b[2], b[3]]).collect());
    let found = judge_plain(other.on(SIZE, SAME, SAME, 0.0));
    assert!(words(&found).contains("do not show the same") && found.failed_a_check(), "{}", words(&found));
}

#[test]
fn totals_are_compared_as_sums() {
    let mean = |v: &[f64]| -> Vec<f64> {
        let at = |r: usize, c: usize| v[r * SIZE.1 + c];
        (0..80)
            .flat_map(|r| (0..95).map(move |c| (2 * r, 2 * c)))
            .map(|(r, c)| at(r, c) + at(r + 1, c) + at(r, c + 1) + at(r + 1, c + 1))
            .collect()
    };
    let rules = AuditRules {
        values: regauge::job::AuditValues::Total,
        tolerance: Some(1e-12),
        ..AuditRules::default()
    };
    let sums = raster((80, 95), mean(&before()));
    let found = judge(&raster(SIZE, before()), &sums, &rules);
    assert!(found.flux.closed == Some(true) && !found.failed_a_check(), "{}", words(&found));
    assert!((found.flux.before.unwrap() - before().iter().sum::<f64>()).abs() < 1e-8);
    assert_eq!(found.pixels.overshoot, 0);
    let (b, a) = (found.centroid.before.unwrap(), found.centroid.after.unwrap());
    assert!((b[0] - a[0]).abs() < 1e-9 && (b[1] - a[1]).abs() < 1e-9);
    // As densities they would be four times too large.
    let found = judge(&raster(SIZE, before()), &sums, &AuditRules::default());
    assert!((found.flux.closure.unwrap() - 3.0).abs() < 1e-12);
}

fn write_f64(path: &Path, size: (usize, usize), values: &[f64]) {
    let bytes: Vec<u8> = values.iter().flat_map(|v| v.to_le_bytes()).collect();
    write_npy(path, size.0, size.1, "<f8", &bytes);
}

#[test]
fn clean_resamplings_of_our_own_pass() {
    let f = Folder::new();
    write_f64(&f.path("a.npy"), SIZE, &before());
    for (options, mtf50) in [
        (&["--factor", "2"][..], "0.4"),
        (&["--factor", "0.5"], "0.18"),
        (&["--size", "111x240", "--kernel", "bspline:5"], "0.25"),
        (&["--factor", "0.5", "--kernel", "area"], "0.2"),
        (&["--factor", "1.5", "--kernel", "keys"], "0.35"),
    ] {
        let run: Vec<&str> =
            ["rescale", "a.npy", "b.npy", "--overwrite", "--quiet"].iter().chain(options).copied().collect();
        f.regauge(&run).ends(0);
        let said = f
            .regauge(&[
                "audit",
                "a.npy",
                "b.npy",
                "--tolerance",
                "2e-3",
                "--max-displacement",
                "0.02",
                "--min-mtf50",
                mtf50,
            ])
            .ends(0)
            .stderr();
        assert!(said.contains("no displacement") && said.contains("holds"), "{options:?}\n{said}");
    }
    // A turn, by the map that it followed; and what is found without it.
    let (sin, cos) = 3f64.to_radians().sin_cos();
    std::fs::write(
        f.path("map.json"),
        format!(
            r#"{{"model": "rigid", "matrix": [[{cos}, {}, 6.5], [{sin}, {cos}, -4.0], [0, 0, 1]],
                "moving": {{"rows": 160, "columns": 190}}, "reference": {{"rows": 160, "columns": 190}}}}"#,
            -sin
        ),
    )
    .unwrap();
    f.regauge(&["move", "a.npy", "t.npy", "--map", "map.json", "--quiet"]).ends(0);
    f.regauge(&["audit", "a.npy", "t.npy", "--map", "map.json", "--max-displacement", "0.02"])
        .ends(0)
        .says("by the map");
    f.regauge(&["audit", "a.npy", "t.npy"]).ends(3).says("DOES NOT HOLD");
    // By their worlds: another pixel, another origin.
    f.regauge(&["rescale", "a.npy", "a.tif", "--factor", "1", "--quiet"]).ends(0);
    let grid = |name: &str, text: &str| std::fs::write(f.path(name), text).unwrap();
    grid("from.json", r#"{"rows": 160, "columns": 190, "world": [[2, 0, 500000], [0, -2, 4000000]]}"#);
    grid("to.json", r#"{"rows": 90, "columns": 100, "world": [[3, 0, 500031.7], [0, -3, 3999970.3]]}"#);
    f.regauge(&["unify", "a.npy", "--map", "own.json", "--onto", "from.json", "--out", "w", "--quiet"])
        .ends(1);
    std::fs::write(
        f.path("own.json"),
        r#"{"model": "shift", "matrix": [[1, 0, 0], [0, 1, 0], [0, 0, 1]], "reference":
            {"rows": 160, "columns": 190, "world": [[2, 0, 500000], [0, -2, 4000000]]}}"#,
    )
    .unwrap();
    std::fs::copy(f.path("a.tif"), f.path("p.tif")).unwrap();
    f.regauge(&["unify", "p.tif", "--map", "own.json", "--onto", "from.json", "--out", "w", "--quiet"])
        .ends(0);
    f.regauge(&["unify", "w/p.tif", "--onto", "to.json", "--out", "v", "--quiet"]).ends(0);
    f.regauge(&["audit", "w/p.tif", "v/p.tif", "--max-displacement", "0.02", "--tolerance", "5e-3"])
        .ends(0)
        .says("by their georeference");
}

#[test]
fn the_account_as_json_and_what_is_refused() {
    let f = Folder::new();
    write_f64(&f.path("a.npy"), SIZE, &before());
    write_f64(&f.path("b.npy"), SIZE, &blobs().on(SIZE, (1.0, -0.25), SAME, 0.0));
    let run = f.regauge(&["audit", "a.npy", "b.npy", "--json", "--quiet"]).ends(3);
    assert_eq!(run.stderr(), "");
    let json: Value = serde_json::from_str(&run.stdout()).unwrap();
    for key in
        ["pixels", "flux", "centroid", "displacement", "blur", "closure_map", "displacement_field", "spectra"]
    {
        assert!(!json[key].is_null(), "no {key}");
    }
    assert!((json["displacement"]["rows"].as_f64().unwrap() - 0.25).abs() < 0.02);
    assert_eq!(json["displacement"]["how"], "correlation");
    assert!((json["blur"]["transfer"]["0.25"].as_f64().unwrap() - 1.0).abs() < 0.05);
    assert_eq!(json["pixels"]["total"], 160 * 190);
    // The same numbers on one thread and on many, in little memory and in much.
    let digest = |memory: &str, threads: &str| {
        let out = std::process::Command::new(env!("CARGO_BIN_EXE_regauge"))
            .args(["audit", "a.npy", "b.npy", "--json", "--quiet", "--memory", memory])
            .env("RAYON_NUM_THREADS", threads)
            .current_dir(&f.0)
            .output()
            .unwrap();
        let mut json: Value = serde_json::from_slice(&out.stdout).unwrap();
        for key in ["time", "command"] {
            json.as_object_mut().unwrap().remove(key);
        }
        json.to_string()
    };
    let one = digest("512MiB", "1");
    assert_eq!(digest("512MiB", "5"), one);
    assert_eq!(digest("1GiB", "2"), one);
    f.regauge(&["audit", "a.npy", "b.npy", "--band", "2"]).ends(2).says("from 1 to 1");
    f.regauge(&["audit", "a.npy", "b.npy", "--band", "0"]).ends(2).says("counted from 1");
    f.regauge(&["audit", "a.npy", "b.npy", "--tolerance=-1"]).ends(2).says("--tolerance");
    f.regauge(&["audit", "a.npy", "b.npy", "--memory", "1MiB"]).ends(2).says("too little");
    f.regauge(&["audit", "a.npy", "none.npy"]).ends(1).says("none.npy");
    // Pixels of 20 x 20: tiles would not fit into the least memory; the message says what would.
    write_f64(&f.path("wide.npy"), (1200, 1200), &vec![1.0; 1200 * 1200]);
    write_f64(&f.path("coarse.npy"), (60, 60), &vec![1.0; 3600]);
    f.regauge(&["audit", "wide.npy", "coarse.npy", "--memory", "16MiB"]).ends(1).says("--memory");
    assert_eq!(f.list(), ["a.npy", "b.npy", "coarse.npy", "wide.npy"]);
}
