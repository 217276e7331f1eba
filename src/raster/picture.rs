//! Picture files by the `image` crate: PNG read and written, JPEG and PNM read; whole, never by windows.

use super::beside::Beside;
use super::memory::{MemorySink, Raster};
use super::{Format, Header, SampleType, Samples, Sink, Source, Window};
use crate::error::{Error, Result};
use crate::grid::Grid;
use image::{ColorType, ImageDecoder, ImageEncoder, ImageReader};
use std::path::Path;

/// The largest picture that is decoded, in bytes of samples.
const MAX_BYTES: u64 = 2 << 30;

/// Reads a whole picture; colours and alpha are bands.
///
/// # Errors
/// When it is damaged, too large, or of a kind of sample that is not read.
pub fn open(path: &Path) -> Result<Raster> {
    let bad = |e: image::ImageError| match e {
        image::ImageError::IoError(e) if e.kind() != std::io::ErrorKind::UnexpectedEof => {
            Error::io(path, "reading", e)
        }
        e => Error::malformed(path, "picture", e.to_string()),
    };
    let mut reader = ImageReader::open(path)
        .map_err(|e| Error::io(path, "opening", e))?
        .with_guessed_format()
        .map_err(|e| Error::io(path, "reading the header", e))?;
    reader.no_limits();
    let decoder = reader.into_decoder().map_err(bad)?;
    let (width, height) = decoder.dimensions();
    let (bands, sample_type) = match decoder.color_type() {
        ColorType::L8 => (1, SampleType::U8),
        ColorType::La8 => (2, SampleType::U8),
        ColorType::Rgb8 => (3, SampleType::U8),
        ColorType::Rgba8 => (4, SampleType::U8),
        ColorType::L16 => (1, SampleType::U16),
        ColorType::La16 => (2, SampleType::U16),
        ColorType::Rgb16 => (3, SampleType::U16),
        ColorType::Rgba16 => (4, SampleType::U16),
        other => {
            return Err(Error::unsupported(path, format!("pixels of {other:?}"), "convert it to a TIFF"));
        }
    };
    if decoder.total_bytes() > MAX_BYTES {
        return Err(Error::Limit {
            what: format!(
                "{}: a picture of {height} x {width} pixels, which cannot be read by windows,",
                path.display()
            ),
            needed: format!("{} MiB", decoder.total_bytes() >> 20),
            limit: format!("{} MiB", MAX_BYTES >> 20),
            mend: "convert it to a tiled TIFF".into(),
        });
    }
    let mut bytes = vec![0; decoder.total_bytes() as usize];
    decoder.read_image(&mut bytes).map_err(bad)?;
    let pixels = width as usize * height as usize;
    let planes = |at: &dyn Fn(usize) -> usize| -> Vec<usize> {
        (0..bands).flat_map(|b| (0..pixels).map(move |p| p * bands + b)).map(at).collect()
    };
    let samples = match sample_type {
        SampleType::U8 => Samples::U8(planes(&|i| i).into_iter().map(|i| bytes[i]).collect()),
        _ => Samples::U16(
            planes(&|i| i)
                .into_iter()
                .map(|i| u16::from_ne_bytes([bytes[2 * i], bytes[2 * i + 1]]))
                .collect(),
        ),
    };
    let mut header = Header::new(Grid::new(height as usize, width as usize), bands, sample_type);
    header.storage.format = Format::Picture;
    header.storage.samples_per_pixel = bands;
    header.storage.photometric = (bands >= 3).then_some(2);
    header.storage.extra_samples = if bands.is_multiple_of(2) { vec![2] } else { Vec::new() };
    Raster::new(header, samples)
}

/// Refuses what a PNG cannot hold.
///
/// # Errors
/// Says what, and that a TIFF can.
pub fn check_writable(path: &Path, header: &Header) -> Result<()> {
    let no = |what: String| Err(Error::unsupported(path, what, "write a .tif instead"));
    if !matches!(header.sample_type, SampleType::U8 | SampleType::U16) {
        return no(format!("PNG cannot hold samples of {}", header.sample_type.name()));
    }
    if header.bands > 4 {
        return no(format!("PNG cannot hold {} bands", header.bands));
    }
    let bytes = header.grid.pixels() as u64 * (header.bands * header.sample_type.bytes()) as u64;
    if bytes > MAX_BYTES || header.grid.rows.max(header.grid.columns) > 1 << 30 {
        return no(format!("a PNG of {} x {} pixels is too large", header.grid.rows, header.grid.columns));
    }
    Ok(())
}

/// A PNG in the making: kept whole, encoded at the end.
pub struct PngSink {
    header: Header,
    file: Beside,
    inner: MemorySink,
    collected: super::memory::Collected,
}

impl PngSink {
    /// Starts the file.
    ///
    /// # Errors
    /// When PNG cannot hold such a raster, or the folder refuses.
    pub fn create(path: &Path, header: &Header, overwrite: bool) -> Result<Self> {
        check_writable(path, header)?;
        let file = Beside::create(path, overwrite)?;
        let (inner, collected) = MemorySink::new(header.clone());
        Ok(PngSink { header: header.clone(), file, inner, collected })
    }
}

impl Sink for PngSink {
    fn alignment(&self) -> usize {
        1
    }

    fn write(&mut self, window: &Window, samples: &Samples) -> Result<()> {
        self.inner.write(window, samples)
    }

    fn finish(self: Box<Self>) -> Result<()> {
        let PngSink { header, mut file, inner, collected } = *self;
        Box::new(inner).finish()?;
        let Some(raster) = collected.take() else {
            return Err(Error::unfit("the picture was not collected", ""));
        };
        let all = raster.read(0..header.bands, &Window::whole(&header.grid))?;
        let (bands, pixels) = (header.bands, header.grid.pixels());
        let order = (0..pixels).flat_map(|p| (0..bands).map(move |b| b * pixels + p));
        let (bytes, deep): (Vec<u8>, bool) = match &all {
            Samples::U8(v) => (order.map(|i| v[i]).collect(), false),
            Samples::U16(v) => (order.flat_map(|i| v[i].to_ne_bytes()).collect(), true),
            _ => return Err(Error::unfit("only u8 and u16 go into a PNG", "")),
        };
        let color = match (bands, deep) {
            (1, false) => ColorType::L8,
            (2, false) => ColorType::La8,
            (3, false) => ColorType::Rgb8,
            (_, false) => ColorType::Rgba8,
            (1, true) => ColorType::L16,
            (2, true) => ColorType::La16,
            (3, true) => ColorType::Rgb16,
            (_, true) => ColorType::Rgba16,
        };
        let path = file.path().to_owned();
        image::codecs::png::PngEncoder::new(&mut file)
            .write_image(&bytes, header.grid.columns as u32, header.grid.rows as u32, color.into())
            .map_err(|e| match e {
                image::ImageError::IoError(e) => Error::io(&path, "writing", e),
                e => Error::unsupported(&path, e.to_string(), "write a .tif instead"),
            })?;
        file.finish()
    }
}
