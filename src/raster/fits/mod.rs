//! FITS images: read and written by windows, in file order (the first row of the array is the first of the file).

mod cards;
mod wcs;

use super::beside::Beside;
use super::tiff::Word;
use super::{Format, Header, Positioned, Sample, SampleType, Samples, Sink, Source, Window, check_window};
use crate::error::{Error, Result};
use crate::grid::Grid;
use crate::with_samples;
use cards::{BLOCK, Cards, fixed, keyword};
use std::fs::File;
use std::io::Write;
use std::ops::Range;
use std::path::{Path, PathBuf};

/// An image of a FITS file that is read.
pub struct FitsSource {
    header: Header,
    path: PathBuf,
    file: File,
    data_at: u64,
    stored: Stored,
}

/// How samples stand in the file, and what they mean.
#[derive(Clone, Copy, Debug, PartialEq)]
struct Stored {
    bitpix: i64,
    scale: f64,
    zero: f64,
    /// The stored whole number that means missing, where samples are scaled to floating point.
    blank: Option<i64>,
    /// Samples are stored numbers, shifted at most by the convention for the other sign.
    plain: bool,
}

impl FitsSource {
    /// Opens the file and finds its image: in the primary HDU, or else in the first extension that has one.
    ///
    /// # Errors
    /// When the file is damaged, or holds no image that is read.
    pub fn open(path: &Path) -> Result<Self> {
        let file = File::open(path).map_err(|e| Error::io(path, "opening", e))?;
        let len = file.metadata().map_err(|e| Error::io(path, "opening", e))?.len();
        let (mut at, mut index, mut found, mut others, mut packed) = (0, 0, None, 0, false);
        while let Some(cards) = Cards::read(&file, len, at, path)? {
            if index == 0 && !cards.is_true("SIMPLE") {
                return Err(Error::malformed(path, "SIMPLE", "the file does not keep to the FITS standard"));
            }
            let axes = axes(&cards, path)?;
            let bytes = data_bytes(&cards, &axes, path)?;
            let kind = cards.text("XTENSION").unwrap_or_default();
            let is_image = index == 0 || kind == "IMAGE";
            packed |= cards.is_true("ZIMAGE");
            at = cards.end.saturating_add(bytes.next_multiple_of(BLOCK));
            if is_image && axes.len() >= 2 && bytes > 0 {
                if found.is_none() {
                    found = Some((index, cards, axes));
                } else {
                    others += 1;
                }
            } else if index > 0 {
                others += 1;
            }
            index += 1;
        }
        let Some((index, cards, axes)) = found else {
            return Err(if packed {
                Error::unsupported(path, "its images are compressed", "unpack the file first")
            } else {
                Error::unsupported(path, "it holds no image", "give a file with an image of two axes or more")
            });
        };
        let (columns, rows) = (axes[0], axes[1]);
        let bands = axes[2..].iter().product::<usize>();
        let (stored, sample_type, missing) = read_type(&cards, path)?;
        let mut header = Header::new(Grid::new(rows, columns), bands, sample_type);
        header.missing = missing;
        let storage = &mut header.storage;
        storage.format = Format::Fits;
        if index > 0 {
            storage.notes.push(format!("the image is that of extension {index}"));
        }
        if others > 0 {
            storage.notes.push(format!("{others} other HDUs are not carried over"));
        }
        wcs::read(&cards, &mut header.grid, &mut header.storage.notes, path)?;
        let data_at = cards.end;
        header.storage.cards = cards.cards.into_iter().filter(|c| !is_structural(keyword(c))).collect();
        header.grid.check().map_err(|e| Error::malformed(path, "world coordinates", e.to_string()))?;
        let bytes = (stored.bitpix.unsigned_abs() / 8).saturating_mul((rows * columns * bands) as u64);
        if data_at.saturating_add(bytes) > len {
            return Err(Error::malformed(
                path,
                format!("data at byte {data_at}"),
                format!(
                    "{bands} x {rows} x {columns} samples of {} bits do not stand in {len} bytes",
                    stored.bitpix
                ),
            ));
        }
        Ok(FitsSource { header, path: path.to_owned(), file, data_at, stored })
    }

