//! The account of an audit: what a resampling, whoever did it, made of a raster. The keys are a promise; those that an audit
//! shares with the ledger mean the same.

use super::{Centroid, Flux, RasterEntry, Time};
use crate::map::Map;
use crate::measure::audit::{
    Aliasing, ClosureMap, Curve, Extent, Field, Kind, Loss, NoVote, Sharpness, Verdict,
};
use serde::Serialize;

/// The account of an audit.
#[derive(Clone, Debug, Serialize)]
pub struct Audit {
    /// Version that wrote it.
    pub regauge: String,
    /// The command as typed.
    pub command: Vec<String>,
    /// BEFORE and AFTER.
    pub inputs: Vec<RasterEntry>,
    /// How the grids were laid on each other.
    pub relation: Relation,
    /// What a number is: `density` or `total`.
    pub values: String,
    /// Bands whose signal, gaps and clipping were looked at, counted from 1.
    pub bands: Vec<usize>,
    /// The band whose displacement and blur were measured, counted from 1.
    pub band: usize,
    /// Counts of AFTER's samples.
    pub pixels: AuditPixels,
    /// Signal over the region that both cover with samples.
    pub flux: Flux,
    /// Centre of that signal.
    pub centroid: Centroid,
    /// Where signal went.
    pub closure_map: ClosureMap,
    /// How a loss lies over the raster.
    pub loss: Loss,
    /// Displacement in the middle of the frame.
    pub displacement: MeasuredDisplacement,
    /// Displacement over the frame.
    pub displacement_field: DisplacementField,
    /// Loss of detail.
    pub blur: MeasuredBlur,
    /// The transfer over frequency; null where no patch could be looked at.
    pub spectra: Option<Spectrum>,
    /// What AFTER shows beside BEFORE's content; null where no patch could be looked at.
    pub aliasing: Option<Aliasing>,
    /// Missing samples.
    pub gaps: Gaps,
    /// Samples at the end of their range.
    pub clipping: Clipping,
    /// What was asked for, and whether it held.
    pub checks: Vec<Check>,
    /// What the run took.
    pub time: Time,
}

/// How AFTER's grid was laid on BEFORE's.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Relation {
    /// `world`, `map` or `outer-edges`.
    pub by: String,
    /// From a position (row, column) in AFTER to the place in BEFORE that it should show.
    pub back: Map,
}

/// Counts of AFTER's samples over the bands looked at.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct AuditPixels {
    /// All.
    pub total: u64,
    /// Those with a number.
    pub valid: u64,
    /// Those without.
    pub missing: u64,
    /// At the lower end of AFTER's range where BEFORE goes on.
    pub clipped_low: u64,
    /// At the upper end of AFTER's range where BEFORE goes on.
    pub clipped_high: u64,
    /// Outside the range of BEFORE's samples.
    pub overshoot: u64,
    /// Numbers over a pixel of which BEFORE misses a part.
    pub near_gap: u64,
}

/// Displacement of content in input pixels, positive down and right; null where nothing could be measured.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct MeasuredDisplacement {
    /// Along rows (down), in the middle of the frame.
    pub rows: Option<f64>,
    /// Along columns (right), in the middle of the frame.
    pub columns: Option<f64>,
    /// Standard error of both, the larger.
    pub sigma: Option<f64>,
    /// `correlation`.
    pub how: String,
}

/// Displacement over the frame.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct DisplacementField {
    /// What it looks like and the likely cause; null where nothing could be measured.
    pub verdict: Option<Verdict>,
    /// The robust linear field; null where nothing could be measured.
    pub field: Option<Field>,
    /// The largest displacement in the frame, input pixels: of the field at a corner, or for an irregular field that of the
    /// ninth of ten tiles.
    pub largest: Option<f64>,
    /// The frame, input pixels.
    pub extent: Extent,
    /// Tiles that were looked at.
    pub tiles: Vec<Tile>,
    /// Tiles with a vote.
    pub voted: usize,
    /// Tiles without, because samples are missing in or near them, or they reach beyond BEFORE.
    pub with_gaps: usize,
    /// Tiles without, because they have too little texture.
    pub flat: usize,
    /// Tiles without, because both rasters do not show the same there.
    pub unlike: usize,
}

