//! The ledger: the account of one run, as JSON. The keys are a promise; other programs read them.

use crate::error::{Error, Result};
use crate::grid::Grid;
use crate::raster::SampleType;
use serde::{Deserialize, Serialize};
use std::io::Write;
use std::path::{Path, PathBuf};

/// The account of one run.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Ledger {
    /// Version that wrote it.
    pub regauge: String,
    /// The command as typed.
    pub command: Vec<String>,
    /// What went in.
    pub inputs: Vec<RasterEntry>,
    /// What came out.
    pub output: RasterEntry,
    /// The kernel.
    pub kernel: KernelEntry,
    /// What stood beyond the edges.
    pub extension: String,
    /// What a number is: `density`, `total`, `label` or `cyclic:PERIOD`.
    pub values: String,
    /// What was done against aliasing: `none`, `widen` or `least-squares`.
    pub reduce: String,
    /// The pass: `copy`, `rows-and-columns`, `gather`, `overlap`, `shear` or `majority`.
    pub method: String,
    /// Counts of output samples, over all bands.
    pub pixels: Pixels,
    /// Signal before and after, over the region that both grids cover.
    pub flux: Flux,
    /// Centre of the signal.
    pub centroid: Centroid,
    /// How far content was displaced.
    pub displacement: Displacement,
    /// How much detail was lost.
    pub blur: Blur,
    /// What a step edge suffers.
    pub ringing: Ringing,
    /// What noise became.
    pub noise: Noise,
    /// What the run took.
    pub time: Time,
    /// Everything needed to run it again.
    pub job: serde_json::Value,
}

/// A raster that went in or came out.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct RasterEntry {
    /// The path as given.
    pub path: PathBuf,
    /// Digest of the decoded samples and the grid.
    pub sha256: String,
    /// Rows.
    pub rows: usize,
    /// Columns.
    pub columns: usize,
    /// Bands.
    pub bands: usize,
    /// Type of the samples.
    #[serde(rename = "type")]
    pub sample_type: SampleType,
    /// Size and place.
    pub grid: Grid,
}

/// The kernel.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct KernelEntry {
    /// Full name.
    pub name: String,
    /// Taps along one axis; null where they follow the line's length.
    pub taps: Option<usize>,
    /// Approximation order; null for none that is finite.
    pub order: Option<u32>,
    /// Poles of the prefilter.
    pub poles: Vec<f64>,
}

/// Counts of output samples.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Pixels {
    /// All.
    pub total: u64,
    /// Those with a value.
    pub valid: u64,
    /// Those without.
    pub missing: u64,
    /// Set to the least value of the output's type.
    pub clipped_low: u64,
    /// Set to the greatest value of the output's type.
    pub clipped_high: u64,
    /// Outside the range of the input's samples.
    pub overshoot: u64,
    /// Leaning on missing samples by more than 1e-3 of their weight.
    pub near_gap: u64,
    /// Equal to the code for missing, and moved off it.
    pub moved_off_code: u64,
    /// Beyond the range of the samples around, and held to it by `--limit`.
    #[serde(default)]
    pub limited: u64,
}

/// Signal x area in input pixels, over the region that both grids cover; of totals their sum, wherever they lie.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Flux {
    /// Before.
    pub before: Option<f64>,
    /// After.
    pub after: Option<f64>,
    /// What left the frame; null for `density`.
    pub left_frame: Option<f64>,
    /// What pixels of totals near gaps were given for the part of them that is missing; null for `density`.
    #[serde(default)]
    pub filled_at_gaps: Option<f64>,
    /// What fell into pixels of totals that are missing; null for `density`.
    #[serde(default)]
    pub lost_in_gaps: Option<f64>,
    /// Sum of (stored - computed) x pixel area: the bias that rounding and saturation made.
    pub rounding: Option<f64>,
    /// Sum of moduli of what `--limit` cut off, or of totals handed to neighbours; null without it.
    #[serde(default)]
    pub limited: Option<f64>,
    /// Sum of moduli of what still exceeds the limits, since no neighbour had room; null without `--limit`.
    #[serde(default)]
    pub beyond_limits: Option<f64>,
    /// (after - before) / sum of |before|; null if that is 0. Of totals, after counts what left the frame and what gaps
    /// swallowed, but not what was filled in at them.
    pub closure: Option<f64>,
    /// The bound asked for.
    pub tolerance: Option<f64>,
    /// Whether |closure| keeps the bound; null if none was asked for.
    pub closed: Option<bool>,
    /// The same on a coarse grid over the output.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub local_closure: Option<LocalClosure>,
}

/// Closure on a coarse grid: where signal went, not only how much.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct LocalClosure {
    /// Coarse rows.
    pub rows: usize,
    /// Coarse columns.
    pub columns: usize,
    /// Output pixels of a coarse cell: rows, columns.
    pub cell: [usize; 2],
    /// (after - before) / sum of |before| of each cell, row by row; null where there is nothing to compare.
    pub values: Vec<Option<f64>>,
}

/// Centre of the signal in input pixels (row, column), over the region that both grids cover.
#[derive(Clone, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct Centroid {
    /// Of the input; null where the signal cancels.
    pub before: Option<[f64; 2]>,
    /// Of the output, mapped back.
    pub after: Option<[f64; 2]>,
}

