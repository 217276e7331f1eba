//! The commands as a user meets them: help, refusals, exit codes, ledgers, replay.
#![allow(clippy::unwrap_used)]

#[path = "common/cli.rs"]
mod cli;
use cli::{Folder, write_f32, write_u16};

#[test]
fn help_fits_a_screen_and_every_command_has_an_example() {
    let f = Folder::new();
    let help = f.regauge(&["--help"]).ends(0).stdout();
    assert!(help.lines().count() <= 24, "{} lines", help.lines().count());
    assert!(help.lines().all(|l| l.chars().count() <= 80), "{help}");
    for command in ["rescale", "move", "unify", "subtract", "audit", "describe", "kernels", "replay", "demo"]
    {
        assert!(help.contains(command));
        let own = f.regauge(&[command, "--help"]).ends(0).stdout();
        assert!(own.contains("Example") && own.contains(&format!("regauge {command}")), "{own}");
    }
    assert!(f.regauge(&["--version"]).ends(0).stdout().starts_with("regauge "));
}

#[test]
fn near_names_are_suggested() {
    let f = Folder::new();
    write_f32(&f.path("a.npy"), 8, 9);
    f.regauge(&["rescal", "a.npy", "b.npy"]).ends(2).says("rescale");
    f.regauge(&["rescale", "a.npy", "b.npy", "--facter", "2"]).ends(2).says("--factor");
    f.regauge(&["rescale", "a.npy", "b.npy", "--factor", "2", "--kernel", "lancsoz:3"])
        .ends(2)
        .says("lanczos");
    f.regauge(&["rescale", "a.npy", "b.npy", "--factor", "2", "--extend", "mirror"])
        .ends(2)
        .says("half-symmetric");
    assert_eq!(f.list(), ["a.npy"]);
}

#[test]
fn wrong_usage_ends_with_2_before_any_work() {
    let f = Folder::new();
    write_f32(&f.path("a.npy"), 8, 9);
    write_u16(&f.path("u.npy"), 8, 9);
    let refused: &[(&[&str], &str)] = &[
        (&["rescale", "a.npy", "b.npy"], "--factor"),
        (&["rescale", "a.npy", "b.npy", "--factor", "0"], "positive"),
        (&["rescale", "a.npy", "b.npy", "--factor", "nan"], "no number"),
        (&["rescale", "a.npy", "b.npy", "--factor", "2", "--size", "3x3"], "cannot be used with"),
        (&["rescale", "a.npy", "b.npy", "--size", "0x3"], "at least 1x1"),
        (&["rescale", "a.npy", "b.npy", "--factor", "2", "--memory", "lots"], "256MiB"),
        (&["rescale", "a.npy", "b.npy", "--factor", "2", "--memory", "1MiB"], "too little"),
        (&["rescale", "a.npy", "b.npy", "--factor", "2", "--threads", "0"], "at least 1"),
        (&["rescale", "a.npy", "b.npy", "--factor", "2", "--min-coverage", "1.5"], "between 0 and 1"),
        (&["rescale", "a.npy", "b.npy", "--factor", "2", "--type", "u64"], "u16"),
        (&["rescale", "a.npy", "b.xyz", "--factor", "2"], ".tif"),
        (
            &[
                "rescale",
                "a.npy",
                "b.npy",
                "--factor",
                "0.5",
                "--reduce",
                "least-squares",
                "--kernel",
                "keys",
            ],
            "B-spline",
        ),
        (
            &["rescale", "a.npy", "b.npy", "--factor", "2", "--kernel", "sinc", "--extend", "zero"],
            "half-symmetric",
        ),
        (&["move", "a.npy", "b.npy"], "nothing to do"),
        (&["move", "a.npy", "b.npy", "--scale", "-1"], "not positive"),
        (&["move", "a.npy", "b.npy", "--turn", "1e300"], "-360 and 360"),
        (&["move", "u.npy", "b.npy", "--shift", "0.75,0"], "--missing"),
        (&["move", "u.npy", "b.npy", "--shift", "0.75,0", "--missing", "-1"], "range"),
        (&["rescale", "a.npy", "a.npy", "--factor", "2", "--overwrite"], "input and output"),
        (&["unify", "a.npy", "--out", "d"], "--onto"),
        (&["unify", "a.npy", "a.npy", "--onto", "a.npy", "--out", "d"], "would both become"),
    ];
    for (arguments, words) in refused {
        f.regauge(arguments).ends(2).says(words);
    }
    let mut left = f.list();
    left.retain(|n| n != "d");
    assert_eq!(left, ["a.npy", "u.npy"]);
}

