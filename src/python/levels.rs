//! The ensemble eigenproblem and its density matrices.

use super::arrays::Numbers;
use super::door::{enter, enter_monitored};
use super::hamiltonian::{AnyHamiltonian, Hamiltonian};
use super::sector::Sector;
use crate::density;
use crate::eigen::{self, LevelCount, LevelRequest, Status};
use crate::error::{Error, Result};
use crate::memory;
use crate::operator as core;
use crate::scalar::Scalar;
use crate::weights::Weights;
use num_complex::Complex64;
use numpy::ndarray::{Array1, Array4, Array5, ArrayView2, Ix2};
use numpy::{Element, IntoPyArray, PyArray1, PyReadonlyArray1, PyReadonlyArray2};
use pyo3::prelude::*;
use std::sync::Arc;

/// What the eigensolver found; vectors are rows here, `(found, dimension)`.
#[pyclass(frozen, get_all, module = "fockhull._core")]
pub struct Levels {
    energies: Py<PyAny>,
    vectors: Py<PyAny>,
    residuals: Py<PyAny>,
    error_bounds: Py<PyAny>,
    next_energy: Option<f64>,
    next_error: Option<f64>,
    multiplets: Vec<(usize, usize)>,
    last_multiplet_complete: bool,
    /// "proved", "probed" or "unchecked"
    level_count: &'static str,
    failure_probability: Option<f64>,
    /// "converged" or "not converged"
    status: &'static str,
    products: usize,
    method: &'static str,
}

impl Levels {
    fn wrap<T: Scalar + Element>(py: Python<'_>, levels: eigen::Levels<T>) -> Self {
        let (level_count, failure_probability) = match levels.level_count {
            LevelCount::Proved => ("proved", Some(0.0)),
            LevelCount::Probed {
                failure_probability,
            } => ("probed", Some(failure_probability)),
            LevelCount::Unchecked => ("unchecked", None),
        };
        Levels {
            energies: levels.energies.into_pyarray(py).into_any().unbind(),
            vectors: levels.vectors.into_pyarray(py).into_any().unbind(),
            residuals: levels.residuals.into_pyarray(py).into_any().unbind(),
            error_bounds: levels.error_bounds.into_pyarray(py).into_any().unbind(),
            next_energy: levels.next_energy,
            next_error: levels.next_error,
            multiplets: levels.multiplets.iter().map(|m| (m.start, m.end)).collect(),
            last_multiplet_complete: levels.last_multiplet_complete,
            level_count,
            failure_probability,
            status: match levels.status {
                Status::Converged => "converged",
                Status::NotConverged | Status::Interrupted => "not converged",
            },
            products: levels.products,
            method: levels.method,
        }
    }
}

/// Weights checked, trailing zeros dropped, normalised.
#[pyfunction]
pub fn checked_weights<'py>(
    py: Python<'py>,
    weights: PyReadonlyArray1<'py, f64>,
) -> PyResult<Bound<'py, PyArray1<f64>>> {
    let values = weights.as_array().to_vec();
    let checked = enter(py, || Weights::new(&values))?;
    Ok(checked.as_slice().to_vec().into_pyarray(py))
}

/// Settings of a solve, in the order of the Python call.
struct Settings {
    levels: usize,
    tolerance: f64,
    seed: u64,
    max_products: usize,
    progress: Option<Py<PyAny>>,
}

fn solve<T: Scalar + Element>(
    py: Python<'_>,
    hamiltonian: &Arc<core::Hamiltonian<T>>,
    start: Option<ArrayView2<'_, T>>,
    settings: Settings,
) -> PyResult<Levels> {
    // the basis may take most of what is left, the rest is for products and results
    let available = usize::try_from(memory::available_bytes()).unwrap_or(usize::MAX);
    let request = LevelRequest {
        levels: settings.levels,
        memory_limit: available / 5 * 4,
        tolerance: settings.tolerance,
        start,
        seed: settings.seed,
        max_products: settings.max_products,
        ..LevelRequest::new(settings.levels)
    };
    let levels = enter_monitored(py, settings.progress, |monitor| {
        require_vectors::<T>(hamiltonian, settings.levels)?;
        hamiltonian.prepare()?;
        eigen::lowest_levels(hamiltonian.as_ref(), &request, monitor)
    })?;
    Ok(Levels::wrap(py, levels))
}

/// The result alone must fit, whatever the method.
fn require_vectors<T: Scalar>(hamiltonian: &core::Hamiltonian<T>, levels: usize) -> Result<()> {
    let dimension = hamiltonian.sector().enumerable_dimension()? as u128;
    let vectors = levels as u128 + 2;
    memory::require(
        format!("the result of {levels} level(s) of {dimension} components"),
        vectors * dimension * size_of::<T>() as u128,
    )
}

