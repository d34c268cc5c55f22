//! Interactions, real or complex.

use super::arrays::Numbers;
use super::door::enter;
use super::sector::Sector;
use crate::error::{Error, Result};
use crate::operator::{self as core, TensorOrder};
use crate::scalar::Scalar;
use num_complex::Complex64;
use numpy::ndarray::{Array1, Array2, ArrayView1, ArrayView2, Ix1, Ix4};
use numpy::{Element, IntoPyArray, PyArray2, PyReadonlyArray2, ToPyArray};
use pyo3::prelude::*;
use std::sync::Arc;

/// An interaction of the core, of either element type.
#[pyclass(frozen, module = "fockhull._core")]
pub struct Interaction {
    pub inner: AnyInteraction,
}

/// Real or complex.
#[derive(Clone)]
pub enum AnyInteraction {
    Real(Arc<core::Interaction<f64>>),
    Complex(Arc<core::Interaction<Complex64>>),
}

impl AnyInteraction {
    fn real(interaction: core::Interaction<f64>) -> Self {
        AnyInteraction::Real(Arc::new(interaction))
    }

    fn complex(interaction: core::Interaction<Complex64>) -> Self {
        AnyInteraction::Complex(Arc::new(interaction))
    }

    /// The interaction with complex elements.
    pub fn to_complex(&self) -> Result<Arc<core::Interaction<Complex64>>> {
        match self {
            AnyInteraction::Complex(w) => Ok(w.clone()),
            AnyInteraction::Real(w) => w
                .convert()
                .map(Arc::new)
                .ok_or_else(|| Error::argument("interaction", "real elements", "convertible ones")),
        }
    }
}

fn listed<T: Scalar>(
    indices: ArrayView2<'_, i64>,
    values: ArrayView1<'_, T>,
) -> Result<Vec<core::Entry<T>>> {
    let as_mode = |mode: i64| {
        usize::try_from(mode).map_err(|_| Error::index("entries", mode, "modes counted from 0"))
    };
    indices
        .rows()
        .into_iter()
        .zip(values)
        .map(|(row, &value)| {
            let mut index = [0; 4];
            for (target, &mode) in index.iter_mut().zip(row) {
                *target = as_mode(mode)?;
            }
            Ok((index, value))
        })
        .collect()
}

type Parts<'py> = (
    Option<Bound<'py, PyArray2<f64>>>,
    Option<Bound<'py, PyAny>>,
    Option<(Bound<'py, PyArray2<i64>>, Bound<'py, PyAny>)>,
);

fn parts<'py, T: Scalar + Element>(
    py: Python<'py>,
    interaction: &core::Interaction<T>,
) -> Parts<'py> {
    let entries = interaction.has_entries().then(|| {
        let list: Vec<core::Entry<T>> = interaction.entries().collect();
        let indices = Array2::from_shape_fn((list.len(), 4), |(k, i)| list[k].0[i] as i64);
        let values: Array1<T> = list.iter().map(|&(_, value)| value).collect();
        (indices.into_pyarray(py), values.into_pyarray(py).into_any())
    });
    let density = interaction.density_density().map(|v| v.to_pyarray(py));
    let tensor = interaction.tensor().map(|v| v.to_pyarray(py).into_any());
    (density, tensor, entries)
}

#[pymethods]
impl Interaction {
    /// From a real symmetric matrix `(d, d)`.
    #[staticmethod]
    fn density_density(
        py: Python<'_>,
        sector: &Sector,
        matrix: PyReadonlyArray2<'_, f64>,
    ) -> PyResult<Self> {
        let (sector, matrix) = (sector.inner, matrix.as_array());
        let inner = enter(py, || {
            core::Interaction::from_density_density(sector, matrix)
        })?;
        Ok(Interaction {
            inner: AnyInteraction::real(inner),
        })
    }

    /// From a tensor `(d, d, d, d)` of float64 or complex128; `order` is "dirac" or "mulliken".
    #[staticmethod]
    fn two_body(
        py: Python<'_>,
        sector: &Sector,
        tensor: &Bound<'_, PyAny>,
        order: &str,
    ) -> PyResult<Self> {
        let sector = sector.inner;
        let tensor = Numbers::<Ix4>::read(tensor)?;
        let order = match order {
            "dirac" => Ok(TensorOrder::Dirac),
            "mulliken" => Ok(TensorOrder::Mulliken),
            other => Err(Error::argument("order", other, "\"dirac\" or \"mulliken\"")),
        };
        let inner = match &tensor {
            Numbers::Real(v) => {
                let v = v.as_array();
                enter(py, || core::Interaction::from_two_body(sector, v, order?))
                    .map(AnyInteraction::real)
            }
            Numbers::Complex(v) => {
                let v = v.as_array();
                enter(py, || core::Interaction::from_two_body(sector, v, order?))
                    .map(AnyInteraction::complex)
            }
        }?;
        Ok(Interaction { inner })
    }

    /// From indices `(n, 4)` and values `(n,)` of float64 or complex128, in Dirac order.
    #[staticmethod]
    fn entries(
        py: Python<'_>,
        sector: &Sector,
        indices: PyReadonlyArray2<'_, i64>,
        values: &Bound<'_, PyAny>,
    ) -> PyResult<Self> {
        let (sector, indices) = (sector.inner, indices.as_array());
        let inner = match &Numbers::<Ix1>::read(values)? {
            Numbers::Real(v) => {
                let v = v.as_array();
                enter(py, || {
                    core::Interaction::from_entries(sector, &listed(indices, v)?)
                })
                .map(AnyInteraction::real)
            }
            Numbers::Complex(v) => {
                let v = v.as_array();
                enter(py, || {
                    core::Interaction::from_entries(sector, &listed(indices, v)?)
                })
                .map(AnyInteraction::complex)
            }
        }?;
        Ok(Interaction { inner })
    }

    /// The parts that make it up: density matrix, tensor in Dirac order, indices and values of
    /// the sparse list; parts that are not there are None.
    fn parts<'py>(&self, py: Python<'py>) -> Parts<'py> {
        match &self.inner {
            AnyInteraction::Real(w) => parts(py, w),
            AnyInteraction::Complex(w) => parts(py, w),
        }
    }

    /// Sum with another interaction on the same sector.
    fn plus(&self, py: Python<'_>, other: &Interaction) -> PyResult<Self> {
        let inner = enter(py, || match (&self.inner, &other.inner) {
            (AnyInteraction::Real(a), AnyInteraction::Real(b)) => {
                a.plus(b).map(AnyInteraction::real)
            }
            (a, b) => a
                .to_complex()?
                .plus(&*b.to_complex()?)
                .map(AnyInteraction::complex),
        })?;
        Ok(Interaction { inner })
    }

    /// A real multiple.
    fn times(&self, py: Python<'_>, factor: f64) -> PyResult<Self> {
        let inner = enter(py, || match &self.inner {
            AnyInteraction::Real(w) => w.times(factor).map(AnyInteraction::real),
            AnyInteraction::Complex(w) => w.times(factor).map(AnyInteraction::complex),
        })?;
        Ok(Interaction { inner })
    }

    /// Whether elements are complex.
    #[getter]
    fn is_complex(&self) -> bool {
        matches!(self.inner, AnyInteraction::Complex(_))
    }
}