#[test]
fn what_cannot_be_done_ends_with_1_and_leaves_nothing() {
    let f = Folder::new();
    write_f32(&f.path("a.npy"), 8, 9);
    f.regauge(&["rescale", "none.tif", "b.npy", "--factor", "2"]).ends(1).says("none.tif");
    f.regauge(&["rescale", "a.npy", "deep/b.npy", "--factor", "2"]).ends(1).says("deep");
    f.regauge(&["rescale", ".", "b.npy", "--factor", "2"]).ends(1).says("folder");
    f.regauge(&["rescale", "a.npy", "b.tif", "--size", "99999999x99999999"]).ends(1).says("--memory");
    f.regauge(&["rescale", "a.npy", "b.tif", "--factor", "1e9"]).ends(1).says("more than the limit");
    f.regauge(&["rescale", "a.npy", "b.npy", "--factor", "1e-9"]).ends(1).says("would cover");
    f.regauge(&["rescale", "a.npy", "b.png", "--factor", "2"]).ends(1).says(".tif");
    std::fs::write(f.path("text.tif"), "not a raster at all").unwrap();
    f.regauge(&["describe", "text.tif"]).ends(1).says("first bytes");
    std::fs::write(f.path("empty.tif"), "").unwrap();
    f.regauge(&["describe", "empty.tif"]).ends(1).says("empty");
    std::fs::write(f.path("map.json"), "{\"model\": \"affine\", \"matrix\": [[1,0,0],[1,0,0],[0,0,1]]}")
        .unwrap();
    f.regauge(&["move", "a.npy", "b.npy", "--map", "map.json"]).ends(1).says("map.json");
    std::fs::write(f.path("grid.json"), "{\"rows\": 3}").unwrap();
    f.regauge(&["unify", "a.npy", "--onto", "grid.json", "--out", "d"]).ends(1).says("grid.json");
    std::fs::write(f.path("led.json"), "{}").unwrap();
    f.regauge(&["replay", "led.json"]).ends(1).says("no ledger");
    assert_eq!(f.list(), ["a.npy", "empty.tif", "grid.json", "led.json", "map.json", "text.tif"]);
}

#[test]
fn a_run_leaves_its_ledger_and_replay_comes_to_the_same() {
    let f = Folder::new();
    write_f32(&f.path("a.npy"), 60, 45);
    let run =
        f.regauge(&["move", "a.npy", "b.tif", "--turn", "-12.5", "--shift", "-1.5,0.25", "--json"]).ends(0);
    let printed: serde_json::Value = serde_json::from_str(&run.stdout()).unwrap();
    let stored: serde_json::Value =
        serde_json::from_slice(&std::fs::read(f.path("b.tif.ledger.json")).unwrap()).unwrap();
    assert_eq!(printed, stored);
    for key in [
        "regauge",
        "command",
        "inputs",
        "output",
        "kernel",
        "extension",
        "values",
        "reduce",
        "method",
        "pixels",
        "flux",
        "centroid",
        "displacement",
        "blur",
        "ringing",
        "noise",
        "time",
        "job",
    ] {
        assert!(!stored[key].is_null(), "no {key}");
    }
    assert_eq!(stored["method"], "gather");
    assert_eq!(stored["pixels"]["total"], 2700);
    assert_eq!(stored["inputs"][0]["type"], "f32");
    f.regauge(&["replay", "b.tif.ledger.json"]).ends(0).says("the same samples");
    f.regauge(&["move", "a.npy", "b.tif", "--turn", "3"]).ends(2).says("--overwrite");
    f.regauge(&["move", "a.npy", "b.tif", "--turn", "3", "--overwrite", "--quiet"]).ends(0);
    assert_eq!(f.list(), ["a.npy", "b.tif", "b.tif.ledger.json"]);
    // Another input under the same name: the digest tells.
    write_f32(&f.path("a.npy"), 61, 45);
    f.regauge(&["replay", "b.tif.ledger.json"]).ends(3).says("not what it was");
}

#[test]
fn digests_do_not_depend_on_threads_or_memory() {
    let f = Folder::new();
    write_f32(&f.path("a.npy"), 700, 1300);
    let digest = |more: &[&str]| {
        let mut arguments = vec![
            "move",
            "a.npy",
            "b.tif",
            "--turn",
            "7",
            "--overwrite",
            "--quiet",
            "--json",
            "--kernel",
            "bspline:5",
        ];
        arguments.extend(more);
        let ledger: serde_json::Value =
            serde_json::from_str(&f.regauge(&arguments).ends(0).stdout()).unwrap();
        ledger["output"]["sha256"].as_str().unwrap().to_owned()
    };
    let one = digest(&["--threads", "1"]);
    for more in [&["--threads", "2"][..], &["--threads", "7"], &["--memory", "64MiB"], &["--memory", "2GiB"]]
    {
        assert_eq!(digest(more), one, "{more:?}");
    }
}

#[test]
fn a_tolerance_that_is_not_met_ends_with_3() {
    let f = Folder::new();
    write_f32(&f.path("a.npy"), 30, 40);
    f.regauge(&["rescale", "a.npy", "b.npy", "--factor", "0.4", "--reduce", "none", "--tolerance", "1e-9"])
        .ends(3)
        .says("TOLERANCE EXCEEDED");
    f.regauge(&["rescale", "a.npy", "c.npy", "--factor", "2", "--kernel", "area", "--tolerance", "1e-6"])
        .ends(0);
    assert!(f.list().contains(&"b.npy".to_owned()));
    // Border pixels that became missing are no lost signal.
    f.regauge(&[
        "move",
        "a.npy",
        "d.npy",
        "--shift",
        "0.8,-1.6",
        "--kernel",
        "linear",
        "--tolerance",
        "2e-3",
    ])
    .ends(0);
}

