//! TIFF files as a [`Sink`]: tiles compressed in parallel and appended; directories last. Little-endian.

use super::codec::{ChunkShape, Compression, encode};
use super::read::Word;
use super::{geo, ome, tags};
use crate::error::{Error, Result};
use crate::raster::beside::Beside;
use crate::raster::{Header, SampleType, Samples, Sink, Window};
use crate::with_samples;
use rayon::prelude::*;
use std::borrow::Cow;
use std::io::{BufWriter, Write};
use std::path::Path;

/// Side of a tile.
const TILE: usize = 256;

/// Above this many bytes of samples a file gets 64-bit offsets; compression may do little.
const CLASSIC_LIMIT: u64 = 3_900_000_000;

/// A TIFF in the making.
pub struct TiffSink {
    header: Header,
    file: BufWriter<Beside>,
    at: u64,
    big: bool,
    /// Offset and size of each tile, page by page, plane by plane.
    tiles: Vec<(u64, u64)>,
}

/// Refuses what a TIFF cannot hold.
///
/// # Errors
/// Names what is too large.
pub fn check_writable(path: &Path, header: &Header) -> Result<()> {
    let most = u32::MAX as usize;
    if header.grid.rows > most || header.grid.columns > most || samples_per_pixel(header) > 65_535 {
        return Err(Error::unsupported(
            path,
            "TIFF holds at most 4294967295 rows and columns and 65535 bands a page",
            "cut the raster into parts",
        ));
    }
    Ok(())
}

fn samples_per_pixel(header: &Header) -> usize {
    let s = header.storage.samples_per_pixel.max(1);
    if header.bands.is_multiple_of(s) { s } else { header.bands }
}

impl TiffSink {
    /// Starts the file beside its name.
    ///
    /// # Errors
    /// When the folder or the disk refuses.
    pub fn create(path: &Path, header: &Header, overwrite: bool) -> Result<Self> {
        check_writable(path, header)?;
        let mut header = header.clone();
        let samples = samples_per_pixel(&header);
        let s = &mut header.storage;
        s.samples_per_pixel = samples;
        s.pages = header.bands / s.samples_per_pixel;
        let float = matches!(header.sample_type, SampleType::F32 | SampleType::F64);
        if s.predictor != 1 || s.compression != Compression::None {
            // A predictor that the new type cannot have gives way to the one it can.
            s.predictor = match (s.compression, s.predictor) {
                (Compression::None | Compression::PackBits, _) => 1,
                (_, 0 | 1) => 1,
                _ if float => 3,
                _ => 2,
            };
        }
        let bytes = header.grid.pixels() as u128 * header.bands as u128 * header.sample_type.bytes() as u128;
        let big = bytes > u128::from(CLASSIC_LIMIT);
        let planes = if s.planar { header.bands } else { s.pages };
        let tiles = header.grid.rows.div_ceil(TILE) * header.grid.columns.div_ceil(TILE) * planes;
        let file = BufWriter::with_capacity(1 << 20, Beside::create(path, overwrite)?);
        let mut sink = TiffSink { header, file, at: 0, big, tiles: vec![(0, 0); tiles] };
        // The place of the first directory is filled in at the end.
        let head: &[u8] = if big {
            &[b'I', b'I', 43, 0, 8, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0]
        } else {
            &[b'I', b'I', 42, 0, 0, 0, 0, 0]
        };
        sink.append(head)?;
        Ok(sink)
    }

    fn path(&self) -> &Path {
        self.file.get_ref().path()
    }

    fn append(&mut self, bytes: &[u8]) -> Result<u64> {
        let at = self.at;
        self.file.write_all(bytes).map_err(|e| Error::io(self.file.get_ref().path(), "writing", e))?;
        self.at += bytes.len() as u64;
        Ok(at)
    }

    /// Pads to a multiple of 8, where the standard wants values to begin.
    fn align(&mut self) -> Result<()> {
        let pad = (8 - self.at % 8) % 8;
        self.append(&[0; 8][..pad as usize]).map(|_| ())
    }

