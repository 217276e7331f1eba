//! Totals, labels, angles, uncertainty, masks, differences and dry runs as a user meets them.
#![allow(clippy::unwrap_used)]

#[path = "common/cli.rs"]
mod cli;
use cli::{Folder, write_f32, write_npy, write_u16};

/// The samples of an NPY file of f32 or f64.
fn read(f: &Folder, name: &str) -> Vec<f64> {
    let bytes = std::fs::read(f.path(name)).unwrap();
    let len = usize::from(u16::from_le_bytes([bytes[8], bytes[9]]));
    let head = String::from_utf8_lossy(&bytes[10..10 + len]).into_owned();
    let data = &bytes[10 + len..];
    if head.contains("<f8") {
        data.chunks_exact(8).map(|b| f64::from_le_bytes(b.try_into().unwrap())).collect()
    } else if head.contains("<f4") {
        data.chunks_exact(4).map(|b| f64::from(f32::from_le_bytes(b.try_into().unwrap()))).collect()
    } else {
        data.chunks_exact(2).map(|b| f64::from(u16::from_le_bytes(b.try_into().unwrap()))).collect()
    }
}

fn ledger(f: &Folder, name: &str) -> serde_json::Value {
    serde_json::from_str(&std::fs::read_to_string(f.path(name)).unwrap()).unwrap()
}

#[test]
fn counts_are_kept_and_said_to_be() {
    let f = Folder::new();
    write_u16(&f.path("u.npy"), 40, 50);
    let before: f64 = read(&f, "u.npy").iter().sum();
    f.regauge(&[
        "move",
        "u.npy",
        "t.npy",
        "--turn",
        "17.3",
        "--frame",
        "fit",
        "--values",
        "total",
        "--tolerance",
        "1e-12",
    ])
    .ends(0)
    .says("counts, all accounted for");
    let after: f64 = read(&f, "t.npy").iter().filter(|v| !v.is_nan()).sum();
    assert!((after / before - 1.0).abs() < 1e-12, "{after} of {before}");
    let l = ledger(&f, "t.npy.ledger.json");
    assert_eq!(l["values"], "total");
    assert_eq!(l["output"]["type"], "f64");
    assert_eq!(l["method"], "shear");
    // What leaves the frame is told, and the ledger still closes.
    f.regauge(&["move", "u.npy", "k.npy", "--shift", "9.5,0", "--values", "total", "--tolerance", "1e-12"])
        .ends(0)
        .says("left the frame");
    assert!(ledger(&f, "k.npy.ledger.json")["flux"]["left_frame"].as_f64().unwrap() > 0.1 * before);
    // Whole numbers only if asked; the check judges what was stored.
    f.regauge(&[
        "rescale",
        "u.npy",
        "r.npy",
        "--factor",
        "1.7",
        "--values",
        "total",
        "--type",
        "u16",
        "--tolerance",
        "1e-12",
    ])
    .ends(3)
    .says("TOLERANCE EXCEEDED");
    assert!(ledger(&f, "r.npy.ledger.json")["flux"]["rounding"].as_f64().unwrap() != 0.0);
    f.regauge(&["replay", "t.npy.ledger.json"]).ends(0);
    f.regauge(&[
        "rescale",
        "u.npy",
        "l.npy",
        "--factor",
        "2.7",
        "--values",
        "total",
        "--limit",
        "neighbours",
    ])
    .ends(0)
    .says("handed to neighbours");
}

