//! The Python module: a thin skin on the library. Arrays come as (bands, rows, columns), contiguous and of the machine's byte
//! order; the Python half of the package sees to that.

mod arrays;
mod grid;
mod kernel;
mod work;

use crate::error::Error;
use pyo3::exceptions::{PyOSError, PyRuntimeError, PyValueError};
use pyo3::prelude::*;
use std::panic::{AssertUnwindSafe, catch_unwind};

/// What is wrong and what mends it, as the exception that Python expects.
fn raised(e: &Error) -> PyErr {
    let (text, mend) = (e.to_string(), e.mend());
    let text = if mend.is_empty() { text } else { format!("{text}; {mend}") };
    match e {
        Error::Io { .. } => PyOSError::new_err(text),
        _ => PyValueError::new_err(text),
    }
}

/// Runs `work` with the interpreter free for other threads. A fault of ours becomes an exception that `except Exception` sees.
fn free<R: Send>(py: Python<'_>, work: impl FnOnce() -> crate::Result<R> + Send) -> PyResult<R> {
    match py.detach(|| catch_unwind(AssertUnwindSafe(work))) {
        Ok(result) => result.map_err(|e| raised(&e)),
        Err(_) => Err(PyRuntimeError::new_err("a fault in regauge; the input was not changed")),
    }
}

#[pymodule]
fn _regauge(module: &Bound<'_, PyModule>) -> PyResult<()> {
    module.add("__version__", env!("CARGO_PKG_VERSION"))?;
    module.add_class::<grid::PyGrid>()?;
    module.add_class::<kernel::PyKernel>()?;
    module.add_class::<work::Work>()?;
    module.add_function(wrap_pyfunction!(grid::rescaled, module)?)?;
    module.add_function(wrap_pyfunction!(grid::moved, module)?)?;
    module.add_function(wrap_pyfunction!(grid::span, module)?)?;
    module.add_function(wrap_pyfunction!(grid::way_back, module)?)?;
    module.add_function(wrap_pyfunction!(work::audit, module)?)?;
    Ok(())
}
