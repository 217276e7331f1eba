//! TIFF files as a [`Source`]: windows decoded chunk by chunk, in parallel.

use super::codec::{ChunkShape, Compression, decode};
use super::tags::{self, Directories};
use super::{geo, ome};
use crate::error::{Error, Result};
use crate::grid::Grid;
use crate::raster::storage::{Format, Storage};
use crate::raster::{Header, Positioned, SampleType, Samples, Source, Window, check_window};
use crate::with_samples;
use rayon::prelude::*;
use std::fs::File;
use std::ops::Range;
use std::path::{Path, PathBuf};

/// A chunk larger than this, decoded, is taken for damage.
const MAX_CHUNK_BYTES: usize = 1 << 30;

/// Pages of one TIFF file as bands.
pub struct TiffSource {
    header: Header,
    path: PathBuf,
    file: File,
    big_endian: bool,
    pages: Vec<Page>,
}

/// Where the chunks of one page are.
struct Page {
    samples: usize,
    planar: bool,
    compression: Compression,
    predictor: u16,
    /// Rows and columns of a chunk.
    chunk: (usize, usize),
    /// Whether the last chunk row is stored cut off (strips) or whole (tiles).
    tiled: bool,
    offsets: Vec<u64>,
    counts: Vec<u64>,
}

/// What all pages must share.
#[derive(PartialEq, Clone, Copy, Debug)]
struct Look {
    rows: usize,
    columns: usize,
    sample_type: SampleType,
    samples: usize,
    bits: u64,
}

/// The mask pages of a file: 8 bits a pixel, or 1 packed from the highest bit on.
pub struct MaskPages {
    header: Header,
    bytes: TiffSource,
    packed: bool,
    /// Bands of the raster to a page.
    samples: usize,
}

impl MaskPages {
    /// Bands of the raster that one mask page serves.
    fn page_of(&self, band: usize) -> usize {
        if self.bytes.pages.len() == 1 { 0 } else { band / self.samples }
    }
}

impl Source for MaskPages {
    fn header(&self) -> &Header {
        &self.header
    }

    fn read(&self, bands: Range<usize>, window: &Window) -> Result<Samples> {
        let mut out = Vec::with_capacity(bands.len() * window.area());
        for band in bands {
            let page = self.page_of(band);
            let columns = match self.packed {
                true => window.columns.start / 8..window.columns.end.div_ceil(8),
                false => window.columns.clone(),
            };
            let part = Window { rows: window.rows.clone(), columns: columns.clone() };
            let Samples::U8(bytes) = self.bytes.read(page..page + 1, &part)? else { continue };
            if !self.packed {
                out.extend(bytes);
                continue;
            }
            for line in bytes.chunks(columns.len().max(1)) {
                out.extend(window.columns.clone().map(|c| (line[c / 8 - columns.start] >> (7 - c % 8)) & 1));
            }
        }
        Ok(Samples::U8(out))
    }
}

