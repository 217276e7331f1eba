//! Blocks: the output cut into pieces that fit the memory, each resampled from the patch it needs.
//!
//! Inside a block, rows and strips are shared among threads. Nothing in a sample's value depends on how the output is cut.

use super::axis::{Axis, Way};
use super::convert::{Counts, convert};
use super::copy::copy;
use super::limit::{self, Bounds};
use super::passes::{Passes, Prepared, Ranges, Span};
use super::plan::{Plan, Size};
use super::prepared::nothing;
use super::rows_and_columns::Plane;
use super::rules::{Outside, Rules};
use super::settle::{Resampled, Settled, Shifted, settle};
use super::values::{Limit, Values};
use super::variance::Noise;
use crate::error::{Error, Result};
use crate::kernel::SEGMENT;
use crate::raster::{MissingCodes, Sample, SampleType, Samples, Source, Window};
use crate::real::Real;
use crate::with_samples;
use ndarray::{Array2, s};
use rayon::prelude::*;
use std::ops::Range;

/// A resampling that is ready to run: the plan with its source and the form of its output.
pub struct Engine<'a> {
    /// Where samples come from.
    pub source: &'a dyn Source,
    /// Size of the output.
    pub target: Size,
    /// The plan.
    pub plan: Plan,
    /// The choices.
    pub rules: &'a Rules,
    /// What counts as missing in the source.
    pub codes: MissingCodes,
    /// Type of the output.
    pub sample_type: SampleType,
    /// Code for missing in the output; NaN if `None`.
    pub fill: Option<f64>,
    /// What is wanted beside the values.
    pub extras: Extras,
}

/// What is wanted of an engine beside the values.
#[derive(Clone, Debug, Default)]
pub struct Extras {
    /// The share of each pixel's weights that found samples.
    pub coverage: bool,
    /// The noise of the samples, where the standard uncertainty of the outputs is wanted.
    pub noise: Option<Noise>,
    /// Which outputs are missing: for types that cannot say so and have no code.
    pub missing: bool,
    /// Angles are told from minus half a period to half a period, as in a source that has negative ones; else from 0 to the
    /// period.
    pub signed_angles: bool,
}

/// One finished block.
pub struct Block {
    /// Where it belongs.
    pub window: Window,
    /// All bands.
    pub samples: Samples,
    /// What the conversion did.
    pub counts: Counts,
    /// Outputs that lean on missing samples by more than 1e-3 of their weight.
    pub near_gap: u64,
    /// What happened to totals at gaps.
    pub shifted: Shifted,
    /// The share of each pixel's weights that found samples, band by band, if wanted.
    pub coverage: Option<Vec<f32>>,
    /// Whether each pixel is missing, band by band, if wanted.
    pub missing: Option<Vec<bool>>,
    /// The standard uncertainty of each pixel, band by band, NaN where it is missing or unknown, if wanted.
    pub sigma: Option<Vec<f64>>,
}

/// An engine with its passes prepared.
pub struct Runner<'a> {
    engine: &'a Engine<'a>,
    passes: Precision,
}

/// The passes in the precision that the samples ask for.
enum Precision {
    F32(Passes<f32>),
    F64(Passes<f64>),
}

impl Runner<'_> {
    /// Resamples a window of the output.
    ///
    /// # Errors
    /// When the source cannot be read.
    pub fn window(&self, rows: &Range<usize>, columns: &Range<usize>) -> Result<Block> {
        let engine = self.engine;
        match (&engine.plan, &self.passes) {
            (Plan::Copy { swapped, rows: a, columns: b }, _)
                if engine.copies_bits() && engine.extras.noise.is_none() && !engine.extras.missing =>
            {
                engine.copied(*swapped, (*a, *b), rows, columns)
            }
            (_, Precision::F64(passes)) => engine.block(passes, rows, columns),
            (_, Precision::F32(passes)) => engine.block(passes, rows, columns),
        }
    }
}

