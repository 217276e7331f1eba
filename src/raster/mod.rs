//! Rasters: samples on a grid, in memory or in a file, read and written by windows.
//!
//! [`Source`] and [`Sink`] are all that the rest of the crate knows of files.

mod beside;
mod digest;
mod fits;
mod masked;
mod memory;
mod npy;
mod picture;
mod pieces;
mod sample;
mod samples;
mod storage;
mod tiff;

pub use beside::check_free;
pub use digest::{CELL, Digest, digest};
pub use masked::{Flags, Masked, codes_of, split_bits};
pub use memory::{Collected, MemorySink, Raster};
pub use pieces::{Held, Pieces};
pub use sample::{MissingCodes, Sample};
pub use storage::{Format, Storage};
pub use tiff::{Compression, GeoKeys};

use crate::error::{Error, Result};
use crate::grid::Grid;
use serde::{Deserialize, Serialize};
use std::ops::Range;
use std::path::Path;

/// The type of a stored sample.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
#[allow(missing_docs)]
pub enum SampleType {
    U8,
    I8,
    U16,
    I16,
    U32,
    I32,
    F32,
    F64,
}

/// Samples in their stored type, band by band: `data[(band * rows + row) * columns + column]`.
#[derive(Clone, Debug, PartialEq)]
#[allow(missing_docs)]
pub enum Samples {
    U8(Vec<u8>),
    I8(Vec<i8>),
    U16(Vec<u16>),
    I16(Vec<i16>),
    U32(Vec<u32>),
    I32(Vec<i32>),
    F32(Vec<f32>),
    F64(Vec<f64>),
}

/// A window of a raster: half-open ranges of rows and columns.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Window {
    /// Rows, counted from 0.
    pub rows: Range<usize>,
    /// Columns, counted from 0.
    pub columns: Range<usize>,
}

/// What a raster is, without its samples.
#[derive(Clone, Debug)]
pub struct Header {
    /// Size and place.
    pub grid: Grid,
    /// Bands in all: pages x samples per pixel. Every one is read and written.
    pub bands: usize,
    /// Type of the stored samples.
    pub sample_type: SampleType,
    /// The code the file declares for "no data" (beside NaN, which always means missing).
    pub missing: Option<f64>,
    /// Channel names, where the file has them (empty, or one a band).
    pub band_names: Vec<String>,
    /// How the file stores the samples and what else it carries; copied to the output and corrected for its grid.
    pub storage: Storage,
}

/// A raster that is read by windows. Reading is thread-safe and changes nothing.
pub trait Source: Send + Sync {
    /// What the raster is.
    fn header(&self) -> &Header;
    /// Reads a window of the bands in `bands`. The answer holds `bands.len() * rows * columns` samples, band by band.
    ///
    /// # Errors
    /// When the file cannot be read or is damaged. A window outside the raster is a usage error.
    fn read(&self, bands: Range<usize>, window: &Window) -> Result<Samples>;
}

/// A raster that is written by windows.
pub trait Sink: Send {
    /// Windows must start at multiples of this in rows and columns, and end at multiples or at the raster's end.
    fn alignment(&self) -> usize;
    /// Writes a window of all bands, band by band as in [`Source::read`]. Each window is written once.
    ///
    /// # Errors
    /// When the disk refuses.
    fn write(&mut self, window: &Window, samples: &Samples) -> Result<()>;
    /// Completes the file, syncs it and gives it its name. Dropped without this, nothing is left behind.
    ///
    /// # Errors
    /// When the disk refuses.
    fn finish(self: Box<Self>) -> Result<()>;
}

impl SampleType {
    /// Bytes of one sample.
    pub fn bytes(self) -> usize {
        match self {
            SampleType::U8 | SampleType::I8 => 1,
            SampleType::U16 | SampleType::I16 => 2,
            SampleType::U32 | SampleType::I32 | SampleType::F32 => 4,
            SampleType::F64 => 8,
        }
    }

    /// Smallest and largest value of an integer type; `None` for floating point.
    pub fn integer_range(self) -> Option<(f64, f64)> {
        match self {
            SampleType::U8 => Some((0.0, 255.0)),
            SampleType::I8 => Some((-128.0, 127.0)),
            SampleType::U16 => Some((0.0, 65_535.0)),
            SampleType::I16 => Some((-32_768.0, 32_767.0)),
            SampleType::U32 => Some((0.0, f64::from(u32::MAX))),
            SampleType::I32 => Some((f64::from(i32::MIN), f64::from(i32::MAX))),
            SampleType::F32 | SampleType::F64 => None,
        }
    }