/// The lowest levels of a Hamiltonian; `start` rows are of its element type.
#[pyfunction]
#[pyo3(signature = (hamiltonian, levels, tolerance, start, seed, max_products, progress))]
#[allow(clippy::too_many_arguments)]
pub fn lowest_levels(
    py: Python<'_>,
    hamiltonian: &Hamiltonian,
    levels: usize,
    tolerance: f64,
    start: Option<&Bound<'_, PyAny>>,
    seed: u64,
    max_products: Option<usize>,
    progress: Option<Py<PyAny>>,
) -> PyResult<Levels> {
    let settings = Settings {
        levels,
        tolerance,
        seed,
        max_products: max_products.unwrap_or(usize::MAX),
        progress,
    };
    match &hamiltonian.inner {
        AnyHamiltonian::Real(h) => {
            let start: Option<PyReadonlyArray2<'_, f64>> =
                start.map(|s| s.extract()).transpose()?;
            solve(py, h, start.as_ref().map(|s| s.as_array()), settings)
        }
        AnyHamiltonian::Complex(h) => {
            let start: Option<PyReadonlyArray2<'_, Complex64>> =
                start.map(|s| s.extract()).transpose()?;
            solve(py, h, start.as_ref().map(|s| s.as_array()), settings)
        }
    }
}

/// Refuses vectors that do not belong to the sector.
fn check_length<T>(sector: &Sector, vectors: &ArrayView2<'_, T>) -> Result<()> {
    let dimension = sector.inner.enumerable_dimension()?;
    if vectors.ncols() == dimension {
        return Ok(());
    }
    Err(Error::argument(
        "vectors",
        format!("{} components", vectors.ncols()),
        format!("{dimension}, the dimension of the sector"),
    ))
}

/// <S^2> of the rows of `vectors`.
#[pyfunction]
pub fn spin_squared<'py>(
    py: Python<'py>,
    sector: &Sector,
    vectors: &Bound<'py, PyAny>,
) -> PyResult<Bound<'py, PyArray1<f64>>> {
    fn measured<T: Scalar>(sector: &Sector, vectors: ArrayView2<'_, T>) -> Result<Array1<f64>> {
        check_length(sector, &vectors)?;
        density::spin_squared(&sector.inner, vectors)
    }
    let values = match Numbers::<Ix2>::read(vectors)? {
        Numbers::Real(x) => {
            let x = x.as_array();
            enter(py, || measured(sector, x))
        }
        Numbers::Complex(x) => {
            let x = x.as_array();
            enter(py, || measured(sector, x))
        }
    }?;
    Ok(values.into_pyarray(py))
}

/// One-body density matrices `(states, spins, d, d)` of the rows of `vectors`.
#[pyfunction]
pub fn density_matrices(
    py: Python<'_>,
    sector: &Sector,
    vectors: &Bound<'_, PyAny>,
) -> PyResult<Py<PyAny>> {
    fn traced<T: Scalar>(sector: &Sector, vectors: ArrayView2<'_, T>) -> Result<Array4<T>> {
        check_length(sector, &vectors)?;
        density::state_density_matrices(&sector.inner, vectors)
    }
    match Numbers::<Ix2>::read(vectors)? {
        Numbers::Real(x) => {
            let x = x.as_array();
            let gamma = enter(py, || traced(sector, x))?;
            Ok(gamma.into_pyarray(py).into_any().unbind())
        }
        Numbers::Complex(x) => {
            let x = x.as_array();
            let gamma = enter(py, || traced(sector, x))?;
            Ok(gamma.into_pyarray(py).into_any().unbind())
        }
    }
}

/// Transition density matrices `(bras, kets, spins, d, d)` of the rows of two arrays of one type.
#[pyfunction]
pub fn transition_density_matrices(
    py: Python<'_>,
    sector: &Sector,
    bras: &Bound<'_, PyAny>,
    kets: &Bound<'_, PyAny>,
) -> PyResult<Py<PyAny>> {
    fn traced<T: Scalar>(
        sector: &Sector,
        bras: ArrayView2<'_, T>,
        kets: ArrayView2<'_, T>,
    ) -> Result<Array5<T>> {
        check_length(sector, &bras)?;
        check_length(sector, &kets)?;
        density::transition_density_matrices(&sector.inner, bras, kets)
    }
    match Numbers::<Ix2>::read(bras)? {
        Numbers::Real(x) => {
            let y: PyReadonlyArray2<'_, f64> = kets.extract()?;
            let (x, y) = (x.as_array(), y.as_array());
            let gamma = enter(py, || traced(sector, x, y))?;
            Ok(gamma.into_pyarray(py).into_any().unbind())
        }
        Numbers::Complex(x) => {
            let y: PyReadonlyArray2<'_, Complex64> = kets.extract()?;
            let (x, y) = (x.as_array(), y.as_array());
            let gamma = enter(py, || traced(sector, x, y))?;
            Ok(gamma.into_pyarray(py).into_any().unbind())
        }
    }
}