impl TiffSource {
    /// Opens a TIFF file; reads its directories, no samples. Mask pages come apart.
    ///
    /// # Errors
    /// When the file is damaged or uses what Regauge does not read.
    pub fn open(path: &Path) -> Result<(Self, Option<MaskPages>)> {
        let mut directories = Directories::read(path)?;
        let mut storage = Storage { format: Format::Tiff, ..Storage::default() };
        let mut pages: Vec<Page> = Vec::new();
        let mut look: Option<Look> = None;
        let mut masks = Vec::new();
        let mut reduced = 0;
        for index in 0..directories.pages.len() {
            let kind = directories.integer(index, tags::NEW_SUBFILE_TYPE)?.unwrap_or(0);
            if kind & 1 != 0 && index > 0 {
                reduced += 1;
                continue;
            }
            if kind & 4 != 0 {
                masks.push(read_page(&mut directories, path, index, true)?);
                continue;
            }
            let (page, this) = read_page(&mut directories, path, index, false)?;
            match look {
                None => {
                    look = Some(this);
                    read_storage(&mut directories, index, &page, &mut storage)?;
                }
                Some(first) if first != this => {
                    return Err(Error::unsupported(
                        path,
                        format!(
                            "page {} has {} x {} x {} samples of {}, the first page {} x {} x {} of {}",
                            index + 1,
                            this.rows,
                            this.columns,
                            this.samples,
                            this.sample_type.name(),
                            first.rows,
                            first.columns,
                            first.samples,
                            first.sample_type.name()
                        ),
                        "split the file: pages are resampled together only if they are alike",
                    ));
                }
                Some(_) => {}
            }
            if directories.pages[index].contains(tiff::tags::Tag::from_u16_exhaustive(tags::SUB_IFDS)) {
                reduced += 1;
            }
            pages.push(page);
        }
        let look =
            look.ok_or_else(|| Error::malformed(path, "directories", "every page is a reduced copy"))?;
        if reduced > 0 {
            storage.notes.push(format!("{reduced} reduced-resolution pages are not carried over"));
        }
        storage.pages = pages.len();
        storage.samples_per_pixel = look.samples;
        let mut grid = Grid::new(look.rows, look.columns);
        storage.geo_keys = geo::read(&mut directories, &mut grid, &mut storage.notes)?;
        let bands = pages.len() * look.samples;
        let mut band_names = Vec::new();
        if let Some(xml) = storage.description.as_deref().filter(|d| ome::is_ome(d)) {
            band_names = ome::band_names(xml, bands);
            if grid.world.is_none()
                && let Some((world, unit)) = ome::physical_size(xml)
            {
                grid.world = Some(world);
                grid.unit = Some(unit);
            }
        }
        grid.check().map_err(|e| Error::malformed(path, "georeference", e.to_string()))?;
        let missing = directories.text(0, tags::NO_DATA)?.and_then(|t| parse_no_data(&t, &mut storage.notes));
        let file = File::open(path).map_err(|e| Error::io(path, "opening", e))?;
        let header = Header { grid, bands, sample_type: look.sample_type, missing, band_names, storage };
        let source =
            TiffSource { header, path: path.to_owned(), file, big_endian: directories.big_endian, pages };
        let mask = if masks.is_empty() { None } else { Some(source.mask(masks, look)?) };
        Ok((source, mask))
    }

    /// The mask pages as a raster: 0 where a sample is missing.
    fn mask(&self, masks: Vec<(Page, Look)>, look: Look) -> Result<MaskPages> {
        let packed = masks[0].1.bits == 1;
        for (_, this) in &masks {
            let fits = (this.rows, this.columns, this.samples) == (look.rows, look.columns, 1);
            if !fits || this.bits != masks[0].1.bits || (masks.len() > 1 && masks.len() != self.pages.len()) {
                return Err(Error::unsupported(
                    &self.path,
                    format!(
                        "{} mask pages, one of {} x {} pixels of {} bits, do not fit {} pages of {} x {}",
                        masks.len(),
                        this.rows,
                        this.columns,
                        this.bits,
                        self.pages.len(),
                        look.rows,
                        look.columns
                    ),
                    "give one mask page of the raster's size, or one for each page",
                ));
            }
        }
        let header = Header::new(Grid::new(look.rows, look.columns), masks.len(), SampleType::U8);
        let columns = if packed { look.columns.div_ceil(8) } else { look.columns };
        let mut stored = Header::new(Grid::new(look.rows, columns), masks.len(), SampleType::U8);
        stored.storage.samples_per_pixel = 1;
        let file = self.file.try_clone().map_err(|e| Error::io(&self.path, "opening", e))?;
        let pages = masks.into_iter().map(|m| m.0).collect();
        let bytes =
            TiffSource { header: stored, path: self.path.clone(), file, big_endian: self.big_endian, pages };
        Ok(MaskPages { header, bytes, packed, samples: look.samples })
    }

