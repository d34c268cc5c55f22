//! Was a level missed? A single-vector Lanczos run from a random start in the orthogonal
//! complement of what was found looks for one.
//!
//! Let x be an eigenvector in that complement with eigenvalue E, and p_j the orthonormal
//! polynomials of the recurrence. Its components along the Lanczos vectors are p_j(E) <v_0, x>,
//! and their squares sum to at most one, so |<v_0, x>|^2 <= 1 / sum_j p_j(E)^2. (This extremal
//! property of the Christoffel function is classical; recalled.) Below all Ritz values the
//! p_j^2 decrease with E, so the bound at E covers all missed levels up to E. A random start
//! violates it with a probability known exactly; the a-priori estimate of Kuczynski and
//! Wozniakowski, SIAM J. Matrix Anal. Appl. 13, 1094 (1992) (recalled) rests on the same idea
//! with Chebyshev polynomials in place of the p_j. Loss of orthogonality only adds copies of
//! Ritz values (Paige), none below the spectrum, as long as the known vectors are kept out.

use super::lanczos::BlockLanczos;
use super::orthogonal::{Purge, fill_random, orthonormalize, subtract_basis};
use crate::error::{Error, Result};
use crate::linear_operator::LinearOperator;
use crate::progress::{Monitor, Progress};
use crate::scalar::Scalar;
use ndarray::{Array2, Axis, s};
use rand_chacha::ChaCha8Rng;

/// Probability of overlooking a level that ends the search.
const ENOUGH: f64 = 1e-6;

/// What a search in the complement says.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) enum Finding {
    /// No level at or below the first bound, up to the probability of having overlooked one.
    Nothing { failure_probability: f64 },
    /// There is a level at or below this bound.
    Missed { bound: f64 },
    /// Stopped by the monitor or the operator.
    Interrupted,
}

/// The p_j at one energy, as long as it lies below all Ritz values.
struct Christoffel {
    energy: f64,
    previous: f64,
    current: f64,
    sum: f64,
}

impl Christoffel {
    fn new(energy: f64) -> Self {
        Christoffel {
            energy,
            previous: 0.0,
            current: 1.0,
            sum: 1.0,
        }
    }

    /// Next row of the tridiagonal matrix: `before`, `diagonal`, `after`. False once a Ritz
    /// value lies at or below the energy: by Sturm's theorem signs alternate until then.
    fn advance(&mut self, before: f64, diagonal: f64, after: f64) -> bool {
        let numerator = (self.energy - diagonal) * self.current - before * self.previous;
        if numerator * self.current >= 0.0 {
            return false;
        }
        self.previous = self.current;
        self.current = numerator / after.max(f64::MIN_POSITIVE);
        self.sum += self.current * self.current;
        true
    }

    /// Probability that a random unit vector hides an eigenvector at or below the energy.
    fn failure_probability<T: Scalar>(&self, dimension: usize) -> f64 {
        let weight = dimension as f64 / self.sum;
        let probability = if T::IS_COMPLEX {
            weight
        } else {
            (2.0 * weight / std::f64::consts::PI).sqrt()
        };
        probability.clamp(f64::EPSILON, 1.0)
    }
}

/// What to search for, and how long.
pub(super) struct Probe {
    /// First rows of the basis: those in whose complement to search.
    pub known: usize,
    /// No level may lie at or below these, most important first.
    pub bounds: Vec<f64>,
    /// Products allowed.
    pub budget: usize,
    /// Levels asked for, for the reports.
    pub levels: usize,
}

impl Probe {
    /// Runs the search from the first random vector of `generator`.
    pub fn search<T: Scalar>(
        &self,
        operator: &dyn LinearOperator<T>,
        run: &mut BlockLanczos<'_, T>,
        mut generator: ChaCha8Rng,
        monitor: &mut Monitor<'_>,
    ) -> Result<Finding> {
        let room = operator.dimension() - self.known;
        // a filter increases below its interval, so that the bounds on its images do the same
        let image = |&bound: &f64| match run.filter() {
            Some(filter) => filter.image(bound),
            None => Some(bound),
        };
        let images = self.bounds.iter().map_while(image);
        let mut polynomials: Vec<Christoffel> = images.map(Christoffel::new).collect();
        // rows after the known ones: two Lanczos vectors, taking turns, and the image
        let current_row = |turn: usize| self.known + turn % 2;
        self.begin(run, &mut generator)?;
        // what the Lanczos vectors contain of the known ones, by rounding
        let mut leak = Array2::<T>::zeros((self.known, 2));
        let mut before = 0.0;
        let mut failure_probability = 1.0;
        for turn in 0..(self.budget / run.cost()).min(room) {
            let current = current_row(turn);
            match run.multiply(current..current + 1, self.known + 2, monitor) {
                Err(Error::Interrupted) => return Ok(Finding::Interrupted),
                other => other?,
            }
            let (basis, mut image) = run.split(self.known + 2, 1);
            let (inside, left) = subtract_basis(basis, image.view_mut(), leak.view());
            let diagonal = inside[[current, 0]].re();
            let after = left.gram[[0, 0]].re().max(0.0).sqrt();
            for (polynomial, &bound) in polynomials.iter_mut().zip(&self.bounds) {
                if !polynomial.advance(before, diagonal, after) {
                    return Ok(Finding::Missed { bound });
                }
            }
            failure_probability = polynomials[0].failure_probability::<T>(room);
            run.latest = Progress {
                stage: "level count",
                done: self.levels,
                total: self.levels,
                products: run.products,
                residual: failure_probability,
            };
            if monitor(&run.latest).is_break() {
                return Ok(Finding::Interrupted);
            }
            if failure_probability <= ENOUGH || after <= 16.0 * f64::EPSILON * run.norm() {
                break;
            }
            self.take_turn(run, current_row(turn + 1), after);
            let leaked = left.overlaps.slice(s![..self.known, 0]);
            let leaked = leaked.mapv(|x| x * (1.0 / after));
            leak.column_mut((turn + 1) % 2).assign(&leaked);
            before = after;
        }
        Ok(Finding::Nothing {
            failure_probability,
        })
    }

    fn begin<T: Scalar>(
        &self,
        run: &mut BlockLanczos<'_, T>,
        generator: &mut ChaCha8Rng,
    ) -> Result<()> {
        let (known, mut rows) = run.split(self.known, 2);
        fill_random(rows.row_mut(0), generator);
        rows.row_mut(1).fill(T::zero());
        let purge = Purge {
            first_expected: 0,
            noise: 0.0,
            overlap: 0.0,
        };
        orthonormalize(known, rows.slice_mut(s![..1, ..]), &purge, generator)?;
        Ok(())
    }

    /// Row `next` <- image / norm.
    fn take_turn<T: Scalar>(&self, run: &mut BlockLanczos<'_, T>, next: usize, norm: f64) {
        let (_, mut rows) = run.split(self.known, 3);
        let (mut vectors, image) = rows.view_mut().split_at(Axis(0), 2);
        let mut target = vectors.row_mut(next - self.known);
        ndarray::Zip::from(&mut target)
            .and(image.row(0))
            .par_for_each(|out, &x| *out = x * (1.0 / norm));
    }
}
