//! The total spin, measured by the exchange operator.

use crate::error::{Error, Result};
use crate::operator::{Hamiltonian, Interaction};
use crate::scalar::Scalar;
use crate::sector::Sector;
use ndarray::{Array1, Array3, ArrayView2};
use std::sync::Arc;

/// <S^2> = S (S + 1) of each row of `vectors`.
///
/// For spin-1/2, v_pqrs = delta_ps delta_qr acts as -(N (N - 4) / 4 + S^2) (textbook; Dirac's
/// exchange identity).
///
/// # Errors
/// [`Error::Argument`] for sectors without spin; those of [`Hamiltonian::prepare`].
pub fn spin_squared<T: Scalar>(sector: &Sector, vectors: ArrayView2<'_, T>) -> Result<Array1<f64>> {
    let Sector::SpinHalf { orbitals, .. } = *sector else {
        return Err(Error::argument(
            "sector",
            format!("{sector:?}"),
            "spin-1/2 fermions; others carry no spin",
        ));
    };
    let no_hops = Array3::<T>::zeros((2, orbitals, orbitals));
    let exchange = Arc::new(Interaction::exchange(*sector));
    let operator = Hamiltonian::new(*sector, no_hops.view(), Some(exchange), 0.0)?;
    let n = sector.particles() as f64;
    let values = operator.expectation(vectors)?;
    Ok(values.mapv(|value| -value - n * (n - 4.0) / 4.0))
}

#[cfg(test)]
mod tests {
    use super::*;
    use approx::assert_abs_diff_eq;
    use ndarray::array;

    #[test]
    fn singlet_and_triplet_of_two_electrons() {
        // |up 0, down 1> -+ |up 1, down 0> in the order (up, down) = 00, 01, 10, 11
        let sector = Sector::spin_half(2, 1, 1).unwrap();
        let s = 0.5f64.sqrt();
        let vectors = array![[0.0, s, s, 0.0], [0.0, s, -s, 0.0], [1.0, 0.0, 0.0, 0.0]];
        let spin = spin_squared(&sector, vectors.view()).unwrap();
        assert_abs_diff_eq!(spin, array![0.0, 2.0, 0.0], epsilon = 1e-14);
        let polarised = Sector::spin_half(3, 3, 0).unwrap();
        let spin = spin_squared(&polarised, array![[1.0]].view()).unwrap();
        assert_abs_diff_eq!(spin, array![3.75], epsilon = 1e-14);
        assert!(spin_squared(&Sector::fermions(2, 1).unwrap(), array![[1.0, 0.0]].view()).is_err());
    }
}
