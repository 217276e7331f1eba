//! Kernels by name.

use super::raised;
use crate::kernel::Kernel;
use pyo3::prelude::*;

/// A kernel by name, such as ``bspline:3``.
#[pyclass(frozen, subclass, name = "Kernel", module = "regauge")]
pub struct PyKernel(Kernel);

#[pymethods]
impl PyKernel {
    #[new]
    fn new(name: &str) -> PyResult<Self> {
        Kernel::parse(name).map(PyKernel).map_err(|e| raised(&e))
    }

    /// The full name.
    #[getter]
    fn name(&self) -> &str {
        self.0.name()
    }

    /// Samples that weigh in along an axis; None for kernels of whole lines.
    #[getter]
    fn taps(&self) -> Option<usize> {
        self.0.taps()
    }

    /// Approximation order; None: faster than any power.
    #[getter]
    fn order(&self) -> Option<u32> {
        self.0.order()
    }

    /// Poles of the prefilter within the unit circle.
    #[getter]
    fn poles(&self) -> Vec<f64> {
        self.0.poles()
    }

    /// The basis function at ``t`` samples from its middle.
    fn _weight(&self, t: Vec<f64>) -> Vec<f64> {
        t.into_iter().map(|t| self.0.weight(t)).collect()
    }

    /// The cardinal function, prefilter included.
    fn _cardinal(&self, t: Vec<f64>) -> Vec<f64> {
        t.into_iter().map(|t| self.0.cardinal(t)).collect()
    }

    fn __repr__(&self) -> String {
        format!("Kernel({:?})", self.0.name())
    }

    fn __reduce__<'py>(&self, py: Python<'py>) -> (Bound<'py, PyAny>, (String,)) {
        (py.get_type::<PyKernel>().into_any(), (self.0.name().to_owned(),))
    }
}
