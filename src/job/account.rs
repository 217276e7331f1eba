//! The account of a run: sums over samples before and after, and the ledger made of them.

use super::{Job, Progress, reading_windows};
use crate::error::{Error, Result};
use crate::map::Map;
use crate::measure::{Balance, Costs, Frame, Local, Sum, closure, step_overshoot};
use crate::raster::{Digest, Header, MissingCodes, Sample, SampleType, Samples, Source, Window};
use crate::report::{
    Blur, Centroid, Displacement, Flux, KernelEntry, Ledger, LocalClosure, Noise, Pixels, RasterEntry,
    Ringing, SumUnderestimated, Time, Transfer, peak_memory_bytes,
};
use crate::resample::{Counts, Limit, Plan, Reduce, Rules, Shifted, Values};
use crate::with_samples;
use rayon::prelude::*;

/// Sums over the samples of one raster, band by band.
pub struct Account {
    frame: Frame,
    /// To input positions; the identity for the input itself.
    back: Map,
    /// What the samples are sums over their pixel already.
    total: bool,
    bands: Vec<Balance>,
    /// Of totals that go in: what lies in the frame of the output, for its centre.
    framed: Vec<Balance>,
    overshoot: u64,
}

impl Account {
    /// For a raster of `size` whose positions `back` takes to input positions, and which shares what lies within `other`.
    /// Of totals every pixel counts whole: it holds nothing but what it was given.
    pub fn new(back: &Map, size: (usize, usize), other: (usize, usize), bands: usize, total: bool) -> Self {
        let frame = if total { Frame::whole(size) } else { Frame::new(back, size, other) };
        let bands = vec![Balance::default(); bands];
        Account { frame, back: *back, total, bands, framed: Vec::new(), overshoot: 0 }
    }

    /// For the input: positions stay, the frame is the output's, into which `onward` leads.
    fn of_input(
        onward: &Map,
        size: (usize, usize),
        target: (usize, usize),
        bands: usize,
        total: bool,
    ) -> Self {
        let bands = vec![Balance::default(); bands];
        let framed = if total { bands.clone() } else { Vec::new() };
        Account {
            frame: Frame::new(onward, size, target),
            back: Map::IDENTITY,
            total,
            bands,
            framed,
            overshoot: 0,
        }
    }

    /// Adds a window of all bands; counts what lies outside the range of `limits`, band by band.
    pub fn add(
        &mut self,
        window: &Window,
        samples: &Samples,
        codes: &MissingCodes,
        limits: Option<&Account>,
    ) {
        let width = window.columns.len();
        let by_area = !self.total;
        let whole = Frame::whole((window.rows.end, window.columns.end));
        // Totals that go in count wherever they lie; what lies in the output's frame is added up beside.
        let frame = if self.framed.is_empty() { &self.frame } else { &whole };
        for (b, balance) in self.bands.iter_mut().enumerate() {
            let range = limits.and_then(|l| l.bands.get(b)).map(|l| l.range).filter(|r| r.0 <= r.1);
            let start = b * window.area();
            // Row by row in parallel, merged in order: the same sums for any number of threads.
            let rows: Vec<(Balance, Balance, u64)> = window
                .rows
                .clone()
                .into_par_iter()
                .map_init(
                    || (vec![0.0; width], Vec::new()),
                    |(line, shares), r| {
                        let at = start + (r - window.rows.start) * width;
                        with_samples!(samples, v => as_f64(&v[at..at + width], codes, line));
                        let (mut part, mut framed) = (Balance::default(), Balance::default());
                        let back = &self.back;
                        part.add_row(frame, back, by_area, r, &window.columns, line, shares);
                        if self.total {
                            framed.add_row(&self.frame, back, by_area, r, &window.columns, line, shares);
                        }
                        let over = range
                            .map_or(0, |(low, high)| line.iter().filter(|v| **v < low || **v > high).count());
                        (part, framed, over as u64)
                    },
                )
                .collect();
            for (part, framed, over) in &rows {
                balance.merge(part);
                self.framed.get_mut(b).into_iter().for_each(|f| f.merge(framed));
                self.overshoot += over;
            }
        }
    }

    /// Takes back what does not count on both sides.
    pub(super) fn take(&mut self, band: usize, signal: f64, modulus: f64, moments: (f64, f64)) {
        // Totals that came out count wherever they lie; of those that went in, the framed ones are compared.
        if self.total && self.framed.is_empty() {
            return;
        }
        let balances = if self.framed.is_empty() { &mut self.bands } else { &mut self.framed };
        if let Some(b) = balances.get_mut(band) {
            b.take(signal, modulus, moments);
        }
    }

    /// How pixels lie in the other frame.
    pub(super) fn frame(&self) -> &Frame {
        &self.frame
    }

    /// Missing samples over all bands.
    pub fn missing(&self) -> u64 {
        self.bands.iter().map(|b| b.missing).sum()
    }

