//! FITS: what is read and written, and where the pixels lie afterwards, from the formulas of the standard's papers.
#![allow(clippy::unwrap_used)]

#[path = "common/cli.rs"]
mod cli;
use cli::Folder;
use regauge::grid::{Grid, Sampling};
use regauge::job::{Conduct, Job};
use regauge::map::{Anchor, Map, Rescale, rescaled};
use regauge::raster::{Header, Raster, SampleType, Samples, Window, create, open};
use regauge::resample::Rules;
use std::path::Path;

/// A card in fixed format.
fn card(key: &str, value: &str) -> String {
    let text = format!("{key:<8}= {value:>20}");
    format!("{text:<80}")
}

/// A primary HDU of 32-bit samples: value = index.
fn fits(axes: &[usize], cards: &[(&str, String)]) -> Vec<u8> {
    let mut head = card("SIMPLE", "T") + &card("BITPIX", "-32") + &card("NAXIS", &axes.len().to_string());
    for (i, n) in axes.iter().enumerate() {
        head += &card(&format!("NAXIS{}", i + 1), &n.to_string());
    }
    finish(head, cards, axes.iter().product())
}

fn finish(mut head: String, cards: &[(&str, String)], samples: usize) -> Vec<u8> {
    cards.iter().for_each(|(key, value)| head += &card(key, value));
    head += &format!("{:<80}", "END");
    let mut bytes = head.into_bytes();
    bytes.resize(bytes.len().next_multiple_of(2880), b' ');
    bytes.extend((0..samples).flat_map(|i| (i as f32).to_be_bytes()));
    bytes.resize(bytes.len().next_multiple_of(2880), 0);
    bytes
}

/// The header of a file that was written, read here without the library.
struct Cards(Vec<(String, String)>);

impl Cards {
    fn read(path: &Path) -> Cards {
        let bytes = std::fs::read(path).unwrap();
        assert_eq!(bytes.len() % 2880, 0, "whole blocks");
        let mut out = Vec::new();
        for card in bytes.chunks_exact(80) {
            assert!(card.iter().all(|b| (32..127).contains(b)), "cards are ASCII text");
            let text = String::from_utf8(card.to_vec()).unwrap();
            if text.trim_end() == "END" {
                return Cards(out);
            }
            let value = text[8..].strip_prefix("= ").unwrap_or(&text[8..]);
            let value = match value.trim_start().strip_prefix('\'') {
                Some(t) => t.split('\'').next().unwrap().trim_end().to_owned(),
                None => value.split('/').next().unwrap().trim().to_owned(),
            };
            out.push((text[..8].trim_end().to_owned(), value));
        }
        panic!("no END");
    }

    fn text(&self, key: &str) -> Option<&str> {
        self.0.iter().find(|c| c.0 == key).map(|c| c.1.as_str())
    }

    fn number(&self, key: &str) -> Option<f64> {
        self.text(key).map(|v| v.replace('D', "E").parse().unwrap())
    }

    /// Intermediate coordinates of (row, column): Greisen and Calabretta 2002, formulas (1), (3) and (189), SIP before them.
    fn intermediate(&self, row: f64, column: f64, letter: &str) -> [f64; 2] {
        let get = |key: String| self.number(&(key + letter));
        let mut p = [0, 1].map(|j| [column, row][j] + 1.0 - get(format!("CRPIX{}", j + 1)).unwrap_or(0.0));
        if letter.is_empty() && self.text("A_ORDER").is_some() {
            let u = p;
            for (stem, out) in ["A", "B"].iter().zip(&mut p) {
                for (i, j) in (0..=3).flat_map(|i| (0..=3).map(move |j| (i, j))) {
                    *out += get(format!("{stem}_{i}_{j}")).unwrap_or(0.0) * u[0].powi(i) * u[1].powi(j);
                }
            }
        }
        let any_cd =
            self.0.iter().any(|c| c.0.starts_with("CD") && c.0.contains('_') && c.0.ends_with(letter));
        let d = [0, 1].map(|i| get(format!("CDELT{}", i + 1)).unwrap_or(1.0));
        let turn = self.number(&format!("CROTA2{letter}")).unwrap_or(0.0).to_radians();
        let older = [[turn.cos(), -turn.sin() * d[1] / d[0]], [turn.sin() * d[0] / d[1], turn.cos()]];
        [0, 1].map(|i| {
            (0..2)
                .map(|j| {
                    let cd = get(format!("CD{}_{}", i + 1, j + 1));
                    let pc = get(format!("PC{}_{}", i + 1, j + 1));
                    let any_pc = self.0.iter().any(|c| c.0.starts_with("PC") && c.0.contains('_'));
                    let usual = if any_pc { f64::from(i == j) } else { older[i][j] };
                    p[j] * if any_cd { cd.unwrap_or(0.0) } else { d[i] * pc.unwrap_or(usual) }
                })
                .sum()
        })
    }

