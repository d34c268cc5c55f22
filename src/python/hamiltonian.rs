//! Hamiltonians, real or complex.

use super::arrays::Numbers;
use super::door::{enter, enter_monitored};
use super::interaction::{AnyInteraction, Interaction};
use super::sector::Sector;
use crate::error::{Error, Result};
use crate::linear_operator::LinearOperator;
use crate::operator::{self as core, SparseMatrix};
use crate::progress::Progress;
use crate::scalar::Scalar;
use num_complex::Complex64;
use numpy::ndarray::{Array1, ArrayView2, ArrayViewMut2, Axis, Ix2, Ix3};
use numpy::{Element, IntoPyArray, PyArray1, PyReadwriteArray2};
use pyo3::prelude::*;
use pyo3::types::PyDict;
use rayon::prelude::*;
use std::ops::ControlFlow;
use std::sync::Arc;

/// A Hamiltonian of the core, of either element type.
#[pyclass(frozen, module = "fockhull._core")]
pub struct Hamiltonian {
    pub inner: AnyHamiltonian,
}

/// Real or complex.
#[derive(Clone)]
pub enum AnyHamiltonian {
    Real(Arc<core::Hamiltonian<f64>>),
    Complex(Arc<core::Hamiltonian<Complex64>>),
}

/// Calls the same expression with the Hamiltonian of either type.
macro_rules! with_hamiltonian {
    ($any:expr, $inner:ident => $body:expr) => {
        match $any {
            AnyHamiltonian::Real($inner) => $body,
            AnyHamiltonian::Complex($inner) => $body,
        }
    };
}

/// One product after another, so that Ctrl-C is seen between them.
fn apply_rows<T: Scalar>(
    operator: &dyn LinearOperator<T>,
    block: ArrayView2<'_, T>,
    mut out: ArrayViewMut2<'_, T>,
    monitor: &mut (dyn FnMut(&Progress) -> ControlFlow<()> + '_),
) -> Result<()> {
    /// Components handled between two looks at the signals.
    const LARGE: usize = 1 << 26;
    let rows = (LARGE / block.ncols().max(1)).max(1);
    let total = block.nrows();
    let parts = block
        .axis_chunks_iter(Axis(0), rows)
        .zip(out.axis_chunks_iter_mut(Axis(0), rows));
    for (k, (part, target)) in parts.enumerate() {
        operator.apply(part, target)?;
        let report = Progress {
            stage: "apply",
            done: ((k + 1) * rows).min(total),
            total,
            products: ((k + 1) * rows).min(total),
            residual: f64::NAN,
        };
        if monitor(&report).is_break() {
            return Err(Error::Interrupted);
        }
    }
    Ok(())
}

/// Refuses NaN and infinity, in parallel: it must cost little beside the product.
fn check_finite<T: Scalar>(block: ArrayView2<'_, T>) -> Result<()> {
    const PART: usize = 1 << 15;
    let all_finite = |part: &[T]| part.iter().fold(true, |all, x| all & x.is_finite());
    let finite = match block.to_slice() {
        Some(numbers) => numbers.par_chunks(PART).all(all_finite),
        None => block.iter().all(|x| x.is_finite()),
    };
    if finite {
        Ok(())
    } else {
        Err(Error::argument("x", "NaN or infinity", "finite numbers"))
    }
}

fn apply_checked<T: Scalar + Element>(
    py: Python<'_>,
    operator: &core::Hamiltonian<T>,
    block: ArrayView2<'_, T>,
    out: &Bound<'_, PyAny>,
) -> PyResult<()> {
    let mut out: PyReadwriteArray2<'_, T> = out.extract()?;
    let out = out.as_array_mut();
    enter_monitored(py, None, move |monitor| {
        check_finite(block)?;
        operator.prepare()?;
        apply_rows(operator, block, out, monitor)
    })
}

type Csr<'py> = (
    Bound<'py, PyArray1<i64>>,
    Bound<'py, PyArray1<i64>>,
    Bound<'py, PyAny>,
);

