//! Digests: SHA-256 of decoded samples and grid, the same however a file is laid out or read.

use super::{Header, Samples, Source, Window};
use crate::error::Result;
use crate::with_samples;
use rayon::prelude::*;
use sha2::{Digest as _, Sha256};

/// Side of the cells that are hashed on their own.
pub const CELL: usize = 256;

/// Collects the hashes of cells, in any order of windows.
pub struct Digest {
    bands: usize,
    size: (usize, usize),
    cells: Vec<[u8; 32]>,
}

/// A sample as canonical bytes: little-endian, every NaN alike.
trait Canonical: Copy + Sync {
    fn feed(self, out: &mut Vec<u8>);
}
macro_rules! canonical {
    ($($t:ty),*) => {$(impl Canonical for $t { #[inline(always)] fn feed(self, out: &mut Vec<u8>) { out.extend_from_slice(&self.to_le_bytes()) } })*};
}
canonical!(u8, i8, u16, i16, u32, i32);
macro_rules! canonical_float {
    ($($t:ty),*) => {$(impl Canonical for $t {
        #[inline(always)]
        fn feed(self, out: &mut Vec<u8>) {
            let v = if self.is_nan() { <$t>::NAN } else { self };
            out.extend_from_slice(&v.to_le_bytes());
        }
    })*};
}
canonical_float!(f32, f64);

impl Digest {
    /// For a raster of that header.
    pub fn new(header: &Header) -> Self {
        let size = (header.grid.rows, header.grid.columns);
        let cells = size.0.div_ceil(CELL) * size.1.div_ceil(CELL) * header.bands;
        Digest { bands: header.bands, size, cells: vec![[0; 32]; cells] }
    }

    /// Feeds a window of all bands that begins at multiples of [`CELL`] and ends there or at the raster's end.
    pub fn feed(&mut self, window: &Window, samples: &Samples) {
        let (down, across) = (self.size.0.div_ceil(CELL), self.size.1.div_ceil(CELL));
        let rows = window.rows.start / CELL..window.rows.end.div_ceil(CELL);
        let columns = window.columns.start / CELL..window.columns.end.div_ceil(CELL);
        let places: Vec<(usize, usize, usize)> = (0..self.bands)
            .flat_map(|b| rows.clone().flat_map(move |r| (0..across).map(move |c| (b, r, c))))
            .filter(|(_, _, c)| columns.contains(c))
            .collect();
        let hashes: Vec<[u8; 32]> = places
            .par_iter()
            .map(|(b, r, c)| with_samples!(samples, v => hash_cell(v, window, *b, (r * CELL, c * CELL))))
            .collect();
        for ((b, r, c), hash) in places.into_iter().zip(hashes) {
            self.cells[(b * down + r) * across + c] = hash;
        }
    }

    /// The digest in hexadecimal: of type, sizes, grid and all cells in order.
    pub fn finish(self, header: &Header) -> String {
        let mut all = Sha256::new();
        let grid = serde_json::to_string(&header.grid).unwrap_or_default();
        all.update(format!("{} {} {grid}", header.sample_type.name(), header.bands));
        for cell in &self.cells {
            all.update(cell);
        }
        all.finalize().iter().map(|b| format!("{b:02x}")).collect()
    }
}

fn hash_cell<S: Canonical>(samples: &[S], window: &Window, band: usize, origin: (usize, usize)) -> [u8; 32] {
    let (height, width) = (window.rows.len(), window.columns.len());
    let rows = origin.0..(origin.0 + CELL).min(window.rows.end);
    let columns =
        origin.1 - window.columns.start..(origin.1 + CELL).min(window.columns.end) - window.columns.start;
    let mut bytes = Vec::with_capacity(rows.len() * columns.len() * size_of::<S>());
    for r in rows {
        let line = (band * height + r - window.rows.start) * width;
        samples[line + columns.start..line + columns.end].iter().for_each(|s| s.feed(&mut bytes));
    }
    Sha256::digest(&bytes).into()
}

/// The digest of a whole raster, read in bands of rows.
///
/// # Errors
/// When the source cannot be read.
pub fn digest(source: &dyn Source) -> Result<String> {
    let header = source.header();
    let mut digest = Digest::new(header);
    for start in (0..header.grid.rows).step_by(CELL) {
        let rows = start..(start + CELL).min(header.grid.rows);
        let window = Window { rows, columns: 0..header.grid.columns };
        digest.feed(&window, &source.read(0..header.bands, &window)?);
    }
    Ok(digest.finish(header))
}
