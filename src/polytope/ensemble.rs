//! Explicit ensembles of configurations.

use super::active_set::Atom;
use super::oracle::{Domain, Oracle};
use crate::error::{Error, Result};
use ndarray::{Array2, Array3, ArrayView2};

/// A mixture of permuted line-ups, each the r lowest configurations of a potential in order.
///
/// The mixture is a product: every line-up of [`Ensemble::line_ups`] occurs with every
/// permutation of [`Ensemble::permutations`].
#[derive(Debug, Clone)]
pub struct Ensemble {
    oracle: Oracle,
    line_ups: Vec<(f64, Array2<f64>)>,
    permutations: Vec<(f64, Array2<usize>)>,
}

/// One member of the mixture: weight w_j belongs to the j-th lowest configuration of the
/// potential, its modes permuted.
#[derive(Debug, Clone, Copy)]
pub struct Term<'a> {
    /// Share of the mixture.
    pub probability: f64,
    /// One-particle energies `(components, modes)` that order the configurations.
    pub potential: ArrayView2<'a, f64>,
    /// `permutation[[s, m]]` is the mode of the line-up that takes the place of mode m.
    pub permutation: ArrayView2<'a, usize>,
}

impl Ensemble {
    pub(super) fn new(
        oracle: Oracle,
        atoms: &[Atom],
        permutations: Vec<(f64, Array2<usize>)>,
    ) -> Self {
        let shape = oracle.shape();
        let line_ups = atoms
            .iter()
            .map(|atom| {
                let potential =
                    Array2::from_shape_fn(shape, |(s, m)| atom.potential[s * shape.1 + m]);
                (atom.probability, potential)
            })
            .collect();
        Ensemble {
            oracle,
            line_ups,
            permutations,
        }
    }

    /// Probability and potential of each line-up.
    pub fn line_ups(&self) -> &[(f64, Array2<f64>)] {
        &self.line_ups
    }

    /// Probability of each permutation of modes, `(components, modes)`.
    pub fn permutations(&self) -> &[(f64, Array2<usize>)] {
        &self.permutations
    }

    /// Number of terms.
    pub fn term_count(&self) -> usize {
        self.line_ups.len() * self.permutations.len()
    }

    /// A term of the mixture.
    ///
    /// # Errors
    /// [`Error::Index`] if the index is not below [`Ensemble::term_count`].
    pub fn term(&self, index: usize) -> Result<Term<'_>> {
        if index >= self.term_count() {
            return Err(Error::index(
                "index",
                index,
                format!("less than {}", self.term_count()),
            ));
        }
        let (p, potential) = &self.line_ups[index / self.permutations.len()];
        let (q, permutation) = &self.permutations[index % self.permutations.len()];
        Ok(Term {
            probability: p * q,
            potential: potential.view(),
            permutation: permutation.view(),
        })
    }

    /// All terms.
    pub fn terms(&self) -> impl Iterator<Item = Term<'_>> {
        (0..self.term_count()).filter_map(|index| self.term(index).ok())
    }

    /// The configurations `(r, spins, modes)` of a term in the order of the weights, modes as
    /// in the occupations that were projected.
    ///
    /// # Errors
    /// [`Error::Argument`] if the term belongs to a polytope of another shape.
    pub fn configurations(&self, term: &Term<'_>) -> Result<Array3<u32>> {
        let line_up = self.oracle.line_up(term.potential)?.occupations();
        let (count, spins, modes) = line_up.dim();
        // summed over spins there is one permutation of orbitals for both
        let component = |s: usize| {
            if self.oracle.domain == Domain::SpinSummed {
                0
            } else {
                s
            }
        };
        Ok(Array3::from_shape_fn((count, spins, modes), |(j, s, m)| {
            line_up[[j, s, term.permutation[[component(s), m]]]]
        }))
    }

    /// Occupations `(components, modes)` of the mixture, recomputed from its line-ups.
    ///
    /// # Errors
    /// None for ensembles that come from a projection.
    pub fn occupations(&self) -> Result<Array2<f64>> {
        let mut mixture = Array2::zeros(self.oracle.shape());
        for (probability, potential) in &self.line_ups {
            mixture.scaled_add(*probability, &self.oracle.minimiser(potential.view())?);
        }
        let mut occupations = Array2::<f64>::zeros(mixture.dim());
        for (probability, permutation) in &self.permutations {
            for ((position, value), from) in occupations.indexed_iter_mut().zip(permutation) {
                *value += probability * mixture[[position.0, *from]];
            }
        }
        Ok(occupations)
    }
}
