//! Tag numbers (TIFF 6.0, BigTIFF, OGC GeoTIFF 1.1) and directories read by the `tiff` crate.

use crate::error::{Error, Result};
use std::fs::File;
use std::io::{BufReader, Cursor, Read, Seek, SeekFrom};
use std::path::Path;
use tiff::Directory;
use tiff::decoder::ifd::Value;
use tiff::decoder::{Decoder, Limits};
use tiff::tags::{IfdPointer, Tag};

pub const NEW_SUBFILE_TYPE: u16 = 254;
pub const WIDTH: u16 = 256;
pub const HEIGHT: u16 = 257;
pub const BITS: u16 = 258;
pub const COMPRESSION: u16 = 259;
pub const PHOTOMETRIC: u16 = 262;
pub const DESCRIPTION: u16 = 270;
pub const STRIP_OFFSETS: u16 = 273;
pub const SAMPLES_PER_PIXEL: u16 = 277;
pub const ROWS_PER_STRIP: u16 = 278;
pub const STRIP_COUNTS: u16 = 279;
pub const X_RESOLUTION: u16 = 282;
pub const Y_RESOLUTION: u16 = 283;
pub const PLANAR: u16 = 284;
pub const RESOLUTION_UNIT: u16 = 296;
pub const PREDICTOR: u16 = 317;
pub const COLOR_MAP: u16 = 320;
pub const TILE_WIDTH: u16 = 322;
pub const TILE_HEIGHT: u16 = 323;
pub const TILE_OFFSETS: u16 = 324;
pub const TILE_COUNTS: u16 = 325;
pub const SUB_IFDS: u16 = 330;
pub const EXTRA_SAMPLES: u16 = 338;
pub const SAMPLE_FORMAT: u16 = 339;
pub const PIXEL_SCALE: u16 = 33550;
pub const TIEPOINT: u16 = 33922;
pub const TRANSFORMATION: u16 = 34264;
pub const GEO_DIRECTORY: u16 = 34735;
pub const GEO_DOUBLES: u16 = 34736;
pub const GEO_ASCII: u16 = 34737;
pub const NO_DATA: u16 = 42113;

/// Text tags that travel as they are: DocumentName, Make, Model, PageName, Software, DateTime, Artist, HostComputer, Copyright.
pub const TEXT: [u16; 9] = [269, 271, 272, 285, 305, 306, 315, 316, 33432];

/// Every tag that is understood; others are named in a note.
pub const KNOWN: [u16; 37] = [
    254, 255, 256, 257, 258, 259, 262, 266, 270, 273, 274, 277, 278, 279, 280, 281, 282, 283, 284, 296, 297,
    317, 320, 322, 323, 324, 325, 330, 338, 339, 33550, 33922, 34264, 34735, 34736, 34737, 42113,
];

/// More directories than this are taken for damage.
const MAX_PAGES: usize = 100_000;

/// What the `tiff` crate reads from: first an empty picture, so that it opens without judging the file's first image by
/// its own limits and tastes, then the file.
struct Switch {
    empty: Cursor<Vec<u8>>,
    file: Option<BufReader<File>>,
}

impl Read for Switch {
    fn read(&mut self, buf: &mut [u8]) -> std::io::Result<usize> {
        match &mut self.file {
            Some(f) => f.read(buf),
            None => self.empty.read(buf),
        }
    }
}

impl Seek for Switch {
    fn seek(&mut self, to: SeekFrom) -> std::io::Result<u64> {
        match &mut self.file {
            Some(f) => f.seek(to),
            None => self.empty.seek(to),
        }
    }
}

/// The directories of a file.
pub struct Directories {
    decoder: Decoder<Switch>,
    /// Main directories in order.
    pub pages: Vec<Directory>,
    /// Whether the file is big-endian.
    pub big_endian: bool,
    path: std::path::PathBuf,
}

impl Directories {
    /// Reads the chain of main directories.
    pub fn read(path: &Path) -> Result<Self> {
        let bad = |place: &str, problem: String| Error::malformed(path, place, problem);
        let io = |e| Error::io(path, "reading the header", e);
        let mut file = File::open(path).map_err(io)?;
        let file_len = file.metadata().map_err(io)?.len();
        let mut head = [0u8; 16];
        let got = file.read(&mut head).map_err(io)?;
        if got < 8 {
            return Err(bad("header", "the file is shorter than a TIFF header".into()));
        }
        let big_endian = &head[..2] == b"MM";
        let word = |at: usize, n: usize| -> u64 {
            let bytes = head[at..at + n].iter();
            let push = |v: u64, b: &u8| v << 8 | u64::from(*b);
            if big_endian { bytes.fold(0, push) } else { bytes.rev().fold(0, push) }
        };
        let is_big = word(2, 2) == 43;
        if is_big && got < 16 {
            return Err(bad("header", "the file is shorter than a BigTIFF header".into()));
        }
        let first = if is_big { word(8, 8) } else { word(4, 4) };
        let empty = Cursor::new(empty_picture(big_endian, is_big));
        let opened = Decoder::new(Switch { empty, file: None });
        let mut decoder = opened.map_err(|e| bad("header", e.to_string()))?;
        file.rewind().map_err(io)?;
        decoder.inner().file = Some(BufReader::new(file));
        // A value cannot be longer than the file that holds it.
        let mut limits = Limits::default();
        limits.ifd_value_size = usize::try_from(file_len).unwrap_or(usize::MAX).min(1 << 31);
        let mut decoder = decoder.with_limits(limits);
        let mut pages = Vec::new();
        let mut seen = std::collections::HashSet::new();
        let mut next = Some(first).filter(|p| *p != 0);
        while let Some(at) = next {
            if !seen.insert(at) || pages.len() >= MAX_PAGES {
                return Err(bad(
                    "directories",
                    "the chain of directories runs in a circle or never ends".into(),
                ));
            }
            if at >= file_len {
                return Err(bad(
                    &format!("directory {}", pages.len() + 1),
                    format!("it should stand at byte {at}, past the end"),
                ));
            }
            let page = decoder
                .read_directory(IfdPointer(at))
                .map_err(|e| bad(&format!("directory {}", pages.len() + 1), e.to_string()))?;
            next = page.next().map(|p| p.0).filter(|p| *p != 0);
            pages.push(page);
        }
        if pages.is_empty() {
            return Err(bad("header", "there is no directory, so no image".into()));
        }
        Ok(Directories { decoder, pages, big_endian, path: path.to_owned() })
    }

