//! Samples that someone else holds, whole or in pieces: read where they lie.

use super::{Header, SampleType, Samples, Source, Window, check_window};
use crate::error::{Error, Result};
use std::ops::Range;

/// Samples of one window, band by band, that are only looked at.
#[derive(Clone, Copy, Debug)]
#[allow(missing_docs)]
pub enum Held<'a> {
    U8(&'a [u8]),
    I8(&'a [i8]),
    U16(&'a [u16]),
    I16(&'a [i16]),
    U32(&'a [u32]),
    I32(&'a [i32]),
    F32(&'a [f32]),
    F64(&'a [f64]),
}

impl Held<'_> {
    /// The type of the samples.
    pub fn sample_type(&self) -> SampleType {
        match self {
            Held::U8(_) => SampleType::U8,
            Held::I8(_) => SampleType::I8,
            Held::U16(_) => SampleType::U16,
            Held::I16(_) => SampleType::I16,
            Held::U32(_) => SampleType::U32,
            Held::I32(_) => SampleType::I32,
            Held::F32(_) => SampleType::F32,
            Held::F64(_) => SampleType::F64,
        }
    }

    fn len(&self) -> usize {
        match self {
            Held::U8(v) => v.len(),
            Held::I8(v) => v.len(),
            Held::U16(v) => v.len(),
            Held::I16(v) => v.len(),
            Held::U32(v) => v.len(),
            Held::I32(v) => v.len(),
            Held::F32(v) => v.len(),
            Held::F64(v) => v.len(),
        }
    }
}

/// A raster of which some windows are held; reading beyond them is an error.
pub struct Pieces<'a> {
    header: Header,
    pieces: Vec<(Window, Held<'a>)>,
}

impl<'a> Pieces<'a> {
    /// Joins a header with windows that do not overlap.
    ///
    /// # Errors
    /// When a window is not in the raster, or its samples are of another number or type than it asks for.
    pub fn new(header: Header, pieces: Vec<(Window, Held<'a>)>) -> Result<Self> {
        for (window, held) in &pieces {
            check_window(&header, &(0..header.bands), window)?;
            if held.sample_type() != header.sample_type || held.len() != header.bands * window.area() {
                return Err(Error::usage(
                    format!(
                        "a piece of {} samples of {} for {} bands of rows {:?}, columns {:?} of {}",
                        held.len(),
                        held.sample_type().name(),
                        header.bands,
                        window.rows,
                        window.columns,
                        header.sample_type.name()
                    ),
                    "",
                ));
            }
        }
        Ok(Pieces { header, pieces })
    }
}

impl Source for Pieces<'_> {
    fn header(&self) -> &Header {
        &self.header
    }

    fn read(&self, bands: Range<usize>, window: &Window) -> Result<Samples> {
        check_window(&self.header, &bands, window)?;
        let mut out = Samples::zeros(self.header.sample_type, bands.len() * window.area());
        let mut found = 0;
        for (own, held) in &self.pieces {
            let both = |a: &Range<usize>, b: &Range<usize>| a.start.max(b.start)..a.end.min(b.end);
            let part =
                Window { rows: both(&own.rows, &window.rows), columns: both(&own.columns, &window.columns) };
            if part.rows.is_empty() || part.columns.is_empty() {
                continue;
            }
            found += part.area();
            match (&mut out, held) {
                (Samples::U8(out), Held::U8(v)) => copy(out, v, &bands, window, own, &part),
                (Samples::I8(out), Held::I8(v)) => copy(out, v, &bands, window, own, &part),
                (Samples::U16(out), Held::U16(v)) => copy(out, v, &bands, window, own, &part),
                (Samples::I16(out), Held::I16(v)) => copy(out, v, &bands, window, own, &part),
                (Samples::U32(out), Held::U32(v)) => copy(out, v, &bands, window, own, &part),
                (Samples::I32(out), Held::I32(v)) => copy(out, v, &bands, window, own, &part),
                (Samples::F32(out), Held::F32(v)) => copy(out, v, &bands, window, own, &part),
                (Samples::F64(out), Held::F64(v)) => copy(out, v, &bands, window, own, &part),
                // Types were compared when the pieces were joined.
                _ => {}
            }
        }
        if found < window.area() {
            return Err(Error::unfit(
                format!(
                    "rows {:?}, columns {:?} are not all among the pieces given",
                    window.rows, window.columns
                ),
                "give all that Job::needs names",
            ));
        }
        Ok(out)
    }
}

fn copy<S: Copy>(
    out: &mut [S],
    held: &[S],
    bands: &Range<usize>,
    window: &Window,
    own: &Window,
    part: &Window,
) {
    for (i, band) in bands.clone().enumerate() {
        for r in part.rows.clone() {
            let to = (i * window.rows.len() + r - window.rows.start) * window.columns.len()
                + part.columns.start
                - window.columns.start;
            let from = (band * own.rows.len() + r - own.rows.start) * own.columns.len() + part.columns.start
                - own.columns.start;
            out[to..to + part.columns.len()].copy_from_slice(&held[from..from + part.columns.len()]);
        }
    }
}

impl Samples {
    /// The same samples, to be looked at.
    pub fn held(&self) -> Held<'_> {
        match self {
            Samples::U8(v) => Held::U8(v),
            Samples::I8(v) => Held::I8(v),
            Samples::U16(v) => Held::U16(v),
            Samples::I16(v) => Held::I16(v),
            Samples::U32(v) => Held::U32(v),
            Samples::I32(v) => Held::I32(v),
            Samples::F32(v) => Held::F32(v),
            Samples::F64(v) => Held::F64(v),
        }
    }
}

#[cfg(test)]
#[allow(clippy::unwrap_used)]
mod tests {
    use super::*;
    use crate::grid::Grid;
    use crate::raster::Raster;

    #[test]
    fn pieces_read_like_the_whole_and_holes_are_errors() {
        let (rows, columns, bands) = (7, 9, 2);
        let header = Header::new(Grid::new(rows, columns), bands, SampleType::U16);
        let all: Vec<u16> = (0..(rows * columns * bands) as u16).collect();
        let whole = Raster::new(header.clone(), Samples::U16(all)).unwrap();
        let windows: Vec<Window> = [(0..4, 0..5), (0..4, 5..9), (4..7, 0..9)]
            .into_iter()
            .map(|(rows, columns)| Window { rows, columns })
            .collect();
        let parts: Vec<Samples> = windows.iter().map(|w| whole.read(0..bands, w).unwrap()).collect();
        let held = |n: usize| windows.iter().cloned().zip(parts.iter().map(Samples::held)).take(n).collect();
        let pieces = Pieces::new(header.clone(), held(3)).unwrap();
        for window in [Window { rows: 2..6, columns: 3..8 }, Window { rows: 0..7, columns: 0..9 }] {
            for bands in [0..2, 1..2, 0..1] {
                let (a, b) = (pieces.read(bands.clone(), &window), whole.read(bands, &window));
                assert_eq!(a.unwrap(), b.unwrap());
            }
        }
        let partial = Pieces::new(header.clone(), held(2)).unwrap();
        assert!(partial.read(0..2, &Window { rows: 3..5, columns: 0..2 }).is_err());
        assert!(partial.read(0..2, &Window { rows: 3..4, columns: 0..9 }).is_ok());
        let wrong = vec![(windows[0].clone(), parts[1].held())];
        assert_eq!(Pieces::new(header.clone(), wrong).is_err(), windows[0].area() != windows[1].area());
        let beyond = vec![(Window { rows: 5..8, columns: 0..1 }, Held::U16(&[0; 6]))];
        assert!(Pieces::new(header, beyond).is_err());
    }
}