    /// Right ascension and declination in degrees by the gnomonic projection, LONPOLE 180: Calabretta and Greisen 2002
    /// (A&A 395:1077), formulas (2), (14), (15) and (55).
    fn sky(&self, row: f64, column: f64) -> [f64; 2] {
        let [x, y] = self.intermediate(row, column, "").map(f64::to_radians);
        let (phi, theta) = (x.atan2(-y), 1f64.atan2(x.hypot(y)));
        let (a0, d0) =
            (self.number("CRVAL1").unwrap().to_radians(), self.number("CRVAL2").unwrap().to_radians());
        let turn = phi - std::f64::consts::PI;
        let a = a0
            + (-theta.cos() * turn.sin()).atan2(theta.sin() * d0.cos() - theta.cos() * d0.sin() * turn.cos());
        let d = (theta.sin() * d0.sin() + theta.cos() * d0.cos() * turn.cos()).asin();
        [a.to_degrees(), d.to_degrees()]
    }
}

fn text(v: &str) -> String {
    format!("'{v:<8}'")
}

const PIXEL: f64 = 5e-4;

/// A description of the sky, its matrix in one of four forms.
fn sky(form: &str) -> Vec<(&'static str, String)> {
    let (sin, cos) = 12f64.to_radians().sin_cos();
    let mut out = vec![
        ("CTYPE1", text("RA---TAN")),
        ("CTYPE2", text("DEC--TAN")),
        ("CRVAL1", "83.633".into()),
        ("CRVAL2", "22.0145".into()),
        ("CRPIX1", "20.25".into()),
        ("CRPIX2", "17.5".into()),
    ];
    out.extend(match form {
        "cd" | "sip" => vec![
            ("CD1_1", (-PIXEL * cos).to_string()),
            ("CD1_2", (PIXEL * sin).to_string()),
            ("CD2_1", (PIXEL * sin).to_string()),
            ("CD2_2", (PIXEL * cos).to_string()),
        ],
        _ => vec![("CDELT1", (-PIXEL).to_string()), ("CDELT2", (1.5 * PIXEL).to_string())],
    });
    out.extend(match form {
        "pc" => vec![
            ("PC1_1", cos.to_string()),
            ("PC1_2", (-sin).to_string()),
            ("PC2_1", sin.to_string()),
            ("PC2_2", cos.to_string()),
        ],
        "crota" => vec![("CROTA2", "12.0".into())],
        "sip" => vec![
            ("A_ORDER", "3".into()),
            ("B_ORDER", "2".into()),
            ("A_2_0", "1.5E-4".into()),
            ("A_0_3", "-2E-6".into()),
            ("B_1_1", "3D-4".into()),
            ("B_0_2", "-1E-4".into()),
        ],
        _ => Vec::new(),
    });
    if form == "sip" {
        out[0].1 = "'RA---TAN-SIP'".into();
        out[1].1 = "'DEC--TAN-SIP'".into();
    }
    // Millimetres on the detector, by another letter.
    out.extend([("CRPIX1D", "3.0".into()), ("CDELT1D", "0.015".into()), ("CDELT2D", "0.02".into())]);
    out
}

/// Runs a job from a.fits to b.fits.
fn run(f: &Folder, target: Grid, back: Map) -> Cards {
    let job = Job {
        input: f.path("a.fits"),
        output: f.path("b.fits"),
        target,
        back,
        rules: Rules::default(),
        mask: None,
        sigma: None,
    };
    job.run(&Conduct { overwrite: true, ..Conduct::default() }, &()).unwrap();
    Cards::read(&f.path("b.fits"))
}

