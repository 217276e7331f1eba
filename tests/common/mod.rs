//! What the tests share: rasters in memory and a run of the engine.
#![allow(dead_code)]

use regauge::grid::Grid;
use regauge::map::Map;
use regauge::raster::{Header, MissingCodes, Sample, SampleType, Samples, Source, Storage, Window};
use regauge::resample::{Engine, Extras, Noise, Plan, Rules, Shifted};
use std::ops::Range;

pub struct Memory {
    pub header: Header,
    pub values: Vec<f64>,
}

impl Memory {
    /// One band of f64; `sample_type` is what the passes are told.
    pub fn new(rows: usize, columns: usize, values: Vec<f64>, sample_type: SampleType) -> Self {
        assert_eq!(values.len(), rows * columns);
        let header = Header {
            grid: Grid::new(rows, columns),
            bands: 1,
            sample_type,
            missing: None,
            band_names: Vec::new(),
            storage: Storage::default(),
        };
        Memory { header, values }
    }
}

impl Source for Memory {
    fn header(&self) -> &Header {
        &self.header
    }
    fn read(&self, bands: Range<usize>, window: &Window) -> regauge::Result<Samples> {
        assert_eq!(bands, 0..1);
        let n = self.header.grid.columns;
        let all = window.rows.clone().flat_map(|r| window.columns.clone().map(move |c| r * n + c));
        let picked: Vec<f64> = all.map(|i| self.values[i]).collect();
        Ok(match self.header.sample_type {
            SampleType::F64 => Samples::F64(picked),
            SampleType::F32 => Samples::F32(picked.iter().map(|v| *v as f32).collect()),
            SampleType::U16 => Samples::U16(picked.iter().map(|v| *v as u16).collect()),
            SampleType::U8 => Samples::U8(picked.iter().map(|v| *v as u8).collect()),
            other => panic!("{other:?} is not used here"),
        })
    }
}

/// What a run of the engine gives.
pub struct Made {
    pub values: Vec<f64>,
    /// NaN where no noise was given.
    pub sigma: Vec<f64>,
    /// What totals did at gaps and beyond the frame.
    pub shifted: Shifted,
}

/// Runs the engine in memory; samples as f64.
pub fn run(
    source: &Memory,
    target: (usize, usize),
    back: &Map,
    rules: &Rules,
    side: Option<usize>,
) -> Vec<f64> {
    make(source, target, back, rules, None, side).values
}

/// The same with all that comes beside the samples.
pub fn make(
    source: &Memory,
    target: (usize, usize),
    back: &Map,
    rules: &Rules,
    noise: Option<&Noise>,
    side: Option<usize>,
) -> Made {
    let size = (source.header.grid.rows, source.header.grid.columns);
    let plan = Plan::new(size, target, back, rules).unwrap();
    let sample_type = rules.sample_type.unwrap_or(source.header.sample_type);
    let codes = MissingCodes { codes: rules.missing.into_iter().collect() };
    let extras = Extras { noise: noise.cloned(), ..Extras::default() };
    let engine = Engine { source, target, plan, rules, codes, sample_type, fill: None, extras };
    let empty = vec![f64::NAN; target.0 * target.1];
    let mut made = Made { values: empty.clone(), sigma: empty, shifted: Shifted::default() };
    engine
        .run(1, side, &mut |block| {
            let values: Vec<f64> =
                regauge::with_samples!(&block.samples, v => v.iter().map(|v| v.wide()).collect());
            let width = block.window.columns.len();
            for (i, r) in block.window.rows.clone().enumerate() {
                let to = r * target.1 + block.window.columns.start..r * target.1 + block.window.columns.end;
                let from = i * width..(i + 1) * width;
                made.values[to.clone()].copy_from_slice(&values[from.clone()]);
                if let Some(sigma) = &block.sigma {
                    made.sigma[to].copy_from_slice(&sigma[from]);
                }
            }
            made.shifted.merge(&block.shifted);
            Ok(())
        })
        .unwrap();
    made.shifted.merge(&engine.beyond(1, side, &mut |_| Ok(())).unwrap());
    made
}

/// Uneven values without symmetry, from a fixed seed.
pub fn values(len: usize, seed: u64) -> Vec<f64> {
    let mut state = seed.wrapping_mul(0x9E37_79B9_7F4A_7C15) | 1;
    (0..len)
        .map(|_| {
            state ^= state << 13;
            state ^= state >> 7;
            state ^= state << 17;
            (state >> 11) as f64 / (1u64 << 53) as f64 * 2.0 - 1.0
        })
        .collect()
}

/// The largest difference, NaN where the two do not agree on what is missing.
pub fn worst(a: &[f64], b: &[f64]) -> f64 {
    assert_eq!(a.len(), b.len());
    a.iter().zip(b).fold(0.0, |worst, (a, b)| {
        let d = match (a.is_nan(), b.is_nan()) {
            (true, true) => 0.0,
            (false, false) => (a - b).abs(),
            _ => f64::NAN,
        };
        if d.is_nan() || worst.is_nan() { f64::NAN } else { worst.max(d) }
    })
}
