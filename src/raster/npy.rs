//! NumPy's array files: (rows, columns) or (bands, rows, columns), read and written by windows.

use super::beside::Beside;
use super::{Format, Header, Positioned, SampleType, Samples, Sink, Source, Window, check_window};
use crate::error::{Error, Result};
use crate::grid::Grid;
use crate::with_samples;
use std::fs::File;
use std::io::{Read, Write};
use std::ops::Range;
use std::path::{Path, PathBuf};

/// An NPY file that is read.
pub struct NpySource {
    header: Header,
    path: PathBuf,
    file: File,
    data_at: u64,
    big_endian: bool,
    fortran: bool,
}

impl NpySource {
    /// Opens the file; reads its header only.
    ///
    /// # Errors
    /// When it is damaged, or of a type or shape that is no raster.
    pub fn open(path: &Path) -> Result<Self> {
        let io = |e| Error::io(path, "reading the header", e);
        let bad = |what: String| Error::malformed(path, "header", what);
        let mut file = File::open(path).map_err(io)?;
        let file_len = file.metadata().map_err(io)?.len();
        let mut start = [0u8; 12];
        file.read_exact(&mut start).map_err(|_| bad("the file is shorter than a header".into()))?;
        let (len, at) = match start[6] {
            1 => (u64::from(u16::from_le_bytes([start[8], start[9]])), 10),
            2 | 3 => (u64::from(u32::from_le_bytes([start[8], start[9], start[10], start[11]])), 12),
            v => {
                return Err(Error::unsupported(
                    path,
                    format!("NPY version {v}"),
                    "save it again with numpy.save",
                ));
            }
        };
        if len > 1 << 20 || at + len > file_len {
            return Err(bad(format!("a header of {len} bytes in a file of {file_len}")));
        }
        let mut text = vec![0; len as usize];
        file.read_exact_at_offset(&mut text, at).map_err(io)?;
        let text = String::from_utf8_lossy(&text).into_owned();
        let descr = value(&text, "descr").ok_or_else(|| bad("no dtype".into()))?;
        let descr = descr.trim_matches(['\'', '"']);
        let (order, kind) = descr.split_at(descr.chars().next().map_or(0, char::len_utf8));
        let sample_type = match kind {
            "u1" => SampleType::U8,
            "i1" => SampleType::I8,
            "u2" => SampleType::U16,
            "i2" => SampleType::I16,
            "u4" => SampleType::U32,
            "i4" => SampleType::I32,
            "f4" => SampleType::F32,
            "f8" => SampleType::F64,
            _ => {
                return Err(Error::unsupported(
                    path,
                    format!("arrays of dtype {descr}"),
                    "convert it to 8, 16 or 32-bit integers, float32 or float64",
                ));
            }
        };
        let big_endian = match order {
            ">" => true,
            "<" | "|" => false,
            "=" => cfg!(target_endian = "big"),
            o => return Err(bad(format!("byte order \"{o}\""))),
        };
        let fortran = value(&text, "fortran_order").is_some_and(|v| v == "True");
        let shape = value(&text, "shape").ok_or_else(|| bad("no shape".into()))?;
        let shape: Option<Vec<usize>> = shape
            .trim_matches(['(', ')'])
            .split(',')
            .map(str::trim)
            .filter(|s| !s.is_empty())
            .map(|s| s.trim_end_matches('L').parse().ok())
            .collect();
        let shape = shape.ok_or_else(|| bad("the shape holds something else than whole numbers".into()))?;
        let (bands, rows, columns) = match shape[..] {
            [r, c] => (1, r, c),
            [b, r, c] => (b, r, c),
            _ => {
                return Err(Error::unsupported(
                    path,
                    format!("an array of {} dimensions", shape.len()),
                    "give (rows, columns) or (bands, rows, columns)",
                ));
            }
        };
        let samples = [rows, columns, bands]
            .iter()
            .try_fold(sample_type.bytes() as u64, |n, s| n.checked_mul(*s as u64));
        if samples.is_none_or(|n| n == 0 || n > file_len - at - len) {
            return Err(bad(format!(
                "{bands} x {rows} x {columns} samples of {descr} do not stand in {file_len} bytes"
            )));
        }
        let mut header = Header::new(Grid::new(rows, columns), bands, sample_type);
        header.storage.format = Format::Npy;
        Ok(NpySource { header, path: path.to_owned(), file, data_at: at + len, big_endian, fortran })
    }
}

/// The value behind a key of the header's dictionary, up to the comma that ends it.
fn value<'a>(text: &'a str, key: &str) -> Option<&'a str> {
    let at = text.find(&format!("'{key}'")).or_else(|| text.find(&format!("\"{key}\"")))?;
    let rest = text.get(at + key.len() + 2..)?.trim_start().strip_prefix(':')?.trim_start();
    let end = match rest.chars().next()? {
        '(' => rest.find(')')? + 1,
        q @ ('\'' | '"') => rest[1..].find(q)? + 2,
        _ => rest.find([',', '}'])?,
    };
    Some(rest[..end].trim())
}