#[test]
fn sky_positions_stay_to_a_billionth_of_a_pixel() {
    let f = Folder::new();
    for form in ["cd", "pc", "crota", "delta", "sip"] {
        std::fs::write(f.path("a.fits"), fits(&[53, 37], &sky(form))).unwrap();
        let before = Cards::read(&f.path("a.fits"));
        let grid = open(&f.path("a.fits")).unwrap().header().grid.clone();
        let mut cases = vec![
            rescaled(&grid, Rescale::Factor(0.4, 0.4), Anchor::Edge).unwrap(),
            rescaled(&grid, Rescale::Factor(0.7, 1.9), Anchor::Edge).unwrap(),
            rescaled(&grid, Rescale::Size(11, 13), Anchor::Centre).unwrap(),
        ];
        // Cut out, by whole pixels and by parts of them.
        for origin in [(5.0, 7.0), (3.25, -2.6)] {
            cases.push((grid.stepped(20, 30, (1.0, 1.0), origin), Map::shift(origin.0, origin.1)));
        }
        if form != "sip" {
            // A lattice that stands obliquely on the first.
            let w = grid.world.unwrap();
            let at = grid.world_at(4.0, 6.0);
            let world = [
                [0.9 * w[0][0] + 0.2 * w[0][1], -0.2 * w[0][0] + 1.1 * w[0][1], at.0],
                [0.9 * w[1][0] + 0.2 * w[1][1], -0.2 * w[1][0] + 1.1 * w[1][1], at.1],
            ];
            let target = Grid { rows: 20, columns: 25, world: Some(world), ..grid.clone() };
            let back = target.to(&grid).unwrap();
            cases.push((target, back));
        }
        for (target, back) in cases {
            let after = run(&f, target.clone(), back);
            assert_eq!(after.text("CRVAL1"), Some("83.633"));
            let mut worst = 0f64;
            for k in 0..100 {
                let part = |ratio: f64| (f64::from(k) * ratio).fract();
                let (r, c) =
                    (part(0.754_877_666) * target.rows as f64, part(0.569_840_291) * target.columns as f64);
                let (or, oc) = back.apply(r, c);
                let (new, old) = (after.sky(r, c), before.sky(or, oc));
                let off = ((new[0] - old[0]) * old[1].to_radians().cos()).hypot(new[1] - old[1]) / PIXEL;
                let (new, old) = (after.intermediate(r, c, "D"), before.intermediate(or, oc, "D"));
                worst = worst.max(off).max((new[0] - old[0]).hypot(new[1] - old[1]) / 0.015);
            }
            assert!(worst < 1e-9, "{form}, {} x {}: {worst:e} px", target.rows, target.columns);
        }
    }
}

#[test]
fn a_turned_grid_has_no_sip_any_more_and_says_so() {
    let f = Folder::new();
    std::fs::write(f.path("a.fits"), fits(&[53, 37], &sky("sip"))).unwrap();
    let source = open(&f.path("a.fits")).unwrap();
    assert!(source.header().storage.notes.iter().any(|n| n.contains("SIP")));
    let grid = &source.header().grid;
    let w = grid.world.unwrap();
    let world = [[w[0][1], w[0][0], w[0][2]], [w[1][1], w[1][0], w[1][2]]];
    let target = Grid { rows: 53, columns: 37, world: Some(world), ..grid.clone() };
    let after = run(&f, target.clone(), target.to(grid).unwrap());
    assert_eq!(after.text("CTYPE1"), Some("RA---TAN"));
    assert!(!after.0.iter().any(|c| c.0.starts_with("A_") || c.0.starts_with("B_")));
}

#[test]
fn what_does_not_change_stands_letter_by_letter() {
    let f = Folder::new();
    let mut cards = sky("crota");
    cards.push(("EXPTIME", "1.250E+01 / seconds".into()));
    std::fs::write(f.path("a.fits"), fits(&[53, 37], &cards)).unwrap();
    let grid = open(&f.path("a.fits")).unwrap().header().grid.clone();
    run(&f, grid, Map::IDENTITY);
    let (before, after) =
        (std::fs::read(f.path("a.fits")).unwrap(), std::fs::read(f.path("b.fits")).unwrap());
    for card in before[..2880].chunks_exact(80) {
        assert!(after.chunks_exact(80).any(|c| c == card), "{}", String::from_utf8_lossy(card));
    }
    assert_eq!(before[2880..], after[after.len() - (before.len() - 2880)..]);
}