    fn decode_chunk(&self, page: &Page, plane: usize, chunk: (usize, usize)) -> Result<Option<Vec<u8>>> {
        let grid = &self.header.grid;
        let (down, across) = (grid.rows.div_ceil(page.chunk.0), grid.columns.div_ceil(page.chunk.1));
        let index = (plane * down + chunk.0) * across + chunk.1;
        let (offset, count) = (page.offsets[index], page.counts[index]);
        if count == 0 {
            return Ok(None);
        }
        let place = || format!("chunk {index} at byte {offset}");
        let shape = self.shape(page, chunk.0);
        // No codec here makes more than twice the bytes of its worst case; more is damage.
        if count > 2 * shape.len() as u64 + 4096 {
            return Err(Error::malformed(
                &self.path,
                place(),
                format!("{count} bytes for {} bytes of samples", shape.len()),
            ));
        }
        let mut stored = vec![0; count as usize];
        self.file.read_exact_at_offset(&mut stored, offset).map_err(|e| match e.kind() {
            std::io::ErrorKind::UnexpectedEof => {
                Error::malformed(&self.path, place(), "the file ends within it")
            }
            _ => Error::io(&self.path, "reading samples", e),
        })?;
        decode(&stored, page.compression, page.predictor, self.big_endian, shape)
            .map(Some)
            .map_err(|e| Error::malformed(&self.path, place(), e))
    }

    fn shape(&self, page: &Page, chunk_row: usize) -> ChunkShape {
        let left = self.header.grid.rows - chunk_row * page.chunk.0;
        ChunkShape {
            rows: if page.tiled { page.chunk.0 } else { page.chunk.0.min(left) },
            columns: page.chunk.1,
            samples: if page.planar { 1 } else { page.samples },
            bytes: self.header.sample_type.bytes(),
        }
    }
}

impl Source for TiffSource {
    fn header(&self) -> &Header {
        &self.header
    }

    fn read(&self, bands: Range<usize>, window: &Window) -> Result<Samples> {
        check_window(&self.header, &bands, window)?;
        let mut out = Samples::zeros(self.header.sample_type, bands.len() * window.area());
        if window.area() > 0 {
            with_samples!(&mut out, v => self.fill(v, &bands, window))?;
        }
        Ok(out)
    }
}

/// One row of chunks of one page (and plane), and the rows of the window that it fills: for each band its sample within
/// the chunk and its part of the output.
struct ChunkRow<'a, W> {
    page: usize,
    plane: usize,
    row: usize,
    parts: Vec<(usize, &'a mut [W])>,
}

impl TiffSource {
    /// Decodes all chunks of a window in parallel, a row of chunks at a time.
    fn fill<W: Word>(&self, out: &mut [W], bands: &Range<usize>, window: &Window) -> Result<()> {
        let samples = self.header.storage.samples_per_pixel;
        let mut jobs: Vec<ChunkRow<W>> = Vec::new();
        let mut first_of_page: Option<(usize, usize)> = None;
        for (band, plane) in bands.clone().zip(out.chunks_mut(window.area())) {
            let (p, sample) = (band / samples, band % samples);
            let page = &self.pages[p];
            let mut rest = plane;
            // The bands of a chunky page share its chunks: they join the jobs that its first band made.
            let shared = first_of_page.filter(|(known, _)| *known == p && !page.planar).map(|(_, at)| at);
            let start = shared.unwrap_or(jobs.len());
            for (i, row) in
                (window.rows.start / page.chunk.0..window.rows.end.div_ceil(page.chunk.0)).enumerate()
            {
                let rows = (row * page.chunk.0).max(window.rows.start)
                    ..((row + 1) * page.chunk.0).min(window.rows.end);
                let (part, after) = rest.split_at_mut(rows.len() * window.columns.len());
                rest = after;
                let in_chunk = if page.planar { 0 } else { sample };
                match shared {
                    Some(at) => jobs[at + i].parts.push((in_chunk, part)),
                    None => jobs.push(ChunkRow {
                        page: p,
                        plane: if page.planar { sample } else { 0 },
                        row,
                        parts: vec![(in_chunk, part)],
                    }),
                }
            }
            first_of_page = Some((p, start));
        }
        jobs.into_par_iter().try_for_each(|mut job| {
            let page = &self.pages[job.page];
            for column in window.columns.start / page.chunk.1..window.columns.end.div_ceil(page.chunk.1) {
                let data = self.decode_chunk(page, job.plane, (job.row, column))?;
                let origin = (job.row * page.chunk.0, column * page.chunk.1);
                let rows = origin.0.max(window.rows.start)..window.rows.end;
                for (sample, part) in &mut job.parts {
                    let from = ChunkPart {
                        data: data.as_deref(),
                        shape: self.shape(page, job.row),
                        sample: *sample,
                        origin,
                        fill: self.header.missing.unwrap_or(0.0),
                    };
                    from.place(part, &Window { rows: rows.clone(), columns: window.columns.clone() });
                }
            }
            Ok(())
        })
    }
}

