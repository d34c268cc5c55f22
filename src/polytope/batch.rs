//! Many points at once, in parallel, and by which method.

use super::ensemble::Ensemble;
use super::exact::Inequality;
use super::listed::{Listed, Targets};
use super::oracle::Oracle;
use super::projection::{self, Projection, ProjectionOptions};
use super::{ExclusionPolytope, check_tolerance};
use crate::error::{Error, Result};
use crate::progress::{Monitor, Progress};
use ndarray::{Array, Array1, Array3, ArrayView2, ArrayView3, Axis, Dimension};
use rayon::prelude::*;
use std::sync::OnceLock;
use std::sync::atomic::{AtomicUsize, Ordering};

/// Members handled by the oracle between two looks at the monitor.
const MEMBERS: usize = 64;
/// Members handled by the list in one task,
const TASK: usize = 256;
/// and between two looks at the monitor.
const LISTED_MEMBERS: usize = 32 * TASK;
/// Most weights for which the list is made without being asked for.
const MOST_WEIGHTS: usize = 12;

/// The list of inequalities, once it has been made.
#[derive(Debug, Default)]
pub(super) struct Listing {
    known: OnceLock<(Vec<Inequality>, Listed)>,
    /// The largest limit that was too small for the line-ups.
    refused: AtomicUsize,
}

/// The nearest points to those of a batch, with their certificates.
#[derive(Debug)]
pub struct Projections {
    /// The nearest points, `(batch, components, modes)`, modes in the caller's order.
    pub occupations: Array3<f64>,
    /// Nearest point minus what was projected.
    pub normals: Array3<f64>,
    /// Distances, upper bounds.
    pub distances: Array1<f64>,
    /// Certified lower bounds of the distances.
    pub distances_lower: Array1<f64>,
    /// Duality gaps, as in [`Projection::gap`].
    pub gaps: Array1<f64>,
    /// Whether the tolerances were reached.
    pub converged: Array1<bool>,
    oracle: Oracle,
    /// What the oracle's method found, by members.
    pub(super) searched: Vec<(usize, Projection)>,
}

impl Projections {
    fn new(oracle: &Oracle, count: usize) -> Self {
        let (components, modes) = oracle.shape();
        Projections {
            occupations: Array3::zeros((count, components, modes)),
            normals: Array3::zeros((count, components, modes)),
            distances: Array1::zeros(count),
            distances_lower: Array1::zeros(count),
            gaps: Array1::zeros(count),
            converged: Array1::from_elem(count, false),
            oracle: oracle.clone(),
            searched: Vec::new(),
        }
    }

    /// Number of points.
    pub fn len(&self) -> usize {
        self.distances.len()
    }

    /// Whether there are none.
    pub fn is_empty(&self) -> bool {
        self.len() == 0
    }

    /// An explicit ensemble with the occupations of a member, as [`Projection::ensemble`].
    ///
    /// The list of inequalities gives none: members that were projected by it are projected
    /// once more by the oracle's method.
    ///
    /// # Errors
    /// [`Error::Index`] if there is no such member.
    pub fn ensemble(&self, member: usize) -> Result<Ensemble> {
        if member >= self.len() {
            let expected = format!("less than {}", self.len());
            return Err(Error::index("index", member, expected));
        }
        if let Ok(k) = self.searched.binary_search_by_key(&member, |found| found.0) {
            return Ok(self.searched[k].1.ensemble());
        }
        let occupations = self.occupations.index_axis(Axis(0), member);
        let point = &occupations - &self.normals.index_axis(Axis(0), member);
        let options = ProjectionOptions::default();
        Ok(projection::project(&self.oracle, point.view(), &options, None)?.ensemble())
    }

    /// Number of members that the oracle's method projected.
    pub fn searched(&self) -> usize {
        self.searched.len()
    }

    fn take(&mut self, member: usize, found: Projection) {
        let mut occupations = self.occupations.index_axis_mut(Axis(0), member);
        occupations.assign(&found.occupations);
        let mut normal = self.normals.index_axis_mut(Axis(0), member);
        normal.assign(&found.normal);
        self.distances[member] = found.distance;
        self.distances_lower[member] = found.distance_lower;
        self.gaps[member] = found.gap;
        self.converged[member] = found.converged;
        self.searched.push((member, found));
    }
}

/// Earlier projections to start from.
#[derive(Debug, Clone, Copy)]
pub struct Start<'a> {
    /// The result they belong to.
    pub earlier: &'a Projections,
    /// The member that all points start from; without it, each from that of its own number.
    pub member: Option<usize>,
}

