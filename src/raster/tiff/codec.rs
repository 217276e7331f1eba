//! Chunk codecs: compression and predictors of TIFF 6.0 and its technical notes, whole chunks at a time.
//!
//! Decoded chunks are in the machine's byte order. Output is limited to what the chunk must hold, so that a damaged or
//! hostile chunk cannot ask for more memory than its size in pixels.

use std::io::{Read, Write};

/// How chunks are compressed.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum Compression {
    /// Not at all.
    #[default]
    None,
    /// TIFF's LZW, most significant bit first, early change.
    Lzw,
    /// zlib.
    Deflate,
    /// Byte runs.
    PackBits,
    /// Zstandard.
    Zstd,
}

impl Compression {
    /// From the value of tag 259.
    pub fn from_tag(tag: u64) -> Option<Self> {
        Some(match tag {
            1 => Compression::None,
            5 => Compression::Lzw,
            8 | 32946 => Compression::Deflate,
            32773 => Compression::PackBits,
            50000 => Compression::Zstd,
            _ => return None,
        })
    }

    /// The value of tag 259.
    pub fn tag(self) -> u16 {
        match self {
            Compression::None => 1,
            Compression::Lzw => 5,
            Compression::Deflate => 8,
            Compression::PackBits => 32773,
            Compression::Zstd => 50000,
        }
    }
}

/// The shape of one chunk: rows x columns of pixels with `samples` samples of `bytes` bytes.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct ChunkShape {
    /// Rows stored.
    pub rows: usize,
    /// Columns stored.
    pub columns: usize,
    /// Samples of each pixel in the chunk.
    pub samples: usize,
    /// Bytes of a sample.
    pub bytes: usize,
}

impl ChunkShape {
    fn row_bytes(&self) -> usize {
        self.columns * self.samples * self.bytes
    }

    /// Bytes of the decoded chunk.
    pub fn len(&self) -> usize {
        self.rows * self.row_bytes()
    }
}

/// Decodes a chunk; the answer has exactly `shape.len()` bytes in the machine's order.
pub fn decode(
    stored: &[u8],
    compression: Compression,
    predictor: u16,
    big_endian: bool,
    shape: ChunkShape,
) -> Result<Vec<u8>, String> {
    let len = shape.len();
    let mut data = match compression {
        Compression::None => stored[..len.min(stored.len())].to_vec(),
        Compression::Lzw => unpack_lzw(stored, len)?,
        Compression::Deflate => read_up_to(flate2::read::ZlibDecoder::new(stored), len)?,
        Compression::Zstd => {
            read_up_to(zstd::stream::read::Decoder::new(stored).map_err(|e| e.to_string())?, len)?
        }
        Compression::PackBits => unpack_bits(stored, len),
    };
    if data.len() < len {
        return Err(format!("ends after {} of {len} bytes", data.len()));
    }
    match predictor {
        3 => undo_float_differences(&mut data, shape),
        2 => {
            to_native(&mut data, shape.bytes, big_endian);
            undo_differences(&mut data, shape);
        }
        _ => to_native(&mut data, shape.bytes, big_endian),
    }
    Ok(data)
}

/// Encodes a chunk given in the machine's order, as little-endian.
pub fn encode(
    mut data: Vec<u8>,
    compression: Compression,
    predictor: u16,
    shape: ChunkShape,
) -> std::io::Result<Vec<u8>> {
    match predictor {
        3 => make_float_differences(&mut data, shape),
        2 => {
            make_differences(&mut data, shape);
            to_native(&mut data, shape.bytes, false);
        }
        _ => to_native(&mut data, shape.bytes, false),
    }
    match compression {
        Compression::None => Ok(data),
        Compression::Lzw => {
            let mut encoder = weezl::encode::Encoder::with_tiff_size_switch(weezl::BitOrder::Msb, 8);
            encoder.encode(&data).map_err(std::io::Error::other)
        }
        Compression::Deflate => {
            let mut out = flate2::write::ZlibEncoder::new(Vec::new(), flate2::Compression::new(6));
            out.write_all(&data)?;
            out.finish()
        }
        Compression::Zstd => zstd::bulk::compress(&data, 3),
        Compression::PackBits => {
            // Runs must not cross rows (TIFF 6.0, section 9).
            Ok(data.chunks(shape.row_bytes().max(1)).flat_map(pack_bits).collect())
        }
    }
}

fn read_up_to(reader: impl Read, len: usize) -> Result<Vec<u8>, String> {
    let mut out = Vec::with_capacity(len);
    reader.take(len as u64).read_to_end(&mut out).map_err(|e| e.to_string())?;
    Ok(out)
}

fn unpack_lzw(stored: &[u8], len: usize) -> Result<Vec<u8>, String> {
    let mut out = vec![0; len];
    let mut decoder = weezl::decode::Decoder::with_tiff_size_switch(weezl::BitOrder::Msb, 8);
    let (mut read, mut written) = (0, 0);
    // Some writers leave out the end code: the chunk is done when it is full.
    while written < len {
        let step = decoder.decode_bytes(&stored[read..], &mut out[written..]);
        read += step.consumed_in;
        written += step.consumed_out;
        match step.status {
            Ok(weezl::LzwStatus::Ok) if step.consumed_in + step.consumed_out > 0 => {}
            Ok(_) => break,
            Err(e) => return Err(e.to_string()),
        }
    }
    out.truncate(written);
    Ok(out)
}