    /// The name used in options and ledgers: `u8` to `f64`.
    pub fn name(self) -> &'static str {
        match self {
            SampleType::U8 => "u8",
            SampleType::I8 => "i8",
            SampleType::U16 => "u16",
            SampleType::I16 => "i16",
            SampleType::U32 => "u32",
            SampleType::I32 => "i32",
            SampleType::F32 => "f32",
            SampleType::F64 => "f64",
        }
    }
}

/// Runs `$body` with `$v` bound to the vector inside a [`Samples`], whatever its type.
#[macro_export]
macro_rules! with_samples {
    ($samples:expr, $v:ident => $body:expr) => {
        match $samples {
            $crate::raster::Samples::U8($v) => $body,
            $crate::raster::Samples::I8($v) => $body,
            $crate::raster::Samples::U16($v) => $body,
            $crate::raster::Samples::I16($v) => $body,
            $crate::raster::Samples::U32($v) => $body,
            $crate::raster::Samples::I32($v) => $body,
            $crate::raster::Samples::F32($v) => $body,
            $crate::raster::Samples::F64($v) => $body,
        }
    };
}

impl Samples {
    /// `len` zeros of the given type.
    pub fn zeros(sample_type: SampleType, len: usize) -> Self {
        match sample_type {
            SampleType::U8 => Samples::U8(vec![0; len]),
            SampleType::I8 => Samples::I8(vec![0; len]),
            SampleType::U16 => Samples::U16(vec![0; len]),
            SampleType::I16 => Samples::I16(vec![0; len]),
            SampleType::U32 => Samples::U32(vec![0; len]),
            SampleType::I32 => Samples::I32(vec![0; len]),
            SampleType::F32 => Samples::F32(vec![0.0; len]),
            SampleType::F64 => Samples::F64(vec![0.0; len]),
        }
    }

    /// Number of samples.
    pub fn len(&self) -> usize {
        with_samples!(self, v => v.len())
    }

    /// Whether there are none.
    pub fn is_empty(&self) -> bool {
        self.len() == 0
    }

    /// The type of the samples.
    pub fn sample_type(&self) -> SampleType {
        match self {
            Samples::U8(_) => SampleType::U8,
            Samples::I8(_) => SampleType::I8,
            Samples::U16(_) => SampleType::U16,
            Samples::I16(_) => SampleType::I16,
            Samples::U32(_) => SampleType::U32,
            Samples::I32(_) => SampleType::I32,
            Samples::F32(_) => SampleType::F32,
            Samples::F64(_) => SampleType::F64,
        }
    }
}

impl Window {
    /// The whole of a grid.
    pub fn whole(grid: &Grid) -> Self {
        Window { rows: 0..grid.rows, columns: 0..grid.columns }
    }

    /// Rows x columns.
    pub fn area(&self) -> usize {
        self.rows.len() * self.columns.len()
    }
}

/// Opens a raster file for reading; the format is told by the file's first bytes, not by its name.
///
/// # Errors
/// When there is no such file, or it is damaged, or of a kind that is not read.
pub fn open(path: &Path) -> Result<Box<dyn Source>> {
    use std::io::Read;
    let mut file = std::fs::File::open(path).map_err(|e| Error::io(path, "opening", e))?;
    if file.metadata().is_ok_and(|m| m.is_dir()) {
        return Err(Error::unsupported(path, "this is a folder", "name a raster file"));
    }
    let mut head = Vec::new();
    file.by_ref().take(8).read_to_end(&mut head).map_err(|e| Error::io(path, "reading", e))?;
    Ok(match &head[..] {
        [] => return Err(Error::malformed(path, "byte 0", "the file is empty")),
        [b'I', b'I', 42 | 43, 0, ..] | [b'M', b'M', 0, 42 | 43, ..] => match tiff::TiffSource::open(path)? {
            (source, None) => Box::new(source),
            (source, Some(mask)) => {
                let name = path.display().to_string();
                Box::new(Masked::new(Box::new(source), Box::new(mask), Flags::Zero, &[], &name)?)
            }
        },
        [0x93, b'N', b'U', b'M', b'P', b'Y', ..] => Box::new(npy::NpySource::open(path)?),
        [b'S', b'I', b'M', b'P', b'L', b'E', b' ', b' '] => Box::new(fits::FitsSource::open(path)?),
        [0x89, b'P', b'N', b'G', ..] | [0xff, 0xd8, ..] | [b'P', b'1'..=b'7', ..] => {
            Box::new(picture::open(path)?)
        }
        _ => {
            return Err(Error::unsupported(
                path,
                "its first bytes are those of no format that is read",
                "give a TIFF, BigTIFF, FITS, NPY, PNG, JPEG or PNM file",
            ));
        }
    })
}