fn csr_arrays<'py, T: Element>(py: Python<'py>, matrix: SparseMatrix<T>) -> Csr<'py> {
    let starts: Array1<i64> = matrix.row_starts.iter().map(|&s| s as i64).collect();
    let columns: Array1<i64> = matrix.columns.iter().map(|&c| i64::from(c)).collect();
    (
        starts.into_pyarray(py),
        columns.into_pyarray(py),
        matrix.values.into_pyarray(py).into_any(),
    )
}

#[pymethods]
impl Hamiltonian {
    /// From one-body terms `(spins, d, d)` of float64 or complex128.
    #[new]
    #[pyo3(signature = (sector, one_body, interaction, constant))]
    fn new(
        py: Python<'_>,
        sector: &Sector,
        one_body: &Bound<'_, PyAny>,
        interaction: Option<&Interaction>,
        constant: f64,
    ) -> PyResult<Self> {
        let sector = sector.inner;
        let interaction = interaction.map(|w| w.inner.clone());
        let one_body = Numbers::<Ix3>::read(one_body)?;
        let inner = match (&one_body, interaction) {
            (Numbers::Real(h), None) => {
                let h = h.as_array();
                enter(py, || core::Hamiltonian::new(sector, h, None, constant))
                    .map(|x| AnyHamiltonian::Real(Arc::new(x)))
            }
            (Numbers::Real(h), Some(AnyInteraction::Real(w))) => {
                let h = h.as_array();
                enter(py, || core::Hamiltonian::new(sector, h, Some(w), constant))
                    .map(|x| AnyHamiltonian::Real(Arc::new(x)))
            }
            (h, w) => {
                let h = match h {
                    Numbers::Real(h) => h.as_array().mapv(Complex64::from),
                    Numbers::Complex(h) => h.as_array().to_owned(),
                };
                enter(py, || {
                    let w = w.map(|w| w.to_complex()).transpose()?;
                    core::Hamiltonian::new(sector, h.view(), w, constant)
                })
                .map(|x| AnyHamiltonian::Complex(Arc::new(x)))
            }
        }?;
        Ok(Hamiltonian { inner })
    }

    /// Whether elements are complex.
    #[getter]
    fn is_complex(&self) -> bool {
        matches!(self.inner, AnyHamiltonian::Complex(_))
    }

    /// Overwrites the rows of `out` with H times the rows of `block`, both `(k, dimension)` of
    /// the Hamiltonian's type.
    fn apply(
        &self,
        py: Python<'_>,
        block: &Bound<'_, PyAny>,
        out: &Bound<'_, PyAny>,
    ) -> PyResult<()> {
        match (&self.inner, Numbers::<Ix2>::read(block)?) {
            (AnyHamiltonian::Real(h), Numbers::Real(x)) => apply_checked(py, h, x.as_array(), out),
            (AnyHamiltonian::Complex(h), Numbers::Complex(x)) => {
                apply_checked(py, h, x.as_array(), out)
            }
            _ => Err(super::door::raise(
                py,
                &Error::argument("x", "another element type", "that of the Hamiltonian"),
            )),
        }
    }

    /// Diagonal matrix elements.
    fn diagonal<'py>(&self, py: Python<'py>) -> PyResult<Bound<'py, PyArray1<f64>>> {
        let diagonal = with_hamiltonian!(&self.inner, h => enter(py, || h.diagonal_elements()))?;
        Ok(diagonal.into_pyarray(py))
    }

    /// Row starts, columns and elements of the matrix.
    fn to_csr<'py>(&self, py: Python<'py>) -> PyResult<Csr<'py>> {
        with_hamiltonian!(&self.inner, h => {
            let matrix = enter(py, || h.to_sparse())?;
            Ok(csr_arrays(py, matrix))
        })
    }

    /// Bytes for products, one vector and the stored matrix, and how products are done.
    fn memory_estimate<'py>(&self, py: Python<'py>) -> PyResult<Bound<'py, PyDict>> {
        let estimate = with_hamiltonian!(&self.inner, h => enter(py, || h.memory_estimate()))?;
        let result = PyDict::new(py);
        result.set_item("representation", estimate.representation)?;
        result.set_item("operator", estimate.operator)?;
        result.set_item("vector", estimate.vector)?;
        result.set_item("matrix", estimate.matrix)?;
        Ok(result)
    }
}
