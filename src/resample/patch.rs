//! A patch: the part of a raster that one block needs, read once, with the extension beyond its edges.

use crate::error::Result;
use crate::kernel::{Extension, Place};
use crate::raster::{MissingCodes, Sample, Samples, Source, Window};
use crate::real::Real;
use crate::with_samples;
use rayon::prelude::*;
use std::ops::Range;

/// The lines of one axis that a patch reads, and where each extended index finds its sample among them.
#[derive(Clone, Debug)]
struct AxisRead {
    /// Samples of the whole axis that are read: sorted ranges that do not touch.
    ranges: Vec<Range<usize>>,
    /// Number of samples read.
    len: usize,
    /// What stands at each extended index; sample indices count within what is read.
    places: Vec<Place>,
    /// Where the extended indices are a plain run of what is read.
    run: Option<usize>,
}

impl AxisRead {
    fn new(extended: &Range<i64>, n: usize, extension: Extension) -> Self {
        let places: Vec<Place> = extended.clone().map(|k| extension.place(k, n)).collect();
        let mut used: Vec<usize> = Vec::new();
        for place in &places {
            match *place {
                Place::Sample(i) => used.push(i),
                Place::Turned { index, .. } => used.extend([index, 0, n - 1]),
                Place::Constant(_) | Place::Absent => {}
            }
        }
        used.sort_unstable();
        used.dedup();
        let mut ranges: Vec<Range<usize>> = Vec::new();
        for i in used {
            match ranges.last_mut() {
                // Small holes are read along: one longer read beats two.
                Some(r) if i <= r.end + 64 => r.end = i + 1,
                _ => ranges.push(i..i + 1),
            }
        }
        let local = |i: usize| {
            let mut before = 0;
            for r in &ranges {
                if r.contains(&i) {
                    return before + i - r.start;
                }
                before += r.len();
            }
            0
        };
        let places: Vec<Place> = places
            .into_iter()
            .map(|p| match p {
                Place::Sample(i) => Place::Sample(local(i)),
                // Factors of the first and last sample go with their own indices, kept by `ends`.
                Place::Turned { index, sign, first, last } => {
                    Place::Turned { index: local(index), sign, first, last }
                }
                other => other,
            })
            .collect();
        let start = match places.first() {
            Some(Place::Sample(i)) => Some(*i),
            _ => None,
        };
        let run = start.filter(|s| places.iter().enumerate().all(|(j, p)| *p == Place::Sample(s + j)));
        AxisRead { len: ranges.iter().map(Range::len).sum(), ranges, places, run }
    }
}

/// A part of all bands of a raster, addressed by extended indices.
pub struct Patch {
    samples: Samples,
    rows: AxisRead,
    columns: AxisRead,
    missing: MissingCodes,
}

impl Patch {
    /// Reads what the extended `rows` x `columns` need. With `swapped`, `rows` are columns of the source and the other
    /// way round.
    ///
    /// # Errors
    /// When the source cannot be read.
    pub fn read(
        source: &dyn Source,
        rows: &Range<i64>,
        columns: &Range<i64>,
        swapped: bool,
        extension: Extension,
        missing: MissingCodes,
    ) -> Result<Self> {
        let header = source.header();
        let (n_rows, n_columns) = match swapped {
            false => (header.grid.rows, header.grid.columns),
            true => (header.grid.columns, header.grid.rows),
        };
        let rows = AxisRead::new(rows, n_rows, extension);
        let columns = AxisRead::new(columns, n_columns, extension);
        let (along_rows, along_columns) = if swapped { (&columns, &rows) } else { (&rows, &columns) };
        let mut samples = gather_ranges(source, &along_rows.ranges, &along_columns.ranges)?;
        if swapped {
            samples = with_samples!(samples, v => transpose(v, header.bands, along_rows.len, along_columns.len).into());
        }
        Ok(Patch { samples, rows, columns, missing })
    }