    fn row(&self, band: usize, row: usize, columns: &Range<usize>, buffer: &mut Vec<u8>) -> Result<()> {
        let grid = &self.header.grid;
        let bytes = self.stored.bitpix.unsigned_abs() as usize / 8;
        buffer.resize(columns.len() * bytes, 0);
        let first = ((band * grid.rows + row) * grid.columns + columns.start) * bytes;
        self.file
            .read_exact_at_offset(buffer, self.data_at + first as u64)
            .map_err(|e| Error::io(&self.path, "reading samples", e))?;
        if cfg!(target_endian = "little") && bytes > 1 {
            buffer.chunks_exact_mut(bytes).for_each(<[u8]>::reverse);
        }
        Ok(())
    }
}

/// The lengths of the axes, columns first; those of one sample behind the second are left out.
fn axes(cards: &Cards, path: &Path) -> Result<Vec<usize>> {
    let count =
        cards.integer("NAXIS", path)?.ok_or_else(|| Error::malformed(path, "NAXIS", "no such card"))?;
    if !(0..=999).contains(&count) {
        return Err(Error::malformed(path, "NAXIS", format!("{count} axes")));
    }
    let mut out = Vec::new();
    let mut product = 1usize;
    for n in 1..=count {
        let key = format!("NAXIS{n}");
        let len = cards.integer(&key, path)?.ok_or_else(|| Error::malformed(path, &key, "no such card"))?;
        let len = usize::try_from(len).map_err(|_| Error::malformed(path, &key, format!("{len} samples")))?;
        product = product
            .checked_mul(len)
            .filter(|p| *p < 1 << 50)
            .ok_or_else(|| Error::malformed(path, &key, format!("{len} samples are too many")))?;
        if n <= 2 || len != 1 {
            out.push(len);
        }
    }
    Ok(out)
}

/// Bytes of an HDU's data.
fn data_bytes(cards: &Cards, axes: &[usize], path: &Path) -> Result<u64> {
    if axes.is_empty() {
        return Ok(0);
    }
    let bitpix =
        cards.integer("BITPIX", path)?.ok_or_else(|| Error::malformed(path, "BITPIX", "no such card"))?;
    if !matches!(bitpix, 8 | 16 | 32 | 64 | -32 | -64) {
        return Err(Error::malformed(path, "BITPIX", format!("{bitpix} bits a sample")));
    }
    let count = |key: &str, usual: i64| -> Result<u64> {
        let v = cards.integer(key, path)?.unwrap_or(usual);
        u64::try_from(v).map_err(|_| Error::malformed(path, key, format!("{v}")))
    };
    let (groups, parameters) = (count("GCOUNT", 1)?, count("PCOUNT", 0)?);
    let samples = axes.iter().map(|a| *a as u64).product::<u64>();
    (bitpix.unsigned_abs() / 8)
        .checked_mul(groups)
        .and_then(|b| b.checked_mul(samples.saturating_add(parameters)))
        .filter(|b| *b < 1 << 60)
        .ok_or_else(|| Error::malformed(path, "BITPIX", "the data would be larger than any file"))
}

fn read_type(cards: &Cards, path: &Path) -> Result<(Stored, SampleType, Option<f64>)> {
    let bitpix = cards.integer("BITPIX", path)?.unwrap_or(0);
    let (scale, zero) =
        (cards.number("BSCALE", path)?.unwrap_or(1.0), cards.number("BZERO", path)?.unwrap_or(0.0));
    if scale == 0.0 {
        return Err(Error::malformed(path, "BSCALE", "a scale of 0 makes all samples the same"));
    }
    let blank = if bitpix > 0 { cards.integer("BLANK", path)? } else { None };
    let plain = match (bitpix, scale, zero) {
        (8, 1.0, 0.0) => Some(SampleType::U8),
        (8, 1.0, -128.0) => Some(SampleType::I8),
        (16, 1.0, 0.0) => Some(SampleType::I16),
        (16, 1.0, 32_768.0) => Some(SampleType::U16),
        (32, 1.0, 0.0) => Some(SampleType::I32),
        (32, 1.0, 2_147_483_648.0) => Some(SampleType::U32),
        (-32, 1.0, 0.0) => Some(SampleType::F32),
        (-64, 1.0, 0.0) => Some(SampleType::F64),
        (8 | 16 | 32 | -32 | -64, ..) => None,
        (64, ..) => {
            return Err(Error::unsupported(
                path,
                "samples of 64-bit whole numbers",
                "convert them to 32-bit whole numbers or to doubles",
            ));
        }
        _ => return Err(Error::malformed(path, "BITPIX", format!("{bitpix} bits a sample"))),
    };
    // Few bits times a power of two are exact in f32.
    let exact = matches!(bitpix, 8 | 16)
        && scale.abs().log2().fract() == 0.0
        && (zero / scale).fract() == 0.0
        && (zero / scale).abs() < f64::from(1 << 22);
    let sample_type = plain.unwrap_or(if exact { SampleType::F32 } else { SampleType::F64 });
    let missing = plain.and(blank).map(|b| b as f64 * scale + zero);
    let stored = Stored {
        bitpix,
        scale,
        zero,
        blank: if plain.is_some() { None } else { blank },
        plain: plain.is_some(),
    };
    Ok((stored, sample_type, missing))
}

