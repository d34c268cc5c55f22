//! The linear oracle: a line-up of least energy for given one-particle energies.

use crate::error::{Error, Result};
use crate::sector::{LowestConfigurations, Sector};
use crate::weights::Weights;
use ndarray::{Array2, ArrayView1, ArrayView2, Axis, CowArray, Ix2, concatenate};
use num_bigint::BigUint;
use std::fmt;
use std::sync::Arc;

/// Which occupations the polytope speaks about.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Domain {
    /// Occupations of the modes of spinless fermions or bosons.
    Spinless,
    /// Occupations of spin up and of spin down at fixed (up, down), jointly.
    SpinResolved,
    /// Sums over both spins at fixed (up, down).
    SpinSummed,
}

/// Minimises linear functions over the polytope.
#[derive(Clone)]
pub(super) struct Oracle {
    pub sector: Sector,
    pub weights: Arc<Weights>,
    /// Their sum, one but for rounding.
    total: f64,
    pub domain: Domain,
}

impl fmt::Debug for Oracle {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let count = self.weights.count();
        write!(f, "{:?}, {:?}, {count} weights", self.sector, self.domain)
    }
}

impl Oracle {
    pub fn new(sector: Sector, weights: Weights, domain: Domain) -> Result<Self> {
        let spin_half = matches!(sector, Sector::SpinHalf { .. });
        if spin_half != (domain != Domain::Spinless) {
            let expected = if spin_half {
                "spin-resolved or spin-summed occupations for spin-1/2 fermions"
            } else {
                "the spinless domain for fermions and bosons without spin"
            };
            return Err(Error::argument("domain", format!("{domain:?}"), expected));
        }
        let dimension = sector.dimension();
        if BigUint::from(weights.count()) > dimension {
            return Err(Error::argument(
                "weights",
                format!("{} positive weights", weights.count()),
                format!("at most {dimension}, the number of configurations of the sector"),
            ));
        }
        Ok(Oracle {
            sector,
            total: weights.as_slice().iter().sum(),
            weights: Arc::new(weights),
            domain,
        })
    }

    /// Components and modes of the occupations.
    pub fn shape(&self) -> (usize, usize) {
        let components = match self.domain {
            Domain::SpinResolved => 2,
            _ => 1,
        };
        (components, self.sector.modes())
    }

    /// Number of particles in each component.
    pub fn particles(&self) -> Vec<f64> {
        match self.domain {
            Domain::SpinSummed => vec![self.sector.particles() as f64],
            _ => self
                .sector
                .particles_by_spin()
                .into_iter()
                .map(|n| n as f64)
                .collect(),
        }
    }

    /// The lowest configurations, one for each weight.
    pub fn line_up(&self, potential: ArrayView2<'_, f64>) -> Result<LowestConfigurations> {
        let energies = self.energies(potential);
        self.sector
            .lowest_configurations(energies.view(), self.weights.count())
    }

    /// One-particle energies `(spins, modes)`.
    fn energies<'a>(&self, potential: ArrayView2<'a, f64>) -> CowArray<'a, f64, Ix2> {
        if self.domain == Domain::SpinSummed {
            // both spins feel the same potential
            concatenate![Axis(0), potential, potential].into()
        } else {
            potential.into()
        }
    }

    /// The point of the polytope that a line-up stands for; it minimises `<potential, n>`.
    pub fn minimiser(&self, potential: ArrayView2<'_, f64>) -> Result<Array2<f64>> {
        let energies = self.energies(potential);
        let mut weighted = self
            .sector
            .lowest_mixture(energies.view(), self.weights.as_slice())?;
        weighted /= self.total;
        Ok(if self.domain == Domain::SpinSummed {
            weighted.sum_axis(Axis(0)).insert_axis(Axis(0))
        } else {
            weighted
        })
    }

    /// As [`Oracle::minimiser`], for components written one after the other.
    pub fn flat_minimiser(&self, potential: &[f64]) -> Result<Vec<f64>> {
        let view = ArrayView1::from(potential);
        let view = view
            .into_shape_with_order(self.shape())
            .map_err(|_| Error::argument("h", potential.len(), "components x modes energies"))?;
        let (values, _) = self.minimiser(view)?.into_raw_vec_and_offset();
        Ok(values)
    }
}
