//! Checks that one- and two-body arrays have the symmetries they must have. Deviations up to
//! 1e-8 of the largest element are taken for rounding and averaged away; more is refused.

use super::interaction::Entry;
use crate::error::{Error, Result};
use crate::scalar::Scalar;
use ndarray::{Array, Array2, Array4, ArrayView, ArrayView2, ArrayView4, Dimension};
use std::collections::BTreeMap;

const TOLERANCE: f64 = 1e-8;

/// Index order of a two-body tensor.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum TensorOrder {
    /// v\[p, q, r, s\] = <pq|v|rs>.
    Dirac,
    /// v\[p, q, r, s\] = (pq|rs) = <pr|v|qs>.
    Mulliken,
}

impl TensorOrder {
    fn name(self) -> &'static str {
        match self {
            TensorOrder::Dirac => "dirac",
            TensorOrder::Mulliken => "mulliken",
        }
    }

    fn other(self) -> Self {
        match self {
            TensorOrder::Dirac => TensorOrder::Mulliken,
            TensorOrder::Mulliken => TensorOrder::Dirac,
        }
    }

    /// A tensor of this order seen in Dirac order.
    fn as_dirac<T>(self, tensor: ArrayView4<'_, T>) -> ArrayView4<'_, T> {
        match self {
            TensorOrder::Dirac => tensor,
            TensorOrder::Mulliken => tensor.permuted_axes([0, 2, 1, 3]),
        }
    }
}

/// Refuses arrays whose axes are not all of the length `modes`.
pub fn check_square(argument: &'static str, shape: &[usize], modes: usize) -> Result<()> {
    if shape.iter().all(|&length| length == modes) {
        Ok(())
    } else {
        Err(Error::argument(
            argument,
            format!("shape {shape:?}"),
            format!("shape {:?} for {modes} modes", vec![modes; shape.len()]),
        ))
    }
}

/// Refuses NaN and infinity.
pub fn check_finite<T: Scalar, D: Dimension>(
    argument: &'static str,
    array: &ArrayView<'_, T, D>,
) -> Result<()> {
    if array.iter().all(|x| x.is_finite()) {
        Ok(())
    } else {
        Err(Error::argument(
            argument,
            "NaN or infinity",
            "finite numbers",
        ))
    }
}

/// Largest absolute value.
pub fn largest<T: Scalar, D: Dimension>(array: &ArrayView<'_, T, D>) -> f64 {
    array.iter().map(|x| x.abs()).fold(0.0, f64::max)
}

/// Largest difference between an array and its partner under a symmetry.
fn deviation<T: Scalar, D: Dimension>(
    array: &ArrayView<'_, T, D>,
    partner: &ArrayView<'_, T, D>,
    conjugate: bool,
) -> f64 {
    let mut worst = 0.0f64;
    ndarray::Zip::from(array).and(partner).for_each(|&a, &b| {
        let b = if conjugate { b.conj() } else { b };
        worst = worst.max((a - b).abs());
    });
    worst
}

/// The Hermitian matrix nearest to a finite, nearly Hermitian one.
pub fn hermitian<T: Scalar>(
    argument: &'static str,
    matrix: ArrayView2<'_, T>,
) -> Result<Array2<T>> {
    hermitian_beside(argument, matrix, largest(&matrix))
}

/// The same, for one of several matrices of which `size` is the largest element.
pub fn hermitian_beside<T: Scalar>(
    argument: &'static str,
    matrix: ArrayView2<'_, T>,
    size: f64,
) -> Result<Array2<T>> {
    check_finite(argument, &matrix)?;
    let asymmetry = deviation(&matrix, &matrix.t(), true);
    if asymmetry > TOLERANCE * size {
        let kind = if T::IS_COMPLEX {
            "Hermitian"
        } else {
            "symmetric"
        };
        return Err(Error::argument(
            argument,
            format!("a matrix that differs from its adjoint by {asymmetry:.3e}"),
            format!("a {kind} matrix; if the difference is noise, average it with its adjoint"),
        ));
    }
    Ok(average(matrix.to_owned(), &matrix.t(), true))
}

fn average<T: Scalar, D: Dimension>(
    mut array: Array<T, D>,
    partner: &ArrayView<'_, T, D>,
    conjugate: bool,
) -> Array<T, D> {
    array.zip_mut_with(partner, |a, &b| {
        let b = if conjugate { b.conj() } else { b };
        *a = (*a + b) * 0.5;
    });
    array
}

/// Largest violation of v_pqrs = v_qpsr and of v_pqrs = conj(v_rspq), in Dirac order.
fn violation<T: Scalar>(dirac: &ArrayView4<'_, T>) -> f64 {
    let exchanged = dirac.view().permuted_axes([1, 0, 3, 2]);
    let adjoint = dirac.view().permuted_axes([2, 3, 0, 1]);
    deviation(dirac, &exchanged, false).max(deviation(dirac, &adjoint, true))
}

