//! Products with a single long vector, which a general matrix product spends on packing.

use crate::scalar::Scalar;
use ndarray::{Array2, ArrayView2, ArrayViewMut2};
use pulp::NullaryFnOnce;

/// Numbers handled side by side: a few registers.
const LANES: usize = 16;
/// Rows handled together: one pass over the vector serves them all.
const GROUP: usize = 4;

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
        let (groups, rest) = self.rows.as_chunks::<GROUP>();
        for &group in groups {
            overlaps.extend(dot_products(group, self.vector));
        }
        for &row in rest {
            overlaps.extend(dot_products([row], self.vector));
        }
        overlaps
    }
}

#[inline(always)]
fn dot_products<T: Scalar, const N: usize>(rows: [&[T]; N], vector: &[T]) -> [T; N] {
    let (chunks, rest) = vector.as_chunks::<LANES>();
    let parts = rows.map(|row| row[..vector.len()].as_chunks::<LANES>());
    let mut sums = [[T::zero(); LANES]; N];
    for (c, w) in chunks.iter().enumerate() {
        for k in 0..N {
            let v = &parts[k].0[c];
            for j in 0..LANES {
                sums[k][j] = sums[k][j].plus_product(v[j].conj(), w[j]);
            }
        }
    }
    let mut totals = [T::zero(); N];
    for k in 0..N {
        let tail = parts[k].1.iter().zip(rest).map(|(v, &w)| v.conj() * w);
        totals[k] = sums[k].into_iter().sum::<T>() + tail.sum::<T>();
    }
    totals
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
        let (groups, rest) = self.rows.as_chunks::<GROUP>();
        let (factors, last) = self.coefficients.as_chunks::<GROUP>();
        for (&group, &factors) in groups.iter().zip(factors) {
            add_scaled(factors, group, self.vector);
        }
        for (&row, &factor) in rest.iter().zip(last) {
            add_scaled([factor], [row], self.vector);
        }
    }
}

#[inline(always)]
fn add_scaled<T: Scalar, const N: usize>(factors: [T; N], rows: [&[T]; N], vector: &mut [T]) {
    let length = vector.len();
    let parts = rows.map(|row| row[..length].as_chunks::<LANES>());
    let (chunks, rest) = vector.as_chunks_mut::<LANES>();
    for (c, chunk) in chunks.iter_mut().enumerate() {
        let mut sum = *chunk;
        for k in 0..N {
            let v = &parts[k].0[c];
            for j in 0..LANES {
                sum[j] = sum[j].plus_product(factors[k], v[j]);
            }
        }
        *chunk = sum;
    }
    for (j, x) in rest.iter_mut().enumerate() {
        for k in 0..N {
            *x += factors[k] * parts[k].1[j];
        }
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
