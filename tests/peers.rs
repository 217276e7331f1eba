//! Live tests against general-purpose libraries. They need a Python with tests/peers/requirements.txt, named by
//! REGAUGE_PYTHON; `tests/all.sh` provides it.
#![allow(clippy::unwrap_used)]

use std::process::Command;

fn run(script: &str) {
    let Some(python) = std::env::var_os("REGAUGE_PYTHON") else {
        eprintln!("skipped: REGAUGE_PYTHON names no Python with the peers; run tests/all.sh");
        return;
    };
    let folder = std::env::temp_dir().join(format!("regauge-peer-{script}-{}", std::process::id()));
    std::fs::create_dir_all(&folder).unwrap();
    let done = Command::new(python)
        .arg(format!("{}/tests/peers/{script}.py", env!("CARGO_MANIFEST_DIR")))
        .env("REGAUGE_BINARY", env!("CARGO_BIN_EXE_regauge"))
        .env("REGAUGE_FOLDER", &folder)
        .output()
        .unwrap();
    let said = String::from_utf8_lossy(&done.stdout).into_owned() + &String::from_utf8_lossy(&done.stderr);
    std::fs::remove_dir_all(&folder).unwrap();
    assert!(done.status.success(), "{script}:\n{said}");
    println!("{script}: {said}");
}

#[test]
fn splines_agree_with_scipy() {
    run("scipy_peer");
}

#[test]
fn real_pictures_and_elevations_agree_with_scipy() {
    run("packages_peer");
}

#[test]
fn audits_judge_what_scipy_and_opencv_made() {
    run("audit_peer");
}

#[test]
fn tiffs_go_to_and_from_tifffile_bit_for_bit() {
    run("tiff_peer");
}

#[test]
fn totals_are_differences_of_scipys_cumulative_spline() {
    run("totals_peer");
}

#[test]
fn fits_files_go_to_and_from_astropy() {
    run("fits_peer");
}

#[test]
fn report_pages_work_in_a_browser() {
    run("page_peer");
}