    fn write_directory(&mut self, page: usize, next_at: &mut u64) -> Result<()> {
        let entries = self.entries(page);
        let mut table = Vec::new();
        let inline = if self.big { 8 } else { 4 };
        for e in &entries {
            let place = if e.bytes.len() <= inline {
                let mut b = e.bytes.clone();
                b.resize(inline, 0);
                b
            } else {
                self.align()?;
                let at = self.append(&e.bytes)?;
                at.to_le_bytes()[..inline].to_vec()
            };
            table.extend(e.tag.to_le_bytes());
            table.extend(e.kind.to_le_bytes());
            table.extend(&e.count.to_le_bytes()[..inline]);
            table.extend(place);
        }
        self.align()?;
        let start = self.at;
        if self.big {
            self.append(&(entries.len() as u64).to_le_bytes())?;
        } else {
            self.append(&(entries.len() as u16).to_le_bytes())?;
        }
        self.append(&table)?;
        let link = self.append(&[0; 8][..inline])?;
        if !self.big && self.at > u64::from(u32::MAX) {
            return Err(Error::unsupported(self.path(), "the file outgrew 4 GiB", "write it in two parts"));
        }
        let bytes = start.to_le_bytes();
        let patch = *next_at;
        self.file.flush().map_err(|e| Error::io(self.path(), "writing", e))?;
        self.file
            .get_ref()
            .write_at(&bytes[..inline], patch)
            .map_err(|e| Error::io(self.path(), "writing the directory", e))?;
        *next_at = link;
        Ok(())
    }

    fn entries(&self, page: usize) -> Vec<Entry> {
        let (h, s) = (&self.header, &self.header.storage);
        let n = s.samples_per_pixel;
        let format = match h.sample_type {
            SampleType::U8 | SampleType::U16 | SampleType::U32 => 1u16,
            SampleType::I8 | SampleType::I16 | SampleType::I32 => 2,
            SampleType::F32 | SampleType::F64 => 3,
        };
        let photometric = match s.photometric {
            // A palette needs its map and whole indices; colours need three samples.
            Some(3) if s.color_map.is_empty() || format == 3 => 1,
            Some(2) if n < 3 => 1,
            Some(p @ 0..=3) => p,
            _ => 1,
        };
        let colours = if photometric == 2 { 3 } else { 1 };
        let mut extra = s.extra_samples.clone();
        extra.resize(n - colours.min(n), 0);
        let per_page = self.tiles.len() / s.pages;
        let tiles = &self.tiles[page * per_page..(page + 1) * per_page];
        let bits = 8 * h.sample_type.bytes() as u16;
        let mut e = vec![
            Entry::long(tags::WIDTH, &[h.grid.columns as u64]),
            Entry::long(tags::HEIGHT, &[h.grid.rows as u64]),
            Entry::short(tags::BITS, &vec![bits; n]),
            Entry::short(tags::COMPRESSION, &[s.compression.tag()]),
            Entry::short(tags::PHOTOMETRIC, &[photometric]),
            Entry::short(tags::SAMPLES_PER_PIXEL, &[n as u16]),
            Entry::short(tags::PLANAR, &[if s.planar { 2 } else { 1 }]),
            Entry::long(tags::TILE_WIDTH, &[TILE as u64]),
            Entry::long(tags::TILE_HEIGHT, &[TILE as u64]),
            Entry::offsets(tags::TILE_OFFSETS, tiles.iter().map(|t| t.0), self.big),
            Entry::offsets(tags::TILE_COUNTS, tiles.iter().map(|t| t.1), self.big),
            Entry::short(tags::SAMPLE_FORMAT, &vec![format; n]),
        ];
        if s.predictor > 1 {
            e.push(Entry::short(tags::PREDICTOR, &[s.predictor]));
        }
        if !extra.is_empty() {
            e.push(Entry::short(tags::EXTRA_SAMPLES, &extra));
        }
        if photometric == 3 {
            e.push(Entry::short(tags::COLOR_MAP, &s.color_map));
        }
        if page == 0 {
            if let Some(text) = s.description.as_deref().and_then(without_shape) {
                let text = &text;
                let text = if ome::is_ome(text) {
                    ome::corrected(text, &h.grid, h.sample_type)
                } else {
                    text.to_string()
                };
                e.push(Entry::text(tags::DESCRIPTION, &text));
            }
            e.extend(s.texts.iter().map(|(tag, text)| Entry::text(*tag, text)));
            if let Some((x, y, unit)) = s.resolution {
                e.push(Entry::rational(tags::X_RESOLUTION, x));
                e.push(Entry::rational(tags::Y_RESOLUTION, y));
                e.push(Entry::short(tags::RESOLUTION_UNIT, &[unit]));
            }
        }
        if s.pages > 1 {
            e.push(Entry::long(tags::NEW_SUBFILE_TYPE, &[2]));
        }
        let placed =
            geo::place(&h.grid, s.geo_keys.as_ref(), s.description.as_deref().is_some_and(ome::is_ome));
        if let Some(v) = placed.scale {
            e.push(Entry::double(tags::PIXEL_SCALE, &v));
        }
        if let Some(v) = placed.tie {
            e.push(Entry::double(tags::TIEPOINT, &v));
        }
        if let Some(v) = placed.matrix {
            e.push(Entry::double(tags::TRANSFORMATION, &v));
        }
        if let Some(keys) = placed.keys {
            e.push(Entry::short(tags::GEO_DIRECTORY, &keys.directory));
            if !keys.doubles.is_empty() {
                e.push(Entry::double(tags::GEO_DOUBLES, &keys.doubles));
            }
            if !keys.ascii.is_empty() {
                e.push(Entry::text(tags::GEO_ASCII, &keys.ascii));
            }
        }
        if let Some(code) = h.missing {
            let text = if code.is_nan() { "nan".into() } else { code.to_string() };
            e.push(Entry::text(tags::NO_DATA, &text));
        }
        e.sort_by_key(|e| e.tag);
        e
    }

