//! A FITS image as a [`Sink`]: one image, in the primary HDU.

use super::cards::{BLOCK, fixed, keyword, padded, text};
use super::carry::{self, MAX_NAMES, PIXEL_IS};
use super::wcs;
use crate::error::{Error, Result};
use crate::grid::Sampling;
use crate::raster::beside::Beside;
use crate::raster::tiff::Word;
use crate::raster::{Header, Sample, SampleType, Samples, Sink, Window};
use crate::with_samples;
use std::io::Write;
use std::path::Path;

/// A FITS file in the making.
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

/// Refuses what a FITS file cannot hold.
///
/// # Errors
/// Names the code or card.
pub fn check_writable(path: &Path, header: &Header) -> Result<()> {
    header_cards(path, header).map(|_| ())
}

/// All cards, in order, END included.
fn header_cards(path: &Path, header: &Header) -> Result<Vec<String>> {
    let (bitpix, zero) = layout(header.sample_type);
    let (grid, storage) = (&header.grid, &header.storage);
    grid.check()?;
    // Cubes keep their axes, so that what is said of the third stays said of the third.
    let planes = match &storage.planes {
        p if !p.is_empty() && p.iter().product::<usize>() == header.bands => p.clone(),
        _ if header.bands > 1 => vec![header.bands],
        _ => Vec::new(),
    };
    let mut cards = vec![
        fixed("SIMPLE", "T"),
        fixed("BITPIX", &bitpix.to_string()),
        fixed("NAXIS", &(2 + planes.len()).to_string()),
    ];
    for (i, n) in [grid.columns, grid.rows].into_iter().chain(planes).enumerate() {
        cards.push(fixed(&format!("NAXIS{}", i + 1), &n.to_string()));
    }
    if zero != 0.0 {
        cards.push(fixed("BSCALE", "1"));
        cards.push(fixed("BZERO", &(zero as i64).to_string()));
    }
    if let (Some(code), Some((low, high))) = (header.missing, header.sample_type.integer_range()) {
        if code.fract() != 0.0 || !(low..=high).contains(&code) {
            return Err(Error::usage(
                format!("{}: the no-data code {code} is no {}", path.display(), header.sample_type.name()),
                "choose a code within the type's range, or write floating point",
            ));
        }
        cards.push(fixed("BLANK", &((code - zero) as i64).to_string()));
    }
    let carried: Vec<String> =
        storage.cards.iter().map(|c| padded(c)).filter(|c| !carry::is_structural(keyword(c))).collect();
    cards.extend(wcs::corrected(&carried, grid, path)?);
    if grid.sample == Sampling::Point {
        cards.push(format!(
            "{:<80}",
            format!("{} / samples stand for points", text(PIXEL_IS, "POINT").trim_end())
        ));
    }
    if header.band_names.len() == header.bands && header.bands <= MAX_NAMES {
        cards.extend(header.band_names.iter().enumerate().map(|(i, n)| text(&format!("BAND{}", i + 1), n)));
    }
    cards.push(format!("{:<80}", "END"));
    Ok(cards)
}

impl FitsSink {
    /// Starts the file: the header, and the zeros that fill the last block.
    ///
    /// # Errors
    /// When the header cannot be written in FITS, or the folder or the disk refuses.
    pub fn create(path: &Path, header: &Header, overwrite: bool) -> Result<Self> {
        let mut head = header_cards(path, header)?.concat();
        let block = BLOCK as usize;
        head.push_str(&" ".repeat(head.len().next_multiple_of(block) - head.len()));
        let data_at = head.len() as u64;
        let bytes = header.grid.pixels() as u64 * (header.bands * header.sample_type.bytes()) as u64;
        let mut file = Beside::create(path, overwrite)?;
        let mut start = || {
            file.write_all(head.as_bytes())?;
            let fill = bytes.next_multiple_of(BLOCK) - bytes;
            file.write_at(&vec![0; fill as usize], data_at + bytes)
        };
        start().map_err(|e| Error::io(path, "writing", e))?;
        Ok(FitsSink { header: header.clone(), file, data_at })
    }

    /// A run of samples as it stands in the file. FITS has no code for missing in floating point but NaN.
    fn encode<S: Sample + Word>(&self, samples: &[S], buffer: &mut Vec<u8>) {
        buffer.clear();
        match self.header.missing.and_then(S::code).filter(|_| S::CAN_BE_NAN) {
            Some(code) => {
                let missing = S::of(f64::NAN);
                samples.iter().for_each(|s| if s.is(code) { missing } else { *s }.push(buffer));
            }
            None => samples.iter().for_each(|s| s.push(buffer)),
        }
        let bytes = size_of::<S>();
        if cfg!(target_endian = "little") && bytes > 1 {
            buffer.chunks_exact_mut(bytes).for_each(<[u8]>::reverse);
        }
        if layout(self.header.sample_type).1 != 0.0 {
            // The stored number is the sample less BZERO: the first bit counts the other way.
            buffer.iter_mut().step_by(bytes).for_each(|b| *b ^= 0x80);
        }
    }
}

impl Sink for FitsSink {
    fn alignment(&self) -> usize {
        1
    }

    fn write(&mut self, window: &Window, samples: &Samples) -> Result<()> {
        let grid = &self.header.grid;
        let (height, width) = (window.rows.len(), window.columns.len());
        let bytes = self.header.sample_type.bytes();
        let mut buffer = Vec::with_capacity(width * bytes);
        for band in 0..self.header.bands {
            for i in 0..height {
                let at = (band * height + i) * width;
                with_samples!(samples, v => self.encode(&v[at..at + width], &mut buffer));
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