impl Engine<'_> {
    /// Rows and columns of the source.
    pub(super) fn source_size(&self) -> Size {
        let grid = &self.source.header().grid;
        (grid.rows, grid.columns)
    }

    /// Runs all blocks in order. `alignment` is what the sink asks of windows; `side` fixes the side of blocks, otherwise they
    /// follow the memory. What totals leave beyond the frame is told by [`Engine::beyond`].
    ///
    /// # Errors
    /// What the source or `take` meets, or a limit when not even one small block fits the memory.
    pub fn run(
        &self,
        alignment: usize,
        side: Option<usize>,
        take: &mut dyn FnMut(Block) -> Result<()>,
    ) -> Result<()> {
        let (height, width) = self.block_sides(alignment, side)?;
        let runner = self.runner();
        for r in (0..self.target.0).step_by(height) {
            for c in (0..self.target.1).step_by(width) {
                let rows = r..(r + height).min(self.target.0);
                let columns = c..(c + width).min(self.target.1);
                take(runner.window(&rows, &columns)?)?;
            }
        }
        Ok(())
    }

    /// Height and width of blocks.
    pub(super) fn block_sides(&self, alignment: usize, side: Option<usize>) -> Result<Size> {
        side.map_or_else(|| self.block_size(alignment), |s| Ok((s, s)))
    }

    /// The engine with its passes prepared, for windows in any order.
    pub fn runner(&self) -> Runner<'_> {
        let passes = if self.computes_in_f64() {
            Precision::F64(Passes::new(self))
        } else {
            Precision::F32(Passes::new(self))
        };
        Runner { engine: self, passes }
    }

    /// The rows and the columns of the source that a window of the output needs, every combination of them; `None` if it sees
    /// nothing.
    pub fn needs(&self, rows: &Range<usize>, columns: &Range<usize>) -> Option<(Ranges, Ranges)> {
        let span = self.grown(&Span::of(rows, columns));
        match self.runner().passes {
            Precision::F64(passes) => passes.needs(self, &span),
            Precision::F32(passes) => passes.needs(self, &span),
        }
    }

    /// What the passes are expected to need at most, in bytes, at the size of blocks that the memory allows.
    ///
    /// # Errors
    /// When not even one small block fits the memory.
    pub fn block_need(&self, alignment: usize) -> Result<(Size, usize)> {
        let (height, width) = self.block_size(alignment)?;
        Ok(((height, width), self.block_bytes(height, width)))
    }

    /// Resamples one block of the output.
    fn block<T: Real>(
        &self,
        passes: &Passes<T>,
        rows: &Range<usize>,
        columns: &Range<usize>,
    ) -> Result<Block> {
        let span = Span::of(rows, columns);
        let prepared = passes.prepare(self, &self.grown(&span))?;
        let mut block = Block {
            window: Window { rows: rows.clone(), columns: columns.clone() },
            samples: Samples::zeros(self.sample_type, 0),
            counts: Counts::default(),
            near_gap: 0,
            shifted: Shifted::default(),
            coverage: self.extras.coverage.then(Vec::new),
            missing: self.extras.missing.then(Vec::new),
            sigma: self.extras.noise.is_some().then(Vec::new),
        };
        for band in 0..self.source.header().bands {
            let settled = match &prepared {
                Some(prepared) => self.settled(prepared, &span, band)?,
                None => Settled::of_nothing(nothing(self, &span)),
            };
            block.near_gap += settled.near_gap;
            block.shifted.merge(&settled.shifted);
            if let Some(coverage) = &mut block.coverage {
                coverage.extend(settled.coverage());
            }
            if let (Some(sigma), Some(noise)) = (&mut block.sigma, &self.extras.noise) {
                sigma.extend(match &prepared {
                    Some(prepared) => {
                        let variance = prepared.variance(noise, band)?;
                        self.standard_uncertainty(&variance, &settled, &span)
                    }
                    None => vec![f64::NAN; settled.values.len()],
                });
            }
            if let Some(missing) = &mut block.missing {
                missing.extend(settled.values.iter().map(|v| v.to_f64().is_nan()));
            }
            let (converted, counts) = convert(settled.values.view(), self.sample_type, self.fill);
            block.counts.add(&counts);
            block.samples.append(converted)?;
        }
        Ok(block)
    }

    /// The roots of a block's variances, cut to `span` and divided at gaps as the values were.
    fn standard_uncertainty<T: Real>(
        &self,
        variance: &Array2<f64>,
        settled: &Settled<T>,
        span: &Span,
    ) -> Vec<f64> {
        let around = self.grown(span);
        let (top, left) = (
            (span.rows.start - around.rows.start) as usize,
            (span.columns.start - around.columns.start) as usize,
        );
        settled
            .values
            .indexed_iter()
            .map(|((r, c), v)| {
                let variance = variance[(r + top, c + left)];
                if v.to_f64().is_nan() || !variance.is_finite() {
                    return f64::NAN;
                }
                let divisor = settled.divisor.as_ref().map_or(1.0, |d| d[(r, c)].to_f64());
                variance.max(0.0).sqrt() / divisor.abs()
            })
            .collect()
    }

    /// A block with the pixels around that have a say in it.
    pub(super) fn grown(&self, span: &Span) -> Span {
        let halo =
            if self.limits() { limit::halo(self.rules.values, &self.plan.back(), self.target) } else { 0 };
        let grow = |r: &Range<i64>| r.start - halo..r.end + halo;
        Span { rows: grow(&span.rows), columns: grow(&span.columns) }
    }

    /// Whether values are held to a range: a copy holds nothing else anyway.
    fn limits(&self) -> bool {
        self.rules.limit == Limit::Neighbours && !matches!(self.plan, Plan::Copy { .. })
    }

    /// The settled values of a band over `span`, of a block prepared with what is around it.
    pub(super) fn settled<T: Real>(
        &self,
        prepared: &Prepared<T>,
        span: &Span,
        band: usize,
    ) -> Result<Settled<T>> {
        let around = self.grown(span);
        let inner = (
            (span.rows.start - around.rows.start) as usize..(span.rows.end - around.rows.start) as usize,
            (span.columns.start - around.columns.start) as usize
                ..(span.columns.end - around.columns.start) as usize,
        );
        let mut settled = self.settled_around(prepared, &inner, band);
        if !self.limits() {
            return Ok(settled);
        }
        let bounds = Bounds::of(self, &self.plan.back(), &around, band)?;
        let held = match self.rules.values {
            Values::Total => bounds.hand_over(&mut settled.values, &inner),
            _ => bounds.cut(&mut settled.values),
        };
        settled.shifted.moved = held.moved;
        settled.shifted.limited = held.pixels;
        settled.shifted.beyond_limits = held.beyond;
        let crop = |a: Array2<T>| a.slice(s![inner.0.clone(), inner.1.clone()]).to_owned();
        settled.share = settled.share.map(crop);
        settled.divisor = settled.divisor.map(crop);
        settled.values = crop(settled.values);
        Ok(settled)
    }

    /// The settled values of a band; counts and sums are those of `inner`.
    fn settled_around<T: Real>(
        &self,
        prepared: &Prepared<T>,
        inner: &(Range<usize>, Range<usize>),
        band: usize,
    ) -> Settled<T> {
        let least = self.rules.min_coverage;
        let period = match self.rules.values {
            Values::Cyclic(period) if !matches!(self.plan, Plan::Copy { .. }) => period,
            _ => return settle(prepared.resampled(band, Plane::Values), least, inner),
        };
        let Resampled { values: cosine, mask } = prepared.resampled(band, Plane::Cosine(period));
        let sine = prepared.resampled(band, Plane::Sine(period)).values;
        // Both go through the same weights; a gap's share divides out of the angle but not out of the resultant.
        let low = if self.extras.signed_angles { -0.5 * period } else { 0.0 };
        let of_unit = settle(Resampled { values: length(&cosine, &sine), mask }, least, inner);
        let mut values = of_unit.values;
        ndarray::Zip::from(&mut values).and(&cosine).and(&sine).for_each(|v, c, s| {
            let resultant = v.to_f64();
            *v = T::from_f64(if resultant < LEAST_RESULTANT || resultant.is_nan() {
                f64::NAN
            } else {
                angle(c.to_f64(), s.to_f64(), period, low)
            });
        });
        Settled { values, ..of_unit }
    }

    /// Whether the passes compute in f64.
    pub fn computes_in_f64(&self) -> bool {
        self.plan.needs_f64(self.source.header().sample_type, self.sample_type, self.rules)
    }

    fn copies_bits(&self) -> bool {
        self.source.header().sample_type == self.sample_type
    }

    fn copied(
        &self,
        swapped: bool,
        axes: ((i64, i64), (i64, i64)),
        rows: &Range<usize>,
        columns: &Range<usize>,
    ) -> Result<Block> {
        let samples = copy(self.source, swapped, axes, (rows, columns), &self.codes, self.fill)?;
        let missing = count_missing(&samples, self.fill);
        let coverage = self.extras.coverage.then(|| there(&samples, self.fill));
        Ok(Block {
            window: Window { rows: rows.clone(), columns: columns.clone() },
            samples,
            counts: Counts { missing, ..Counts::default() },
            near_gap: 0,
            shifted: Shifted::default(),
            coverage,
            missing: None,
            sigma: None,
        })
    }

    /// The largest blocks that fit the memory.
    fn block_size(&self, alignment: usize) -> Result<Size> {
        let align = alignment.max(64);
        // A part stays for decoding, encoding and the program itself.
        let budget = self.rules.memory as usize / 5 * 4;
        let (mut height, mut width) = self.target;
        // A prefilter computes whole segments: blocks that end with them repeat least.
        let halve = |v: usize| {
            let half = v.div_ceil(2);
            let unit = if half >= SEGMENT && SEGMENT.is_multiple_of(align) { SEGMENT } else { align };
            if half.next_multiple_of(unit) < v {
                half.next_multiple_of(unit)
            } else {
                half.next_multiple_of(align)
            }
        };
        loop {
            let need = self.block_bytes(height, width);
            if need <= budget {
                return Ok((height, width));
            }
            // Whole rows are cheap to read and to write; squares are what a turned map wants.
            let turned = !matches!(self.plan, Plan::Copy { .. } | Plan::RowsAndColumns { .. });
            let least = if turned { align } else { align.max(SEGMENT) };
            if height > least && (!turned || height >= width) {
                height = halve(height);
            } else if width > align {
                width = halve(width);
            } else if height > align {
                height = halve(height);
            } else {
                return Err(Error::Limit {
                    what: format!("a block of {height} x {width} pixels under {}", self.rules.kernel),
                    needed: format!("{} MiB", need.div_ceil(1 << 20)),
                    limit: format!("--memory {} MiB", self.rules.memory >> 20),
                    mend: format!("give --memory {}MiB or more", (need / 4 * 5).div_ceil(1 << 20)),
                });
            }
        }
    }

    /// Bytes that a block of this size takes at most.
    fn block_bytes(&self, height: usize, width: usize) -> usize {
        let (height, width) = (height.min(self.target.0), width.min(self.target.1));
        let header = self.source.header();
        let (kernel, extension) = (&self.rules.kernel, self.rules.edges());
        let real = if self.computes_in_f64() { 8 } else { 4 };
        let stored = header.sample_type.bytes() * header.bands;
        // Values, and the mask's three responses where samples can be missing.
        let planes = if self.may_miss() { 4 } else { 1 };
        let out = height
            .saturating_mul(width)
            .saturating_mul((self.sample_type.bytes() + 8) * (header.bands + 1) + planes * real);
        // Variances, and the samples' noise that they are made of.
        let noise = if self.extras.noise.is_some() { 24 } else { 0 };
        let out = out.saturating_add(height.saturating_mul(width).saturating_mul(noise + 8 * header.bands));
        // Held values are compared with the samples around, in f64.
        let stored = stored + noise + if self.limits() { 8 } else { 0 };
        let (rows, columns, between) = match &self.plan {
            Plan::Copy { .. } => {
                return height
                    .saturating_mul(width)
                    .saturating_mul(stored + self.sample_type.bytes() * header.bands);
            }
            Plan::RowsAndColumns { rows, columns, .. } => {
                let (r, r_out) = rows.most_needed(kernel, extension, height);
                let (c, c_out) = columns.most_needed(kernel, extension, width);
                (r, c, r.saturating_mul(width) + threads() * 192 * (r + r_out) + threads() * 32 * (c + c_out))
            }
            Plan::Shear(shears) => {
                // Blocks at the corners and in the middle stand for all.
                let ends =
                    |n: usize, len: usize| [0, (n - len) / 2, n - len].map(|s| s as i64..(s + len) as i64);
                let mut most = 0;
                for r in ends(self.target.0, height) {
                    for c in ends(self.target.1, width) {
                        most = most.max(shears.block_numbers(kernel, &r, &c));
                    }
                }
                return most.saturating_mul(8 + stored).saturating_add(out);
            }
            Plan::Gather { back, .. } | Plan::Overlap { back } | Plan::Majority { back } => {
                let (h, w) = (self.target.0 as f64 - 1.0, self.target.1 as f64 - 1.0);
                let corners = [(0.0, 0.0), (0.0, w), (h, 0.0), (h, w)];
                let (mut r, mut c) = (0.0f64, 0.0f64);
                for p in corners {
                    let j = back.jacobian(p.0, p.1);
                    r = r.max(j[0][0].abs() * height as f64 + j[0][1].abs() * width as f64);
                    c = c.max(j[1][0].abs() * height as f64 + j[1][1].abs() * width as f64);
                }
                let axes = self.gather_axes();
                let around = |axis: &Axis, length: f64, n: usize| {
                    let whole = n as f64 + 64.0;
                    let length =
                        if self.rules.outside == Outside::Missing { length.min(whole) } else { length };
                    axis.most_samples(kernel, (length / axis.step) as usize + 64)
                };
                let (n, m) = self.source_size();
                let (r, c) = (around(&axes.0, r, n), around(&axes.1, c, m));
                // A plane and what stands between its two passes; values and mask take turns.
                (r, c, 2 * r.saturating_mul(c))
            }
        };
        rows.saturating_mul(columns)
            .saturating_mul(stored)
            .saturating_add(between.saturating_mul(real))
            .saturating_add(out)
    }

    /// Whether the source may hold missing samples.
    fn may_miss(&self) -> bool {
        let float = matches!(self.source.header().sample_type, SampleType::F32 | SampleType::F64);
        float || !self.codes.codes.is_empty()
    }

    /// The axes that turn a patch into the plane that the gather pass looks at.
    pub(super) fn gather_axes(&self) -> (Axis, Axis) {
        let (rows, columns) = self.source_size();
        let plain = |n: usize, way: Way| Axis { source: n, target: n, step: 1.0, offset: 0.0, way };
        let Plan::Gather { stretch, least_squares, .. } = &self.plan else {
            return (plain(rows, Way::Copy), plain(columns, Way::Copy));
        };
        let widened = *stretch != (1.0, 1.0);
        let axis = |n: usize, a: f64| {
            if *least_squares && a > 1.0 {
                // The coarser spline's knots share the raster's outer edge.
                let target = ((n as f64 / a).ceil() as usize).max(1);
                Axis {
                    source: n,
                    target,
                    step: a,
                    offset: 0.5 * (a - 1.0),
                    way: Way::LeastSquaresCoefficients(a),
                }
            } else if self.rules.kernel.is_prefiltered() && (!widened || *least_squares) {
                plain(n, Way::Coefficients)
            } else {
                plain(n, Way::Copy)
            }
        };
        (axis(rows, stretch.0), axis(columns, stretch.1))
    }
}