impl Source for NpySource {
    fn header(&self) -> &Header {
        &self.header
    }

    fn read(&self, bands: Range<usize>, window: &Window) -> Result<Samples> {
        check_window(&self.header, &bands, window)?;
        let (rows, columns) = (self.header.grid.rows, self.header.grid.columns);
        let bytes = self.header.sample_type.bytes();
        let fetch = |first: usize, count: usize, buffer: &mut Vec<u8>| -> Result<()> {
            buffer.resize(count * bytes, 0);
            self.file
                .read_exact_at_offset(buffer, self.data_at + (first * bytes) as u64)
                .map_err(|e| Error::io(&self.path, "reading samples", e))?;
            if bytes > 1 && self.big_endian != cfg!(target_endian = "big") {
                buffer.chunks_exact_mut(bytes).for_each(<[u8]>::reverse);
            }
            Ok(())
        };
        let mut out = Samples::zeros(self.header.sample_type, bands.len() * window.area());
        let mut buffer = Vec::new();
        let (height, width) = (window.rows.len(), window.columns.len());
        if !self.fortran {
            for (b, band) in bands.enumerate() {
                for (i, r) in window.rows.clone().enumerate() {
                    fetch((band * rows + r) * columns + window.columns.start, width, &mut buffer)?;
                    let at = (b * height + i) * width;
                    with_samples!(&mut out, v => put(&mut v[at..at + width], &buffer, 1, 0));
                }
            }
            return Ok(out);
        }
        // Column-major: the first index runs fastest, so a run of rows of one column is contiguous (bands within).
        let all = self.header.bands;
        for (j, c) in window.columns.clone().enumerate() {
            fetch((c * rows + window.rows.start) * all, height * all, &mut buffer)?;
            for (b, band) in bands.clone().enumerate() {
                let mut column = Samples::zeros(self.header.sample_type, height);
                with_samples!(&mut column, v => put(v, &buffer, all, band));
                out.place(&column, 1, (bands.len() * height, width), (b * height, j), (height, 1))?;
            }
        }
        Ok(out)
    }
}

/// Words `skip`, `skip + step`, ... of a buffer into samples.
fn put<W: super::tiff::Word>(out: &mut [W], buffer: &[u8], step: usize, skip: usize) {
    let bytes = size_of::<W>();
    for (v, word) in out.iter_mut().zip(buffer.chunks_exact(bytes).skip(skip).step_by(step)) {
        *v = W::from_bytes(word);
    }
}

/// An NPY file that is written.
pub struct NpySink {
    header: Header,
    file: Beside,
    data_at: u64,
}

impl NpySink {
    /// Starts the file: little-endian, C order; three dimensions where there is more than one band.
    ///
    /// # Errors
    /// When the folder or the disk refuses.
    pub fn create(path: &Path, header: &Header, overwrite: bool) -> Result<Self> {
        let mut file = Beside::create(path, overwrite)?;
        let name = match header.sample_type {
            SampleType::U8 => "|u1",
            SampleType::I8 => "|i1",
            SampleType::U16 => "<u2",
            SampleType::I16 => "<i2",
            SampleType::U32 => "<u4",
            SampleType::I32 => "<i4",
            SampleType::F32 => "<f4",
            SampleType::F64 => "<f8",
        };
        let (rows, columns) = (header.grid.rows, header.grid.columns);
        let shape = match header.bands {
            1 => format!("({rows}, {columns})"),
            b => format!("({b}, {rows}, {columns})"),
        };
        let mut text = format!("{{'descr': '{name}', 'fortran_order': False, 'shape': {shape}, }}");
        // The data begin at a multiple of 64.
        let pad = (64 - (10 + text.len() + 1) % 64) % 64;
        text.push_str(&" ".repeat(pad));
        text.push('\n');
        let mut head = b"\x93NUMPY\x01\x00".to_vec();
        head.extend((text.len() as u16).to_le_bytes());
        head.extend(text.bytes());
        file.write_all(&head).map_err(|e| Error::io(path, "writing", e))?;
        Ok(NpySink { header: header.clone(), file, data_at: head.len() as u64 })
    }
}

impl Sink for NpySink {
    fn alignment(&self) -> usize {
        1
    }

    fn write(&mut self, window: &Window, samples: &Samples) -> Result<()> {
        use super::tiff::Word;
        let (rows, columns) = (self.header.grid.rows, self.header.grid.columns);
        let bytes = self.header.sample_type.bytes();
        let (height, width) = (window.rows.len(), window.columns.len());
        let mut buffer = Vec::with_capacity(width * bytes);
        for band in 0..self.header.bands {
            for i in 0..height {
                buffer.clear();
                let at = (band * height + i) * width;
                with_samples!(samples, v => v[at..at + width].iter().for_each(|s| s.push(&mut buffer)));
                if cfg!(target_endian = "big") && bytes > 1 {
                    buffer.chunks_exact_mut(bytes).for_each(<[u8]>::reverse);
                }
                let first = (band * rows + window.rows.start + i) * columns + window.columns.start;
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
