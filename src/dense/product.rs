//! Matrix products through the `gemm` crate: it picks its instruction set at run time and is
//! several times faster than a distribution's BLAS on processors newer than that BLAS.

use crate::scalar::Scalar;
use ndarray::{ArrayView2, ArrayViewMut2};

/// Whether a factor enters conjugated.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Conjugate {
    /// As it is.
    No,
    /// Element by element conjugated (not transposed).
    Yes,
}

/// How many threads a product may use.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Threads {
    /// The calling thread only; inside parallel loops.
    One,
    /// The current rayon pool.
    All,
}

/// out <- keep * out + factor * left * right, any strides.
///
/// # Panics
/// If the shapes do not fit each other.
pub fn multiply<T: Scalar>(
    factor: T,
    left: (ArrayView2<'_, T>, Conjugate),
    right: (ArrayView2<'_, T>, Conjugate),
    keep: T,
    out: ArrayViewMut2<'_, T>,
    threads: Threads,
) {
    let ((left, conjugate_left), (right, conjugate_right)) = (left, right);
    let ((m, k), n) = (left.dim(), right.ncols());
    assert_eq!(right.nrows(), k, "inner sizes of the product");
    assert_eq!(out.dim(), (m, n), "shape of the result");
    let parallelism = match threads {
        Threads::One => gemm::Parallelism::None,
        Threads::All => gemm::Parallelism::Rayon(0),
    };
    let mut out = out;
    // SAFETY: pointers and strides come from live views of the asserted shapes; `out` is a
    // unique borrow, so it overlaps neither factor.
    unsafe {
        gemm::gemm(
            m,
            n,
            k,
            out.as_mut_ptr(),
            out.strides()[1],
            out.strides()[0],
            keep != T::zero(),
            left.as_ptr(),
            left.strides()[1],
            left.strides()[0],
            right.as_ptr(),
            right.strides()[1],
            right.strides()[0],
            keep,
            factor,
            false,
            conjugate_left == Conjugate::Yes,
            conjugate_right == Conjugate::Yes,
            parallelism,
        );
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

    fn check<T: Scalar>() {
        let mut generator = ChaCha8Rng::seed_from_u64(5);
        let mut random = |m, n| Array2::from_shape_fn((m, n), |_| T::random_normal(&mut generator));
        for (m, k, n) in [(1, 1, 1), (3, 0, 2), (5, 17, 3), (33, 65, 31), (2, 301, 7)] {
            let (a, b, start) = (random(m, 2 * k + 1), random(n, k), random(m, n));
            // a strided left factor and a transposed, conjugated right one
            let left = a.slice(s![.., ..2 * k;2]);
            let right = b.t();
            let (factor, keep) = (T::from_real(1.5), T::from_real(-0.5));
            for threads in [Threads::One, Threads::All] {
                let mut out = start.clone();
                multiply(
                    factor,
                    (left, Conjugate::No),
                    (right, Conjugate::Yes),
                    keep,
                    out.view_mut(),
                    threads,
                );
                for ((i, j), &value) in out.indexed_iter() {
                    let sum: T = (0..k).map(|l| left[[i, l]] * right[[l, j]].conj()).sum();
                    let expected = keep * start[[i, j]] + factor * sum;
                    assert_abs_diff_eq!((value - expected).abs(), 0.0, epsilon = 1e-11);
                }
            }
        }
    }

    #[test]
    fn awkward_sizes_match_plain_loops() {
        check::<f64>();
        check::<Complex64>();
    }
}