    /// The bytes of one tile; pixels beyond the raster repeat its last ones, which compresses well.
    fn tile<W: Word>(
        &self,
        samples: &[W],
        window: &Window,
        page: usize,
        plane: usize,
        origin: (usize, usize),
    ) -> Vec<u8> {
        let s = &self.header.storage;
        let in_tile = if s.planar { 1 } else { s.samples_per_pixel };
        let first_band = page * s.samples_per_pixel + plane;
        let mut out = Vec::with_capacity(TILE * TILE * in_tile * self.header.sample_type.bytes());
        let (height, width) = (window.rows.len(), window.columns.len());
        for r in 0..TILE {
            let r = (origin.0 + r).min(window.rows.end - 1) - window.rows.start;
            for c in 0..TILE {
                let c = (origin.1 + c).min(window.columns.end - 1) - window.columns.start;
                for band in first_band..first_band + in_tile {
                    samples[(band * height + r) * width + c].push(&mut out);
                }
            }
        }
        out
    }
}

impl Sink for TiffSink {
    fn alignment(&self) -> usize {
        TILE
    }

    fn write(&mut self, window: &Window, samples: &Samples) -> Result<()> {
        let s = &self.header.storage;
        let (down, across) = (self.header.grid.rows.div_ceil(TILE), self.header.grid.columns.div_ceil(TILE));
        let planes = if s.planar { s.samples_per_pixel } else { 1 };
        let mut jobs = Vec::new();
        for page in 0..s.pages {
            for plane in 0..planes {
                for r in window.rows.start / TILE..window.rows.end.div_ceil(TILE) {
                    for c in window.columns.start / TILE..window.columns.end.div_ceil(TILE) {
                        let index = ((page * planes + plane) * down + r) * across + c;
                        jobs.push((index, page, plane, (r * TILE, c * TILE)));
                    }
                }
            }
        }
        let shape = ChunkShape {
            rows: TILE,
            columns: TILE,
            samples: if s.planar { 1 } else { s.samples_per_pixel },
            bytes: self.header.sample_type.bytes(),
        };
        let (compression, predictor) = (s.compression, s.predictor);
        for batch in jobs.chunks(4 * rayon::current_num_threads()) {
            let encoded: Vec<Vec<u8>> = batch
                .par_iter()
                .map(|(_, page, plane, origin)| {
                    let raw = with_samples!(samples, v => self.tile(v, window, *page, *plane, *origin));
                    encode(raw, compression, predictor, shape)
                })
                .collect::<std::io::Result<_>>()
                .map_err(|e| Error::io(self.path(), "compressing", e))?;
            for ((index, ..), bytes) in batch.iter().zip(encoded) {
                let at = self.append(&bytes)?;
                self.tiles[*index] = (at, bytes.len() as u64);
            }
        }
        Ok(())
    }