impl<'a> Start<'a> {
    /// What the oracle's method found; nothing if the list was used.
    fn found_for(self, member: usize) -> Option<&'a Projection> {
        let member = self.member.unwrap_or(member);
        let searched = &self.earlier.searched;
        let place = searched.binary_search_by_key(&member, |found| found.0);
        place.ok().map(|k| &searched[k].1)
    }
}

impl ExclusionPolytope {
    /// The facet inequalities, complete, as [`LineUps::inequalities`](super::LineUps::inequalities);
    /// they are kept.
    ///
    /// # Errors
    /// As for [`ExclusionPolytope::line_ups`].
    pub fn inequalities(&self, limit: usize, monitor: &mut Monitor<'_>) -> Result<&[Inequality]> {
        Ok(&self.listed(limit, monitor)?.0)
    }

    /// The nearest points to a batch `(batch, components, modes)`.
    ///
    /// The list of inequalities is used if it is known from [`ExclusionPolytope::inequalities`] or
    /// an earlier batch, or if it takes no more line-ups than there are points (for at most 12
    /// weights); otherwise the oracle. Both agree within their certificates.
    ///
    /// An earlier result saves the oracle calls where points are near; it changes what is found
    /// only within the certificates.
    ///
    /// # Errors
    /// As for [`ExclusionPolytope::project`], [`Error::Argument`] for an earlier result on another
    /// polytope or of another number of points, and [`Error::Interrupted`].
    pub fn project_batch(
        &self,
        points: ArrayView3<'_, f64>,
        options: &ProjectionOptions,
        start: Option<Start<'_>>,
        monitor: &mut Monitor<'_>,
    ) -> Result<Projections> {
        options.check()?;
        let count = points.len_of(Axis(0));
        if let Some(start) = start {
            self.check_start(start, count)?;
        }
        let project = |member: usize, point: ArrayView2<'_, f64>| {
            let start = start.and_then(|start| start.found_for(member));
            self.check_occupations(point)?;
            projection::project(&self.oracle, point, options, start)
        };
        let mut result = Projections::new(&self.oracle, count);
        let Some(listed) = self.listed_for(count, monitor)? else {
            let found = for_batch(points, monitor, |k, n| project(k, n))?;
            let members = found.into_iter().enumerate();
            members.for_each(|(member, found)| result.take(member, found));
            return Ok(result);
        };
        self.project_listed(listed, points, options, &mut result, monitor)?;
        let converged = result.converged.iter().enumerate();
        let left: Vec<usize> = converged.filter(|(_, c)| !**c).map(|(m, _)| m).collect();
        if !left.is_empty() {
            let rest = points.select(Axis(0), &left);
            let found = for_batch(rest.view(), monitor, |k, n| project(left[k], n))?;
            let members = left.into_iter().zip(found);
            members.for_each(|(member, found)| result.take(member, found));
        }
        Ok(result)
    }

    /// Which of a batch `(batch, components, modes)` are within `tolerance` of the polytope; the
    /// list is used as for [`ExclusionPolytope::project_batch`].
    ///
    /// # Errors
    /// As for [`ExclusionPolytope::contains`], and [`Error::Interrupted`].
    pub fn contains_batch(
        &self,
        points: ArrayView3<'_, f64>,
        tolerance: f64,
        monitor: &mut Monitor<'_>,
    ) -> Result<Vec<bool>> {
        if self.listed_for(points.len_of(Axis(0)), monitor)?.is_none() {
            return for_batch(points, monitor, |_, n| self.contains(n, tolerance));
        }
        check_tolerance(tolerance)?;
        let found = self.project_batch(points, &ProjectionOptions::default(), None, monitor)?;
        Ok(found.distances.iter().map(|&d| d <= tolerance).collect())
    }

    fn check_start(&self, start: Start<'_>, count: usize) -> Result<()> {
        let (given, own) = (&start.earlier.oracle, &self.oracle);
        let same = given.sector == own.sector
            && given.domain == own.domain
            && given.weights.as_slice() == own.weights.as_slice();
        if !same {
            let expected = format!("a projection on this polytope, {own:?}");
            return Err(Error::argument(
                "start",
                format!("one on {given:?}"),
                expected,
            ));
        }
        let length = start.earlier.len();
        if start
            .member
            .map_or(length != count, |member| member >= length)
        {
            let expected = format!("one of a single point, or of {count} as given now");
            let given = format!("a projection of {length} points");
            return Err(Error::argument("start", given, expected));
        }
        Ok(())
    }

    fn project_listed(
        &self,
        listed: &Listed,
        points: ArrayView3<'_, f64>,
        options: &ProjectionOptions,
        result: &mut Projections,
        monitor: &mut Monitor<'_>,
    ) -> Result<()> {
        let (components, modes) = self.shape();
        let (size, count) = (components * modes, points.len_of(Axis(0)));
        for (group, part) in points.axis_chunks_iter(Axis(0), LISTED_MEMBERS).enumerate() {
            let first = group * LISTED_MEMBERS;
            report(monitor, first, count)?;
            let part = part.as_standard_layout();
            let numbers = first..first + part.len_of(Axis(0));
            let values = first * size..numbers.end * size;
            let points = part.as_slice().unwrap_or_default();
            if !points.iter().all(|n| n.abs() <= self.largest_occupation()) {
                let mut members = part.outer_iter();
                members.try_for_each(|point| self.check_occupations(point))?;
            }
            let tasks = points
                .par_chunks(TASK * size)
                .zip(slice_of(&mut result.occupations)[values.clone()].par_chunks_mut(TASK * size))
                .zip(slice_of(&mut result.normals)[values].par_chunks_mut(TASK * size))
                .zip(slice_of(&mut result.distances)[numbers.clone()].par_chunks_mut(TASK))
                .zip(slice_of(&mut result.distances_lower)[numbers.clone()].par_chunks_mut(TASK))
                .zip(slice_of(&mut result.gaps)[numbers.clone()].par_chunks_mut(TASK))
                .zip(slice_of(&mut result.converged)[numbers].par_chunks_mut(TASK));
            tasks.for_each(
                |((((((points, occupations), normals), distances), lower), gaps), converged)| {
                    let targets = Targets {
                        occupations,
                        normals,
                        distances,
                        lower,
                        gaps,
                        converged,
                    };
                    listed.project(points, options, targets);
                },
            );
        }
        Ok(())
    }

    fn listed(
        &self,
        limit: usize,
        monitor: &mut Monitor<'_>,
    ) -> Result<&(Vec<Inequality>, Listed)> {
        if let Some(known) = self.listing.known.get() {
            return Ok(known);
        }
        let list = self.line_ups(limit, monitor)?.inequalities()?;
        let listed = Listed::new(&list, self.oracle.particles(), self.shape().1);
        Ok(self.listing.known.get_or_init(|| (list, listed)))
    }

    /// The list, if it is known or worth its while for this many points.
    fn listed_for(&self, count: usize, monitor: &mut Monitor<'_>) -> Result<Option<&Listed>> {
        let known = self.listing.known.get();
        let refused = self.listing.refused.load(Ordering::Relaxed);
        if known.is_none() && (self.weights().count() > MOST_WEIGHTS || count <= refused) {
            return Ok(None);
        }
        match self.listed(count, monitor) {
            Ok((_, listed)) => Ok(Some(listed)),
            Err(Error::Interrupted) => Err(Error::Interrupted),
            Err(_) => {
                self.listing.refused.fetch_max(count, Ordering::Relaxed);
                Ok(None)
            }
        }
    }
}

