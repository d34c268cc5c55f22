//! The exclusion polytope; occupations are `(batch, components, modes)` throughout.

use super::door::{enter, enter_monitored, raise};
use super::sector::Sector;
use crate::error::Error;
use crate::polytope as core;
use crate::polytope::{Domain, ProjectionOptions, Start, for_batch};
use crate::weights::Weights;
use numpy::ndarray::{Array1, Array2, Array3, Array4, Axis};
use numpy::{
    IntoPyArray, PyArray1, PyArray2, PyArray3, PyArray4, PyReadonlyArray1, PyReadonlyArray3,
    ToPyArray,
};
use pyo3::prelude::*;

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
    inner: core::Projections,
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

    /// The facet inequalities, sorted by the level at which they appear; at most `limit` line-ups.
    #[pyo3(signature = (limit=None))]
    fn inequalities(&self, py: Python<'_>, limit: Option<usize>) -> PyResult<Vec<Inequality>> {
        let limit = limit.unwrap_or(core::DEFAULT_LIMIT);
        let list = enter_monitored(py, None, |monitor| self.inner.inequalities(limit, monitor))?;
        let wrapped = list.iter().map(|inequality| Inequality {
            sentence: inequality.sentence(),
            latex: inequality.latex(),
            normal_length: inequality.normal_length(),
            bound_constant: inequality.bound_constant,
            bound_weights: inequality.bound_weights.clone(),
            bound: inequality.bound,
            first_level: inequality.first_level,
            is_positivity: inequality.positivity,
            coefficients: inequality.coefficients.to_pyarray(py).unbind(),
        });
        Ok(wrapped.collect())
    }

    /// Values `(batch,)` and minimisers of the support function.
    fn support<'py>(
        &self,
        py: Python<'py>,
        potentials: PyReadonlyArray3<'py, f64>,
    ) -> PyResult<Batch<'py>> {
        let potentials = potentials.as_array();
        let found = enter_monitored(py, None, |monitor| {
            for_batch(potentials, monitor, |_, h| self.inner.support(h))
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
            self.inner.contains_batch(occupations, tolerance, monitor)
        })?;
        Ok(inside.into_pyarray(py))
    }

    /// The nearest points, from an earlier result if there is one.
    #[pyo3(signature = (occupations, start=None, member=None))]
    fn project(
        &self,
        py: Python<'_>,
        occupations: PyReadonlyArray3<'_, f64>,
        start: Option<PyRef<'_, Projections>>,
        member: Option<usize>,
    ) -> PyResult<Projections> {
        let occupations = occupations.as_array();
        let options = ProjectionOptions::default();
        let start = start.as_ref().map(|start| Start {
            earlier: &start.inner,
            member,
        });
        let inner = enter_monitored(py, None, |monitor| {
            self.inner
                .project_batch(occupations, &options, start, monitor)
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
            for_batch(occupations, monitor, |_, n| self.inner.stretch(n))
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
}

#[pymethods]
impl Projections {
    /// The nearest points.
    #[getter]
    fn occupations<'py>(&self, py: Python<'py>) -> Bound<'py, PyArray3<f64>> {
        self.inner.occupations.to_pyarray(py)
    }

    /// Nearest point minus what was projected.
    #[getter]
    fn normals<'py>(&self, py: Python<'py>) -> Bound<'py, PyArray3<f64>> {
        self.inner.normals.to_pyarray(py)
    }

    /// Distances (upper bounds).
    #[getter]
    fn distance<'py>(&self, py: Python<'py>) -> Bound<'py, PyArray1<f64>> {
        self.inner.distances.to_pyarray(py)
    }

    /// Certified lower bounds of the distances.
    #[getter]
    fn distance_lower<'py>(&self, py: Python<'py>) -> Bound<'py, PyArray1<f64>> {
        self.inner.distances_lower.to_pyarray(py)
    }

    /// Duality gaps.
    #[getter]
    fn gap<'py>(&self, py: Python<'py>) -> Bound<'py, PyArray1<f64>> {
        self.inner.gaps.to_pyarray(py)
    }

    /// Whether the tolerances were reached.
    #[getter]
    fn converged<'py>(&self, py: Python<'py>) -> Bound<'py, PyArray1<bool>> {
        self.inner.converged.to_pyarray(py)
    }

    /// Probabilities and potentials of the line-ups, probabilities and permutations of modes of
    /// the ensemble of one member.
    fn ensemble<'py>(&self, py: Python<'py>, index: usize) -> PyResult<EnsembleParts<'py>> {
        let ensemble = enter(py, || self.inner.ensemble(index))?;
        let (_, components, modes) = self.inner.occupations.dim();
        let shape = (components, modes);
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