fn threads() -> usize {
    rayon::current_num_threads()
}

/// The least length of the mean of unit vectors that still has a direction.
const LEAST_RESULTANT: f64 = 0.1;

fn length<T: Real>(cosine: &Array2<T>, sine: &Array2<T>) -> Array2<T> {
    let mut out = cosine.clone();
    out.zip_mut_with(sine, |c, s| *c = T::from_f64(c.to_f64().hypot(s.to_f64())));
    out
}

/// The angle of a vector, from `low` to a period above it.
fn angle(cosine: f64, sine: f64, period: f64, low: f64) -> f64 {
    let turn = sine.atan2(cosine) / (2.0 * std::f64::consts::PI) * period;
    // An angle a rounding below `low` is `low`.
    let slack = 1e-12 * period;
    let above = (turn - low).rem_euclid(period);
    low + if period - above < slack { 0.0 } else { above }
}

/// 1 where a sample is there.
fn there(samples: &Samples, fill: Option<f64>) -> Vec<f32> {
    fn mark<S: Sample>(v: &[S], codes: &MissingCodes) -> Vec<f32> {
        let codes = codes.of::<S>();
        v.iter().map(|v| if v.is_nan() || codes.iter().any(|c| v.is(*c)) { 0.0 } else { 1.0 }).collect()
    }
    let codes = MissingCodes { codes: fill.into_iter().collect() };
    with_samples!(samples, v => mark(v, &codes))
}

fn count_missing(samples: &Samples, fill: Option<f64>) -> u64 {
    fn count<S: Sample>(v: &[S], codes: &MissingCodes) -> u64 {
        let codes = codes.of::<S>();
        v.par_iter().filter(|v| v.is_nan() || codes.iter().any(|c| v.is(*c))).count() as u64
    }
    let codes = MissingCodes { codes: fill.into_iter().collect() };
    with_samples!(samples, v => count(v, &codes))
}