fn unpack_bits(stored: &[u8], len: usize) -> Vec<u8> {
    let mut out = Vec::with_capacity(len);
    let mut at = 0;
    while at < stored.len() && out.len() < len {
        let n = stored[at] as i8;
        at += 1;
        if n >= 0 {
            let end = (at + n as usize + 1).min(stored.len());
            out.extend_from_slice(&stored[at..end]);
            at = end;
        } else if n != -128 {
            let Some(byte) = stored.get(at) else { break };
            out.extend(std::iter::repeat_n(*byte, 1 + (-i16::from(n)) as usize));
            at += 1;
        }
    }
    out.truncate(len);
    out
}

fn pack_bits(row: &[u8]) -> Vec<u8> {
    let mut out = Vec::with_capacity(row.len() + row.len() / 64 + 2);
    let run = |at: usize| row[at..].iter().take(128).take_while(|b| **b == row[at]).count();
    let mut at = 0;
    while at < row.len() {
        let n = run(at);
        if n >= 3 || (n == 2 && at + 2 == row.len()) {
            out.extend([(1 - n as i16) as u8, row[at]]);
            at += n;
            continue;
        }
        let start = at;
        while at < row.len() && at - start < 128 && run(at) < 3 {
            at += 1;
        }
        out.push((at - start - 1) as u8);
        out.extend_from_slice(&row[start..at]);
    }
    out
}

/// Between a byte order and the machine's; its own inverse.
fn to_native(data: &mut [u8], bytes: usize, big_endian: bool) {
    if bytes > 1 && big_endian != cfg!(target_endian = "big") {
        data.chunks_exact_mut(bytes).for_each(<[u8]>::reverse);
    }
}

macro_rules! for_words {
    ($bytes:expr, $t:ident => $body:block) => {
        match $bytes {
            1 => {
                type $t = u8;
                $body
            }
            2 => {
                type $t = u16;
                $body
            }
            4 => {
                type $t = u32;
                $body
            }
            _ => {
                type $t = u64;
                $body
            }
        }
    };
}

/// Horizontal differencing (predictor 2) undone, each row on its own.
fn undo_differences(data: &mut [u8], shape: ChunkShape) {
    for_words!(shape.bytes, W => {
        const N: usize = size_of::<W>();
        for row in data.chunks_exact_mut(shape.row_bytes()) {
            let (row, _) = row.as_chunks_mut::<N>();
            for i in shape.samples..row.len() {
                row[i] = W::from_ne_bytes(row[i]).wrapping_add(W::from_ne_bytes(row[i - shape.samples])).to_ne_bytes();
            }
        }
    });
}

fn make_differences(data: &mut [u8], shape: ChunkShape) {
    for_words!(shape.bytes, W => {
        const N: usize = size_of::<W>();
        for row in data.chunks_exact_mut(shape.row_bytes()) {
            let (row, _) = row.as_chunks_mut::<N>();
            for i in (shape.samples..row.len()).rev() {
                row[i] = W::from_ne_bytes(row[i]).wrapping_sub(W::from_ne_bytes(row[i - shape.samples])).to_ne_bytes();
            }
        }
    });
}

/// Floating-point predictor (Adobe technical note 3): bytes sorted by significance, then differenced.
fn undo_float_differences(data: &mut [u8], shape: ChunkShape) {
    let (values, bytes) = (shape.columns * shape.samples, shape.bytes);
    let mut sorted = vec![0; shape.row_bytes()];
    for row in data.chunks_exact_mut(shape.row_bytes()) {
        for i in shape.samples..row.len() {
            row[i] = row[i].wrapping_add(row[i - shape.samples]);
        }
        sorted.copy_from_slice(row);
        for (i, value) in row.chunks_exact_mut(bytes).enumerate() {
            for (b, byte) in value.iter_mut().enumerate() {
                let significance = if cfg!(target_endian = "big") { b } else { bytes - 1 - b };
                *byte = sorted[significance * values + i];
            }
        }
    }
}

fn make_float_differences(data: &mut [u8], shape: ChunkShape) {
    let (values, bytes) = (shape.columns * shape.samples, shape.bytes);
    let mut sorted = vec![0; shape.row_bytes()];
    for row in data.chunks_exact_mut(shape.row_bytes()) {
        for (i, value) in row.chunks_exact(bytes).enumerate() {
            for (b, byte) in value.iter().enumerate() {
                let significance = if cfg!(target_endian = "big") { b } else { bytes - 1 - b };
                sorted[significance * values + i] = *byte;
            }
        }
        for i in (shape.samples..sorted.len()).rev() {
            sorted[i] = sorted[i].wrapping_sub(sorted[i - shape.samples]);
        }
        row.copy_from_slice(&sorted);
    }
}