#[test]
fn classes_and_angles_have_their_own_rules() {
    let f = Folder::new();
    let codes: Vec<u8> =
        (0..20 * 30).flat_map(|i| [3u16, 17, 200][(i / 7 + i / 61) % 3].to_le_bytes()).collect();
    write_npy(&f.path("c.npy"), 20, 30, "<u2", &codes);
    f.regauge(&["rescale", "c.npy", "d.npy", "--factor", "0.4", "--values", "label", "--fractions", "s.npy"])
        .ends(0);
    assert!(read(&f, "d.npy").iter().all(|v| [3.0, 17.0, 200.0].contains(v)));
    assert_eq!(ledger(&f, "d.npy.ledger.json")["method"], "majority");
    // The shares of the three classes add up to the whole of each pixel.
    let shares = read(&f, "s.npy");
    let n = shares.len() / 3;
    for i in 0..n {
        let sum: f64 = (0..3).map(|c| shares[c * n + i]).sum();
        assert!((sum - 1.0).abs() < 1e-5, "{sum}");
    }
    f.regauge(&["rescale", "c.npy", "e.npy", "--factor", "2", "--values", "label", "--kernel", "bspline:3"])
        .ends(2)
        .says("never mixed");
    f.regauge(&["rescale", "c.npy", "e.npy", "--factor", "2", "--fractions", "s2.npy"])
        .ends(2)
        .says("--values label");
    f.regauge(&["rescale", "c.npy", "e.npy", "--factor", "2", "--values", "cyclic:0"])
        .ends(2)
        .says("cyclic:360");
    f.regauge(&["rescale", "c.npy", "e.npy", "--factor", "2", "--values", "sum"])
        .ends(2)
        .says("density, total");
    let angles: Vec<u8> = (0..12 * 12).flat_map(|i| [359f32, 1.0][i % 2].to_le_bytes()).collect();
    write_npy(&f.path("a.npy"), 12, 12, "<f4", &angles);
    f.regauge(&[
        "move",
        "a.npy",
        "b.npy",
        "--shift",
        "0,0.5",
        "--values",
        "cyclic:360",
        "--kernel",
        "linear",
        "--outside",
        "extend",
    ])
    .ends(0);
    let half = read(&f, "b.npy");
    assert!((0..12).all(|r| (1..12).all(|c| half[r * 12 + c].abs() < 1e-4)), "{half:?}");
}

#[test]
fn uncertainty_coverage_and_masks_go_along() {
    let f = Folder::new();
    write_f32(&f.path("a.npy"), 30, 40);
    f.regauge(&[
        "move",
        "a.npy",
        "b.npy",
        "--shift",
        "0.5,0.5",
        "--kernel",
        "linear",
        "--sigma",
        "2",
        "--sigma-out",
        "s.npy",
        "--coverage",
        "w.npy",
    ])
    .ends(0);
    let sigma = read(&f, "s.npy");
    // Half a pixel along both axes: a quarter of the variance.
    assert!((sigma[15 * 40 + 20] - 1.0).abs() < 1e-6, "{}", sigma[15 * 40 + 20]);
    assert!(read(&f, "w.npy").iter().all(|v| *v == 0.0 || (*v - 1.0).abs() < 1e-6));
    f.regauge(&["move", "a.npy", "c.npy", "--shift", "0.5,0.5", "--sigma-out", "t.npy"])
        .ends(2)
        .says("--sigma");
    f.regauge(&["move", "a.npy", "c.npy", "--shift", "0.5,0.5", "--sigma", "poisson:2"])
        .ends(2)
        .says("poisson:2.2,5");
    f.regauge(&["move", "a.npy", "c.npy", "--shift", "0.5,0.5", "--sigma", "-1"])
        .ends(2)
        .says("not negative");
    write_f32(&f.path("small.npy"), 3, 4);
    f.regauge(&["move", "a.npy", "c.npy", "--shift", "0.5,0.5", "--sigma", "small.npy"])
        .ends(1)
        .says("small.npy");
    // Flags: bit 4 hides a sample, bit 1 does not.
    let flags: Vec<u8> =
        (0..30 * 40).flat_map(|i: u32| (u16::from(i == 610) * 4 + 1).to_le_bytes()).collect();
    write_npy(&f.path("q.npy"), 30, 40, "<u2", &flags);
    f.regauge(&["move", "a.npy", "m.npy", "--shift", "0,0", "--mask", "q.npy:0x4"]).ends(0);
    let masked = read(&f, "m.npy");
    assert!(masked[610].is_nan() && masked.iter().filter(|v| v.is_nan()).count() == 1);
    // Without bits any flag counts, and whole numbers without a code become floating point.
    write_u16(&f.path("u.npy"), 30, 40);
    f.regauge(&["move", "u.npy", "n.npy", "--shift", "0,0", "--mask", "q.npy"]).ends(0);
    assert!(read(&f, "n.npy").iter().all(|v| v.is_nan()));
    f.regauge(&["move", "u.npy", "o.npy", "--shift", "0,0", "--mask", "nowhere.npy"])
        .ends(1)
        .says("nowhere.npy");
}