fn slice_of<T, D: Dimension>(array: &mut Array<T, D>) -> &mut [T] {
    array.as_slice_mut().unwrap_or_default()
}

fn report(monitor: &mut Monitor<'_>, done: usize, total: usize) -> Result<()> {
    let report = Progress {
        stage: "polytope",
        done,
        total,
        products: done,
        residual: f64::NAN,
    };
    if monitor(&report).is_break() {
        return Err(Error::Interrupted);
    }
    Ok(())
}

/// Runs `work` for each member, in parallel; the monitor is called in between.
///
/// # Errors
/// The first of `work`, or [`Error::Interrupted`].
pub fn for_batch<T: Send>(
    batch: ArrayView3<'_, f64>,
    monitor: &mut Monitor<'_>,
    work: impl Fn(usize, ArrayView2<'_, f64>) -> Result<T> + Sync,
) -> Result<Vec<T>> {
    let total = batch.len_of(Axis(0));
    let mut results = Vec::with_capacity(total);
    for part in batch.axis_chunks_iter(Axis(0), MEMBERS) {
        report(monitor, results.len(), total)?;
        let members: Vec<_> = (results.len()..).zip(part.outer_iter()).collect();
        let done: Result<Vec<T>> = members.into_par_iter().map(|(k, n)| work(k, n)).collect();
        results.extend(done?);
    }
    Ok(results)
}