    /// The value of a tag on a page.
    pub fn value(&mut self, page: usize, tag: u16) -> Result<Option<Value>> {
        let path = self.path.clone();
        self.decoder
            .read_directory_tags(&self.pages[page])
            .find_tag(Tag::from_u16_exhaustive(tag))
            .map_err(|e| Error::malformed(&path, format!("page {}, tag {tag}", page + 1), e.to_string()))
    }

    /// A tag as whole numbers; empty if it is not there.
    pub fn integers(&mut self, page: usize, tag: u16) -> Result<Vec<u64>> {
        let wrong = |e: tiff::TiffError| {
            Error::malformed(&self.path, format!("page {}, tag {tag}", page + 1), e.to_string())
        };
        let value =
            self.decoder.read_directory_tags(&self.pages[page]).find_tag(Tag::from_u16_exhaustive(tag));
        match value.map_err(wrong)? {
            None => Ok(Vec::new()),
            Some(v) => v.into_u64_vec().map_err(wrong),
        }
    }

    /// A tag as one whole number.
    pub fn integer(&mut self, page: usize, tag: u16) -> Result<Option<u64>> {
        Ok(self.integers(page, tag)?.first().copied())
    }

    /// A tag as floating-point numbers; empty if it is not there.
    pub fn doubles(&mut self, page: usize, tag: u16) -> Result<Vec<f64>> {
        let place = format!("page {}, tag {tag}", page + 1);
        Ok(match self.value(page, tag)? {
            None => Vec::new(),
            Some(Value::Rational(n, d)) => vec![f64::from(n) / f64::from(d)],
            Some(Value::Float(v)) => vec![f64::from(v)],
            Some(v) => v.into_f64_vec().map_err(|e| Error::malformed(&self.path, place, e.to_string()))?,
        })
    }

    /// A tag as text without its closing NUL; bytes that are no UTF-8 are taken for Latin-1.
    pub fn text(&mut self, page: usize, tag: u16) -> Result<Option<String>> {
        let text = match self.value(page, tag) {
            Ok(Some(Value::Ascii(s))) => Some(s),
            Ok(Some(v)) => v.into_u8_vec().ok().map(|b| b.iter().map(|c| *c as char).collect()),
            Ok(None) => None,
            // Text that the crate cannot decode is no reason to refuse the raster.
            Err(_) => None,
        };
        Ok(text.map(|t| t.trim_end_matches('\0').to_owned()))
    }
}

/// A complete TIFF of one black pixel in the given flavour.
fn empty_picture(big_endian: bool, big: bool) -> Vec<u8> {
    let put = |out: &mut Vec<u8>, v: u64, n: usize| {
        let bytes = v.to_le_bytes();
        if big_endian { out.extend(bytes[..n].iter().rev()) } else { out.extend(&bytes[..n]) }
    };
    let mut out: Vec<u8> = if big_endian { b"MM".to_vec() } else { b"II".to_vec() };
    let (offset, count) = if big { (8, 8) } else { (4, 2) };
    put(&mut out, if big { 43 } else { 42 }, 2);
    if big {
        put(&mut out, 8, 2);
        put(&mut out, 0, 2);
    }
    let start = if big { 16 } else { 8 };
    put(&mut out, start, offset);
    let tags: [(u16, u64); 8] = [
        (WIDTH, 1),
        (HEIGHT, 1),
        (BITS, 8),
        (COMPRESSION, 1),
        (PHOTOMETRIC, 1),
        (STRIP_OFFSETS, 0),
        (ROWS_PER_STRIP, 1),
        (STRIP_COUNTS, 1),
    ];
    put(&mut out, tags.len() as u64, count);
    for (tag, value) in tags {
        put(&mut out, u64::from(tag), 2);
        put(&mut out, 4, 2);
        put(&mut out, 1, offset);
        put(&mut out, value, 4);
        if big {
            out.extend([0; 4]);
        }
    }
    put(&mut out, 0, offset);
    out
}