#[test]
fn a_raster_laid_by_a_map_gets_the_sky_of_its_reference() {
    let f = Folder::new();
    std::fs::write(f.path("a.fits"), fits(&[53, 37], &sky("cd"))).unwrap();
    let mut other = sky("pc");
    other[2].1 = "10.5".into();
    other[3].1 = "-41.0".into();
    other.push(("PV2_1", "0.25".into()));
    other.push(("EQUINOX", "2000.0".into()));
    std::fs::write(f.path("c.fits"), fits(&[53, 37], &other)).unwrap();
    let size = r#"{"rows": 37, "columns": 53}"#;
    let map = format!(
        r#"{{"model": "shift", "matrix": [[1,0,2],[0,1,-3],[0,0,1]], "moving": {size}, "reference": {size}}}"#
    );
    std::fs::write(f.path("m.json"), map).unwrap();
    let bytes: Vec<u8> = (0..37 * 53).flat_map(|i| (i as f32).to_le_bytes()).collect();
    cli::write_npy(&f.path("n.npy"), 37, 53, "<f4", &bytes);
    f.regauge(&["unify", "a.fits", "--onto", "c.fits", "--map", "m.json", "--out", "by-map"]).ends(0);
    let (want, got) = (Cards::read(&f.path("c.fits")), Cards::read(&f.path("by-map/a.fits")));
    let near =
        |a: [f64; 2], b: [f64; 2]| assert!((a[0] - b[0]).hypot(a[1] - b[1]) < 1e-9 * PIXEL, "{a:?} {b:?}");
    near(got.sky(3.0, 40.0), want.sky(3.0, 40.0));
    assert_eq!((got.number("PV2_1"), got.text("RADESYS")), (Some(0.25), Some("FK5")));
    assert!(got.text("CRPIX1D").is_none(), "the other description was of another raster");
    // The sky reaches rasters that have no cards at all.
    let grid = open(&f.path("c.fits")).unwrap().header().grid.clone();
    let job = |input: &str, target: Grid| Job {
        input: f.path(input),
        output: f.path("b.fits"),
        target,
        back: Map::IDENTITY,
        rules: Rules::default(),
        mask: None,
        sigma: None,
    };
    let conduct = Conduct { overwrite: true, ..Conduct::default() };
    job("n.npy", grid.clone()).run(&conduct, &()).unwrap();
    near(Cards::read(&f.path("b.fits")).sky(3.0, 40.0), want.sky(3.0, 40.0));
    assert_eq!(open(&f.path("b.fits")).unwrap().header().grid.crs, grid.crs);
    // And a grid without a place leaves none behind.
    job("a.fits", Grid::new(37, 53)).run(&conduct, &()).unwrap();
    let none = Cards::read(&f.path("b.fits"));
    assert!(none.text("CTYPE1").is_none() && none.text("CRVAL1").is_none() && none.text("CD1_1").is_none());
    // By the world they do not meet: another pointing, other parameters.
    f.regauge(&["unify", "a.fits", "--onto", "c.fits", "--out", "by-world"])
        .ends(1)
        .says("DEC--TAN at 10.5, -41");
    let mut near = sky("cd");
    near.push(("PV2_1", "0.5".into()));
    std::fs::write(f.path("p.fits"), fits(&[53, 37], &near)).unwrap();
    f.regauge(&["unify", "a.fits", "--onto", "p.fits", "--out", "by-world"]).ends(1).says("PV2_1 0.5");
    // What the standard takes for granted may be spelled out.
    let mut same = sky("cd");
    same.extend([("RADESYS", text("ICRS")), ("LONPOLE", "180.0".into()), ("LATPOLE", "22.0145".into())]);
    std::fs::write(f.path("q.fits"), fits(&[53, 37], &same)).unwrap();
    f.regauge(&["unify", "a.fits", "--onto", "q.fits", "--out", "by-world"]).ends(0);
}

