//! The exclusion polytope.
//!
//! Sigma(w) = { n : `<h, n>` >= f_w(h) for all h }, f_w(h) = sum_j w_j eps_(j)(h), with eps_(j)(h)
//! the j-th lowest configuration energy. Natural occupation numbers of ensembles with weights w
//! lie in it, and every point of it belongs to an ensemble whose spectrum w majorises (Phys.
//! Rev. Lett. 127, 023001 (2021); Ann. Henri Poincare 24, 2241 (2023)).
//!
//! Everything rests on one oracle, the line-up of the r lowest configurations: it needs no list
//! of vertices or inequalities, so r = 100 000 is as good as r = 3. Occupations come as
//! `(components, modes)`: one component, or spin up and spin down where these are resolved.
//!
//! Where lists are small enough they come exactly, in integers ([`LineUps`]); batches of points
//! are then projected by the list ([`ExclusionPolytope::project_batch`]).
//!
//! The polytope lies in the plane where each component sums to its particle number. The
//! projection of occupations with another sum first removes the excess uniformly over the modes
//! of the component, which adds |sum - N| / sqrt(d) to the distance in quadrature.

mod active_set;
mod batch;
mod ensemble;
mod exact;
mod least_squares;
mod listed;
mod monotone;
mod oracle;
mod permutahedron;
mod projection;
mod search;
mod sorting;
mod stretch;
#[cfg(test)]
mod tests;

pub use batch::{Projections, Start, for_batch};
pub use ensemble::{Ensemble, Term};
pub use exact::{DEFAULT_LIMIT, GeneratingVertex, Inequality, LineUps};
pub use oracle::Domain;
pub use projection::{Projection, ProjectionOptions};
pub use stretch::Stretch;

use crate::error::{Error, Result};
use crate::progress::Monitor;
use crate::sector::Sector;
use crate::weights::Weights;
use batch::Listing;
use ndarray::{Array2, ArrayView2};
use oracle::Oracle;
use std::sync::Arc;

/// The set of occupation numbers that ensembles with given weights can have.
#[derive(Debug, Clone)]
pub struct ExclusionPolytope {
    oracle: Oracle,
    listing: Arc<Listing>,
}

impl ExclusionPolytope {
    /// The polytope of a sector and weights.
    ///
    /// # Errors
    /// [`Error::Argument`] if there are more weights than configurations, or if the domain does
    /// not fit the sector.
    pub fn new(sector: Sector, weights: Weights, domain: Domain) -> Result<Self> {
        Ok(ExclusionPolytope {
            oracle: Oracle::new(sector, weights, domain)?,
            listing: Arc::default(),
        })
    }

    /// The sector.
    pub fn sector(&self) -> &Sector {
        &self.oracle.sector
    }

    /// The weights.
    pub fn weights(&self) -> &Weights {
        &self.oracle.weights
    }

    /// What the occupations speak about.
    pub fn domain(&self) -> Domain {
        self.oracle.domain
    }

    /// Components and modes of occupations: `(2, d)` spin-resolved, otherwise `(1, d)`.
    pub fn shape(&self) -> (usize, usize) {
        self.oracle.shape()
    }

    /// f_w(h) = min of `<h, n>` over the polytope, and occupations where it is attained.
    ///
    /// # Errors
    /// [`Error::Argument`] for a wrong shape or numbers that are not finite.
    pub fn support(&self, h: ArrayView2<'_, f64>) -> Result<(f64, Array2<f64>)> {
        self.check("h", h)?;
        let minimiser = self.oracle.minimiser(h)?;
        Ok(((&h * &minimiser).sum(), minimiser))
    }

    /// The nearest occupations in the polytope, with certificate and explicit ensemble.
    ///
    /// # Errors
    /// [`Error::Argument`] for a wrong shape, numbers that are not finite or far beyond any
    /// occupation, or options out of range.
    pub fn project(
        &self,
        occupations: ArrayView2<'_, f64>,
        options: &ProjectionOptions,
    ) -> Result<Projection> {
        self.check_occupations(occupations)?;
        projection::project(&self.oracle, occupations, options, None)
    }

    /// Euclidean distance to the polytope.
    ///
    /// # Errors
    /// As for [`ExclusionPolytope::project`].
    pub fn distance(&self, occupations: ArrayView2<'_, f64>) -> Result<f64> {
        Ok(self
            .project(occupations, &ProjectionOptions::default())?
            .distance)
    }

    /// Whether the distance to the polytope is at most `tolerance`.
    ///
    /// # Errors
    /// As for [`ExclusionPolytope::project`], or a tolerance that is not positive.
    pub fn contains(&self, occupations: ArrayView2<'_, f64>, tolerance: f64) -> Result<bool> {
        self.check_occupations(occupations)?;
        check_tolerance(tolerance)?;
        projection::is_within(&self.oracle, occupations, tolerance)
    }

    /// How far the occupations can be scaled about the centre before they leave the polytope.
    ///
    /// # Errors
    /// [`Error::Argument`] as for [`ExclusionPolytope::project`], or if a component does not sum
    /// to its particle number.
    pub fn stretch(&self, occupations: ArrayView2<'_, f64>) -> Result<Stretch> {
        self.check_occupations(occupations)?;
        stretch::stretch(&self.oracle, occupations)
    }

    /// All line-ups, and from them the generating vertices and the facet inequalities.
    ///
    /// # Errors
    /// [`Error::Argument`] for more than `limit` of them, [`Error::Interrupted`].
    pub fn line_ups(&self, limit: usize, monitor: &mut Monitor<'_>) -> Result<LineUps> {
        LineUps::enumerate(self.sector(), self.weights(), self.domain(), limit, monitor)
    }

    fn check(&self, argument: &'static str, values: ArrayView2<'_, f64>) -> Result<()> {
        let (components, modes) = self.shape();
        if values.dim() != (components, modes) {
            return Err(Error::argument(
                argument,
                format!("shape {:?}", values.shape()),
                format!("shape [{components}, {modes}] (components, modes)"),
            ));
        }
        if values.iter().any(|x| !x.is_finite()) {
            return Err(Error::argument(
                argument,
                "NaN or infinity",
                "finite numbers",
            ));
        }
        Ok(())
    }

    /// Magnitude beyond which numbers are no occupations.
    fn largest_occupation(&self) -> f64 {
        1e6 * self.sector().particles().max(1) as f64
    }

    fn check_occupations(&self, occupations: ArrayView2<'_, f64>) -> Result<()> {
        const ARGUMENT: &str = "occupations";
        self.check(ARGUMENT, occupations)?;
        let limit = self.largest_occupation();
        match occupations.iter().find(|n| n.abs() > limit) {
            Some(n) => Err(Error::argument(
                ARGUMENT,
                format!("{n:e}"),
                format!("occupation numbers (magnitudes above {limit:e} are refused)"),
            )),
            None => Ok(()),
        }
    }
}

fn check_tolerance(tolerance: f64) -> Result<()> {
    if !(tolerance > 0.0 && tolerance.is_finite()) {
        return Err(Error::argument("tol", tolerance, "a positive number"));
    }
    Ok(())
}
