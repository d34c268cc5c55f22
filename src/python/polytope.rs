//! The exclusion polytope; occupations are `(batch, components, modes)` throughout.

use super::door::{enter, enter_monitored, raise};
use super::sector::Sector;
use crate::error::{Error, Result};
use crate::polytope as core;
use crate::polytope::{Domain, ProjectionOptions};
use crate::progress::Progress;
use crate::weights::Weights;
use numpy::ndarray::{Array1, Array2, Array3, Array4, ArrayView2, ArrayView3, Axis};
use numpy::{
    IntoPyArray, PyArray1, PyArray2, PyArray3, PyArray4, PyReadonlyArray1, PyReadonlyArray3,
};
use pyo3::prelude::*;
use rayon::prelude::*;
use std::ops::ControlFlow;

/// Members of a batch handled between two looks at the signals.
const BATCH: usize = 64;

/// A polytope of the core.
#[pyclass(frozen, module = "fockhull._core")]
pub struct ExclusionPolytope {
    inner: core::ExclusionPolytope,
}

/// All line-ups of a polytope.
#[pyclass(frozen, module = "fockhull._core")]
pub struct LineUps {
    inner: core::LineUps,
}

/// A facet: integer coefficients, bound as constant + weights, number, words.
#[pyclass(frozen, get_all, module = "fockhull._core")]
pub struct Inequality {
    /// `(components, modes)`
    coefficients: Py<PyArray2<i64>>,
    bound_constant: i64,
    bound_weights: Vec<i64>,
    bound: f64,
    first_level: usize,
    is_positivity: bool,
    normal_length: f64,
    sentence: String,
    latex: String,
}

/// Projections of a batch.
#[pyclass(frozen, module = "fockhull._core")]
pub struct Projections {
    inner: Vec<core::Projection>,
}

/// Numbers `(batch,)` and occupations `(batch, components, modes)`.
type Batch<'py> = (Bound<'py, PyArray1<f64>>, Bound<'py, PyArray3<f64>>);

/// Factors, lower bounds, boundary points, normals.
type StretchParts<'py> = (
    Bound<'py, PyArray1<f64>>,
    Bound<'py, PyArray1<f64>>,
    Bound<'py, PyArray3<f64>>,
    Bound<'py, PyArray3<f64>>,
);

/// An explicit ensemble: mixture of line-ups, times mixture of permutations of modes.
type EnsembleParts<'py> = (
    Bound<'py, PyArray1<f64>>,
    Bound<'py, PyArray3<f64>>,
    Bound<'py, PyArray1<f64>>,
    Bound<'py, PyArray3<i64>>,
);

fn stacked<'a>(
    rows: impl ExactSizeIterator<Item = &'a Array2<f64>>,
    (components, modes): (usize, usize),
) -> Array3<f64> {
    let mut all = Array3::zeros((rows.len(), components, modes));
    for (row, mut target) in rows.zip(all.outer_iter_mut()) {
        target.assign(row);
    }
    all
}

/// Occupations of the generating vertices and their line-ups.
type Vertices<'py> = (Bound<'py, PyArray3<f64>>, Bound<'py, PyArray4<u32>>);

