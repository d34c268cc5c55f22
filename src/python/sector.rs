//! Sectors and their configurations.

use super::door::enter;
use crate::memory;
use crate::sector as core;
use num_bigint::BigUint;
use numpy::ndarray::{Array1, Array3, Axis};
use numpy::{
    IntoPyArray, PyArray1, PyArray3, PyReadonlyArray1, PyReadonlyArray2, PyReadonlyArray3,
};
use pyo3::prelude::*;
use std::sync::OnceLock;

/// Energies `(r,)` and occupations `(r, spins, modes)`.
type Lowest<'py> = (Bound<'py, PyArray1<f64>>, Bound<'py, PyArray3<i64>>);

/// A sector of the core; occupations are `(count, spins, modes)` throughout.
#[pyclass(frozen, module = "fockhull._core")]
pub struct Sector {
    pub inner: core::Sector,
    configurations: OnceLock<core::Configurations>,
}

impl Sector {
    fn wrap(inner: Result<core::Sector, crate::error::Error>, py: Python<'_>) -> PyResult<Self> {
        let inner = enter(py, || inner)?;
        Ok(Sector {
            inner,
            configurations: OnceLock::new(),
        })
    }

    fn numbered(&self) -> Result<&core::Configurations, crate::error::Error> {
        if let Some(configurations) = self.configurations.get() {
            return Ok(configurations);
        }
        let built = self.inner.configurations()?;
        Ok(self.configurations.get_or_init(|| built))
    }
}

#[pymethods]
impl Sector {
    /// Spinless fermions.
    #[staticmethod]
    fn fermions(py: Python<'_>, modes: usize, particles: usize) -> PyResult<Self> {
        Self::wrap(core::Sector::fermions(modes, particles), py)
    }

    /// Spin-1/2 fermions at fixed (up, down).
    #[staticmethod]
    fn spin_half(py: Python<'_>, orbitals: usize, up: usize, down: usize) -> PyResult<Self> {
        Self::wrap(core::Sector::spin_half(orbitals, up, down), py)
    }

    /// Bosons.
    #[staticmethod]
    fn bosons(py: Python<'_>, modes: usize, particles: usize) -> PyResult<Self> {
        Self::wrap(core::Sector::bosons(modes, particles), py)
    }

    /// Exact number of configurations.
    #[getter]
    fn dimension(&self) -> BigUint {
        self.inner.dimension()
    }

    /// Occupations `(count, spins, modes)` of the configurations with the given indices.
    fn occupations<'py>(
        &self,
        py: Python<'py>,
        indices: PyReadonlyArray1<'py, u64>,
    ) -> PyResult<Bound<'py, PyArray3<i64>>> {
        let indices = indices.as_array();
        let result = enter(py, || {
            let configurations = self.numbered()?;
            let shape = (indices.len(), self.inner.spins(), self.inner.modes());
            let mut all = Array3::zeros(shape);
            for (&index, mut row) in indices.iter().zip(all.outer_iter_mut()) {
                row.assign(&configurations.occupations(index)?.mapv(i64::from));
            }
            Ok(all)
        })?;
        Ok(result.into_pyarray(py))
    }

    /// Indices of configurations given by occupations `(count, spins, modes)`.
    fn index<'py>(
        &self,
        py: Python<'py>,
        occupations: PyReadonlyArray3<'py, u32>,
    ) -> PyResult<Bound<'py, PyArray1<u64>>> {
        let occupations = occupations.as_array();
        let result = enter(py, || {
            let configurations = self.numbered()?;
            let indices: Result<Vec<u64>, _> = occupations
                .axis_iter(Axis(0))
                .map(|row| configurations.index(row))
                .collect();
            Ok(Array1::from(indices?))
        })?;
        Ok(result.into_pyarray(py))
    }

    /// Energies `(r,)` and occupations `(r, spins, modes)` of the r lowest configurations.
    fn lowest_configurations<'py>(
        &self,
        py: Python<'py>,
        energies: PyReadonlyArray2<'py, f64>,
        r: usize,
    ) -> PyResult<Lowest<'py>> {
        let energies = energies.as_array();
        let (values, occupations) = enter(py, || {
            let lowest = self.inner.lowest_configurations(energies, r)?;
            let numbers = r as u128 * (self.inner.spins() * self.inner.modes()) as u128;
            memory::require("the occupations of the configurations", numbers * 12)?;
            let values = Array1::from(lowest.energies().to_vec());
            Ok((values, lowest.occupations().mapv(i64::from)))
        })?;
        Ok((values.into_pyarray(py), occupations.into_pyarray(py)))
    }
}