#[test]
fn cubes_keep_their_axes() {
    let f = Folder::new();
    let mut cards = sky("cd");
    cards.extend([
        ("CTYPE3", text("FREQ")),
        ("CRPIX3", "1.0".into()),
        ("CD3_3", "1E6".into()),
        ("CTYPE4", text("STOKES")),
        ("CD4_4", "1.0".into()),
        // The frequency drifts along the columns.
        ("CD3_1", "250.0".into()),
    ]);
    std::fs::write(f.path("a.fits"), fits(&[53, 37, 1, 4], &cards)).unwrap();
    let source = open(&f.path("a.fits")).unwrap();
    assert_eq!(source.header().bands, 4);
    let Samples::F32(one) = source.read(2..3, &Window { rows: 5..6, columns: 7..9 }).unwrap() else {
        panic!()
    };
    let first = (2 * 37 * 53 + 5 * 53 + 7) as f32;
    assert_eq!(one, [first, first + 1.0]);
    let (target, back) = rescaled(&source.header().grid, Rescale::Factor(0.5, 0.5), Anchor::Edge).unwrap();
    let after = run(&f, target, back);
    let axes: Vec<_> =
        ["NAXIS", "NAXIS1", "NAXIS2", "NAXIS3", "NAXIS4"].map(|k| after.number(k).unwrap()).into();
    assert_eq!(axes, [4.0, 27.0, 19.0, 1.0, 4.0]);
    assert_eq!((after.number("CD3_3"), after.number("CD3_1")), (Some(1e6), Some(500.0)));
}

#[test]
fn headers_travel_without_what_would_be_wrong() {
    let f = Folder::new();
    let mut head = card("SIMPLE", "T") + &card("BITPIX", "8") + &card("NAXIS", "0") + &card("EXTEND", "T");
    head += &format!("{:<80}", "HISTORY of the night");
    let mut bytes = finish(head, &[("TELESCOP", text("tube")), ("OBJECT", text("nothing"))], 0);
    let ext = |name: &str| {
        card("XTENSION", &text("IMAGE"))
            + &card("BITPIX", "-32")
            + &card("NAXIS", "2")
            + &card("NAXIS1", "8")
            + &card("NAXIS2", "6")
            + &card("PCOUNT", "0")
            + &card("GCOUNT", "1")
            + &card("EXTNAME", &text(name))
    };
    let more = [
        ("OBJECT", text("field")),
        ("LTV1", "3.0".into()),
        ("LTM1_1", "1.0".into()),
        ("DATASEC", text("[1:8,1:6]")),
        ("DATAMAX", "47.0".into()),
        ("CHECKSUM", text("0123456789abcdef")),
        ("LTVAR", "2.5".into()),
    ];
    bytes.extend(finish(ext("SCI"), &more, 48));
    bytes.extend(finish(ext("ERR"), &[], 48));
    bytes.extend([0; 1000]);
    std::fs::write(f.path("a.fits"), &bytes).unwrap();
    let said = f.regauge(&["describe", "a.fits"]).ends(0);
    let words = said.stderr();
    for word in ["extension 1 (SCI)", "1 other HDU is", "DATAMAX, DATASEC, LTM1_1, LTV1", "is no HDU"] {
        assert!(words.contains(word), "{word}: {words}");
    }
    f.regauge(&["rescale", "a.fits", "b.fits", "--factor", "0.5"]).ends(0);
    let got = Cards::read(&f.path("b.fits"));
    assert_eq!(
        (got.text("TELESCOP"), got.text("OBJECT"), got.number("LTVAR")),
        (Some("tube"), Some("field"), Some(2.5))
    );
    assert!(got.0.iter().any(|c| c.0 == "HISTORY" && c.1.contains("night")));
    for key in ["XTENSION", "PCOUNT", "LTV1", "LTM1_1", "DATASEC", "DATAMAX", "CHECKSUM", "EXTEND"] {
        assert!(got.text(key).is_none(), "{key}");
    }
}