    fn sum(&self) -> Balance {
        add_up(&self.bands)
    }

    /// Centre of what lies in the frame that input and output share.
    fn centroid(&self) -> Option<[f64; 2]> {
        if self.framed.is_empty() { self.sum().centroid() } else { add_up(&self.framed).centroid() }
    }

    /// Whether some valid sample is below 0.
    pub fn has_negative(&self) -> bool {
        self.bands.iter().any(|b| b.range.0 < 0.0)
    }
}

fn add_up(bands: &[Balance]) -> Balance {
    bands.iter().fold(Balance::default(), |mut all, b| {
        all.merge(b);
        all
    })
}

/// A row as f64 with NaN for what is missing; codes are compared as the type stores them.
pub(super) fn as_f64<S: Sample>(stored: &[S], codes: &MissingCodes, out: &mut [f64]) {
    let codes: Vec<S> = codes.of();
    for (d, s) in out.iter_mut().zip(stored) {
        *d = if codes.iter().any(|c| s.is(*c)) { f64::NAN } else { s.wide() };
    }
}

/// All bands of a window as f64, NaN = missing, one after the other.
pub(super) fn bands_of<'a>(
    samples: &'a Samples,
    window: &Window,
    bands: usize,
    codes: &'a MissingCodes,
) -> impl Iterator<Item = Vec<f64>> + 'a {
    let area = window.area();
    (0..bands).map(move |b| {
        let mut out = vec![0.0; area];
        with_samples!(samples, v => as_f64(&v[b * area..(b + 1) * area], codes, &mut out));
        out
    })
}

/// What reading the input once tells.
pub struct Inspected {
    /// Its sums.
    pub account: Account,
    /// What of it belongs to each part of the output.
    pub local: Local,
    /// Its digest.
    pub sha256: String,
}

/// Reads the input once from end to end.
pub fn inspect(
    source: &dyn Source,
    back: &Map,
    target: (usize, usize),
    codes: &MissingCodes,
    rules: &Rules,
    progress: &dyn Progress,
) -> Result<Inspected> {
    let header = source.header();
    let onward = back.invert()?;
    let size = (header.grid.rows, header.grid.columns);
    let mut digest = Digest::new(header);
    let total = rules.values == Values::Total;
    let mut account = Account::of_input(&onward, size, target, header.bands, total);
    let mut local = Local::new(back, size, target, total)?;
    let (mut done, total) = (0, header.grid.pixels() + target.0 * target.1);
    for window in reading_windows(header, rules.memory) {
        if progress.stopped() {
            return Err(Error::Stopped);
        }
        let samples = source.read(0..header.bands, &window)?;
        digest.feed(&window, &samples);
        account.add(&window, &samples, codes, None);
        for values in bands_of(&samples, &window, header.bands, codes) {
            local.add_before(&window.rows, &window.columns, &values);
        }
        done += window.area();
        progress.advance(done as u64, total as u64);
    }
    Ok(Inspected { account, local, sha256: digest.finish(header) })
}

/// All that a ledger is made of.
pub struct Run<'a> {
    pub job: &'a Job,
    pub command: &'a [String],
    pub plan: &'a Plan,
    pub from: &'a Header,
    pub to: &'a Header,
    /// Of input and output.
    pub digests: (String, String),
    pub before: &'a Account,
    pub after: &'a Account,
    pub counts: Counts,
    pub near_gap: u64,
    pub shifted: Shifted,
    pub local: &'a Local,
    pub costs: Costs,
    pub underestimates: [Option<f64>; 4],
    pub seconds: f64,
}

