//! Joining and placing of typed samples.

use super::Samples;
use crate::error::{Error, Result};

impl Samples {
    /// Copies a block of `size` (rows, columns) of all bands to `at` within blocks of `whole` size.
    ///
    /// # Errors
    /// When the types differ, which a source must not let happen.
    pub(crate) fn place(
        &mut self,
        part: &Samples,
        bands: usize,
        whole: (usize, usize),
        at: (usize, usize),
        size: (usize, usize),
    ) -> Result<()> {
        fn copy<S: Copy>(
            to: &mut [S],
            from: &[S],
            bands: usize,
            whole: (usize, usize),
            at: (usize, usize),
            size: (usize, usize),
        ) {
            for band in 0..bands {
                for r in 0..size.0 {
                    let start = (band * whole.0 + at.0 + r) * whole.1 + at.1;
                    to[start..start + size.1]
                        .copy_from_slice(&from[(band * size.0 + r) * size.1..][..size.1]);
                }
            }
        }
        macro_rules! same {
            ($($kind:ident),*) => {
                match (self, part) {
                    $((Samples::$kind(to), Samples::$kind(from)) => copy(to, from, bands, whole, at, size),)*
                    _ => return Err(Error::unfit("the source changed its sample type while it was read", "")),
                }
            };
        }
        same!(U8, I8, U16, I16, U32, I32, F32, F64);
        Ok(())
    }
}

macro_rules! samples_from {
    ($($kind:ident: $t:ty),*) => {$(
        impl From<Vec<$t>> for Samples {
            fn from(v: Vec<$t>) -> Self { Samples::$kind(v) }
        }
    )*};
}
samples_from!(U8: u8, I8: i8, U16: u16, I16: i16, U32: u32, I32: i32, F32: f32, F64: f64);

impl Samples {
    /// Appends samples of the same type.
    ///
    /// # Errors
    /// When the types differ.
    pub(crate) fn append(&mut self, more: Samples) -> Result<()> {
        macro_rules! same {
            ($($kind:ident),*) => {
                match (self, more) {
                    $((Samples::$kind(to), Samples::$kind(mut from)) => to.append(&mut from),)*
                    _ => return Err(Error::unfit("bands of different sample types cannot be joined", "")),
                }
            };
        }
        same!(U8, I8, U16, I16, U32, I32, F32, F64);
        Ok(())
    }
}
