//! Files: round trips of every layout, and damage of every kind.
#![allow(clippy::unwrap_used)]

#[path = "common/cli.rs"]
mod cli;
use cli::Folder;
use proptest::prelude::*;
use regauge::grid::{Grid, Sampling};
use regauge::raster::{
    Compression, Header, Raster, SampleType, Samples, Source, Window, create, digest, open,
};
use std::path::Path;

const TYPES: [SampleType; 8] = [
    SampleType::U8,
    SampleType::I8,
    SampleType::U16,
    SampleType::I16,
    SampleType::U32,
    SampleType::I32,
    SampleType::F32,
    SampleType::F64,
];

/// Uneven samples of a type.
fn samples(sample_type: SampleType, len: usize, seed: u64) -> Samples {
    let value = |i: usize| {
        let mut z = (i as u64 + 1).wrapping_mul(0x9E37_79B9_7F4A_7C15) ^ seed;
        z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
        z ^ (z >> 27)
    };
    match sample_type {
        SampleType::U8 => Samples::U8((0..len).map(|i| value(i) as u8).collect()),
        SampleType::I8 => Samples::I8((0..len).map(|i| value(i) as i8).collect()),
        SampleType::U16 => Samples::U16((0..len).map(|i| value(i) as u16).collect()),
        SampleType::I16 => Samples::I16((0..len).map(|i| value(i) as i16).collect()),
        SampleType::U32 => Samples::U32((0..len).map(|i| value(i) as u32).collect()),
        SampleType::I32 => Samples::I32((0..len).map(|i| value(i) as i32).collect()),
        SampleType::F32 => Samples::F32((0..len).map(|i| value(i) as i32 as f32 * 1e-3).collect()),
        SampleType::F64 => Samples::F64((0..len).map(|i| value(i) as i64 as f64 * 1e-7).collect()),
    }
}

fn raster(rows: usize, columns: usize, bands: usize, sample_type: SampleType, seed: u64) -> Raster {
    let header = Header::new(Grid::new(rows, columns), bands, sample_type);
    Raster::new(header, samples(sample_type, rows * columns * bands, seed)).unwrap()
}

fn write(path: &Path, raster: &Raster) {
    let mut sink = create(path, raster.header(), true).unwrap();
    sink.write(&Window::whole(&raster.header().grid), raster.samples()).unwrap();
    sink.finish().unwrap();
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 96, ..ProptestConfig::default() })]

    #[test]
    fn tiffs_come_back_as_they_were(
        rows in 1usize..300,
        columns in 1usize..600,
        kind in 0usize..8,
        layout in (1usize..3, 1usize..4, any::<bool>()),
        compression in 0usize..5,
        predict in any::<bool>(),
        seed in any::<u64>(),
        place in (0.0f64..1.0, 0.0f64..1.0, 0.0f64..1.0, 0.0f64..1.0),
    ) {
        let f = Folder::new();
        let (pages, per_pixel, planar) = layout;
        let mut r = raster(rows, columns, pages * per_pixel, TYPES[kind], seed);
        let s = &mut r.header_mut().storage;
        s.samples_per_pixel = per_pixel;
        s.planar = planar;
        s.compression = [Compression::None, Compression::Lzw, Compression::Deflate, Compression::PackBits, Compression::Zstd][compression];
        s.predictor = if predict { 2 } else { 1 };
        let path = f.path("a.tif");
        write(&path, &r);
        let back = open(&path).unwrap();
        let bands = pages * per_pixel;
        prop_assert_eq!(back.header().bands, bands);
        prop_assert_eq!(&back.read(0..bands, &Window::whole(&r.header().grid)).unwrap(), r.samples());
        prop_assert_eq!(digest(back.as_ref()).unwrap(), digest(&r).unwrap());
        // Any window of any bands equals the same part of the whole.
        let (a, b) = ((place.0 * rows as f64) as usize, (place.1 * columns as f64) as usize);
        let window = Window {
            rows: a..a + 1 + (place.2 * (rows - a - 1) as f64) as usize,
            columns: b..b + 1 + (place.3 * (columns - b - 1) as f64) as usize,
        };
        let some = bands / 2..bands;
        prop_assert_eq!(back.read(some.clone(), &window).unwrap(), r.read(some, &window).unwrap());
    }

    #[test]
    fn npy_fits_and_png_come_back_as_they_were(rows in 1usize..60, columns in 1usize..70, kind in 0usize..8, bands in 1usize..5, seed in any::<u64>()) {
        let f = Folder::new();
        let r = raster(rows, columns, bands, TYPES[kind], seed);
        let all = Window::whole(&r.header().grid);
        write(&f.path("a.npy"), &r);
        prop_assert_eq!(&open(&f.path("a.npy")).unwrap().read(0..bands, &all).unwrap(), r.samples());
        write(&f.path("a.fits"), &r);
        prop_assert_eq!(&open(&f.path("a.fits")).unwrap().read(0..bands, &all).unwrap(), r.samples());
        if kind == 0 || kind == 2 {
            write(&f.path("a.png"), &r);
            prop_assert_eq!(&open(&f.path("a.png")).unwrap().read(0..bands, &all).unwrap(), r.samples());
        }
    }
}