/// One sample plane of a decoded chunk, on its way into a window.
struct ChunkPart<'a> {
    /// `None` for a chunk that the file does not store.
    data: Option<&'a [u8]>,
    shape: ChunkShape,
    sample: usize,
    origin: (usize, usize),
    fill: f64,
}

/// A sample as bytes in the machine's order.
pub(in crate::raster) trait Word: Copy + Send + Sync {
    fn from_bytes(bytes: &[u8]) -> Self;
    fn push(self, out: &mut Vec<u8>);
    fn from_f64(v: f64) -> Self;
}

macro_rules! words {
    ($($t:ty),*) => {$(
        impl Word for $t {
            #[inline(always)]
            fn from_bytes(bytes: &[u8]) -> Self {
                let mut word = [0; size_of::<$t>()];
                word.copy_from_slice(bytes);
                <$t>::from_ne_bytes(word)
            }
            #[inline(always)]
            fn push(self, out: &mut Vec<u8>) { out.extend_from_slice(&self.to_ne_bytes()) }
            fn from_f64(v: f64) -> Self { v as $t }
        }
    )*};
}
words!(u8, i8, u16, i16, u32, i32, f32, f64);

impl ChunkPart<'_> {
    fn place<W: Word>(&self, out: &mut [W], window: &Window) {
        let shape = self.shape;
        let rows = self.origin.0.max(window.rows.start)..(self.origin.0 + shape.rows).min(window.rows.end);
        let columns =
            self.origin.1.max(window.columns.start)..(self.origin.1 + shape.columns).min(window.columns.end);
        let (step, width) = (shape.samples * shape.bytes, window.columns.len());
        for r in rows {
            let line = &mut out[(r - window.rows.start) * width..][..width];
            let line = &mut line[columns.start - window.columns.start..columns.end - window.columns.start];
            let Some(data) = self.data else {
                line.fill(W::from_f64(self.fill));
                continue;
            };
            let first = ((r - self.origin.0) * shape.columns + columns.start - self.origin.1) * step
                + self.sample * shape.bytes;
            for (v, word) in line.iter_mut().zip(data[first..].chunks(step)) {
                *v = W::from_bytes(&word[..shape.bytes]);
            }
        }
    }
}