impl Run<'_> {
    /// Writes it all down.
    pub fn ledger(&self) -> Ledger {
        let (rules, kernel) = (&self.job.rules, &self.job.rules.kernel);
        let (before, after) = (self.before.sum(), self.after.sum());
        let total_values = rules.values == Values::Total;
        let s = &self.shifted;
        // What comes out of totals: in the frame, beyond it, and what gaps swallowed, less what was filled in at them.
        let mut beyond = Sum::default();
        if total_values {
            beyond.merge(&s.left_frame);
            beyond.merge(&s.dropped);
            beyond.add(-s.filled.value());
        }
        let total = (self.to.grid.pixels() * self.to.bands) as u64;
        let closure = closure(&before, &after, &beyond);
        let finite = |v: f64| v.is_finite().then_some(v);
        let entry = |path: &std::path::Path, header: &Header, sha256: &str| RasterEntry {
            path: path.to_owned(),
            sha256: sha256.to_owned(),
            rows: header.grid.rows,
            columns: header.grid.columns,
            bands: header.bands,
            sample_type: header.sample_type,
            grid: header.grid.clone(),
        };
        let area = {
            let j = self.job.back.jacobian(0.0, 0.0);
            if total_values { 1.0 } else { (j[0][0] * j[1][1] - j[0][1] * j[1][0]).abs() }
        };
        Ledger {
            regauge: env!("CARGO_PKG_VERSION").to_owned(),
            command: self.command.to_vec(),
            inputs: vec![entry(&self.job.input, self.from, &self.digests.0)],
            output: entry(&self.job.output, self.to, &self.digests.1),
            kernel: KernelEntry {
                name: kernel.name().to_owned(),
                taps: kernel.taps(),
                order: kernel.order(),
                poles: kernel.poles(),
            },
            extension: rules.edges().to_string(),
            values: rules.values.to_string(),
            reduce: reduce_name(self.plan, rules.reduce).into(),
            method: self.plan.method().into(),
            pixels: Pixels {
                total,
                valid: after.valid,
                missing: after.missing,
                clipped_low: self.counts.clipped_low,
                clipped_high: self.counts.clipped_high,
                overshoot: self.after.overshoot,
                near_gap: self.near_gap,
                moved_off_code: self.counts.moved_off_code,
                limited: s.limited,
            },
            // The sum of class codes or of angles tells nothing.
            flux: if !matches!(rules.values, Values::Density | Values::Total) {
                Flux::default()
            } else {
                Flux {
                    before: finite(before.signal.value()),
                    after: finite(after.signal.value()),
                    left_frame: total_values.then(|| s.left_frame.value()),
                    filled_at_gaps: total_values.then(|| s.filled.value()),
                    lost_in_gaps: total_values.then(|| s.dropped.value()),
                    limited: (rules.limit != Limit::None).then(|| s.moved.value() * area),
                    beyond_limits: (rules.limit != Limit::None).then(|| s.beyond_limits.value()),
                    rounding: is_integer(self.to.sample_type).then_some(self.counts.rounding * area),
                    closure: closure.and_then(finite),
                    tolerance: rules.tolerance,
                    // A closure that cannot be had (no signal) has nothing to be off.
                    closed: rules.tolerance.map(|t| closure.is_none_or(|c| c.abs() <= t)),
                    local_closure: Some(self.local_closure()),
                }
            },
            centroid: Centroid { before: self.before.centroid(), after: self.after.centroid() },
            displacement: Displacement {
                rows: self.costs.displacement.0,
                columns: self.costs.displacement.1,
                sigma: self.costs.displacement_sigma,
                how: "predicted".into(),
            },
            blur: Blur {
                transfer: Transfer {
                    at_010: self.costs.transfer[0],
                    at_025: self.costs.transfer[1],
                    at_040: self.costs.transfer[2],
                },
                mtf50: self.costs.mtf50,
            },
            ringing: Ringing {
                step_overshoot: if matches!(self.plan, Plan::Copy { .. }) {
                    Some(0.0)
                } else if reduce_name(self.plan, rules.reduce) == "none" {
                    step_overshoot(kernel)
                } else {
                    super::windows::widened_overshoot(
                        self.plan,
                        rules,
                        (self.from.grid.rows, self.from.grid.columns),
                    )
                },
            },
            noise: Noise {
                gain_mean: self.costs.gain[0],
                gain_min: self.costs.gain[1],
                gain_max: self.costs.gain[2],
                lag1_rows: self.costs.lag1_rows,
                lag1_columns: self.costs.lag1_columns,
                sum_underestimated: SumUnderestimated::of(self.underestimates),
            },
            time: Time {
                seconds: self.seconds,
                megapixels_per_second: total as f64 / 1e6 / self.seconds.max(1e-9),
                peak_memory_bytes: peak_memory_bytes(),
            },
            // A job is made of numbers, names and paths: it always has a JSON form.
            job: serde_json::to_value(self.job).unwrap_or_default(),
        }
    }
}

impl Run<'_> {
    fn local_closure(&self) -> LocalClosure {
        let (rows, columns, values) = self.local.closure();
        let (down, across) = self.local.step();
        LocalClosure { rows, columns, cell: [down, across], values }
    }
}

fn is_integer(t: SampleType) -> bool {
    t.integer_range().is_some()
}

/// What was done against aliasing, as it turned out.
fn reduce_name(plan: &Plan, asked: Reduce) -> &'static str {
    use crate::resample::axis::Way;
    let widened = match plan {
        Plan::Copy { .. } | Plan::Overlap { .. } | Plan::Shear(_) | Plan::Majority { .. } => false,
        Plan::RowsAndColumns { rows, columns, .. } => [rows, columns].iter().any(|a| {
            matches!(a.way, Way::Widen(_) | Way::WidenThenPrefilter(_) | Way::LeastSquares(_))
                || matches!(a.way, Way::Fourier(s) if s > 1.0)
        }),
        Plan::Gather { stretch, .. } => *stretch != (1.0, 1.0),
    };
    match (widened, asked) {
        (false, _) => "none",
        (true, Reduce::LeastSquares) => "least-squares",
        (true, _) => "widen",
    }
}
