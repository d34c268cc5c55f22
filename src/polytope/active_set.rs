//! The nearest point of conv(atoms) + cone(e_{i+1} - e_i) to a decreasing target.
//!
//! An active-set method: for a fixed mixture of atoms the best ray multipliers come from
//! isotonic regression, which also says on which blocks the normal is flat; for fixed blocks
//! and atoms the signs are dropped and a least-squares problem in block averages remains, and
//! the mixture walks towards its solution until a probability or a multiplier reaches zero.
//! (Lawson and Hanson's scheme for non-negative least squares with the constraint that the
//! probabilities sum to one, as in Wolfe's method for the nearest point of a polytope.)

use super::least_squares::{Columns, dot};
use super::monotone::{blocks, pool_adjacent_violators};

/// Relative size of rounding errors in what is compared with zero.
const ROUNDING: f64 = 4.0 * f64::EPSILON;

/// Rounds without a shorter normal before the last digits are given up.
const PATIENCE: usize = 10;

/// A point of the polytope that minimises `<potential, n>`.
#[derive(Debug, Clone)]
pub(super) struct Atom {
    pub potential: Vec<f64>,
    pub point: Vec<f64>,
    pub probability: f64,
}

/// Removes the uniform part, which is only rounding where the sum is fixed.
pub(super) fn remove_mean(component: &mut [f64]) {
    let mean = component.iter().sum::<f64>() / component.len() as f64;
    component.iter_mut().for_each(|x| *x -= mean);
}

/// What ends a step.
#[derive(Debug, Clone, Copy)]
enum Blocker {
    None,
    Atom(usize),
    Link(usize),
}

/// The present mixture of atoms and what belongs to it.
#[derive(Debug)]
pub(super) struct ActiveSet<'a> {
    target: &'a [f64],
    modes: usize,
    pub atoms: Vec<Atom>,
    /// Atoms that have been dropped; they may come back.
    retired: Vec<Atom>,
    /// sum of probability x point.
    pub mixture: Vec<f64>,
    /// Nearest point minus target; increases within components.
    pub normal: Vec<f64>,
    pub links: Vec<bool>,
    scale: f64,
}

impl<'a> ActiveSet<'a> {
    /// Starts from atoms whose probabilities sum to one.
    pub fn new(target: &'a [f64], modes: usize, atoms: Vec<Atom>) -> Self {
        let size = target.len();
        let largest = target.iter().fold(1.0f64, |m, x| m.max(x.abs()));
        let mut set = ActiveSet {
            target,
            modes,
            atoms,
            retired: Vec::new(),
            mixture: vec![0.0; size],
            normal: vec![0.0; size],
            links: vec![false; size],
            scale: largest,
        };
        set.mix();
        set.pool();
        set
    }

    /// Magnitude of the occupations, which rounding errors are compared with.
    pub fn scale(&self) -> f64 {
        self.scale
    }

    /// Makes the mixture optimal with a further atom, and with those dropped before that undercut
    /// the nearest point by more than `tolerance`. Returns whether the further atom was of use.
    pub fn enter(&mut self, potential: Vec<f64>, point: Vec<f64>, tolerance: f64) -> bool {
        let accepted = self.admit(Atom {
            potential,
            point,
            probability: 0.0,
        });
        for _ in 0..self.retired.len() {
            let Some(index) = self.most_undercutting(tolerance) else {
                break;
            };
            let atom = self.retired.swap_remove(index);
            self.admit(atom);
        }
        accepted
    }

    /// Whether an atom takes a share; one that does not is forgotten.
    fn admit(&mut self, atom: Atom) -> bool {
        if self.atoms.iter().any(|known| known.point == atom.point) {
            return false;
        }
        let point = atom.point.clone();
        self.atoms.push(atom);
        self.optimise();
        let accepted = self.atoms.iter().any(|atom| atom.point == point);
        if !accepted {
            self.retired.retain(|atom| atom.point != point);
        }
        accepted
    }

