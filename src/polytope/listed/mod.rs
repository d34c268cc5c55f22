//! Projections by the complete list of inequalities, many at a time.
//!
//! The nearest decreasing occupations x to y with `<a_i, x>` <= b_i: rows enter by their violation,
//! the worst first, and a dual active-set method ([`dual`]) finds the nearest point for those met
//! so far. Rows are gone through for a few points side by side ([`rows`]), those with few steps
//! first, the others once these hold. A point that is done makes room for the next, and none has
//! influence on another.
//!
//! The certificate needs no oracle: with multipliers lambda >= 0 every point n of the polytope
//! has `<h, n>` >= -sum_i lambda_i b_i for h = x - y, so that the gap is sum_i lambda_i times the
//! slack of row i, zero but for rounding.

mod dual;
mod rows;

use super::exact::Inequality;
use super::projection::ProjectionOptions;
use dual::{Point, Settled};
use rows::{LANES, Rows};

/// Nearest points by a list of inequalities.
#[derive(Debug)]
pub(super) struct Listed {
    rows: Rows,
    particles: Vec<f64>,
}

/// Where the projections of a few points are written, each `(points, occupations)` or `(points,)`.
pub(super) struct Targets<'a> {
    pub occupations: &'a mut [f64],
    pub normals: &'a mut [f64],
    pub distances: &'a mut [f64],
    pub lower: &'a mut [f64],
    pub gaps: &'a mut [f64],
    /// Whether the tolerances were reached.
    pub converged: &'a mut [bool],
}

/// A place for a point under way.
#[derive(Debug, Default)]
struct Lane {
    member: usize,
    busy: bool,
    /// By how much the simple rows are violated, once that is no more than rounding.
    simple: Option<f64>,
    point: Point,
    /// Occupations with their places in the caller's order.
    sorted: Vec<(f64, u32)>,
    depths: Vec<f64>,
    /// What was taken off each component.
    shifts: Vec<f64>,
    /// Square of the distance that does not depend on the list.
    fixed: f64,
}

impl Listed {
    pub fn new(list: &[Inequality], particles: Vec<f64>, modes: usize) -> Self {
        Listed {
            rows: Rows::new(list, &particles, modes),
            particles,
        }
    }

    /// Projects points `(points, occupations)` that were checked.
    pub fn project(&self, points: &[f64], options: &ProjectionOptions, targets: Targets<'_>) {
        pulp::Arch::new().dispatch(Task {
            listed: self,
            points,
            options,
            targets,
        });
    }
}

/// The work on a few points, compiled for the instruction set at hand.
struct Task<'a> {
    listed: &'a Listed,
    points: &'a [f64],
    options: &'a ProjectionOptions,
    targets: Targets<'a>,
}

impl pulp::NullaryFnOnce for Task<'_> {
    type Output = ();

    #[inline(always)]
    fn call(mut self) {
        let rows = &self.listed.rows;
        let mut lanes: [Lane; LANES] = Default::default();
        let mut depths = vec![[0.0; LANES]; rows.size()];
        let mut heights = depths.clone();
        let mut waiting = 0;
        for (k, lane) in lanes.iter_mut().enumerate() {
            self.load(lane, &mut waiting);
            lane.write_depths(&mut depths, k);
        }
        while lanes.iter().any(|lane| lane.busy) {
            // the long way through the other rows is gone for all lanes together
            let simple = lanes.iter().any(|lane| lane.busy && lane.simple.is_none());
            let some = if simple { rows.simple() } else { rows.others() };
            let (violations, worst) = rows.most_violated(some, &depths, &mut heights);
            for (k, lane) in lanes.iter_mut().enumerate() {
                if !lane.busy || (simple && lane.simple.is_some()) {
                    continue;
                }
                let (violation, row) = (violations[k], worst[k] as usize);
                // active rows hold but for rounding in the sums
                if violation <= lane.point.rounding || lane.point.holds(row) {
                    let excess = violation.max(lane.simple.unwrap_or(0.0));
                    lane.simple = Some(excess.max(0.0));
                    if simple && !rows.others().is_empty() {
                        continue;
                    }
                    self.finish(lane, excess.max(0.0));
                    self.load(lane, &mut waiting);
                } else {
                    lane.simple = None;
                    if lane.point.take_in(rows, row) == Settled::No {
                        self.load(lane, &mut waiting);
                    }
                }
                lane.write_depths(&mut depths, k);
            }
        }
    }
}