#[test]
fn unify_brings_rasters_onto_one_grid_by_world_or_by_map() {
    let f = Folder::new();
    write_f32(&f.path("a.npy"), 30, 40);
    write_f32(&f.path("b.npy"), 30, 40);
    std::fs::write(
        f.path("map.json"),
        r#"{"model": "shift", "matrix": [[1, 0, 2], [0, 1, -3], [0, 0, 1]],
            "moving": {"rows": 30, "columns": 40}, "reference": {"rows": 30, "columns": 40}}"#,
    )
    .unwrap();
    f.regauge(&[
        "unify", "a.npy", "b.npy", "--onto", "a.npy", "--map", "-", "--map", "map.json", "--out", "common",
    ])
    .ends(0);
    let read = |name: &str| std::fs::read(f.path(name)).unwrap();
    assert_eq!(read("common/a.npy"), read("a.npy"));
    let (moved, own) = (read("common/b.npy"), read("b.npy"));
    let at = |bytes: &[u8], r: usize, c: usize| {
        let i = bytes.len() - 4 * (30 * 40 - r * 40 - c);
        f32::from_le_bytes([bytes[i], bytes[i + 1], bytes[i + 2], bytes[i + 3]])
    };
    // Content moves down by 2 and left by 3.
    assert_eq!(at(&moved, 12, 7), at(&own, 10, 10));
    assert!(at(&moved, 0, 0).is_nan());
    // Grids in different systems are refused by name.
    let grid = r#"{"rows": 5, "columns": 6, "world": [[1, 0, 0], [0, -1, 0]], "crs": "EPSG:32633"}"#;
    std::fs::write(f.path("grid.json"), grid).unwrap();
    f.regauge(&["unify", "a.npy", "--onto", "grid.json", "--out", "other"])
        .ends(1)
        .says("no place in the world");
}

#[test]
fn describe_and_kernels_print_words_and_json() {
    let f = Folder::new();
    write_u16(&f.path("u.npy"), 20, 30);
    let words = f.regauge(&["describe", "u.npy"]).ends(0).stdout();
    assert!(words.contains("20 rows x 30 columns") && words.contains("u16"), "{words}");
    let json: serde_json::Value =
        serde_json::from_str(&f.regauge(&["describe", "u.npy", "--json"]).ends(0).stdout()).unwrap();
    assert_eq!(json["statistics"][0]["valid"], 600);
    let json: serde_json::Value =
        serde_json::from_str(&f.regauge(&["kernels", "--json"]).ends(0).stdout()).unwrap();
    assert!(json["kernels"].as_array().unwrap().iter().any(|k| k["name"] == "bspline:3" && k["order"] == 4));
    assert!(f.regauge(&["kernels"]).ends(0).stdout().contains("-0.26795"));
}

#[test]
fn the_demo_comes_close_to_its_truth() {
    let f = Folder::new();
    let said = f.regauge(&["demo", "--out", "d"]).ends(0).stdout();
    let rms: f64 =
        said.split("rms error ").nth(1).and_then(|t| t.split(' ').next()).unwrap().parse().unwrap();
    let noise: f64 =
        said.split("explains ").nth(1).and_then(|t| t.split(' ').next()).unwrap().parse().unwrap();
    // What is left beyond the instruments' noise is under a millimetre, in squares.
    assert!(rms > 0.9 * noise && (rms * rms - noise * noise).max(0.0).sqrt() < 0.3, "{said}");
    for name in
        ["change.png", "surfaces.png", "change.tif", "year1.tif", "year2.tif", "common/year2.tif.ledger.json"]
    {
        assert!(f.path("d").join(name).exists(), "{name}");
    }
}

#[cfg(unix)]
#[test]
fn an_interrupted_run_leaves_nothing_under_the_name() {
    use std::process::{Command, Stdio};
    let f = Folder::new();
    write_f32(&f.path("a.npy"), 1500, 1500);
    for signal in ["-INT", "-KILL"] {
        let mut child = Command::new(env!("CARGO_BIN_EXE_regauge"))
            .args([
                "move",
                "a.npy",
                "b.tif",
                "--turn",
                "31",
                "--kernel",
                "bspline:9",
                "--memory",
                "64MiB",
                "--threads",
                "1",
                "--quiet",
            ])
            .current_dir(&f.0)
            .stderr(Stdio::piped())
            .spawn()
            .unwrap();
        std::thread::sleep(std::time::Duration::from_millis(700));
        let id = child.id().to_string();
        Command::new("kill").args([signal, &id]).status().unwrap();
        let status = child.wait().unwrap();
        assert!(!status.success(), "the run was over before it could be stopped");
        assert!(!f.path("b.tif").exists() && !f.path("b.tif.ledger.json").exists());
        if signal == "-INT" {
            assert_eq!(status.code(), Some(1));
            assert_eq!(f.list(), ["a.npy"], "a stopped run tidies up");
        }
    }
}