/// Runs `work` for each member, in parallel, with looks at the signals in between.
fn for_batch<T: Send>(
    batch: ArrayView3<'_, f64>,
    monitor: &mut (dyn FnMut(&Progress) -> ControlFlow<()> + '_),
    work: impl Fn(ArrayView2<'_, f64>) -> Result<T> + Sync,
) -> Result<Vec<T>> {
    let mut results = Vec::with_capacity(batch.len_of(Axis(0)));
    for part in batch.axis_chunks_iter(Axis(0), BATCH) {
        let report = Progress {
            stage: "polytope",
            done: results.len(),
            total: batch.len_of(Axis(0)),
            products: results.len(),
            residual: f64::NAN,
        };
        if monitor(&report).is_break() {
            return Err(Error::Interrupted);
        }
        let done: Result<Vec<T>> = part
            .outer_iter()
            .collect::<Vec<_>>()
            .into_par_iter()
            .map(&work)
            .collect();
        results.extend(done?);
    }
    Ok(results)
}

#[pymethods]
impl ExclusionPolytope {
    /// `domain` is "spinless", "spin-resolved" or "spin-summed".
    #[new]
    fn new(
        py: Python<'_>,
        sector: &Sector,
        weights: PyReadonlyArray1<'_, f64>,
        domain: &str,
    ) -> PyResult<Self> {
        let domain = match domain {
            "spinless" => Domain::Spinless,
            "spin-resolved" => Domain::SpinResolved,
            "spin-summed" => Domain::SpinSummed,
            other => {
                let expected = "\"spin-resolved\" or \"spin-summed\"";
                return Err(raise(py, &Error::argument("domain", other, expected)));
            }
        };
        let (sector, values) = (sector.inner, weights.as_array().to_vec());
        let inner = enter(py, || {
            core::ExclusionPolytope::new(sector, Weights::new(&values)?, domain)
        })?;
        Ok(ExclusionPolytope { inner })
    }

    /// Components and modes of occupations.
    #[getter]
    fn shape(&self) -> (usize, usize) {
        self.inner.shape()
    }

    /// All line-ups, at most `limit`.
    #[pyo3(signature = (limit=None))]
    fn line_ups(&self, py: Python<'_>, limit: Option<usize>) -> PyResult<LineUps> {
        let limit = limit.unwrap_or(core::DEFAULT_LIMIT);
        let inner = enter_monitored(py, None, |monitor| self.inner.line_ups(limit, monitor))?;
        Ok(LineUps { inner })
    }

    /// Values `(batch,)` and minimisers of the support function.
    fn support<'py>(
        &self,
        py: Python<'py>,
        potentials: PyReadonlyArray3<'py, f64>,
    ) -> PyResult<Batch<'py>> {
        let potentials = potentials.as_array();
        let found = enter_monitored(py, None, |monitor| {
            for_batch(potentials, monitor, |h| self.inner.support(h))
        })?;
        let values: Array1<f64> = found.iter().map(|(value, _)| *value).collect();
        let minimisers = stacked(found.iter().map(|(_, n)| n), self.inner.shape());
        Ok((values.into_pyarray(py), minimisers.into_pyarray(py)))
    }

    /// Whether each member is within `tolerance` of the polytope.
    fn contains<'py>(
        &self,
        py: Python<'py>,
        occupations: PyReadonlyArray3<'py, f64>,
        tolerance: f64,
    ) -> PyResult<Bound<'py, PyArray1<bool>>> {
        let occupations = occupations.as_array();
        let inside = enter_monitored(py, None, |monitor| {
            for_batch(occupations, monitor, |n| self.inner.contains(n, tolerance))
        })?;
        Ok(inside.into_pyarray(py))
    }

    /// The nearest points.
    fn project(
        &self,
        py: Python<'_>,
        occupations: PyReadonlyArray3<'_, f64>,
    ) -> PyResult<Projections> {
        let occupations = occupations.as_array();
        let options = ProjectionOptions::default();
        let inner = enter_monitored(py, None, |monitor| {
            for_batch(occupations, monitor, |n| self.inner.project(n, &options))
        })?;
        Ok(Projections { inner })
    }

    /// Factors, their lower bounds, boundary points and normals.
    fn stretch<'py>(
        &self,
        py: Python<'py>,
        occupations: PyReadonlyArray3<'py, f64>,
    ) -> PyResult<StretchParts<'py>> {
        let occupations = occupations.as_array();
        let found = enter_monitored(py, None, |monitor| {
            for_batch(occupations, monitor, |n| self.inner.stretch(n))
        })?;
        let values: Array1<f64> = found.iter().map(|s| s.value).collect();
        let lower: Array1<f64> = found.iter().map(|s| s.lower).collect();
        let boundary = stacked(found.iter().map(|s| &s.boundary), self.inner.shape());
        let normals = stacked(found.iter().map(|s| &s.normal), self.inner.shape());
        Ok((
            values.into_pyarray(py),
            lower.into_pyarray(py),
            boundary.into_pyarray(py),
            normals.into_pyarray(py),
        ))
    }
}

#[pymethods]
impl LineUps {
    /// Number of generating vertices.
    #[getter]
    fn count(&self) -> usize {
        self.inner.count()
    }