/// Displacement of content in input pixels, positive down and right.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Displacement {
    /// Along rows (down).
    pub rows: f64,
    /// Along columns (right).
    pub columns: f64,
    /// Spread over sub-pixel phase.
    pub sigma: f64,
    /// `predicted` from the weights, or by `correlation`.
    pub how: String,
}

/// Loss of detail.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Blur {
    /// Modulus of the transfer, averaged over phase, of the axis that loses more.
    pub transfer: Transfer,
    /// Cycles per input pixel where it first falls to 1/2, at most the coarser grid's Nyquist.
    pub mtf50: f64,
}

/// Transfer at three frequencies in cycles per input pixel.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Transfer {
    /// At 0.10.
    #[serde(rename = "0.10")]
    pub at_010: f64,
    /// At 0.25.
    #[serde(rename = "0.25")]
    pub at_025: f64,
    /// At 0.40.
    #[serde(rename = "0.40")]
    pub at_040: f64,
}

/// Ringing.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Ringing {
    /// Overshoot of a step as a fraction of its height; null where it has no bound.
    pub step_overshoot: Option<f64>,
}

/// Noise.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Noise {
    /// Mean variance gain over sub-pixel phase.
    pub gain_mean: f64,
    /// Least.
    pub gain_min: f64,
    /// Greatest.
    pub gain_max: f64,
    /// Correlation made between a pixel and the one in the next row.
    pub lag1_rows: f64,
    /// The same for the next column.
    pub lag1_columns: f64,
    /// By which factor the uncertainty of a sum over N x N pixels is underestimated if the correlation is forgotten.
    #[serde(default)]
    pub sum_underestimated: SumUnderestimated,
}

/// The factor for windows of 2, 5, 10 and 50 pixels a side; null where it was not worked out.
#[derive(Clone, Copy, Debug, Default, PartialEq, Serialize, Deserialize)]
pub struct SumUnderestimated {
    /// 2 x 2.
    #[serde(rename = "2")]
    pub of_2: Option<f64>,
    /// 5 x 5.
    #[serde(rename = "5")]
    pub of_5: Option<f64>,
    /// 10 x 10.
    #[serde(rename = "10")]
    pub of_10: Option<f64>,
    /// 50 x 50.
    #[serde(rename = "50")]
    pub of_50: Option<f64>,
}

impl SumUnderestimated {
    /// From the four factors in order.
    pub fn of(factors: [Option<f64>; 4]) -> Self {
        let [of_2, of_5, of_10, of_50] = factors;
        SumUnderestimated { of_2, of_5, of_10, of_50 }
    }
}

/// What the run took.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Time {
    /// Wall time.
    pub seconds: f64,
    /// Output pixels (over all bands) per second, in millions.
    pub megapixels_per_second: f64,
    /// The largest resident size of the process so far; null where the system does not tell.
    pub peak_memory_bytes: Option<u64>,
}

impl Ledger {
    /// Writes the ledger: beside its name, synced, renamed.
    ///
    /// # Errors
    /// When the disk refuses; nothing is left then.
    pub fn write(&self, path: &Path) -> Result<()> {
        let mut text = serde_json::to_string_pretty(self)
            .map_err(|e| Error::io(path, "writing the ledger", std::io::Error::other(e)))?;
        text.push('\n');
        write_whole(path, text.as_bytes()).map_err(|e| Error::io(path, "writing the ledger", e))
    }

    /// Reads a ledger.
    ///
    /// # Errors
    /// When the file is missing or is no ledger.
    pub fn read(path: &Path) -> Result<Self> {
        let text = std::fs::read_to_string(path).map_err(|e| Error::io(path, "reading the ledger", e))?;
        serde_json::from_str(&text).map_err(|e| {
            Error::malformed(
                path,
                format!("line {}, column {}", e.line(), e.column()),
                format!("this is no ledger: {e}"),
            )
        })
    }

    /// Whether a check that was asked for did not hold.
    pub fn failed_a_check(&self) -> bool {
        self.flux.closed == Some(false)
    }
}

/// Writes a small file so that its name never stands for half of it.
pub fn write_whole(path: &Path, bytes: &[u8]) -> std::io::Result<()> {
    let name = path.file_name().map(|n| n.to_string_lossy().into_owned()).unwrap_or_default();
    let beside = path.with_file_name(format!(".{name}.{}.part", std::process::id()));
    let write = || {
        let mut file = std::fs::File::create(&beside)?;
        file.write_all(bytes)?;
        file.sync_all()?;
        std::fs::rename(&beside, path)
    };
    write().inspect_err(|_| {
        // The first error is the one to tell; the leftover goes either way.
        let _ = std::fs::remove_file(&beside);
    })
}

/// The largest resident size of this process, in bytes, where the system tells (Linux: VmHWM).
pub fn peak_memory_bytes() -> Option<u64> {
    let status = std::fs::read_to_string("/proc/self/status").ok()?;
    let line = status.lines().find(|l| l.starts_with("VmHWM:"))?;
    line.split_whitespace().nth(1)?.parse::<u64>().ok().map(|kib| kib * 1024)
}