    /// The dropped atom that lies farthest below the nearest point along the normal.
    fn most_undercutting(&self, tolerance: f64) -> Option<usize> {
        let level = dot(&self.normal, &self.mixture);
        let depths = self
            .retired
            .iter()
            .map(|atom| level - dot(&self.normal, &atom.point));
        let deepest = depths.enumerate().max_by(|a, b| a.1.total_cmp(&b.1));
        deepest
            .filter(|(_, depth)| *depth > tolerance)
            .map(|(index, _)| index)
    }

    /// Makes the mixture optimal for the present atoms; those without share are dropped.
    pub fn optimise(&mut self) {
        let limit = 100 + 4 * self.target.len();
        let mut shortest = f64::INFINITY;
        let mut idle = 0;
        while idle < PATIENCE {
            self.relax(limit);
            let relaxed = (self.links.clone(), self.normal.clone());
            self.pool();
            let change = self.normal.iter().zip(&relaxed.1);
            let change = change.fold(0.0f64, |m, (a, b)| m.max((a - b).abs()));
            let length = dot(&self.normal, &self.normal);
            idle = if length < shortest { 0 } else { idle + 1 };
            shortest = shortest.min(length);
            if relaxed.0 == self.links || change <= ROUNDING * self.scale || idle == PATIENCE {
                // more precise than differences of points: orthogonal to all atoms
                (self.links, self.normal) = relaxed;
                return;
            }
        }
    }

    /// Solves the problem without signs on the present blocks and atoms, dropping whatever
    /// reaches zero on the way.
    fn relax(&mut self, limit: usize) {
        for _ in 0..limit {
            let old_length = dot(&self.normal, &self.normal);
            let (changes, normal) = self.unsigned_step();
            let (reach, blocker) = self.step_length(&changes);
            for (atom, change) in self.atoms.iter_mut().zip(&changes) {
                atom.probability = (atom.probability + reach * change).max(0.0);
            }
            if let Blocker::Atom(index) = blocker {
                self.retired.push(self.atoms.swap_remove(index));
            }
            if let Blocker::None = blocker {
                let idle = self
                    .atoms
                    .extract_if(.., |atom| atom.probability <= ROUNDING);
                self.retired.extend(idle);
            }
            self.mix();
            if let Blocker::None = blocker {
                self.normal = normal;
                let length = dot(&self.normal, &self.normal);
                if length > 1e-6 * old_length {
                    return;
                }
                // most of the old normal cancelled: repeat for full relative precision
                let (_, normal) = self.unsigned_step();
                self.normal = normal;
                return;
            }
            self.unlink(blocker);
        }
    }

    /// Changes of the probabilities to the unsigned minimum, and the normal there.
    fn unsigned_step(&self) -> (Vec<f64>, Vec<f64>) {
        let reference = self.reference();
        let base = &self.atoms[reference].point;
        let spans: Vec<_> = blocks(&self.links).collect();
        let reduced = |a: &[f64], b: &[f64]| -> Vec<f64> {
            spans
                .iter()
                .map(|span| {
                    let sum: f64 = a[span.clone()]
                        .iter()
                        .zip(&b[span.clone()])
                        .map(|(x, y)| x - y)
                        .sum();
                    sum / (span.len() as f64).sqrt()
                })
                .collect()
        };
        let mut columns = Columns {
            rows: spans.len(),
            data: Vec::with_capacity(spans.len() * self.atoms.len()),
        };
        for (index, atom) in self.atoms.iter().enumerate() {
            if index != reference {
                columns.data.extend(reduced(&atom.point, base));
            }
        }
        let minimum = columns.minimise(reduced(&self.mixture, self.target));
        let mut changes = minimum.coefficients;
        let total: f64 = changes.iter().sum();
        changes.insert(reference, -total);
        let mut normal = vec![0.0; self.target.len()];
        for (span, value) in spans.into_iter().zip(minimum.residual) {
            let flat = value / (span.len() as f64).sqrt();
            normal[span].fill(flat);
        }
        normal.chunks_mut(self.modes).for_each(remove_mean);
        (changes, normal)
    }

