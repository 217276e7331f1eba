//! A FITS image as a [`Source`].

use super::cards::{BLOCK, Cards};
use super::{carry, wcs};
use crate::error::{Error, Result};
use crate::grid::{Grid, Sampling};
use crate::raster::storage::Format;
use crate::raster::tiff::Word;
use crate::raster::{Header, Positioned, Sample, SampleType, Samples, Source, Window, check_window};
use crate::with_samples;
use std::fs::File;
use std::ops::Range;
use std::path::{Path, PathBuf};

/// Whole rows are read together up to this many bytes.
const RUN: usize = 1 << 20;

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
    /// Samples are stored numbers, shifted at most by the convention for the other sign.
    plain: bool,
    /// That convention: the first bit counts the other way.
    flipped: bool,
    scale: f64,
    zero: f64,
    /// The stored whole number that means missing, where samples are scaled to floating point.
    blank: Option<i64>,
}

/// The HDU that holds the image.
struct Image {
    index: usize,
    cards: Cards,
    axes: Vec<usize>,
}

impl FitsSource {
    /// Opens the file and finds its image: in the primary HDU, or else in the first extension that has one.
    ///
    /// # Errors
    /// When the file is damaged, or holds no image that is read.
    pub fn open(path: &Path) -> Result<Self> {
        let file = File::open(path).map_err(|e| Error::io(path, "opening", e))?;
        let len = file.metadata().map_err(|e| Error::io(path, "opening", e))?.len();
        let mut notes = Vec::new();
        let (image, primary) = find_image(&file, len, path, &mut notes)?;
        let (columns, rows) = match image.axes[..] {
            [c, r, ..] => (c, r),
            _ => return Err(Error::malformed(path, "card NAXIS", "an image has two axes or more")),
        };
        let planes = image.axes.get(2..).unwrap_or_default().to_vec();
        let bands = planes.iter().product::<usize>();
        let (stored, sample_type, missing) = read_type(&image.cards, path, &mut notes)?;
        let bytes = (stored.bitpix.unsigned_abs() / 8).saturating_mul((rows * columns * bands) as u64);
        if image.cards.end.saturating_add(bytes) > len {
            return Err(Error::malformed(
                path,
                format!("data at byte {}", image.cards.end),
                format!(
                    "{bands} x {rows} x {columns} samples of {} bits (cards NAXISn, BITPIX) do not stand in a file of {len} bytes",
                    stored.bitpix
                ),
            ));
        }
        let mut header = Header::new(Grid::new(rows, columns), bands, sample_type);
        header.missing = missing;
        let carry::Carried { mut cards, dropped } = carry::carried(&image.cards, primary.as_ref());
        if !dropped.is_empty() {
            notes.push(format!(
                "cards that would be wrong for other pixels are not carried over: {}",
                dropped.join(", ")
            ));
        }
        if carry::take_pixel_is_point(&mut cards) {
            header.grid.sample = Sampling::Point;
        }
        header.band_names = carry::take_band_names(&mut cards, bands);
        wcs::read(&mut cards, &mut header.grid, &mut notes, path)?;
        header.grid.check().map_err(|e| Error::malformed(path, "world coordinates", e.to_string()))?;
        let storage = &mut header.storage;
        storage.format = Format::Fits;
        (storage.cards, storage.planes, storage.notes) = (cards, planes, notes);
        Ok(FitsSource { header, path: path.to_owned(), file, data_at: image.cards.end, stored })
    }

    /// `count` stored words from the sample `first` on, as their bytes in the machine's order.
    fn fetch(&self, first: usize, count: usize, buffer: &mut Vec<u8>) -> Result<()> {
        let bytes = self.stored.bitpix.unsigned_abs() as usize / 8;
        buffer.resize(count * bytes, 0);
        let at = self.data_at + (first * bytes) as u64;
        self.file
            .read_exact_at_offset(buffer, at)
            .map_err(|e| Error::io(&self.path, "reading samples", e))?;
        if self.stored.flipped {
            buffer.iter_mut().step_by(bytes).for_each(|b| *b ^= 0x80);
        }
        if cfg!(target_endian = "little") && bytes > 1 {
            buffer.chunks_exact_mut(bytes).for_each(<[u8]>::reverse);
        }
        Ok(())
    }
}

