//! Projection on the polytope by alternating the active set with the oracle.

use super::active_set::{ActiveSet, Atom};
use super::ensemble::Ensemble;
use super::least_squares::dot;
use super::oracle::{Domain, Oracle};
use super::permutahedron::{Permuted, decompose};
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
    fn check(&self) -> Result<()> {
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
    fn largest_gap(&self, length: f64) -> f64 {
        (self.point_tolerance * self.point_tolerance).min(self.distance_tolerance * length)
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
    /// `<h, x> - f_w(h)` for the part h of the normal that leaves the particle number alone;
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

/// The caller's modes in decreasing order of occupation, per component.
#[derive(Debug, Clone)]
pub(super) struct Sorting {
    shape: (usize, usize),
    /// Caller's position of each sorted one, components one after the other.
    positions: Vec<usize>,
}

impl Sorting {
    pub fn new(occupations: ArrayView2<'_, f64>) -> Self {
        let (components, modes) = occupations.dim();
        let mut positions: Vec<usize> = (0..components * modes).collect();
        for (row, positions) in occupations
            .rows()
            .into_iter()
            .zip(positions.chunks_mut(modes))
        {
            let start = positions[0];
            positions.sort_by(|&a, &b| row[b - start].total_cmp(&row[a - start]).then(a.cmp(&b)));
        }
        Sorting {
            shape: (components, modes),
            positions,
        }
    }

    pub fn sorted(&self, values: ArrayView2<'_, f64>) -> Vec<f64> {
        let modes = self.shape.1;
        self.positions
            .iter()
            .map(|&p| values[[p / modes, p % modes]])
            .collect()
    }

    pub fn to_caller(&self, values: &[f64]) -> Array2<f64> {
        let mut result = Array2::zeros(self.shape);
        for (&p, &value) in self.positions.iter().zip(values) {
            result[[p / self.shape.1, p % self.shape.1]] = value;
        }
        result
    }

    /// For each of the caller's modes, the mode of the line-up that takes its place.
    fn permutation_to_caller(&self, order: &[usize]) -> Array2<usize> {
        let mut result = Array2::zeros(self.shape);
        let modes = self.shape.1;
        for (&p, &from) in self.positions.iter().zip(order) {
            result[[p / modes, p % modes]] = from % modes;
        }
        result
    }
}

/// Weights of the query direction: this much of the best direction so far, for large r.
const SMOOTHING: f64 = 0.75;
/// Number of weights from which the query direction is smoothed.
const SMOOTHING_FROM: usize = 100;
/// Exact queries without a better gap before rounding is held responsible.
const PATIENCE: usize = 6;

/// Occupations minus the uniform part of each component that changes the particle number.
pub(super) fn remove_excess(oracle: &Oracle, sorted: &mut [f64]) -> Vec<f64> {
    let modes = oracle.shape().1;
    let particles = oracle.particles();
    sorted
        .chunks_mut(modes)
        .zip(particles)
        .map(|(component, particles)| {
            let shift = (component.iter().sum::<f64>() - particles) / modes as f64;
            component.iter_mut().for_each(|n| *n -= shift);
            // a sum that is right but for rounding costs no distance
            let rounding = 4.0 * f64::EPSILON * component[0].abs().max(1.0);
            if shift.abs() > rounding { shift } else { 0.0 }
        })
        .collect()
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

/// Projects validated occupations.
pub(super) fn project(
    oracle: &Oracle,
    occupations: ArrayView2<'_, f64>,
    options: &ProjectionOptions,
) -> Result<Projection> {
    options.check()?;
    let sorting = Sorting::new(occupations);
    let mut target = sorting.sorted(occupations);
    let shifts = remove_excess(oracle, &mut target);
    let modes = oracle.shape().1;
    let excess = shifts.iter().map(|s| s * s).sum::<f64>() * modes as f64;
    let found = Search::new(oracle, &target, *options, EarlyStop::NONE, Vec::new())?.run()?;

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

/// What a search ends with, in sorted coordinates.
#[derive(Debug)]
pub(super) struct Found {
    pub point: Vec<f64>,
    pub normal: Vec<f64>,
    pub length: f64,
    pub lower: f64,
    /// Direction that proved the lower bound.
    pub separator: Vec<f64>,
    pub gap: f64,
    pub converged: bool,
    pub calls: usize,
    pub atoms: Vec<Atom>,
    mixture: Vec<f64>,
    links: Vec<bool>,
}

/// Reasons to end a search before its tolerances are met.
#[derive(Debug, Clone, Copy)]
pub(super) struct EarlyStop {
    /// The distance is at most this.
    pub near: f64,
    /// The distance is certainly more than this.
    pub far: f64,
    /// The certified lower bound is at least this share of the distance.
    pub share: f64,
}

impl EarlyStop {
    /// Never.
    pub const NONE: EarlyStop = EarlyStop {
        near: 0.0,
        far: f64::INFINITY,
        share: f64::INFINITY,
    };
}

/// A projection under way.
pub(super) struct Search<'a> {
    oracle: &'a Oracle,
    target: &'a [f64],
    options: ProjectionOptions,
    stop: EarlyStop,
    set: ActiveSet<'a>,
    calls: usize,
    /// Best lower bound of the distance and the direction that proved it.
    lower: f64,
    best: Vec<f64>,
    gap: f64,
}

impl<'a> Search<'a> {
    /// Starts from given atoms, or else from the line-up that suits the target.
    pub fn new(
        oracle: &'a Oracle,
        target: &'a [f64],
        options: ProjectionOptions,
        stop: EarlyStop,
        mut start: Vec<Atom>,
    ) -> Result<Self> {
        let calls = usize::from(start.is_empty());
        if start.is_empty() {
            let potential: Vec<f64> = target.iter().map(|n| -n).collect();
            start.push(Atom {
                point: oracle.flat_minimiser(&potential)?,
                potential,
                probability: 1.0,
            });
        }
        let mut set = ActiveSet::new(target, oracle.shape().1, start);
        set.optimise();
        Ok(Search {
            oracle,
            target,
            options,
            stop,
            best: set.normal.clone(),
            set,
            calls,
            lower: 0.0,
            gap: f64::INFINITY,
        })
    }

    /// Alternates until the gap is small enough or rounding forbids more.
    pub fn run(mut self) -> Result<Found> {
        let smooth = self.oracle.weights.count() >= SMOOTHING_FROM;
        let floor = 8.0 * f64::EPSILON * self.set.scale() * (self.target.len() as f64).sqrt();
        let mut converged = false;
        let mut exact = true;
        let mut idle = 0;
        let mut smallest = f64::INFINITY;
        while self.calls < self.options.oracle_call_limit {
            let length = self.length();
            if length <= floor {
                converged = true;
                self.gap = self.gap.min(length * length);
                break;
            }
            let EarlyStop { near, far, share } = self.stop;
            if length <= near || self.lower > far || self.lower >= share * length {
                break;
            }
            let goal = self.options.largest_gap(length);
            exact |= !smooth || (length - self.lower) * length <= 2.0 * goal;
            let query = self.query(exact);
            let point = self.oracle.flat_minimiser(&query)?;
            self.calls += 1;
            let gap = self.assess(&query, &point);
            if exact {
                idle = if gap < 0.9 * smallest { 0 } else { idle + 1 };
                smallest = gap.min(smallest);
                self.gap = gap.max(0.0);
                let rounding = 4.0 * f64::EPSILON * length * self.set.scale();
                converged = gap <= goal;
                if gap <= rounding || (converged && smooth) || idle > PATIENCE {
                    break;
                }
            }
            let small = 0.25 * goal.min(self.gap);
            let accepted = gap > small && self.set.enter(query, point, small);
            if exact && !accepted {
                break;
            }
            exact = !accepted;
        }
        Ok(self.finish(converged, floor))
    }

    fn length(&self) -> f64 {
        dot(&self.set.normal, &self.set.normal).sqrt()
    }

    /// The present normal, or a step from the best direction so far towards it.
    fn query(&self, exact: bool) -> Vec<f64> {
        if exact {
            return self.set.normal.clone();
        }
        self.best
            .iter()
            .zip(&self.set.normal)
            .map(|(best, now)| SMOOTHING * best + (1.0 - SMOOTHING) * now)
            .collect()
    }

    /// Improves the lower bound; returns by how much the point undercuts the present normal.
    fn assess(&mut self, query: &[f64], point: &[f64]) -> f64 {
        let size = dot(query, query).sqrt();
        let above: Vec<f64> = point.iter().zip(self.target).map(|(a, y)| a - y).collect();
        let lower = dot(query, &above) / size;
        if lower > self.lower {
            self.lower = lower;
            self.best.copy_from_slice(query);
        }
        let below: Vec<f64> = self
            .set
            .mixture
            .iter()
            .zip(point)
            .map(|(v, a)| v - a)
            .collect();
        dot(&self.set.normal, &below)
    }

    fn finish(mut self, converged: bool, floor: f64) -> Found {
        let normal = self.set.normal.clone();
        let length = self.length();
        // blocks and multipliers that match the mixture to the last digit
        self.set.pool();
        let point: Vec<f64> = self
            .target
            .iter()
            .zip(&self.set.normal)
            .map(|(y, h)| y + h)
            .collect();
        let inside = length <= floor;
        Found {
            point,
            length: if inside { 0.0 } else { length },
            lower: if inside { 0.0 } else { self.lower.min(length) },
            normal,
            separator: self.best,
            gap: self.gap,
            converged,
            calls: self.calls,
            atoms: self.set.atoms,
            mixture: self.set.mixture,
            links: self.set.links,
        }
    }
}