    /// The atom with the largest share; differences are taken from it.
    fn reference(&self) -> usize {
        let mut best = 0;
        for (index, atom) in self.atoms.iter().enumerate() {
            if atom.probability > self.atoms[best].probability {
                best = index;
            }
        }
        best
    }

    /// How far the step may go, at most 1, before a probability or a multiplier is negative.
    fn step_length(&self, changes: &[f64]) -> (f64, Blocker) {
        let mut nearest = (1.0f64, Blocker::None);
        let mut limit = |reach: f64, blocker| {
            if reach < nearest.0 {
                nearest = (reach, blocker);
            }
        };
        for (index, (atom, change)) in self.atoms.iter().zip(changes).enumerate() {
            if atom.probability + change < -ROUNDING {
                limit(atom.probability / -change, Blocker::Atom(index));
            }
        }
        let mut drift = vec![0.0; self.target.len()];
        for (atom, change) in self.atoms.iter().zip(changes) {
            for (d, x) in drift.iter_mut().zip(&atom.point) {
                *d += change * x;
            }
        }
        let tolerance = ROUNDING * self.scale;
        for span in blocks(&self.links).filter(|span| span.len() > 1) {
            let now = self.multipliers(&span, &self.mixture, Some(self.target));
            let change = self.multipliers(&span, &drift, None);
            for (link, (mu, change)) in span.zip(now.zip(change)) {
                if mu + change < -tolerance {
                    limit(mu.max(0.0) / -change, Blocker::Link(link));
                }
            }
        }
        nearest
    }

    /// Partial sums of `values` (less the target) over a block, from which its mean was taken.
    fn multipliers<'b>(
        &self,
        span: &std::ops::Range<usize>,
        values: &'b [f64],
        target: Option<&'b [f64]>,
    ) -> impl Iterator<Item = f64> + use<'b> {
        let difference = move |i: usize| values[i] - target.map_or(0.0, |t| t[i]);
        let mean = span.clone().map(difference).sum::<f64>() / span.len() as f64;
        let mut sum = 0.0;
        (span.start..span.end - 1).map(move |i| {
            sum += difference(i) - mean;
            sum
        })
    }

    /// Removes the links whose multipliers have reached zero.
    fn unlink(&mut self, blocker: Blocker) {
        let tolerance = ROUNDING * self.scale;
        let mut kept = self.links.clone();
        for span in blocks(&self.links).filter(|span| span.len() > 1) {
            let multipliers = self.multipliers(&span, &self.mixture, Some(self.target));
            for (i, mu) in span.clone().zip(multipliers) {
                kept[i] = mu > tolerance;
            }
        }
        self.links = kept;
        if let Blocker::Link(link) = blocker {
            self.links[link] = false;
        }
        // keep the normal in step: block means of mixture - target
        let spans: Vec<_> = blocks(&self.links).collect();
        for span in spans {
            let sum: f64 = span.clone().map(|i| self.mixture[i] - self.target[i]).sum();
            let mean = sum / span.len() as f64;
            self.normal[span].fill(mean);
        }
    }

    /// Best multipliers for the present mixture.
    pub fn pool(&mut self) {
        for ((h, v), y) in self.normal.iter_mut().zip(&self.mixture).zip(self.target) {
            *h = v - y;
        }
        pool_adjacent_violators(&mut self.normal, self.modes, &mut self.links);
    }

    fn mix(&mut self) {
        let total: f64 = self.atoms.iter().map(|atom| atom.probability).sum();
        let reference = self.reference();
        for atom in &mut self.atoms {
            atom.probability /= total;
        }
        // sums of differences lose nothing where the atoms agree
        self.mixture.copy_from_slice(&self.atoms[reference].point);
        let base = &self.atoms[reference].point;
        for atom in &self.atoms {
            for ((m, x), b) in self.mixture.iter_mut().zip(&atom.point).zip(base) {
                *m += atom.probability * (x - b);
            }
        }
    }
}