    /// The rows and columns (of a raster of `size`, or of its transpose) that [`Patch::read`] reads.
    pub fn ranges(
        size: (usize, usize),
        rows: &Range<i64>,
        columns: &Range<i64>,
        swapped: bool,
        extension: Extension,
    ) -> (Vec<Range<usize>>, Vec<Range<usize>>) {
        let (n, m) = if swapped { (size.1, size.0) } else { size };
        (AxisRead::new(rows, n, extension).ranges, AxisRead::new(columns, m, extension).ranges)
    }

    /// Number of extended rows and columns.
    pub fn size(&self) -> (usize, usize) {
        (self.rows.places.len(), self.columns.places.len())
    }

    /// Whether a band has any missing sample in the patch.
    pub fn has_missing(&self, band: usize) -> bool {
        let len = self.rows.len * self.columns.len;
        with_samples!(&self.samples, v => has_missing(&v[band * len..(band + 1) * len], &self.missing))
    }

    /// Whether every sample of an extended row is there.
    pub fn is_whole_row(&self, band: usize, row: usize) -> bool {
        if self.columns.places.contains(&Place::Absent) {
            return false;
        }
        match self.rows.places[row] {
            Place::Constant(_) => true,
            Place::Sample(r) => {
                let at = (band * self.rows.len + r) * self.columns.len;
                let width = self.columns.len;
                with_samples!(&self.samples, v => !row_has_missing(&v[at..at + width], &self.missing))
            }
            Place::Absent | Place::Turned { .. } => false,
        }
    }

    /// Writes one extended row of values, missing ones as 0, and, where asked, 1 for a sample that is there and 0 for one
    /// that is not.
    pub fn row<T: Real>(&self, band: usize, row: usize, values: &mut [T], mask: Option<&mut [T]>) {
        match self.rows.places[row] {
            Place::Sample(r) => self.stored_row(band, r, values, mask),
            Place::Constant(c) => {
                values.fill(T::from_f64(c));
                if let Some(m) = mask {
                    m.fill(T::ONE);
                }
            }
            Place::Absent => {
                values.fill(T::default());
                if let Some(m) = mask {
                    m.fill(T::default());
                }
            }
            Place::Turned { index, sign, first, last } => {
                let mut mask = mask;
                let mut part = vec![T::default(); values.len()];
                let mut part_mask = vec![T::ONE; values.len()];
                self.stored_row(band, index, values, mask.as_deref_mut());
                let sign = T::from_f64(sign);
                values.iter_mut().for_each(|v| *v = sign * *v);
                for (r, factor) in [(0, first), (self.rows.len - 1, last)] {
                    if factor == 0.0 {
                        continue;
                    }
                    let factor = T::from_f64(factor);
                    self.stored_row(band, r, &mut part, Some(&mut part_mask));
                    for (v, p) in values.iter_mut().zip(&part) {
                        *v = *v + factor * *p;
                    }
                    if let Some(m) = mask.as_deref_mut() {
                        m.iter_mut().zip(&part_mask).for_each(|(m, p)| *m = *m * *p);
                    }
                }
                // A turned value needs all of its three samples.
                if let Some(m) = mask {
                    values.iter_mut().zip(m).for_each(|(v, m)| *v = *v * *m);
                }
            }
        }
    }

    fn stored_row<T: Real>(&self, band: usize, row: usize, values: &mut [T], mask: Option<&mut [T]>) {
        let at = (band * self.rows.len + row) * self.columns.len;
        with_samples!(&self.samples, v => expand(&v[at..at + self.columns.len], &self.columns, &self.missing, values, mask));
    }
}

fn has_missing<S: Sample>(stored: &[S], missing: &MissingCodes) -> bool {
    let codes: Vec<S> = missing.of();
    if codes.is_empty() && !S::CAN_BE_NAN {
        return false;
    }
    stored.par_chunks(1 << 16).any(|part| match codes.as_slice() {
        [] => part.iter().fold(false, |any, v| any | v.is_nan()),
        [code] => part.iter().fold(false, |any, v| any | v.is_nan() | v.is(*code)),
        more => part.iter().any(|v| v.is_nan() || more.iter().any(|c| v.is(*c))),
    })
}

