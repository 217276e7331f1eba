//! The pass where nothing need be computed: samples are copied bit for bit.

use crate::error::Result;
use crate::raster::{MissingCodes, Sample, Samples, Source, Window};
use crate::with_samples;
use std::ops::Range;

/// Whole-pixel image of one axis: output o shows input `o * step + offset`.
pub type WholeAxis = (i64, i64);

/// Copies the block of outputs; returns all bands and how many samples lie outside the input. Samples that equal one of
/// `codes` become `fill`; what lies outside is `fill` (NaN if `None`).
pub fn copy(
    source: &dyn Source,
    swapped: bool,
    axes: (WholeAxis, WholeAxis),
    block: (&Range<usize>, &Range<usize>),
    codes: &MissingCodes,
    fill: Option<f64>,
) -> Result<Samples> {
    let header = source.header();
    let (n_rows, n_columns) = match swapped {
        false => (header.grid.rows, header.grid.columns),
        true => (header.grid.columns, header.grid.rows),
    };
    let rows = Run::new(axes.0, block.0, n_rows);
    let columns = Run::new(axes.1, block.1, n_columns);
    let window = match swapped {
        false => Window { rows: rows.read.clone(), columns: columns.read.clone() },
        true => Window { rows: columns.read.clone(), columns: rows.read.clone() },
    };
    let stored = if window.area() == 0 {
        Samples::zeros(header.sample_type, 0)
    } else {
        source.read(0..header.bands, &window)?
    };
    let other_codes =
        MissingCodes { codes: codes.codes.iter().copied().filter(|c| Some(*c) != fill).collect() };
    Ok(
        with_samples!(&stored, v => place(v, swapped, header.bands, (&rows, &columns), &other_codes, fill).into()),
    )
}

/// Which inputs a run of outputs shows.
struct Run {
    /// The inputs that are read.
    read: Range<usize>,
    /// For each output of the block, the index within what is read.
    at: Vec<Option<usize>>,
}

impl Run {
    fn new((step, offset): WholeAxis, outputs: &Range<usize>, n: usize) -> Self {
        let inputs: Vec<Option<usize>> = outputs
            .clone()
            .map(|o| usize::try_from(o as i64 * step + offset).ok().filter(|i| *i < n))
            .collect();
        let low = inputs.iter().flatten().min().copied().unwrap_or(0);
        let high = inputs.iter().flatten().max().map_or(0, |h| h + 1);
        Run { read: low..high, at: inputs.into_iter().map(|i| i.map(|i| i - low)).collect() }
    }
}

fn place<S: Sample>(
    stored: &[S],
    swapped: bool,
    bands: usize,
    (rows, columns): (&Run, &Run),
    codes: &MissingCodes,
    fill: Option<f64>,
) -> Vec<S> {
    let fill = S::of(fill.unwrap_or(f64::NAN));
    let (height, width) = (rows.read.len(), columns.read.len());
    let mut out = Vec::with_capacity(bands * rows.at.len() * columns.at.len());
    for band in 0..bands {
        let plane = &stored[band * height * width..(band + 1) * height * width];
        for r in &rows.at {
            out.extend(columns.at.iter().map(|c| match (*r, *c) {
                (Some(r), Some(c)) => plane[if swapped { c * height + r } else { r * width + c }],
                _ => fill,
            }));
        }
    }
    for code in codes.of::<S>() {
        out.iter_mut().filter(|v| v.is(code)).for_each(|v| *v = fill);
    }
    out
}