/// The format that a name's ending asks for.
fn format_of(path: &Path) -> Result<Format> {
    let ending = path.extension().map(|e| e.to_string_lossy().to_lowercase()).unwrap_or_default();
    match ending.as_str() {
        "tif" | "tiff" | "btf" | "gtiff" => Ok(Format::Tiff),
        "npy" => Ok(Format::Npy),
        "png" => Ok(Format::Picture),
        "fits" | "fit" | "fts" => Ok(Format::Fits),
        _ => Err(Error::usage(
            format!("{}: cannot write files that end in \"{ending}\"", path.display()),
            "end the name in .tif, .fits, .npy or .png",
        )),
    }
}

/// Refuses, before any work, a header that the format of `path` cannot hold.
///
/// # Errors
/// Says what does not fit, and which format holds it.
pub fn check_writable(path: &Path, header: &Header) -> Result<()> {
    match format_of(path)? {
        Format::Picture => picture::check_writable(path, header),
        Format::Fits => fits::check_writable(path, header),
        Format::Npy | Format::Memory => Ok(()),
        Format::Tiff => tiff::check_writable(path, header),
    }
}

/// Whether the format of `path` can declare a code for missing in samples of floating point; FITS has NaN alone.
pub fn declares_float_codes(path: &Path) -> bool {
    !matches!(format_of(path), Ok(Format::Fits))
}

/// Creates a raster file; the format is told by the name's ending. Nothing appears under `path` before
/// [`Sink::finish`].
///
/// # Errors
/// When the folder is missing, `path` exists and `overwrite` is false, or the format cannot hold such a raster.
pub fn create(path: &Path, header: &Header, overwrite: bool) -> Result<Box<dyn Sink>> {
    Ok(match format_of(path)? {
        Format::Picture => Box::new(picture::PngSink::create(path, header, overwrite)?),
        Format::Npy => Box::new(npy::NpySink::create(path, header, overwrite)?),
        Format::Fits => Box::new(fits::FitsSink::create(path, header, overwrite)?),
        Format::Tiff | Format::Memory => Box::new(tiff::TiffSink::create(path, header, overwrite)?),
    })
}

/// Refuses windows and bands that are not in the raster.
fn check_window(header: &Header, bands: &Range<usize>, window: &Window) -> Result<()> {
    let inside = bands.end <= header.bands
        && window.rows.end <= header.grid.rows
        && window.columns.end <= header.grid.columns
        && bands.start <= bands.end
        && window.rows.start <= window.rows.end
        && window.columns.start <= window.columns.end;
    if inside {
        return Ok(());
    }
    Err(Error::usage(
        format!(
            "bands {bands:?}, rows {:?}, columns {:?} are not all in a raster of {} x {} x {}",
            window.rows, window.columns, header.bands, header.grid.rows, header.grid.columns
        ),
        "",
    ))
}

/// Reading and writing at a place, without a shared position.
trait Positioned {
    fn read_exact_at_offset(&self, buf: &mut [u8], offset: u64) -> std::io::Result<()>;
    fn write_all_at_offset(&self, buf: &[u8], offset: u64) -> std::io::Result<()>;
}

#[cfg(unix)]
impl Positioned for std::fs::File {
    fn read_exact_at_offset(&self, buf: &mut [u8], offset: u64) -> std::io::Result<()> {
        std::os::unix::fs::FileExt::read_exact_at(self, buf, offset)
    }
    fn write_all_at_offset(&self, buf: &[u8], offset: u64) -> std::io::Result<()> {
        std::os::unix::fs::FileExt::write_all_at(self, buf, offset)
    }
}

#[cfg(windows)]
impl Positioned for std::fs::File {
    fn read_exact_at_offset(&self, mut buf: &mut [u8], mut offset: u64) -> std::io::Result<()> {
        while !buf.is_empty() {
            let n = std::os::windows::fs::FileExt::seek_read(self, buf, offset)?;
            if n == 0 {
                return Err(std::io::ErrorKind::UnexpectedEof.into());
            }
            buf = &mut buf[n..];
            offset += n as u64;
        }
        Ok(())
    }
    fn write_all_at_offset(&self, mut buf: &[u8], mut offset: u64) -> std::io::Result<()> {
        while !buf.is_empty() {
            let n = std::os::windows::fs::FileExt::seek_write(self, buf, offset)?;
            buf = &buf[n..];
            offset += n as u64;
        }
        Ok(())
    }
}