    /// Occupations `(count, components, modes)` of the generating vertices, and the line-ups
    /// `(count, r, components, modes)`.
    fn generating_vertices<'py>(&self, py: Python<'py>) -> PyResult<Vertices<'py>> {
        let (occupations, line_ups) = enter(py, || {
            let vertices = self.inner.generating_vertices()?;
            let first = vertices.first().map(|v| v.configurations.dim());
            let (r, components, modes) = first.unwrap_or((0, 0, 0));
            let count = vertices.len();
            let mut occupations = Array3::zeros((count, components, modes));
            let mut line_ups = Array4::zeros((count, r, components, modes));
            for (k, vertex) in vertices.iter().enumerate() {
                occupations
                    .index_axis_mut(Axis(0), k)
                    .assign(&vertex.occupations);
                line_ups
                    .index_axis_mut(Axis(0), k)
                    .assign(&vertex.configurations);
            }
            Ok((occupations, line_ups))
        })?;
        Ok((occupations.into_pyarray(py), line_ups.into_pyarray(py)))
    }

    /// The facet inequalities, sorted by the level at which they appear.
    fn inequalities(&self, py: Python<'_>) -> PyResult<Vec<Inequality>> {
        let list = enter(py, || self.inner.inequalities())?;
        let wrapped = list.into_iter().map(|inequality| Inequality {
            sentence: inequality.sentence(),
            latex: inequality.latex(),
            normal_length: inequality.normal_length(),
            bound_constant: inequality.bound_constant,
            bound_weights: inequality.bound_weights,
            bound: inequality.bound,
            first_level: inequality.first_level,
            is_positivity: inequality.positivity,
            coefficients: inequality.coefficients.into_pyarray(py).unbind(),
        });
        Ok(wrapped.collect())
    }
}

#[pymethods]
impl Projections {
    /// The nearest points.
    #[getter]
    fn occupations<'py>(&self, py: Python<'py>) -> Bound<'py, PyArray3<f64>> {
        self.stack(|p| &p.occupations).into_pyarray(py)
    }

    /// Nearest point minus what was projected.
    #[getter]
    fn normals<'py>(&self, py: Python<'py>) -> Bound<'py, PyArray3<f64>> {
        self.stack(|p| &p.normal).into_pyarray(py)
    }

    /// Distances (upper bounds).
    #[getter]
    fn distance<'py>(&self, py: Python<'py>) -> Bound<'py, PyArray1<f64>> {
        self.each(py, |p| p.distance)
    }

    /// Certified lower bounds of the distances.
    #[getter]
    fn distance_lower<'py>(&self, py: Python<'py>) -> Bound<'py, PyArray1<f64>> {
        self.each(py, |p| p.distance_lower)
    }

    /// Duality gaps.
    #[getter]
    fn gap<'py>(&self, py: Python<'py>) -> Bound<'py, PyArray1<f64>> {
        self.each(py, |p| p.gap)
    }

    /// Whether the tolerances were reached.
    #[getter]
    fn converged(&self) -> Vec<bool> {
        self.inner.iter().map(|p| p.converged).collect()
    }

    /// Probabilities and potentials of the line-ups, probabilities and permutations of modes of
    /// the ensemble of one member.
    fn ensemble<'py>(&self, py: Python<'py>, index: usize) -> PyResult<EnsembleParts<'py>> {
        let Some(projection) = self.inner.get(index) else {
            let expected = format!("less than {}", self.inner.len());
            return Err(raise(py, &Error::index("index", index, expected)));
        };
        let ensemble = enter(py, || Ok(projection.ensemble()))?;
        let shape = projection.occupations.dim();
        let line_ups = ensemble.line_ups();
        let of_line_ups: Vec<f64> = line_ups.iter().map(|(p, _)| *p).collect();
        let potentials = stacked(line_ups.iter().map(|(_, h)| h), shape);
        let permutations = ensemble.permutations();
        let of_permutations: Vec<f64> = permutations.iter().map(|(p, _)| *p).collect();
        let mut orders = Array3::zeros((permutations.len(), shape.0, shape.1));
        for ((_, order), mut target) in permutations.iter().zip(orders.outer_iter_mut()) {
            target.assign(&order.mapv(|mode| mode as i64));
        }
        Ok((
            of_line_ups.into_pyarray(py),
            potentials.into_pyarray(py),
            of_permutations.into_pyarray(py),
            orders.into_pyarray(py),
        ))
    }
}

impl Projections {
    fn each<'py>(
        &self,
        py: Python<'py>,
        number: impl Fn(&core::Projection) -> f64,
    ) -> Bound<'py, PyArray1<f64>> {
        let values: Array1<f64> = self.inner.iter().map(number).collect();
        values.into_pyarray(py)
    }

    fn stack(&self, rows: impl Fn(&core::Projection) -> &Array2<f64>) -> Array3<f64> {
        let shape = self.inner.first().map_or((0, 0), |p| p.occupations.dim());
        stacked(self.inner.iter().map(rows), shape)
    }
}
