//! Natural orbitals and occupations: the eigenvectors and eigenvalues of a density matrix.

use crate::dense::eigh;
use crate::error::Result;
use crate::scalar::Scalar;
use ndarray::{Array1, Array2, ArrayView2, s};
use std::ops::Range;

/// Occupations in decreasing order and the orbitals that carry them.
#[derive(Debug, Clone)]
pub struct NaturalOrbitals<T> {
    /// Occupations, decreasing.
    pub occupations: Array1<f64>,
    /// Column k is the orbital of occupation k; inside a degenerate block the choice is
    /// arbitrary.
    pub orbitals: Array2<T>,
    /// Ranges of occupations that are equal within the tolerance, those of one left out.
    pub degenerate_blocks: Vec<Range<usize>>,
}

/// Diagonalises a Hermitian density matrix; occupations closer than `tolerance` count as equal.
///
/// # Errors
/// [`crate::error::Error::Lapack`] if the eigensolver fails.
pub fn natural_orbitals<T: Scalar>(
    density_matrix: ArrayView2<'_, T>,
    tolerance: f64,
) -> Result<NaturalOrbitals<T>> {
    let eigen = eigh(density_matrix)?;
    let occupations = eigen.values.slice(s![..;-1]).to_owned();
    let orbitals = eigen.vectors.slice(s![.., ..;-1]).to_owned();
    let mut degenerate_blocks = Vec::new();
    let mut start = 0;
    for k in 1..=occupations.len() {
        let ends = k == occupations.len() || occupations[k - 1] - occupations[k] > tolerance;
        if ends {
            if k - start > 1 {
                degenerate_blocks.push(start..k);
            }
            start = k;
        }
    }
    Ok(NaturalOrbitals {
        occupations,
        orbitals,
        degenerate_blocks,
    })
}

#[cfg(test)]
mod tests {
    use super::*;
    use ndarray::array;

    #[test]
    fn occupations_decrease_and_blocks_are_flagged() {
        let gamma = array![[0.5, 0.0, 0.0], [0.0, 1.0, 0.0], [0.0, 0.0, 0.5]];
        let natural = natural_orbitals(gamma.view(), 1e-9).unwrap();
        assert_eq!(natural.occupations, array![1.0, 0.5, 0.5]);
        assert_eq!(natural.degenerate_blocks, vec![1..3]);
        assert!(natural.orbitals[[1, 0]].abs() > 0.999);
    }
}
