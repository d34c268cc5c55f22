//! Orthonormal rows from a Gram matrix.

use super::orthogonal::{Measured, conjugate_product};
use crate::dense::eigh;
use crate::error::{Error, Result};
use crate::scalar::Scalar;
use ndarray::{Array2, Axis, s};

/// Smallest Gram eigenvalue, relative to the block before, that Pythagoras' theorem predicts well.
const PREDICTABLE: f64 = 1e-3;

/// The transformation that makes the rows of a block orthonormal, from their Gram matrix.
pub(super) struct Whitening<T> {
    /// M, `(rows kept, rows)`.
    pub transform: Array2<T>,
    /// N with W = N^T (M W) for the rows kept.
    pub inverse: Array2<T>,
    /// Smallest Gram eigenvalue.
    pub smallest: f64,
    /// The same over the largest.
    pub condition: f64,
}

impl<T: Scalar> Whitening<T> {
    /// From what is known before the part inside the basis is subtracted, by Pythagoras'
    /// theorem; none if cancellation spoils it.
    pub fn predicted(before: &Measured<T>, room: usize) -> Result<Option<Self>> {
        let inside = &before.overlaps;
        let gram = &before.gram - &conjugate_product(inside.t(), inside.t());
        let whitening = Whitening::new(&gram, room)?;
        let top = before
            .gram
            .diag()
            .iter()
            .fold(0.0, |top: f64, x| top.max(x.re()));
        let safe = whitening.smallest > PREDICTABLE * top;
        Ok((safe && whitening.transform.nrows() == gram.nrows()).then_some(whitening))
    }

    /// Keeps the `room` strongest directions.
    pub fn new(gram: &Array2<T>, room: usize) -> Result<Self> {
        if gram.iter().any(|value| !value.is_finite()) {
            return Err(Error::argument(
                "operator",
                "infinite or NaN components in a product",
                "finite vectors from finite vectors",
            ));
        }
        let eigen = eigh(gram.view())?;
        let width = gram.nrows().min(room);
        let dropped = gram.nrows() - width;
        let top = eigen.values.last().copied().unwrap_or(0.0);
        // weaker directions drown in the rounding of the Gram matrix: the next round scales them
        let sizes = eigen.values.slice(s![dropped..]);
        let sizes = sizes.mapv(|value| value.max(f64::EPSILON * top).sqrt());
        let directions = eigen.vectors.slice(s![.., dropped..]).reversed_axes();
        let scaled = |matrix: Array2<T>, factor: &dyn Fn(f64) -> f64| {
            let factors = sizes.mapv(|size| T::from_real(factor(size)));
            matrix * factors.insert_axis(Axis(1))
        };
        let inverse_size = |size: f64| if size > 0.0 { 1.0 / size } else { 0.0 };
        Ok(Whitening {
            transform: scaled(directions.to_owned(), &inverse_size),
            inverse: scaled(directions.mapv(T::conj), &|size| size),
            smallest: eigen.values.first().copied().unwrap_or(0.0),
            condition: if top > 0.0 {
                eigen.values[0] / top
            } else {
                0.0
            },
        })
    }
}