/// Walks the HDUs. What stands behind the image can spoil nothing: it is told of, not refused.
fn find_image(file: &File, len: u64, path: &Path, notes: &mut Vec<String>) -> Result<(Image, Option<Cards>)> {
    let (mut at, mut index, mut others, mut packed, mut groups) = (0, 0, 0, false, false);
    let (mut found, mut primary): (Option<Image>, Option<Cards>) = (None, None);
    loop {
        let (cards, axes, bytes) = match next_hdu(file, len, at, index, path) {
            Ok(Some(hdu)) => hdu,
            Ok(None) => break,
            Err(_) if found.is_some() => {
                notes.push(format!("what follows at byte {at} is no HDU and was not looked at"));
                break;
            }
            Err(e) => return Err(e),
        };
        at = cards.end.saturating_add(bytes.saturating_add(BLOCK - 1) / BLOCK * BLOCK);
        packed |= cards.is_true("ZIMAGE");
        groups |= cards.is_true("GROUPS");
        let is_image = index == 0 || cards.text("XTENSION").is_some_and(|kind| kind == "IMAGE");
        if found.is_none() && is_image && axes.len() >= 2 && axes.iter().all(|n| *n > 0) {
            found = Some(Image { index, cards, axes });
        } else if index == 0 {
            primary = (bytes == 0).then_some(cards);
        } else {
            others += 1;
        }
        index += 1;
    }
    let Some(image) = found else {
        return Err(if packed {
            Error::unsupported(
                path,
                "its images are tables of compressed tiles (ZIMAGE)",
                "write them again without compression",
            )
        } else if groups {
            Error::unsupported(path, "it holds random groups", "write them as an image")
        } else {
            Error::unsupported(path, "it holds no image", "give a file with an image of two axes or more")
        });
    };
    if image.index > 0 {
        let name = image.cards.text("EXTNAME").map(|n| format!(" ({n})")).unwrap_or_default();
        notes.push(format!("the image is that of extension {}{name}", image.index));
    }
    if others > 0 {
        let are = if others == 1 { "HDU is" } else { "HDUs are" };
        notes.push(format!("{others} other {are} not carried over"));
    }
    // The convention's INHERIT = F: the primary header does not speak for this extension.
    let speaks = image.index > 0 && !image.cards.is_false("INHERIT");
    Ok((image, primary.filter(|_| speaks)))
}

/// The HDU at a place: its cards, axes, and bytes of data.
fn next_hdu(
    file: &File,
    len: u64,
    at: u64,
    index: usize,
    path: &Path,
) -> Result<Option<(Cards, Vec<usize>, u64)>> {
    let Some(cards) = Cards::read(file, len, at, path)? else { return Ok(None) };
    if index == 0 && !cards.is_true("SIMPLE") {
        return Err(Error::malformed(path, "card SIMPLE", "the file does not keep to the FITS standard"));
    }
    if index > 0 && cards.text("XTENSION").is_none() {
        return Err(Error::malformed(path, format!("header at byte {at}"), "no card XTENSION"));
    }
    let axes = axes(&cards, path)?;
    let bytes = data_bytes(&cards, &axes, path)?;
    Ok(Some((cards, axes, bytes)))
}

/// The lengths of the axes, columns first.
fn axes(cards: &Cards, path: &Path) -> Result<Vec<usize>> {
    let need = |key: &str| -> Result<i64> {
        cards.integer(key, path)?.ok_or_else(|| Error::malformed(path, format!("card {key}"), "no such card"))
    };
    let count = need("NAXIS")?;
    if !(0..=999).contains(&count) {
        return Err(Error::malformed(path, "card NAXIS", format!("{count} axes")));
    }
    let mut out = Vec::new();
    let mut product = 1usize;
    for n in 1..=count {
        let key = format!("NAXIS{n}");
        let len = need(&key)?;
        let bad = |what: &str| Error::malformed(path, format!("card {key}"), format!("{len} samples{what}"));
        let len = usize::try_from(len).map_err(|_| bad(""))?;
        product =
            product.checked_mul(len.max(1)).filter(|p| *p < 1 << 50).ok_or_else(|| bad(" are too many"))?;
        out.push(len);
    }
    Ok(out)
}