impl Task<'_> {
    /// Takes the next point that waits.
    #[inline(always)]
    fn load(&self, lane: &mut Lane, waiting: &mut usize) {
        let rows = &self.listed.rows;
        let size = rows.size();
        let values = self.points.get(*waiting * size..(*waiting + 1) * size);
        let Some(values) = values.filter(|values| !values.is_empty()) else {
            lane.busy = false;
            return;
        };
        lane.busy = true;
        lane.simple = None;
        lane.member = *waiting;
        *waiting += 1;
        lane.sort(values, rows.modes);
        lane.depths.clear();
        lane.shifts.clear();
        lane.fixed = 0.0;
        let mut scale = 1.0f64;
        let parts = lane.sorted.chunks(rows.modes).zip(&self.listed.particles);
        for ((part, particles), &rigid) in parts.zip(&rows.rigid) {
            let modes = rows.modes as f64;
            let shift = (part.iter().map(|n| n.0).sum::<f64>() - particles) / modes;
            let top = shift + particles / modes;
            // a sum that is right but for rounding costs no distance
            let rounding = 4.0 * f64::EPSILON * (part[0].0 - shift).abs().max(1.0);
            lane.shifts.push(shift);
            if shift.abs() > rounding {
                lane.fixed += shift * shift * modes;
            }
            if rigid {
                lane.fixed += part.iter().map(|n| (top - n.0).powi(2)).sum::<f64>();
                lane.depths.extend(part.iter().map(|_| 0.0));
            } else {
                lane.depths.extend(part.iter().map(|n| top - n.0));
                scale = scale.max((part[0].0 - shift).abs());
                scale = scale.max((part[part.len() - 1].0 - shift).abs());
            }
        }
        lane.point.start(&lane.depths, 8.0 * f64::EPSILON * scale);
    }

    /// Writes what was found.
    #[inline(always)]
    fn finish(&mut self, lane: &Lane, excess: f64) {
        let rows = &self.listed.rows;
        let (size, member) = (rows.size(), lane.member);
        let nearest = &lane.point.nearest;
        let square: f64 = lane
            .depths
            .iter()
            .zip(nearest)
            .map(|(y, x)| (y - x).powi(2))
            .sum();
        let length = square.sqrt();
        let gap = lane.point.gap(excess);
        let goal = self.options.largest_gap(length);
        let lower = if gap > 0.0 {
            ((square - gap) / length).clamp(0.0, length)
        } else {
            length
        };
        let values = member * size..(member + 1) * size;
        let normal = &mut self.targets.normals[values.clone()];
        let occupations = &mut self.targets.occupations[values];
        for (component, part) in lane.sorted.chunks(rows.modes).enumerate() {
            let shift = lane.shifts[component];
            let start = component * rows.modes;
            let centre = self.listed.particles[component] / rows.modes as f64;
            for (k, &(n, place)) in part.iter().enumerate() {
                let h = if rows.rigid[component] {
                    centre - n
                } else {
                    lane.depths[start + k] - nearest[start + k] - shift
                };
                normal[place as usize] = h;
                occupations[place as usize] = n + h;
            }
        }
        self.targets.distances[member] = length.hypot(lane.fixed.sqrt());
        self.targets.lower[member] = lower.hypot(lane.fixed.sqrt());
        self.targets.gaps[member] = gap;
        self.targets.converged[member] = gap <= goal || self.options.is_negligible(length);
    }
}

impl Lane {
    /// Each component decreasing; of equal occupations the first comes first.
    #[inline(always)]
    fn sort(&mut self, values: &[f64], modes: usize) {
        self.sorted.clear();
        self.sorted
            .extend(values.iter().zip(0u32..).map(|(&n, place)| (n, place)));
        for part in self.sorted.chunks_mut(modes) {
            if !part.is_sorted_by(|a, b| a.0 >= b.0) {
                part.sort_by(|a, b| b.0.total_cmp(&a.0));
            }
        }
    }

    /// The present depths, in a column of `depths`.
    #[inline(always)]
    fn write_depths(&self, depths: &mut [[f64; LANES]], column: usize) {
        for (depths, &v) in depths.iter_mut().zip(&self.point.nearest) {
            depths[column] = v;
        }
    }
}