#[test]
fn all_types_and_codes_come_back() {
    let f = Folder::new();
    let samples: [Samples; 8] = [
        vec![0u8, 7, 255, 1, 2, 3].into(),
        vec![-128i8, 7, 127, 1, -2, 3].into(),
        vec![0u16, 7, 65_535, 32_767, 32_768, 3].into(),
        vec![-32_768i16, 7, 32_767, 1, -2, 3].into(),
        vec![0u32, 7, u32::MAX, 0x7fff_ffff, 0x8000_0000, 3].into(),
        vec![i32::MIN, 7, i32::MAX, 1, -2, 3].into(),
        vec![f32::MIN, 7.0, f32::MAX, f32::MIN_POSITIVE, -0.0, 3.0].into(),
        vec![f64::MIN, 7.0, f64::MAX, f64::MIN_POSITIVE, -0.0, 3.0].into(),
    ];
    for samples in samples {
        let mut header = Header::new(Grid::new(1, 3), 2, samples.sample_type());
        header.missing = Some(7.0);
        header.grid.sample = Sampling::Point;
        header.band_names = vec!["it's one".into(), "two".into()];
        let raster = Raster::new(header, samples.clone()).unwrap();
        let path = f.path("a.fits");
        let mut sink = create(&path, raster_header(&raster), true).unwrap();
        for c in [1..3, 0..1] {
            let window = Window { rows: 0..1, columns: c };
            use regauge::raster::Source;
            sink.write(&window, &raster.read(0..2, &window).unwrap()).unwrap();
        }
        sink.finish().unwrap();
        let back = open(&path).unwrap();
        let h = back.header();
        assert_eq!((h.sample_type, h.bands, h.grid.sample), (samples.sample_type(), 2, Sampling::Point));
        assert_eq!(h.band_names, ["it's one", "two"]);
        let read = back.read(0..2, &Window::whole(&h.grid)).unwrap();
        match (&read, &samples) {
            // FITS has NaN alone for missing in floating point.
            (Samples::F32(a), Samples::F32(b)) => {
                assert!(a[1].is_nan() && a[0] == b[0] && a[2..] == b[2..] && h.missing.is_none());
            }
            (Samples::F64(a), Samples::F64(b)) => {
                assert!(a[1].is_nan() && a[0] == b[0] && a[2..] == b[2..] && h.missing.is_none());
            }
            _ => assert_eq!((&read, h.missing), (&samples, Some(7.0))),
        }
    }
    let mut header = Header::new(Grid::new(1, 3), 1, SampleType::U8);
    header.missing = Some(-1.0);
    assert_eq!(create(&f.path("b.fits"), &header, true).err().unwrap().exit_code(), 2);
}

fn raster_header(raster: &Raster) -> &Header {
    use regauge::raster::Source;
    raster.header()
}

#[test]
fn damage_is_told_by_its_card() {
    let f = Folder::new();
    let good = fits(&[53, 37], &sky("cd"));
    let swap = |from: &str, to: &str| {
        let text: String = good.iter().map(|b| char::from(*b)).collect();
        assert!(text.contains(from));
        text.replace(from, to).chars().map(|c| c as u8).collect::<Vec<u8>>()
    };
    let key = |key: &str, value: &str| {
        let text: String = good[..2880].iter().map(|b| char::from(*b)).collect();
        let at = text.find(&format!("{key:<8}=")).unwrap();
        let mut bytes = good.clone();
        bytes[at..at + 80].copy_from_slice(card(key, value).as_bytes());
        bytes
    };
    for (bytes, word) in [
        (swap("END     ", "        "), "END"),
        (good[..2880].to_vec(), "NAXISn"),
        (good[..1000].to_vec(), "END"),
        (key("NAXIS1", "9223372036854775807"), "NAXIS1"),
        (key("NAXIS1", "99999999"), "do not stand in"),
        (key("NAXIS2", "-4"), "NAXIS2"),
        (key("NAXIS2", "'four'"), "NAXIS2"),
        (key("NAXIS", "1000"), "NAXIS"),
        (key("NAXIS", "3"), "NAXIS3"),
        (key("BITPIX", "12"), "BITPIX"),
        (key("BITPIX", "64"), "64-bit"),
        (key("SIMPLE", "F"), "SIMPLE"),
        (key("CRPIX1", "nan"), "CRPIX1"),
        (key("CD1_2", "1E999"), "CD1_2"),
        (key("CRVAL2", "'north'"), "CRVAL2"),
        (swap("RA---TAN", "RA\u{b5}--TAN"), "ASCII"),
    ] {
        std::fs::write(f.path("bad.fits"), bytes).unwrap();
        f.regauge(&["describe", "bad.fits"]).ends(1).says("bad.fits").says(word);
    }
    // A matrix without inverse is no reason to refuse the samples.
    let mut flat = sky("cd");
    flat.truncate(6);
    flat.push(("CD1_1", "1.0".into()));
    std::fs::write(f.path("flat.fits"), fits(&[53, 37], &flat)).unwrap();
    f.regauge(&["describe", "flat.fits"]).ends(0).says("no inverse");
    f.regauge(&["rescale", "flat.fits", "out.fits", "--factor", "2"]).ends(0);
    assert!(Cards::read(&f.path("out.fits")).text("CRPIX1").is_none());
}