    fn finish(mut self: Box<Self>) -> Result<()> {
        let mut link = if self.big { 8 } else { 4 };
        for page in 0..self.header.storage.pages {
            self.write_directory(page, &mut link)?;
        }
        let path = self.path().to_owned();
        let file = self.file.into_inner().map_err(|e| Error::io(&path, "writing", e.into_error()))?;
        file.finish()
    }
}

/// Array libraries store the array's shape as JSON in the description; it would be wrong on another grid. Other JSON and
/// plain text stay.
fn without_shape(text: &str) -> Option<Cow<'_, str>> {
    let Ok(serde_json::Value::Object(mut map)) = serde_json::from_str(text) else { return Some(text.into()) };
    if map.remove("shape").is_none() {
        return Some(text.into());
    }
    (!map.is_empty()).then(|| serde_json::Value::Object(map).to_string().into())
}

/// One directory entry.
struct Entry {
    tag: u16,
    kind: u16,
    count: u64,
    bytes: Vec<u8>,
}

impl Entry {
    fn new(tag: u16, kind: u16, count: usize, bytes: Vec<u8>) -> Self {
        Entry { tag, kind, count: count as u64, bytes }
    }
    fn short(tag: u16, v: &[u16]) -> Self {
        Entry::new(tag, 3, v.len(), v.iter().flat_map(|v| v.to_le_bytes()).collect())
    }
    fn long(tag: u16, v: &[u64]) -> Self {
        Entry::new(tag, 4, v.len(), v.iter().flat_map(|v| (*v as u32).to_le_bytes()).collect())
    }
    fn offsets(tag: u16, v: impl ExactSizeIterator<Item = u64>, big: bool) -> Self {
        let count = v.len();
        match big {
            true => Entry::new(tag, 16, count, v.flat_map(u64::to_le_bytes).collect()),
            false => Entry::new(tag, 4, count, v.flat_map(|v| (v as u32).to_le_bytes()).collect()),
        }
    }
    fn double(tag: u16, v: &[f64]) -> Self {
        Entry::new(tag, 12, v.len(), v.iter().flat_map(|v| v.to_le_bytes()).collect())
    }
    /// UTF-8 under the ASCII type, as OME-XML and practice have it, with its closing NUL.
    fn text(tag: u16, v: &str) -> Self {
        let bytes: Vec<u8> = v.bytes().chain([0]).collect();
        Entry::new(tag, 2, bytes.len(), bytes)
    }
    /// The nearest fraction with a numerator or denominator that fits.
    fn rational(tag: u16, v: f64) -> Self {
        let mut denominator = 1u32;
        while (v * f64::from(denominator)).fract() != 0.0
            && denominator < 1_000_000
            && v * f64::from(denominator) * 10.0 < 4e9
        {
            denominator *= 10;
        }
        let numerator = (v * f64::from(denominator)).round().clamp(0.0, f64::from(u32::MAX)) as u32;
        Entry::new(tag, 5, 1, [numerator.to_le_bytes(), denominator.to_le_bytes()].concat())
    }
}
