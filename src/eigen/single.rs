//! Products with a single long vector, which a general matrix product spends on packing.

use crate::scalar::Scalar;
use ndarray::{Array2, ArrayView2, ArrayViewMut2};
use pulp::NullaryFnOnce;

/// Numbers handled side by side: a few registers. (One row after the other: the vector is in
/// cache, and of several rows together the compiler makes gathers.)
const LANES: usize = 32;

/// The overlaps <v_i, w> with a single row w, as a column; none if rows are not contiguous.
pub(super) fn overlaps<T: Scalar>(
    rows: ArrayView2<'_, T>,
    vector: ArrayView2<'_, T>,
) -> Option<Array2<T>> {
    let vector = single(vector)?;
    let rows = contiguous(rows)?;
    let overlaps = pulp::Arch::new().dispatch(Overlaps {
        rows: &rows,
        vector,
    });
    Array2::from_shape_vec((rows.len(), 1), overlaps).ok()
}

/// w += sum_i c_i v_i for a single row w, with the c_i in a row; false if rows are not contiguous.
pub(super) fn add_combination<T: Scalar>(
    factor: T,
    coefficients: ArrayView2<'_, T>,
    rows: ArrayView2<'_, T>,
    vector: &mut ArrayViewMut2<'_, T>,
) -> bool {
    let (1, Some(rows)) = (coefficients.nrows(), contiguous(rows)) else {
        return false;
    };
    let Some(vector) = vector.row_mut(0).into_slice() else {
        return false;
    };
    let coefficients: Vec<T> = coefficients.iter().map(|&c| c * factor).collect();
    pulp::Arch::new().dispatch(AddCombination {
        coefficients: &coefficients,
        rows: &rows,
        vector,
    });
    true
}

fn single<T>(block: ArrayView2<'_, T>) -> Option<&[T]> {
    match block.nrows() {
        1 => block.index_axis_move(ndarray::Axis(0), 0).to_slice(),
        _ => None,
    }
}

fn contiguous<T>(rows: ArrayView2<'_, T>) -> Option<Vec<&[T]>> {
    let rows = (0..rows.nrows()).map(|k| rows.index_axis_move(ndarray::Axis(0), k).to_slice());
    rows.collect()
}

struct Overlaps<'a, T> {
    rows: &'a [&'a [T]],
    vector: &'a [T],
}

impl<T: Scalar> NullaryFnOnce for Overlaps<'_, T> {
    type Output = Vec<T>;

    #[inline(always)]
    fn call(self) -> Vec<T> {
        let mut overlaps = Vec::with_capacity(self.rows.len());
        for row in self.rows {
            overlaps.push(dot_product(row, self.vector));
        }
        overlaps
    }
}

#[inline(always)]
fn dot_product<T: Scalar>(row: &[T], vector: &[T]) -> T {
    let (chunks, rest) = vector.as_chunks::<LANES>();
    let (parts, tail) = row[..vector.len()].as_chunks::<LANES>();
    let mut sums = [T::zero(); LANES];
    for (v, w) in parts.iter().zip(chunks) {
        for j in 0..LANES {
            sums[j] = sums[j].plus_product(v[j].conj(), w[j]);
        }
    }
    let tail = tail.iter().zip(rest).map(|(v, &w)| v.conj() * w);
    sums.into_iter().sum::<T>() + tail.sum::<T>()
}

struct AddCombination<'a, T> {
    coefficients: &'a [T],
    rows: &'a [&'a [T]],
    vector: &'a mut [T],
}

impl<T: Scalar> NullaryFnOnce for AddCombination<'_, T> {
    type Output = ();

    #[inline(always)]
    fn call(self) {
        for (&factor, row) in self.coefficients.iter().zip(self.rows) {
            add_scaled(factor, row, self.vector);
        }
    }
}

#[inline(always)]
fn add_scaled<T: Scalar>(factor: T, row: &[T], vector: &mut [T]) {
    let (parts, tail) = row[..vector.len()].as_chunks::<LANES>();
    let (chunks, rest) = vector.as_chunks_mut::<LANES>();
    for (w, v) in chunks.iter_mut().zip(parts) {
        for j in 0..LANES {
            w[j] = w[j].plus_product(factor, v[j]);
        }
    }
    for (w, &v) in rest.iter_mut().zip(tail) {
        *w += factor * v;
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use approx::assert_abs_diff_eq;
    use ndarray::{Array2, s};
    use num_complex::Complex64;
    use rand::SeedableRng;
    use rand_chacha::ChaCha8Rng;

    fn check<T: Scalar>(rows: usize, length: usize) {
        let mut generator = ChaCha8Rng::seed_from_u64(rows as u64);
        let mut random = |shape: (usize, usize)| {
            Array2::<T>::from_shape_simple_fn(shape, || T::random_normal(&mut generator))
        };
        let (basis, block, factors) = (
            random((rows, length)),
            random((1, length)),
            random((1, rows)),
        );
        let expected = basis.mapv(T::conj).dot(&block.t());
        let found = overlaps(basis.view(), block.view()).unwrap();
        let expected_sum = &block - &factors.dot(&basis);
        let mut sum = block.clone();
        assert!(add_combination(
            -T::one(),
            factors.view(),
            basis.view(),
            &mut sum.view_mut()
        ));
        for (a, b) in found
            .iter()
            .zip(&expected)
            .chain(sum.iter().zip(&expected_sum))
        {
            assert_abs_diff_eq!((*a - *b).abs(), 0.0, epsilon = 1e-12);
        }
    }

    #[test]
    fn agree_with_general_products() {
        for rows in [0, 1, 3, 4, 9] {
            for length in [1, 7, 16, 17, 100] {
                check::<f64>(rows, length);
                check::<Complex64>(rows, length);
            }
        }
    }

    #[test]
    fn other_layouts_are_left_to_general_products() {
        let basis = Array2::<f64>::ones((3, 8));
        let strided = basis.slice(s![.., ..;2]);
        assert!(overlaps(strided, strided.slice(s![..1, ..])).is_none());
        assert!(overlaps(basis.view(), basis.view()).is_none());
    }
}