#[test]
fn differences_carry_their_uncertainty() {
    let f = Folder::new();
    write_f32(&f.path("a.npy"), 60, 70);
    write_f32(&f.path("b.npy"), 60, 70);
    f.regauge(&[
        "subtract",
        "a.npy",
        "b.npy",
        "d.npy",
        "--sigma",
        "3",
        "--sigma",
        "4",
        "--sigma-out",
        "s.npy",
        "--significance",
        "z.npy",
        "--json",
    ])
    .ends(0);
    assert!(read(&f, "d.npy").iter().all(|v| *v == 0.0));
    assert!(read(&f, "s.npy").iter().all(|v| (*v - 5.0).abs() < 1e-6));
    let l = ledger(&f, "d.npy.ledger.json");
    assert_eq!(l["difference"]["valid"], 4200);
    assert_eq!(l["parts"][1]["inputs"][0]["path"], "b.npy");
    f.regauge(&["subtract", "a.npy", "b.npy", "a.npy", "--overwrite"]).ends(2).says("named for two things");
    f.regauge(&["subtract", "a.npy", "b.npy", "e.npy", "--significance", "y.npy"])
        .ends(2)
        .says("--sigma twice");
    f.regauge(&["subtract", "a.npy", "gone.npy", "e.npy"]).ends(1).says("gone.npy");
    assert!(!f.list().iter().any(|n| n.starts_with("e.npy") || n.contains(".part")), "{:?}", f.list());
}

#[test]
fn a_dry_run_tells_and_writes_nothing() {
    let f = Folder::new();
    write_f32(&f.path("a.npy"), 300, 400);
    f.regauge(&["rescale", "a.npy", "b.tif", "--factor", "3", "--dry-run"]).ends(0).says("900 x 1200");
    f.regauge(&["move", "a.npy", "b.tif", "--turn", "9", "--values", "total", "--dry-run", "--json"])
        .ends(0)
        .says("shear");
    f.regauge(&["unify", "a.npy", "--onto", "a.npy", "--out", "dir", "--dry-run"]).ends(0).says("copy");
    f.regauge(&["subtract", "a.npy", "a.npy", "d.npy", "--dry-run"]).ends(0).says("would become");
    assert_eq!(f.list(), ["a.npy"]);
}

#[test]
fn a_report_has_a_name_of_its_own() {
    let f = Folder::new();
    write_f32(&f.path("a.npy"), 30, 40);
    f.regauge(&["rescale", "a.npy", "b.npy", "--factor", "2", "--report", "r.html"])
        .ends(0)
        .says("report: r.html");
    let page = std::fs::read_to_string(f.path("r.html")).unwrap();
    for part in ["Before and after", "Difference", "Where signal went", "What the kernel does", "All numbers"]
    {
        assert!(page.contains(part), "{part}");
    }
    f.regauge(&["rescale", "a.npy", "c.npy", "--factor", "2", "--report", "r.html"])
        .ends(2)
        .says("--overwrite");
    f.regauge(&["rescale", "a.npy", "c.npy", "--factor", "2", "--report", "c.npy"])
        .ends(2)
        .says("two things");
    f.regauge(&["rescale", "a.npy", "c.npy", "--factor", "2", "--report", "no/r.html"]).ends(1).says("no");
    assert!(!f.path("c.npy").exists());
}