/// Bytes of an HDU's data.
fn data_bytes(cards: &Cards, axes: &[usize], path: &Path) -> Result<u64> {
    let bitpix = cards
        .integer("BITPIX", path)?
        .ok_or_else(|| Error::malformed(path, "card BITPIX", "no such card"))?;
    if !matches!(bitpix, 8 | 16 | 32 | 64 | -32 | -64) {
        return Err(Error::malformed(path, "card BITPIX", format!("{bitpix} bits a sample")));
    }
    if axes.is_empty() {
        return Ok(0);
    }
    let count = |key: &str, usual: i64| -> Result<u64> {
        let v = cards.integer(key, path)?.unwrap_or(usual);
        u64::try_from(v).map_err(|_| Error::malformed(path, format!("card {key}"), format!("{v}")))
    };
    let (groups, parameters) = (count("GCOUNT", 1)?, count("PCOUNT", 0)?);
    // Random groups mark themselves by a first axis of 0.
    let in_groups = axes.first() == Some(&0) && cards.is_true("GROUPS");
    let samples = axes.iter().skip(usize::from(in_groups)).map(|a| *a as u64).product::<u64>();
    (bitpix.unsigned_abs() / 8)
        .checked_mul(groups)
        .and_then(|b| b.checked_mul(samples.saturating_add(parameters)))
        .filter(|b| *b < 1 << 60)
        .ok_or_else(|| Error::malformed(path, "card BITPIX", "the data would be larger than any file"))
}

fn read_type(
    cards: &Cards,
    path: &Path,
    notes: &mut Vec<String>,
) -> Result<(Stored, SampleType, Option<f64>)> {
    let bitpix = cards.integer("BITPIX", path)?.unwrap_or(0);
    let (scale, zero) =
        (cards.number("BSCALE", path)?.unwrap_or(1.0), cards.number("BZERO", path)?.unwrap_or(0.0));
    if scale == 0.0 {
        return Err(Error::malformed(path, "card BSCALE", "a scale of 0 makes all samples the same"));
    }
    let range = match bitpix {
        8 => Some((0, 255)),
        16 => Some((i64::from(i16::MIN), i64::from(i16::MAX))),
        32 => Some((i64::from(i32::MIN), i64::from(i32::MAX))),
        _ => None,
    };
    let blank = match range {
        Some((low, high)) => cards.integer("BLANK", path)?.filter(|b| {
            let fits = (low..=high).contains(b);
            if !fits {
                notes.push(format!("BLANK {b} is no number of {bitpix} bits and was not used"));
            }
            fits
        }),
        None => None,
    };
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
        _ => return Err(Error::malformed(path, "card BITPIX", format!("{bitpix} bits a sample"))),
    };
    // Whether f32 holds every physical value is tried, for there are few.
    let physical = |v: i64| v as f64 * scale + zero;
    let exact = range
        .filter(|_| bitpix <= 16)
        .is_some_and(|(low, high)| (low..=high).all(|v| f64::from(physical(v) as f32) == physical(v)));
    let sample_type = plain.unwrap_or(if exact { SampleType::F32 } else { SampleType::F64 });
    let missing = plain.and(blank).map(physical);
    let blank = if plain.is_some() { None } else { blank };
    let flipped = plain.is_some() && zero != 0.0;
    Ok((Stored { bitpix, plain: plain.is_some(), flipped, scale, zero, blank }, sample_type, missing))
}

impl Source for FitsSource {
    fn header(&self) -> &Header {
        &self.header
    }

    fn read(&self, bands: Range<usize>, window: &Window) -> Result<Samples> {
        check_window(&self.header, &bands, window)?;
        let grid = &self.header.grid;
        let mut out = Samples::zeros(self.header.sample_type, bands.len() * window.area());
        let (mut buffer, width, height) = (Vec::new(), window.columns.len(), window.rows.len());
        if width == 0 {
            return Ok(out);
        }
        // Whole rows follow each other in the file.
        let bytes = self.stored.bitpix.unsigned_abs() as usize / 8;
        let run = if width == grid.columns { (RUN / (width * bytes)).max(1) } else { 1 };
        for (b, band) in bands.enumerate() {
            for i in (0..height).step_by(run) {
                let count = run.min(height - i) * width;
                let first = (band * grid.rows + window.rows.start + i) * grid.columns + window.columns.start;
                self.fetch(first, count, &mut buffer)?;
                let at = (b * height + i) * width;
                with_samples!(&mut out, v => self.stored.decode(&buffer, &mut v[at..at + count]));
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
            // Bits as they are, NaN payloads and all, where nothing is scaled.
            _ if self.plain => each(words, out, |w: S| w),
            8 => each(words, out, |w: u8| whole(i64::from(w))),
            16 => each(words, out, |w: i16| whole(i64::from(w))),
            32 => each(words, out, |w: i32| whole(i64::from(w))),
            -32 => each(words, out, |w: f32| S::of(f64::from(w) * self.scale + self.zero)),
            _ => each(words, out, |w: f64| S::of(w * self.scale + self.zero)),
        }
    }
}