/// A tensor of the named order in Dirac order, its symmetries exact.
pub fn two_body<T: Scalar>(tensor: ArrayView4<'_, T>, order: TensorOrder) -> Result<Array4<T>> {
    const ARGUMENT: &str = "two_body";
    check_finite(ARGUMENT, &tensor)?;
    let limit = TOLERANCE * largest(&tensor);
    let dirac = order.as_dirac(tensor);
    let worst = violation(&dirac);
    if worst > limit {
        let other = order.other();
        let hint = if violation(&other.as_dirac(tensor)) <= limit {
            format!("; the array fits order=\"{}\"", other.name())
        } else {
            "; the array fits neither order (are the integrals antisymmetrised or incomplete?)"
                .to_owned()
        };
        return Err(Error::argument(
            ARGUMENT,
            format!(
                "order=\"{}\" and an array that violates its symmetries by {worst:.3e}",
                order.name()
            ),
            format!("v_pqrs = v_qpsr = conj(v_rspq) for v_pqrs = <pq|v|rs>{hint}"),
        ));
    }
    let first = average(
        dirac.to_owned(),
        &dirac.view().permuted_axes([1, 0, 3, 2]),
        false,
    );
    let partner = first.view().permuted_axes([2, 3, 0, 1]);
    Ok(average(first.clone(), &partner, true))
}

/// A checked sparse list, its symmetries exact.
pub fn entries<T: Scalar>(list: &[Entry<T>], modes: usize) -> Result<BTreeMap<[usize; 4], T>> {
    const ARGUMENT: &str = "entries";
    let mut map = BTreeMap::new();
    let mut largest = 0.0f64;
    for &(index, value) in list {
        if index.iter().any(|&mode| mode >= modes) {
            return Err(Error::index(
                ARGUMENT,
                format!("{index:?}"),
                format!("modes 0 to {}", modes - 1),
            ));
        }
        if !value.is_finite() {
            return Err(Error::argument(
                ARGUMENT,
                format!("{value} at {index:?}"),
                "finite numbers",
            ));
        }
        if map.insert(index, value).is_some() {
            return Err(Error::argument(
                ARGUMENT,
                format!("index {index:?} twice"),
                "each index once; add the values up",
            ));
        }
        largest = largest.max(value.abs());
    }
    let mut symmetric = BTreeMap::new();
    for (&[p, q, r, s], &value) in &map {
        let at = |index: [usize; 4]| map.get(&index).copied().unwrap_or_else(T::zero);
        let partners = [
            ([q, p, s, r], at([q, p, s, r])),
            ([r, s, p, q], at([r, s, p, q]).conj()),
            ([s, r, q, p], at([s, r, q, p]).conj()),
        ];
        for (partner, expected) in partners {
            if (value - expected).abs() > TOLERANCE * largest {
                return Err(Error::argument(
                    ARGUMENT,
                    format!(
                        "{value} at {:?} without its equal at {partner:?}",
                        [p, q, r, s]
                    ),
                    "the complete list: v_pqrs = v_qpsr = conj(v_rspq), every partner included",
                ));
            }
        }
        let mean = (value + partners[0].1 + partners[1].1 + partners[2].1) * 0.25;
        symmetric.insert([p, q, r, s], mean);
    }
    Ok(symmetric)
}

#[cfg(test)]
mod tests {
    use super::*;
    use ndarray::array;
    use num_complex::Complex64;

    #[test]
    fn rounding_is_averaged_and_more_is_refused() {
        let nearly = array![[1.0, 2.0 + 1e-9], [2.0, 3.0]];
        let exact = hermitian("one_body", nearly.view()).unwrap();
        assert_eq!(exact[[0, 1]], exact[[1, 0]]);
        let wrong = array![[1.0, 2.1], [2.0, 3.0]];
        assert!(hermitian("one_body", wrong.view()).is_err());
        let i = Complex64::i();
        let not_hermitian = array![[0.0 * i, i], [i, 0.0 * i]];
        assert!(hermitian("one_body", not_hermitian.view()).is_err());
    }

    #[test]
    fn the_refusal_names_the_order_that_fits() {
        // Dirac symmetries hold; read as Mulliken they do not
        let mut v = Array4::<Complex64>::zeros((2, 2, 2, 2));
        let value = Complex64::new(0.3, 0.7);
        v[[0, 1, 1, 1]] = value;
        v[[1, 0, 1, 1]] = value;
        v[[1, 1, 0, 1]] = value.conj();
        v[[1, 1, 1, 0]] = value.conj();
        assert!(two_body(v.view(), TensorOrder::Dirac).is_ok());
        let message = two_body(v.view(), TensorOrder::Mulliken)
            .unwrap_err()
            .to_string();
        assert!(message.contains("fits order=\"dirac\""), "{message}");
    }

    #[test]
    fn incomplete_and_double_entries_are_refused() {
        assert!(entries(&[([0, 0, 1, 1], 1.0)], 2).is_err());
        assert!(entries(&[([0, 0, 0, 0], 1.0), ([0, 0, 0, 0], 1.0)], 2).is_err());
        assert!(matches!(
            entries(&[([0, 0, 0, 2], 1.0)], 2),
            Err(Error::Index { .. })
        ));
        let complete = entries(&[([0, 0, 1, 1], 1.0), ([1, 1, 0, 0], 1.0)], 2).unwrap();
        assert_eq!(complete.len(), 2);
    }
}
