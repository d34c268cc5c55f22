//! Arrays of float64 or complex128, read without a copy.

use num_complex::Complex64;
use numpy::PyReadonlyArray;
use numpy::ndarray::Dimension;
use pyo3::prelude::*;

/// A read-only array of either type.
pub enum Numbers<'py, D: Dimension> {
    /// float64
    Real(PyReadonlyArray<'py, f64, D>),
    /// complex128
    Complex(PyReadonlyArray<'py, Complex64, D>),
}

impl<'py, D: Dimension> Numbers<'py, D> {
    /// Reads an array that Python has converted to one of the two types.
    pub fn read(array: &Bound<'py, PyAny>) -> PyResult<Self> {
        match array.extract::<PyReadonlyArray<'py, f64, D>>() {
            Ok(real) => Ok(Numbers::Real(real)),
            Err(_) => Ok(Numbers::Complex(array.extract()?)),
        }
    }
}