/// A page's chunks and look; a mask may have 1 bit a pixel, and its chunks are then those of its bytes.
fn read_page(d: &mut Directories, path: &Path, index: usize, mask: bool) -> Result<(Page, Look)> {
    let bad = |what: String| Error::malformed(path, format!("page {}", index + 1), what);
    let unsupported =
        |what: String, mend: &str| Error::unsupported(path, format!("page {}: {what}", index + 1), mend);
    let mut need = |tag: u16, name: &str| -> Result<usize> {
        let v = d.integer(index, tag)?.ok_or_else(|| bad(format!("no {name}")))?;
        usize::try_from(v).map_err(|_| bad(format!("{name} {v} is too large")))
    };
    let (rows, columns) = (need(tags::HEIGHT, "height")?, need(tags::WIDTH, "width")?);
    if rows == 0 || columns == 0 {
        return Err(bad(format!("{rows} x {columns} pixels")));
    }
    let samples = d.integer(index, tags::SAMPLES_PER_PIXEL)?.unwrap_or(1) as usize;
    if samples == 0 || samples > 65_535 {
        return Err(bad(format!("{samples} samples per pixel")));
    }
    let bits = d.integers(index, tags::BITS)?;
    let bit = bits.first().copied().unwrap_or(1);
    let formats = d.integers(index, tags::SAMPLE_FORMAT)?;
    let format = formats.first().copied().unwrap_or(1);
    if bits.iter().any(|b| *b != bit) || formats.iter().any(|f| *f != format) {
        return Err(unsupported(
            "samples of different types in one pixel".into(),
            "store every band in one type",
        ));
    }
    let sample_type = match (format, bit) {
        (1 | 4, 8) => SampleType::U8,
        (1 | 4, 1) if mask && samples == 1 => SampleType::U8,
        (2, 8) => SampleType::I8,
        (1 | 4, 16) => SampleType::U16,
        (2, 16) => SampleType::I16,
        (1 | 4, 32) => SampleType::U32,
        (2, 32) => SampleType::I32,
        (3, 32) => SampleType::F32,
        (3, 64) => SampleType::F64,
        (f, b) => {
            let kind = match f {
                1 | 4 => "unsigned",
                2 => "signed",
                3 => "floating-point",
                5 | 6 => "complex",
                _ => "unknown",
            };
            return Err(unsupported(
                format!("samples of {b} bits, {kind}"),
                "use 8, 16 or 32-bit integers, or 32 or 64-bit floating point",
            ));
        }
    };
    let code = d.integer(index, tags::COMPRESSION)?.unwrap_or(1);
    let compression = Compression::from_tag(code).ok_or_else(|| {
        let name = match code {
            6 | 7 => "JPEG",
            34712 => "JPEG 2000",
            34887 => "LERC",
            34925 => "LZMA",
            50002 => "JPEG XL",
            2..=4 => "fax",
            _ => "unknown",
        };
        unsupported(
            format!("compression {code} ({name})"),
            "store it uncompressed, or with LZW, Deflate, PackBits or Zstandard",
        )
    })?;
    let predictor = d.integer(index, tags::PREDICTOR)?.unwrap_or(1);
    if !(1..=3).contains(&predictor)
        || (predictor == 3 && !matches!(sample_type, SampleType::F32 | SampleType::F64))
    {
        return Err(unsupported(
            format!("predictor {predictor} on {}", sample_type.name()),
            "use predictor 1, 2 or 3",
        ));
    }
    if d.integer(index, 266)?.unwrap_or(1) != 1 {
        return Err(unsupported("reversed bit order within bytes".into(), "write it with FillOrder 1"));
    }
    let planar = match d.integer(index, tags::PLANAR)?.unwrap_or(1) {
        1 => false,
        2 => samples > 1,
        p => return Err(bad(format!("planar configuration {p}"))),
    };
    let stored = |pixels: usize| if bit == 1 { pixels.div_ceil(8) } else { pixels };
    let tile = (d.integer(index, tags::TILE_HEIGHT)?, d.integer(index, tags::TILE_WIDTH)?);
    let (tiled, chunk, where_tag, count_tag) = match tile {
        (Some(h), Some(w)) => (true, (h as usize, stored(w as usize)), tags::TILE_OFFSETS, tags::TILE_COUNTS),
        _ => {
            let strip = d.integer(index, tags::ROWS_PER_STRIP)?.unwrap_or(u64::MAX);
            let strip = usize::try_from(strip).unwrap_or(usize::MAX).clamp(1, rows);
            (false, (strip, stored(columns)), tags::STRIP_OFFSETS, tags::STRIP_COUNTS)
        }
    };
    if chunk.0 == 0 || chunk.1 == 0 {
        return Err(bad(format!("chunks of {} x {} pixels", chunk.0, chunk.1)));
    }
    let in_chunk = if planar { 1 } else { samples };
    let chunk_bytes =
        chunk.0.checked_mul(chunk.1).and_then(|p| p.checked_mul(in_chunk * sample_type.bytes()));
    if chunk_bytes.is_none_or(|b| b > MAX_CHUNK_BYTES) {
        return Err(Error::Limit {
            what: format!(
                "{}: page {}: one chunk of {} x {} pixels",
                path.display(),
                index + 1,
                chunk.0,
                chunk.1
            ),
            needed: format!("{} MiB", chunk_bytes.map_or("too many".into(), |b| (b >> 20).to_string())),
            limit: format!("{} MiB", MAX_CHUNK_BYTES >> 20),
            mend: "store the raster in tiles or in smaller strips".into(),
        });
    }
    let planes = if planar { samples } else { 1 };
    let wanted = rows
        .div_ceil(chunk.0)
        .checked_mul(stored(columns).div_ceil(chunk.1))
        .and_then(|c| c.checked_mul(planes));
    let offsets = d.integers(index, where_tag)?;
    let mut counts = d.integers(index, count_tag)?;
    if wanted != Some(offsets.len()) {
        return Err(bad(format!(
            "{} chunk offsets where {rows} x {columns} pixels in chunks of {} x {} need {}",
            offsets.len(),
            chunk.0,
            chunk.1,
            wanted.map_or("too many".into(), |w| w.to_string())
        )));
    }
    if counts.is_empty() && compression == Compression::None {
        // Some old writers leave the counts out where they follow from the sizes.
        counts = vec![chunk_bytes.unwrap_or(0) as u64; offsets.len()];
    }
    if counts.len() != offsets.len() {
        return Err(bad(format!("{} chunk sizes for {} chunks", counts.len(), offsets.len())));
    }
    let page =
        Page { samples, planar, compression, predictor: predictor as u16, chunk, tiled, offsets, counts };
    Ok((page, Look { rows, columns, sample_type, samples, bits: bit }))
}