/// One tile.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Tile {
    /// Its centre in BEFORE (row, column).
    pub at: [f64; 2],
    /// Its rows in AFTER: first, and one beyond the last.
    pub after_rows: [usize; 2],
    /// Its columns in AFTER: first, and one beyond the last.
    pub after_columns: [usize; 2],
    /// Displacement (rows, columns) in input pixels; null without a vote.
    pub displacement: Option<[f64; 2]>,
    /// Standard errors of both.
    pub sigma: Option<[f64; 2]>,
    /// Correlation coefficient of both rasters at that displacement.
    pub correlation: Option<f64>,
    /// Why it has no vote.
    pub no_vote: Option<NoVote>,
}

/// Loss of detail.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct MeasuredBlur {
    /// What is left of BEFORE's detail over all directions, 1 at frequency 0.
    pub transfer: MeasuredTransfer,
    /// Cycles per input pixel where it first falls to 1/2, at most the coarser grid's Nyquist frequency (which also stands
    /// here where nothing could be measured: see `spectra`).
    pub mtf50: f64,
}

/// Transfer at three frequencies in cycles per input pixel; 0 above the coarser grid's Nyquist frequency, null where BEFORE
/// has too little detail to tell.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct MeasuredTransfer {
    /// At 0.10.
    #[serde(rename = "0.10")]
    pub at_010: Option<f64>,
    /// At 0.25.
    #[serde(rename = "0.25")]
    pub at_025: Option<f64>,
    /// At 0.40.
    #[serde(rename = "0.40")]
    pub at_040: Option<f64>,
}

/// The transfer over frequency.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Spectrum {
    /// Rings of frequencies.
    pub curve: Curve,
    /// What they come down to; null where BEFORE has too little detail at every frequency.
    pub sharpness: Option<Sharpness>,
    /// Patches that were averaged.
    pub patches: usize,
}

/// Missing samples, counted over the bands looked at.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Gaps {
    /// Missing in BEFORE.
    pub missing_before: u64,
    /// Missing in AFTER.
    pub missing_after: u64,
    /// Missing in AFTER in the middle of BEFORE's samples, which reach 3 pixels and more around them.
    pub appeared: u64,
    /// Missing in AFTER within 4 input pixels of a gap.
    pub kept: u64,
    /// Missing in AFTER at BEFORE's border.
    pub at_border: u64,
    /// Missing in AFTER outside BEFORE.
    pub outside: u64,
    /// Numbers in AFTER where BEFORE has no sample under the pixel.
    pub leaked: u64,
    /// Numbers in AFTER over a pixel of which BEFORE misses a part.
    pub near_gap: u64,
    /// Numbers near a gap that lie between the code for missing and BEFORE's range: the code was averaged into them.
    pub mixed_with_code: u64,
    /// Numbers in AFTER wholly outside BEFORE.
    pub invented_outside: u64,
}

/// Samples at the end of their range, counted over the bands looked at.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Clipping {
    /// Samples of AFTER at a lower plateau that BEFORE does not have there.
    pub low: u64,
    /// Samples of AFTER at an upper plateau that BEFORE does not have there.
    pub high: u64,
    /// The lower plateau.
    pub low_value: Option<f64>,
    /// The upper plateau.
    pub high_value: Option<f64>,
    /// Whether a plateau is the limit of AFTER's type.
    pub at_type_limit: bool,
    /// All samples of AFTER.
    pub samples: u64,
    /// Samples of AFTER above BEFORE's range.
    pub above_range: u64,
    /// Samples of AFTER below BEFORE's range.
    pub below_range: u64,
    /// How far above it at most.
    pub most_above: f64,
    /// How far below it at most.
    pub most_below: f64,
}

/// A check.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Check {
    /// `closure`, `displacement` or `mtf50`.
    pub name: String,
    /// What was measured; null where nothing could be.
    pub value: Option<f64>,
    /// The bound.
    pub bound: f64,
    /// Whether it was asked for, or is a default.
    pub asked: bool,
    /// Whether it held; null for a default that could not be judged. One that was asked for and cannot be judged does not
    /// hold.
    pub held: Option<bool>,
}

impl Audit {
    /// Whether a check did not hold.
    pub fn failed_a_check(&self) -> bool {
        self.checks.iter().any(|c| c.held == Some(false))
    }

    /// The kind of displacement, where it could be measured.
    pub fn kind(&self) -> Option<Kind> {
        self.displacement_field.verdict.as_ref().map(|v| v.kind)
    }
}