#[test]
fn grids_and_codes_travel_in_all_forms() {
    let f = Folder::new();
    let worlds = [
        [[2.0, 0.0, 1001.0], [0.0, -3.0, 4998.5]],
        [[2.0, 0.5, 1001.0], [0.5, -2.0, 4998.5]],
        [[-2.0, 0.0, 1001.0], [0.0, 3.0, 4998.5]],
    ];
    for world in worlds {
        for sample in [Sampling::Area, Sampling::Point] {
            for crs in [Some("EPSG:32633"), Some("EPSG:4326"), None] {
                let mut r = raster(20, 30, 1, SampleType::F32, 1);
                let h = r.header_mut();
                h.grid.world = Some(world);
                h.grid.sample = sample;
                h.grid.crs = crs.map(str::to_owned);
                h.missing = Some(-9999.25);
                write(&f.path("a.tif"), &r);
                let back = open(&f.path("a.tif")).unwrap();
                assert_eq!(back.header().grid, r.header().grid);
                assert_eq!(back.header().missing, Some(-9999.25));
            }
        }
    }
}

#[test]
fn an_unfinished_file_never_has_its_name() {
    let f = Folder::new();
    let r = raster(40, 50, 1, SampleType::U16, 1);
    let mut sink = create(&f.path("a.tif"), r.header(), false).unwrap();
    sink.write(&Window::whole(&r.header().grid), r.samples()).unwrap();
    assert!(!f.path("a.tif").exists());
    drop(sink);
    assert!(f.list().is_empty(), "{:?}", f.list());
    write(&f.path("a.tif"), &r);
    assert_eq!(create(&f.path("a.tif"), r.header(), false).err().unwrap().exit_code(), 2);
}

/// Reads everything; what matters is that it ends, in a result, without a panic.
fn try_all(path: &Path) -> bool {
    let Ok(source) = open(path) else { return false };
    let header = source.header();
    // What the header promises may be absurd; a reader asks for windows.
    let window = Window { rows: 0..header.grid.rows.min(64), columns: 0..header.grid.columns.min(64) };
    source.read(0..header.bands.min(4), &window).is_ok()
}

#[test]
fn damaged_files_end_in_errors() {
    let f = Folder::new();
    let mut state = 0x1234_5678_9abc_def0u64;
    let mut next = || {
        state ^= state << 13;
        state ^= state >> 7;
        state ^= state << 17;
        state
    };
    let mut originals = Vec::new();
    for (i, compression) in
        [Compression::None, Compression::Lzw, Compression::Deflate, Compression::PackBits, Compression::Zstd]
            .into_iter()
            .enumerate()
    {
        let mut r = raster(30, 40, 2, TYPES[(i * 3) % 8], 5);
        let h = r.header_mut();
        h.storage.compression = compression;
        h.storage.predictor = 2;
        h.storage.planar = i % 2 == 0;
        h.storage.samples_per_pixel = 2;
        h.grid.world = Some([[1.0, 0.0, 0.0], [0.0, -1.0, 0.0]]);
        h.grid.crs = Some("EPSG:32633".into());
        write(&f.path("a.tif"), &r);
        originals.push(("tif", std::fs::read(f.path("a.tif")).unwrap()));
    }
    let r = raster(10, 12, 3, SampleType::U8, 5);
    write(&f.path("a.npy"), &r);
    write(&f.path("a.png"), &r);
    write(&f.path("a.fits"), &r);
    originals.push(("fits", std::fs::read(f.path("a.fits")).unwrap()));
    originals.push(("npy", std::fs::read(f.path("a.npy")).unwrap()));
    originals.push(("png", std::fs::read(f.path("a.png")).unwrap()));
    let mut refused = 0;
    for round in 0..600 {
        for (ending, original) in &originals {
            let mut bytes = original.clone();
            if round % 3 == 0 {
                bytes.truncate(next() as usize % bytes.len());
            } else {
                // Most of a TIFF is samples; its directory stands at the end, NPY's and PNG's at the beginning.
                for _ in 0..1 + next() % 4 {
                    let reach = if next() % 2 == 0 { bytes.len() } else { bytes.len().min(400) };
                    let at = bytes.len() - 1 - next() as usize % reach;
                    let start = if *ending == "fits" { 900 } else { 64 };
                    let at = if next() % 4 == 0 { at % start } else { at };
                    bytes[at] = next() as u8;
                }
            }
            let path = f.path(&format!("b.{ending}"));
            std::fs::write(&path, &bytes).unwrap();
            refused += usize::from(!try_all(&path));
        }
    }
    assert!(refused > 500, "only {refused} of the damaged files were noticed");
}

#[test]
fn absurd_sizes_are_refused_before_memory_is_taken() {
    let f = Folder::new();
    // A TIFF of 4 billion by 4 billion pixels in one strip, in 130 bytes.
    let mut bytes = b"II\x2a\x00\x08\x00\x00\x00".to_vec();
    let tags: [(u16, u16, u32); 9] = [
        (256, 4, u32::MAX),
        (257, 4, u32::MAX),
        (258, 3, 16),
        (259, 3, 1),
        (262, 3, 1),
        (273, 4, 8),
        (277, 3, 1),
        (278, 4, u32::MAX),
        (279, 4, u32::MAX),
    ];
    bytes.extend((tags.len() as u16).to_le_bytes());
    for (tag, kind, value) in tags {
        bytes.extend(tag.to_le_bytes());
        bytes.extend(kind.to_le_bytes());
        bytes.extend(1u32.to_le_bytes());
        bytes.extend(value.to_le_bytes());
    }
    bytes.extend([0; 4]);
    std::fs::write(f.path("huge.tif"), &bytes).unwrap();
    f.regauge(&["describe", "huge.tif"]).ends(1).says("huge.tif");
    let head =
        b"\x93NUMPY\x01\x00\x46\x00{'descr': '<f8', 'fortran_order': False, 'shape': (99999999, 99999999)}\n";
    std::fs::write(f.path("huge.npy"), head).unwrap();
    f.regauge(&["describe", "huge.npy"]).ends(1).says("huge.npy");
}
