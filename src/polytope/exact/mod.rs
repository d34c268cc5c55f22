//! The exclusion polytope as lists: generating vertices and facet inequalities.
//!
//! For increasing one-particle energies h the r lowest configurations are a *line-up*; the
//! energies that produce it form a cone, found exactly by the double description while the
//! tree of line-ups is searched. The generating vertices are sum_j w_j n_{I_j}; the extremal
//! rays of the cones are the candidates for facet normals, each judged by an integer rank.
//! Only which weights are equal matters for normals and line-ups; weights that differ by no
//! more than 1e-12 count as equal here.
//!
//! Theory: "An effective solution to convex 1-body N-representability", Ann. Henri Poincare 24,
//! 2241 (2023), arXiv:2105.06459; bosons: arXiv:2204.12715.

mod cone;
mod excitations;
mod facets;
mod hierarchy;
mod inequality;
mod refusal;
mod search;
#[cfg(test)]
mod tests;

pub use inequality::Inequality;

use super::oracle::Domain;
use crate::error::Result;
use crate::memory;
use crate::progress::Monitor;
use crate::sector::Sector;
use crate::weights::Weights;
use excitations::Excitations;
use ndarray::{Array2, Array3};
use num_bigint::BigUint;
use std::sync::Arc;

/// Line-ups up to which lists are made, unless the caller says otherwise.
pub const DEFAULT_LIMIT: usize = 200_000;

/// Weights closer than this are equal.
const EQUALITY: f64 = 1e-12;

/// A vertex of the polytope with decreasing occupations; permutations of these generate all.
#[derive(Debug, Clone, PartialEq)]
pub struct GeneratingVertex {
    /// sum_j w_j n_{I_j}, `(components, modes)`, decreasing in each component.
    pub occupations: Array2<f64>,
    /// The line-up `(r, components, modes)`, lowest configuration first; the order inside a
    /// group of equal weights is arbitrary.
    pub configurations: Array3<u32>,
}

/// All line-ups of a sector, and from them the polytope's vertices and inequalities.
#[derive(Debug)]
pub struct LineUps {
    weights: Weights,
    table: Excitations,
    /// `cuts[k - 1]` says whether w_k > w_{k+1}.
    cuts: Vec<bool>,
    chosen: Vec<Vec<usize>>,
    rays: Vec<Arc<[i64]>>,
    /// Whether all states have the same weight, so that only the centre is allowed.
    is_point: bool,
}

impl LineUps {
    /// Searches all line-ups. The monitor is called from this thread between small batches.
    ///
    /// # Errors
    /// [`crate::error::Error::Argument`] for more than `limit` line-ups: foreseen from the growth from level to
    /// level or counted; [`crate::error::Error::Interrupted`].
    pub(super) fn enumerate(
        sector: &Sector,
        weights: &Weights,
        domain: Domain,
        limit: usize,
        monitor: &mut Monitor<'_>,
    ) -> Result<Self> {
        let r = weights.count();
        let states = sector.dimension();
        let cuts: Vec<bool> = (0..r)
            .map(|k| weights.get(k) - weights.get(k + 1) > EQUALITY || k + 1 == r)
            .collect();
        let table = Excitations::new(sector, domain, r)?;
        let found = search::line_ups(&table, &cuts, limit, monitor)?;
        let is_point = BigUint::from(r) == states && cuts[..r - 1].iter().all(|cut| !cut);
        Ok(LineUps {
            weights: weights.clone(),
            table,
            cuts,
            chosen: found.line_ups,
            rays: found.rays,
            is_point,
        })
    }

    /// Number of generating vertices.
    pub fn count(&self) -> usize {
        self.chosen.len()
    }

    /// The generating vertices, in the order of the search.
    ///
    /// # Errors
    /// [`crate::error::Error::Memory`] if they do not fit.
    pub fn generating_vertices(&self) -> Result<Vec<GeneratingVertex>> {
        let shape = (self.table.components, self.table.modes);
        let numbers = self.count() * shape.0 * shape.1;
        let bytes = numbers as u128 * (8 + 4 * self.weights.count() as u128);
        memory::require("the list of generating vertices", bytes)?;
        let of_entry: Vec<Vec<u32>> = (0..self.table.entries.len())
            .map(|k| self.table.occupations(k))
            .collect();
        let vertex = |chosen: &Vec<usize>| {
            let mut occupations = Array2::zeros(shape);
            let mut configurations = Array3::zeros((chosen.len(), shape.0, shape.1));
            for (j, &entry) in chosen.iter().enumerate() {
                let mut configuration = configurations.index_axis_mut(ndarray::Axis(0), j);
                configuration
                    .iter_mut()
                    .zip(&of_entry[entry])
                    .for_each(|(x, &n)| *x = n);
                let weight = self.weights.get(j);
                ndarray::Zip::from(&mut occupations)
                    .and(&configuration)
                    .for_each(|x, &n| *x += weight * f64::from(n));
            }
            GeneratingVertex {
                occupations,
                configurations,
            }
        };
        Ok(self.chosen.iter().map(vertex).collect())
    }
}