fn read_storage(d: &mut Directories, index: usize, page: &Page, storage: &mut Storage) -> Result<()> {
    storage.compression = page.compression;
    storage.predictor = page.predictor;
    storage.planar = page.planar;
    let shorts = |v: Vec<u64>| v.into_iter().map(|v| v as u16).collect::<Vec<u16>>();
    storage.photometric = d.integer(index, tags::PHOTOMETRIC)?.map(|v| v as u16);
    storage.extra_samples = shorts(d.integers(index, tags::EXTRA_SAMPLES)?);
    storage.color_map = shorts(d.integers(index, tags::COLOR_MAP)?);
    storage.description = d.text(index, tags::DESCRIPTION)?;
    for tag in tags::TEXT {
        if let Some(text) = d.text(index, tag)? {
            storage.texts.push((tag, text));
        }
    }
    let (x, y) = (d.doubles(index, tags::X_RESOLUTION)?, d.doubles(index, tags::Y_RESOLUTION)?);
    if let ([x], [y]) = (&x[..], &y[..]) {
        let unit = d.integer(index, tags::RESOLUTION_UNIT)?.unwrap_or(2) as u16;
        storage.resolution = Some((*x, *y, unit));
    }
    let unknown: Vec<String> = d.pages[index]
        .iter()
        .map(|(t, _)| t.to_u16())
        .filter(|t| !tags::KNOWN.contains(t) && !tags::TEXT.contains(t))
        .map(|t| t.to_string())
        .collect();
    if !unknown.is_empty() {
        storage.notes.push(format!("tags not carried over: {}", unknown.join(", ")));
    }
    Ok(())
}

fn parse_no_data(text: &str, notes: &mut Vec<String>) -> Option<f64> {
    let text = text.trim();
    match text.to_ascii_lowercase().as_str() {
        "nan" | "+nan" | "-nan" => Some(f64::NAN),
        "inf" | "+inf" => Some(f64::INFINITY),
        "-inf" => Some(f64::NEG_INFINITY),
        t => {
            let v = t.parse().ok();
            if v.is_none() && !text.is_empty() {
                notes.push(format!("the no-data text \"{text}\" is no number and was not used"));
            }
            v
        }
    }
}
