//! Arrays in and out: looked at where they lie, handed over without a copy.

use crate::error::Error;
use crate::raster::{Header, Held, Pieces, SampleType, Samples, Source, Window};
use numpy::{PyArray1, PyArrayMethods, PyReadonlyArray3, PyUntypedArray, PyUntypedArrayMethods};
use pyo3::exceptions::PyTypeError;
use pyo3::prelude::*;
use std::ops::Range;

/// An array whose samples are looked at; it cannot be written to by others meanwhile.
pub enum Looked<'py> {
    U8(PyReadonlyArray3<'py, u8>),
    I8(PyReadonlyArray3<'py, i8>),
    U16(PyReadonlyArray3<'py, u16>),
    I16(PyReadonlyArray3<'py, i16>),
    U32(PyReadonlyArray3<'py, u32>),
    I32(PyReadonlyArray3<'py, i32>),
    F32(PyReadonlyArray3<'py, f32>),
    F64(PyReadonlyArray3<'py, f64>),
}

macro_rules! each {
    ($looked:expr, $a:ident => $body:expr) => {
        match $looked {
            Looked::U8($a) => $body,
            Looked::I8($a) => $body,
            Looked::U16($a) => $body,
            Looked::I16($a) => $body,
            Looked::U32($a) => $body,
            Looked::I32($a) => $body,
            Looked::F32($a) => $body,
            Looked::F64($a) => $body,
        }
    };
}

impl<'py> Looked<'py> {
    /// Looks at an array of (bands, rows, columns).
    pub fn at(array: &Bound<'py, PyUntypedArray>) -> PyResult<Self> {
        macro_rules! tried {
            ($($kind:ident: $t:ty),*) => {$(
                if let Ok(a) = array.cast::<numpy::PyArray3<$t>>() {
                    return Ok(Looked::$kind(a.try_readonly()?));
                }
            )*};
        }
        tried!(F32: f32, U16: u16, U8: u8, F64: f64, I16: i16, I32: i32, U32: u32, I8: i8);
        Err(PyTypeError::new_err(format!(
            "an array of {} with {} dimensions is not resampled; bring it to float32, float64 or whole numbers of 8 to 32 bits, \
             as (bands, rows, columns)",
            array.dtype(),
            array.ndim()
        )))
    }

    /// Bands, rows, columns.
    pub fn shape(&self) -> (usize, usize, usize) {
        let shape = each!(self, a => a.shape());
        (shape[0], shape[1], shape[2])
    }

    /// The samples, band by band.
    pub fn held(&self) -> PyResult<Held<'_>> {
        macro_rules! slices {
            ($($kind:ident),*) => { match self { $(Looked::$kind(a) => a.as_slice().map(Held::$kind),)* } };
        }
        slices!(U8, I8, U16, I16, U32, I32, F32, F64).map_err(|_| {
            PyTypeError::new_err("the array is not contiguous; numpy.ascontiguousarray makes it so")
        })
    }
}

/// A raster in pieces of its own.
pub struct Owned {
    header: Header,
    pieces: Vec<(Window, Samples)>,
}

impl Owned {
    /// Copies pieces.
    pub fn copied(header: Header, pieces: &[(Window, Held<'_>)]) -> Self {
        macro_rules! copied {
            ($held:expr; $($kind:ident),*) => { match $held { $(Held::$kind(v) => Samples::$kind(v.to_vec()),)* } };
        }
        let copy = |held: &Held<'_>| copied!(held; U8, I8, U16, I16, U32, I32, F32, F64);
        Owned { header, pieces: pieces.iter().map(|(w, h)| (w.clone(), copy(h))).collect() }
    }
}

impl Source for Owned {
    fn header(&self) -> &Header {
        &self.header
    }

    fn read(&self, bands: Range<usize>, window: &Window) -> crate::Result<Samples> {
        let held = self.pieces.iter().map(|(w, s)| (w.clone(), s.held())).collect();
        Pieces::new(self.header.clone(), held)?.read(bands, window)
    }
}

/// Hands samples over as an array of (bands, rows, columns).
pub fn array<'py>(
    py: Python<'py>,
    samples: Samples,
    shape: (usize, usize, usize),
) -> PyResult<Bound<'py, PyAny>> {
    let shape = [shape.0, shape.1, shape.2];
    crate::with_samples!(samples, v => Ok(PyArray1::from_vec(py, v).reshape(shape)?.into_any()))
}

/// The type of that name, as NumPy spells it.
pub fn type_named(name: &str) -> crate::Result<SampleType> {
    use SampleType::{F32, F64, I8, I16, I32, U8, U16, U32};
    let numpy = |t: SampleType| match t {
        U8 => "uint8",
        I8 => "int8",
        U16 => "uint16",
        I16 => "int16",
        U32 => "uint32",
        I32 => "int32",
        F32 => "float32",
        F64 => "float64",
    };
    [U8, I8, U16, I16, U32, I32, F32, F64]
        .into_iter()
        .find(|t| t.name() == name || numpy(*t) == name)
        .ok_or_else(|| {
            Error::usage(format!("unknown type \"{name}\""), "use uint8 to int32, float32 or float64")
        })
}
