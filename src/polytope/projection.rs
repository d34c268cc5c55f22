//! Projection on the polytope: options, result and certificate.

use super::active_set::Atom;
use super::ensemble::Ensemble;
use super::oracle::{Domain, Oracle};
use super::permutahedron::{Permuted, decompose};
use super::search::{EarlyStop, Search};
use super::sorting::{Sorting, remove_excess};
use crate::error::{Error, Result};
use ndarray::{Array2, ArrayView2};

/// When a projection is good enough.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ProjectionOptions {
    /// Largest certified error of the distance.
    pub distance_tolerance: f64,
    /// Largest certified distance between the point returned and the exact projection.
    pub point_tolerance: f64,
    /// Most calls of the oracle; afterwards the accuracy reached is returned.
    pub oracle_call_limit: usize,
}

impl Default for ProjectionOptions {
    fn default() -> Self {
        ProjectionOptions {
            distance_tolerance: 1e-11,
            point_tolerance: 2e-7,
            oracle_call_limit: 10_000,
        }
    }
}

impl ProjectionOptions {
    pub(super) fn check(&self) -> Result<()> {
        for (argument, value) in [
            ("distance_tolerance", self.distance_tolerance),
            ("point_tolerance", self.point_tolerance),
        ] {
            if !(value > 0.0 && value.is_finite()) {
                return Err(Error::argument(argument, value, "a positive number"));
            }
        }
        if self.oracle_call_limit < 2 {
            return Err(Error::argument(
                "oracle_call_limit",
                self.oracle_call_limit,
                "at least 2",
            ));
        }
        Ok(())
    }

    /// Largest acceptable gap: |x - x*|^2 <= gap, and the distance is known to gap / |h|.
    pub(super) fn largest_gap(&self, length: f64) -> f64 {
        (self.point_tolerance * self.point_tolerance).min(self.distance_tolerance * length)
    }

    /// Whether this length of the normal alone bounds the distance and the point well enough.
    pub(super) fn is_negligible(&self, length: f64) -> bool {
        length <= self.distance_tolerance.min(0.5 * self.point_tolerance)
    }
}

/// The nearest point of the polytope, with its certificate.
#[derive(Debug, Clone)]
pub struct Projection {
    /// What the occupations speak about.
    pub domain: Domain,
    /// The nearest point x, `(components, modes)`, modes in the caller's order.
    pub occupations: Array2<f64>,
    /// |x - y| for the occupations y that were asked about: an upper bound of the distance.
    pub distance: f64,
    /// Certified lower bound of the distance.
    pub distance_lower: f64,
    /// At least `<h, x> - f_w(h)`, h the part of the normal that keeps the particle number;
    /// |x - x*|^2 <= gap for the exact projection x*.
    pub gap: f64,
    /// Whether the tolerances asked for were reached.
    pub converged: bool,
    /// x - y; outside the polytope it separates: `<normal, y>` < f_w(normal).
    pub normal: Array2<f64>,
    /// Calls of the linear oracle.
    pub oracle_calls: usize,
    certificate: Certificate,
}

/// What the explicit ensemble is made from, in sorted coordinates.
#[derive(Debug, Clone)]
struct Certificate {
    oracle: Oracle,
    atoms: Vec<Atom>,
    sorting: Sorting,
    sorted: Vec<f64>,
    mixture: Vec<f64>,
    links: Vec<bool>,
}

impl Projection {
    /// An explicit ensemble with the occupations of the projection: line-ups with permuted
    /// modes. It needs at most as many permutations as there are modes in all components.
    pub fn ensemble(&self) -> Ensemble {
        let certificate = &self.certificate;
        let permutations = decompose(
            &certificate.sorted,
            &certificate.mixture,
            &certificate.links,
        )
        .into_iter()
        .map(|Permuted { probability, order }| {
            (
                probability,
                certificate.sorting.permutation_to_caller(&order),
            )
        });
        Ensemble::new(
            certificate.oracle.clone(),
            &certificate.atoms,
            permutations.collect(),
        )
    }
}

/// Whether validated occupations lie within a distance of the polytope.
pub(super) fn is_within(
    oracle: &Oracle,
    occupations: ArrayView2<'_, f64>,
    distance: f64,
) -> Result<bool> {
    let mut target = Sorting::new(occupations).sorted(occupations);
    let shifts = remove_excess(oracle, &mut target);
    let excess = shifts.iter().map(|s| s * s).sum::<f64>() * oracle.shape().1 as f64;
    let Some(left) = Some(distance * distance - excess).filter(|left| *left >= 0.0) else {
        return Ok(false);
    };
    let stop = EarlyStop {
        near: left.sqrt(),
        far: left.sqrt(),
        ..EarlyStop::NONE
    };
    let found = Search::new(
        oracle,
        &target,
        ProjectionOptions::default(),
        stop,
        Vec::new(),
    )?;
    Ok(found.run()?.length <= left.sqrt())
}

/// Projects validated occupations, starting from the vertices that an earlier projection on the
/// same polytope mixed.
pub(super) fn project(
    oracle: &Oracle,
    occupations: ArrayView2<'_, f64>,
    options: &ProjectionOptions,
    start: Option<&Projection>,
) -> Result<Projection> {
    options.check()?;
    let sorting = Sorting::new(occupations);
    let mut target = sorting.sorted(occupations);
    let shifts = remove_excess(oracle, &mut target);
    let modes = oracle.shape().1;
    let excess = shifts.iter().map(|s| s * s).sum::<f64>() * modes as f64;
    let start = start.map_or(Vec::new(), |earlier| earlier.certificate.atoms.clone());
    let found = Search::new(oracle, &target, *options, EarlyStop::NONE, start)?.run()?;

    let mut normal = found.normal.clone();
    for (component, shift) in normal.chunks_mut(modes).zip(&shifts) {
        component.iter_mut().for_each(|h| *h -= shift);
    }
    Ok(Projection {
        domain: oracle.domain,
        occupations: sorting.to_caller(&found.point),
        distance: found.length.hypot(excess.sqrt()),
        distance_lower: found.lower.hypot(excess.sqrt()),
        gap: found.gap,
        converged: found.converged,
        normal: sorting.to_caller(&normal),
        oracle_calls: found.calls,
        certificate: Certificate {
            oracle: oracle.clone(),
            atoms: found.atoms,
            sorting,
            sorted: found.point,
            mixture: found.mixture,
            links: found.links,
        },
    })
}