fn row_has_missing<S: Sample>(stored: &[S], missing: &MissingCodes) -> bool {
    let codes: Vec<S> = missing.of();
    match codes.as_slice() {
        [] => S::CAN_BE_NAN && stored.iter().fold(false, |any, v| any | v.is_nan()),
        codes => stored.iter().any(|v| v.is_nan() || codes.iter().any(|c| v.is(*c))),
    }
}

fn expand<S: Sample, T: Real>(
    stored: &[S],
    axis: &AxisRead,
    missing: &MissingCodes,
    values: &mut [T],
    mask: Option<&mut [T]>,
) {
    let codes: Vec<S> = missing.of();
    let clean = codes.is_empty() && !S::CAN_BE_NAN;
    let there = |v: S| !v.is_nan() && !codes.iter().any(|c| v.is(*c));
    // The common case first: a plain run.
    if let Some(start) = axis.run {
        let run = &stored[start..start + values.len()];
        if clean {
            values.iter_mut().zip(run).for_each(|(d, s)| *d = s.to_real());
            if let Some(m) = mask {
                m.fill(T::ONE);
            }
        } else {
            values
                .iter_mut()
                .zip(run)
                .for_each(|(d, s)| *d = if there(*s) { s.to_real() } else { T::default() });
            if let Some(m) = mask {
                m.iter_mut().zip(run).for_each(|(d, s)| *d = if there(*s) { T::ONE } else { T::default() });
            }
        }
        return;
    }
    let value =
        |i: usize| if there(stored[i]) { (stored[i].to_real::<T>(), true) } else { (T::default(), false) };
    let mut mask = mask;
    for (j, place) in axis.places.iter().enumerate() {
        let (v, ok) = match *place {
            Place::Sample(i) => value(i),
            Place::Constant(c) => (T::from_f64(c), true),
            Place::Absent => (T::default(), false),
            Place::Turned { index, sign, first, last } => {
                let (v, ok) = value(index);
                let (a, a_ok) = value(0);
                let (b, b_ok) = value(axis.len - 1);
                let ok = ok && (a_ok || first == 0.0) && (b_ok || last == 0.0);
                let turned = T::from_f64(sign) * v + T::from_f64(first) * a + T::from_f64(last) * b;
                if ok { (turned, true) } else { (T::default(), false) }
            }
        };
        values[j] = v;
        if let Some(m) = mask.as_deref_mut() {
            m[j] = if ok { T::ONE } else { T::default() };
        }
    }
}

/// Reads every combination of row and column ranges into one compact block, band by band.
fn gather_ranges(source: &dyn Source, rows: &[Range<usize>], columns: &[Range<usize>]) -> Result<Samples> {
    let header = source.header();
    let (height, width): (usize, usize) =
        (rows.iter().map(Range::len).sum(), columns.iter().map(Range::len).sum());
    if let ([r], [c]) = (rows, columns) {
        return source.read(0..header.bands, &Window { rows: r.clone(), columns: c.clone() });
    }
    let mut all = Samples::zeros(header.sample_type, header.bands * height * width);
    let mut row_at = 0;
    for r in rows {
        let mut column_at = 0;
        for c in columns {
            let part = source.read(0..header.bands, &Window { rows: r.clone(), columns: c.clone() })?;
            all.place(&part, header.bands, (height, width), (row_at, column_at), (r.len(), c.len()))?;
            column_at += c.len();
        }
        row_at += r.len();
    }
    Ok(all)
}

fn transpose<S: Copy>(v: Vec<S>, bands: usize, rows: usize, columns: usize) -> Vec<S> {
    let mut out = Vec::with_capacity(v.len());
    for band in 0..bands {
        let plane = &v[band * rows * columns..(band + 1) * rows * columns];
        for c in 0..columns {
            out.extend((0..rows).map(|r| plane[r * columns + c]));
        }
    }
    out
}
