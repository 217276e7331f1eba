//! A raster with a mask of its own: quality flags, or the mask page of a TIFF.

use super::{Header, MissingCodes, Sample, SampleType, Samples, Source, Window};
use crate::error::{Error, Result};
use crate::with_samples;
use std::ops::Range;

/// Which values of a mask say that a sample is missing.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Flags {
    /// Any but 0.
    Any,
    /// Those with one of these bits.
    Bits(u64),
    /// 0: a mask of what is there.
    Zero,
}

/// A source whose samples are missing where a mask says so.
pub struct Masked {
    source: Box<dyn Source>,
    mask: Box<dyn Source>,
    flags: Flags,
    header: Header,
    /// What masked samples become; NaN if `None`.
    code: Option<f64>,
}

impl Masked {
    /// Joins both. Masked samples become the code that the file declares, else one of `codes` that its type can hold; a
    /// raster of whole numbers without one is given in floating point, with NaN.
    ///
    /// # Errors
    /// When the mask does not fit the raster or is not of whole numbers.
    pub fn new(
        source: Box<dyn Source>,
        mask: Box<dyn Source>,
        flags: Flags,
        codes: &[f64],
        name: &str,
    ) -> Result<Self> {
        let mut header = source.header().clone();
        let own = mask.header();
        let (rows, columns) = (header.grid.rows, header.grid.columns);
        let bands_fit = own.bands == 1 || own.bands == header.bands || flags == Flags::Zero;
        if (own.grid.rows, own.grid.columns) != (rows, columns) || !bands_fit {
            return Err(Error::unfit(
                format!(
                    "{name}: a mask of {} x {} pixels in {} bands does not fit {rows} x {columns} in {}",
                    own.grid.rows, own.grid.columns, own.bands, header.bands
                ),
                "give a mask of the raster's size, with one band or as many as the raster",
            ));
        }
        if own.sample_type.integer_range().is_none() && matches!(flags, Flags::Bits(_)) {
            return Err(Error::unfit(
                format!("{name}: samples of {} have no bits", own.sample_type.name()),
                "give a mask of whole numbers, or leave the bits out",
            ));
        }
        let fits = |code: &f64| match header.sample_type.integer_range() {
            Some((low, high)) => code.fract() == 0.0 && (low..=high).contains(code),
            None => false,
        };
        let code = header.missing.into_iter().chain(codes.iter().copied()).find(fits);
        if code.is_none() {
            header.sample_type = match header.sample_type {
                SampleType::U8 | SampleType::I8 | SampleType::U16 | SampleType::I16 => SampleType::F32,
                SampleType::U32 | SampleType::I32 => SampleType::F64,
                float => float,
            };
        }
        Ok(Masked { source, mask, flags, header, code })
    }
}

impl Source for Masked {
    fn header(&self) -> &Header {
        &self.header
    }

    fn read(&self, bands: Range<usize>, window: &Window) -> Result<Samples> {
        let mut samples = self.source.read(bands.clone(), window)?;
        if self.code.is_none() {
            samples = widen(samples, self.header.sample_type);
        }
        let of_mask = if self.mask.header().bands == 1 { 0..1 } else { bands.clone() };
        let mask = self.mask.read(of_mask, window)?;
        let hidden: Vec<bool> = with_samples!(&mask, v => v.iter().map(|v| hides(*v, self.flags)).collect());
        if hidden.is_empty() {
            return Ok(samples);
        }
        let fill = self.code.unwrap_or(f64::NAN);
        with_samples!(&mut samples, v => hide(v, &hidden, fill));
        Ok(samples)
    }
}

fn hides<S: Sample>(v: S, flags: Flags) -> bool {
    let v = v.wide();
    match flags {
        Flags::Any => v != 0.0,
        Flags::Zero => v == 0.0,
        // Negative flags are read as the bits of their 64-bit complement.
        Flags::Bits(bits) => (v as i64 as u64) & bits != 0,
    }
}

fn hide<S: Sample>(samples: &mut [S], hidden: &[bool], fill: f64) {
    let fill = S::of(fill);
    // One band of flags serves all.
    for part in samples.chunks_mut(hidden.len()) {
        part.iter_mut().zip(hidden).filter(|(_, h)| **h).for_each(|(v, _)| *v = fill);
    }
}

fn widen(samples: Samples, to: SampleType) -> Samples {
    match (to, samples.sample_type()) {
        (to, own) if to == own => samples,
        (SampleType::F32, _) => {
            Samples::F32(with_samples!(&samples, v => v.iter().map(|v| v.wide() as f32).collect()))
        }
        _ => Samples::F64(with_samples!(&samples, v => v.iter().map(|v| v.wide()).collect())),
    }
}

/// A file name with the bits that matter, `FILE` or `FILE:BITS`.
pub fn split_bits(text: &str) -> (&str, Flags) {
    let bits = |t: &str| match t.strip_prefix("0x").or_else(|| t.strip_prefix("0X")) {
        Some(hex) => u64::from_str_radix(hex, 16).ok(),
        None => t.parse().ok(),
    };
    match text.rsplit_once(':').and_then(|(file, t)| Some((file, bits(t)?))) {
        Some((file, bits)) => (file, Flags::Bits(bits)),
        None => (text, Flags::Any),
    }
}

/// Which codes a raster and its user declare, for what reads it.
pub fn codes_of(header: &Header, more: Option<f64>) -> MissingCodes {
    MissingCodes { codes: header.missing.into_iter().chain(more).filter(|c| !c.is_nan()).collect() }
}