/// Cards that say how the data stand in their own file.
fn is_structural(key: &str) -> bool {
    let numbered = key.strip_prefix("NAXIS").is_some_and(|n| n.bytes().all(|b| b.is_ascii_digit()));
    numbered
        || matches!(
            key,
            "SIMPLE"
                | "XTENSION"
                | "BITPIX"
                | "EXTEND"
                | "PCOUNT"
                | "GCOUNT"
                | "BSCALE"
                | "BZERO"
                | "BLANK"
                | "CHECKSUM"
                | "DATASUM"
                | "END"
                | "INHERIT"
        )
}

impl Source for FitsSource {
    fn header(&self) -> &Header {
        &self.header
    }

    fn read(&self, bands: Range<usize>, window: &Window) -> Result<Samples> {
        check_window(&self.header, &bands, window)?;
        let mut out = Samples::zeros(self.header.sample_type, bands.len() * window.area());
        let (mut buffer, width) = (Vec::new(), window.columns.len());
        if width == 0 {
            return Ok(out);
        }
        for (b, band) in bands.enumerate() {
            for (i, row) in window.rows.clone().enumerate() {
                self.row(band, row, &window.columns, &mut buffer)?;
                let at = (b * window.rows.len() + i) * width;
                with_samples!(&mut out, v => self.stored.decode(&buffer, &mut v[at..at + width]));
            }
        }
        Ok(out)
    }
}

impl Stored {
    /// Words in the machine's order into samples.
    fn decode<S: Sample + Word>(&self, words: &[u8], out: &mut [S]) {
        fn each<W: Word, S>(words: &[u8], out: &mut [S], value: impl Fn(W) -> S) {
            let step = size_of::<W>();
            out.iter_mut().zip(words.chunks_exact(step)).for_each(|(v, w)| *v = value(W::from_bytes(w)));
        }
        let whole = |stored: i64| {
            if self.blank == Some(stored) {
                S::of(f64::NAN)
            } else {
                S::of(stored as f64 * self.scale + self.zero)
            }
        };
        match self.bitpix {
            8 => each(words, out, |w: u8| whole(i64::from(w))),
            16 => each(words, out, |w: i16| whole(i64::from(w))),
            32 => each(words, out, |w: i32| whole(i64::from(w))),
            // Bits as they are, NaN payloads and all, where nothing is scaled.
            _ if self.plain => {
                out.iter_mut()
                    .zip(words.chunks_exact(size_of::<S>()))
                    .for_each(|(v, w)| *v = S::from_bytes(w));
            }
            -32 => each(words, out, |w: f32| S::of(f64::from(w) * self.scale + self.zero)),
            _ => each(words, out, |w: f64| S::of(w * self.scale + self.zero)),
        }
    }
}

/// A FITS file that is written: one image, in the primary HDU.
pub struct FitsSink {
    header: Header,
    file: Beside,
    data_at: u64,
}

