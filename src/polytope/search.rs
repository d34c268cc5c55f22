//! The search for the nearest point: the active set and the oracle in turn.

use super::active_set::{ActiveSet, Atom};
use super::least_squares::dot;
use super::oracle::Oracle;
use super::projection::ProjectionOptions;
use crate::error::Result;

/// Weights of the query direction: this much of the best direction so far, for large r.
const SMOOTHING: f64 = 0.75;
/// Number of weights from which the query direction is smoothed.
const SMOOTHING_FROM: usize = 100;
/// Number of weights from which all queries are.
const ALWAYS_FROM: usize = 1000;
/// Queries that bring nothing before rounding is held responsible.
const PATIENCE: usize = 25;
/// Relative changes of the bounds that count as progress.
const PROGRESS: f64 = 1e-10;

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
    pub mixture: Vec<f64>,
    pub links: Vec<bool>,
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
    /// Gap of the present normal, if known.
    gap: Option<f64>,
}

/// Counts queries without progress.
#[derive(Debug)]
struct Stall {
    length: f64,
    lower: f64,
    gap: f64,
    bracket: f64,
    idle: usize,
}

impl Default for Stall {
    fn default() -> Self {
        Stall {
            length: f64::INFINITY,
            lower: 0.0,
            gap: f64::INFINITY,
            bracket: f64::INFINITY,
            idle: 0,
        }
    }
}

impl Stall {
    /// Queries since the last that shortened the normal, raised the lower bound or narrowed
    /// the gap or the distance between the bounds.
    fn count(&mut self, length: f64, lower: f64, gap: f64) -> usize {
        let better = length < self.length * (1.0 - PROGRESS)
            || lower > self.lower + PROGRESS * length
            || gap.abs() < 0.9 * self.gap
            || length - lower < 0.9 * self.bracket;
        self.idle = if better { 0 } else { self.idle + 1 };
        self.length = self.length.min(length);
        self.lower = self.lower.max(lower);
        self.gap = self.gap.min(gap.abs());
        if better {
            self.bracket = self.bracket.min(length - lower);
        }
        self.idle
    }
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
            gap: None,
        })
    }

    /// Alternates until the gap is small enough or rounding forbids more.
    pub fn run(mut self) -> Result<Found> {
        let smooth = self.oracle.weights.count() >= SMOOTHING_FROM;
        let very_smooth = self.oracle.weights.count() >= ALWAYS_FROM;
        let floor = 8.0 * f64::EPSILON * self.set.scale() * (self.target.len() as f64).sqrt();
        let mut converged = false;
        let mut exact = true;
        let mut stall = Stall::default();
        while self.calls < self.options.oracle_call_limit {
            let length = self.length();
            converged = length <= floor;
            let EarlyStop { near, far, share } = self.stop;
            if converged || length <= near || self.lower > far || self.lower >= share * length {
                break;
            }
            let goal = self.options.largest_gap(length);
            let bracket = (length - self.lower) * (length + self.lower);
            if very_smooth && bracket <= goal {
                converged = true;
                break;
            }
            // for very many weights the smoothed queries stay ahead to the end
            let last = !very_smooth && (length - self.lower) * length <= 2.0 * goal;
            exact |= !smooth || self.lower <= 0.0 || last;
            let query = self.query(exact);
            let point = self.oracle.flat_minimiser(&query)?;
            self.calls += 1;
            let gap = self.assess(&query, &point);
            let idle = stall.count(length, self.lower, gap);
            let rounding = 4.0 * f64::EPSILON * length * self.set.scale();
            if exact {
                self.gap = Some(gap.max(0.0));
                converged = gap <= goal || self.options.is_negligible(length);
                if gap <= rounding || (converged && smooth) {
                    break;
                }
            }
            let small = (0.25 * self.gap.unwrap_or(goal).min(goal)).max(rounding);
            let accepted = gap > small && idle < PATIENCE && self.set.enter(query, point, small);
            if exact && !accepted {
                break;
            }
            if accepted {
                self.gap = None;
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
            // |x - x*|^2 is also at most the difference of the squared bounds
            gap: self
                .gap
                .unwrap_or((length - self.lower) * (length + self.lower)),
            converged,
            calls: self.calls,
            atoms: self.set.atoms,
            mixture: self.set.mixture,
            links: self.set.links,
        }
    }
}