/// BITPIX and BZERO of a sample type.
fn layout(sample_type: SampleType) -> (i64, f64) {
    match sample_type {
        SampleType::U8 => (8, 0.0),
        SampleType::I8 => (8, -128.0),
        SampleType::I16 => (16, 0.0),
        SampleType::U16 => (16, 32_768.0),
        SampleType::I32 => (32, 0.0),
        SampleType::U32 => (32, 2_147_483_648.0),
        SampleType::F32 => (-32, 0.0),
        SampleType::F64 => (-64, 0.0),
    }
}

impl FitsSink {
    /// Starts the file.
    ///
    /// # Errors
    /// When the folder or the disk refuses.
    pub fn create(path: &Path, header: &Header, overwrite: bool) -> Result<Self> {
        let mut file = Beside::create(path, overwrite)?;
        let (bitpix, zero) = layout(header.sample_type);
        let (rows, columns, bands) = (header.grid.rows, header.grid.columns, header.bands);
        let mut cards = vec![
            fixed("SIMPLE", "T"),
            fixed("BITPIX", &bitpix.to_string()),
            fixed("NAXIS", if bands > 1 { "3" } else { "2" }),
            fixed("NAXIS1", &columns.to_string()),
            fixed("NAXIS2", &rows.to_string()),
        ];
        if bands > 1 {
            cards.push(fixed("NAXIS3", &bands.to_string()));
        }
        if zero != 0.0 {
            cards.push(fixed("BSCALE", "1"));
            cards.push(fixed("BZERO", &(zero as i64).to_string()));
        }
        if let (Some(code), true) = (header.missing, bitpix > 0) {
            cards.push(fixed("BLANK", &((code - zero) as i64).to_string()));
        }
        if header.storage.cards.is_empty() {
            cards.extend(wcs::of_grid(&header.grid));
        } else {
            cards.extend(wcs::corrected(&header.storage.cards, &header.grid, path)?);
        }
        cards.push(format!("{:<80}", "END"));
        let mut text = cards.concat();
        text.push_str(&" ".repeat(text.len().next_multiple_of(BLOCK as usize) - text.len()));
        let data_at = text.len() as u64;
        let mut write = || {
            file.write_all(text.as_bytes())?;
            // The data are filled up with zeros to a whole block.
            let bytes = (rows * columns * bands) as u64 * header.sample_type.bytes() as u64;
            let end = data_at + bytes.next_multiple_of(BLOCK);
            if end > data_at + bytes {
                file.write_at(&vec![0; (end - data_at - bytes) as usize], data_at + bytes)
            } else {
                Ok(())
            }
        };
        write().map_err(|e| Error::io(path, "writing", e))?;
        Ok(FitsSink { header: header.clone(), file, data_at })
    }
}

impl Sink for FitsSink {
    fn alignment(&self) -> usize {
        1
    }

    fn write(&mut self, window: &Window, samples: &Samples) -> Result<()> {
        let grid = &self.header.grid;
        let bytes = self.header.sample_type.bytes();
        let (height, width) = (window.rows.len(), window.columns.len());
        let mut buffer = Vec::with_capacity(width * bytes);
        for band in 0..self.header.bands {
            for i in 0..height {
                buffer.clear();
                let at = (band * height + i) * width;
                match samples {
                    // The other sign: the stored number is the sample less BZERO.
                    Samples::I8(v) => buffer.extend(v[at..at + width].iter().map(|v| (*v as u8) ^ 0x80)),
                    Samples::U16(v) => {
                        v[at..at + width].iter().for_each(|v| ((v ^ 0x8000) as i16).push(&mut buffer));
                    }
                    Samples::U32(v) => {
                        v[at..at + width].iter().for_each(|v| ((v ^ 0x8000_0000) as i32).push(&mut buffer));
                    }
                    other => {
                        with_samples!(other, v => v[at..at + width].iter().for_each(|s| s.push(&mut buffer)))
                    }
                }
                if cfg!(target_endian = "little") && bytes > 1 {
                    buffer.chunks_exact_mut(bytes).for_each(<[u8]>::reverse);
                }
                let first = (band * grid.rows + window.rows.start + i) * grid.columns + window.columns.start;
                self.file
                    .write_at(&buffer, self.data_at + (first * bytes) as u64)
                    .map_err(|e| Error::io(self.file.path(), "writing", e))?;
            }
        }
        Ok(())
    }

    fn finish(self: Box<Self>) -> Result<()> {
        self.file.finish()
    }
}
