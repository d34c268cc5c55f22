//! Hermitian eigenproblems through LAPACK's `syevr` and `heevr`.
//!
//! These drivers compute only the levels asked for and are several times faster than the ones
//! that `ndarray-linalg` calls. LAPACK is handed column-major storage always: a row-major
//! complex Hermitian matrix would be read as its conjugate.

// links the system's OpenBLAS
use ndarray_linalg as _;

use crate::error::{Error, Result};
use crate::scalar::Scalar;
use ndarray::{Array1, Array2, ArrayView2, ShapeBuilder};
use num_complex::Complex64;
use std::any::TypeId;
use std::ffi::{c_char, c_int};
use std::sync::Once;

/// Eigenvalues in increasing order and the eigenvectors as columns.
#[derive(Debug, Clone)]
pub struct DenseEigen<T> {
    /// Eigenvalues, increasing.
    pub values: Array1<f64>,
    /// Column k belongs to eigenvalue k.
    pub vectors: Array2<T>,
}

unsafe extern "C" {
    fn openblas_set_num_threads(count: c_int);
}

/// Sets the linked BLAS to one thread: inside rayon more would only compete.
pub fn single_threaded_blas() {
    static ONCE: Once = Once::new();
    // SAFETY: the function only stores a number; it is called once, before any BLAS work of ours.
    ONCE.call_once(|| unsafe { openblas_set_num_threads(1) });
}

/// All eigenpairs of a Hermitian matrix.
///
/// # Errors
/// [`Error::Lapack`] if the routine fails or the matrix is too large for its 32-bit sizes.
pub fn eigh<T: Scalar>(matrix: ArrayView2<'_, T>) -> Result<DenseEigen<T>> {
    eigh_lowest(matrix, matrix.nrows())
}

/// The `count` lowest eigenpairs of a Hermitian matrix (the lower triangle is read).
///
/// # Errors
/// [`Error::Lapack`] if the routine fails or the matrix is too large for its 32-bit sizes.
pub fn eigh_lowest<T: Scalar>(matrix: ArrayView2<'_, T>, count: usize) -> Result<DenseEigen<T>> {
    debug_assert_eq!(matrix.nrows(), matrix.ncols());
    let n = matrix.nrows();
    let count = count.min(n);
    if n == 0 || count == 0 {
        return Ok(DenseEigen {
            values: Array1::zeros(0),
            vectors: Array2::zeros((n, 0)),
        });
    }
    single_threaded_blas();
    let storage: Vec<T> = matrix.t().iter().copied().collect();
    let (values, vectors) = if TypeId::of::<T>() == TypeId::of::<f64>() {
        let (values, vectors) = real_driver(cast_all(storage), n, count)?;
        (values, cast_all(vectors))
    } else {
        let (values, vectors) = complex_driver(cast_all(storage), n, count)?;
        (values, cast_all(vectors))
    };
    let vectors = Array2::from_shape_vec((n, count).f(), vectors)
        .map_err(|_| lapack_failure("shape of eigenvectors", -1))?;
    Ok(DenseEigen {
        values: Array1::from(values),
        vectors,
    })
}

/// Elements from one scalar type into another that holds them without loss.
fn cast_all<S: Scalar, T: Scalar>(values: Vec<S>) -> Vec<T> {
    values
        .into_iter()
        .filter_map(|value| T::from_complex(value.to_complex()))
        .collect()
}

fn lapack_failure(routine: &'static str, info: i32) -> Error {
    Error::Lapack { routine, info }
}

/// The arguments that both drivers share.
struct Request {
    size: c_int,
    range: c_char,
    lowest: c_int,
    highest: c_int,
    tolerance: f64,
}

impl Request {
    fn new(n: usize, count: usize, routine: &'static str) -> Result<Self> {
        let as_int = |value: usize| c_int::try_from(value).map_err(|_| lapack_failure(routine, -1));
        Ok(Request {
            size: as_int(n)?,
            range: if count == n { b'A' } else { b'I' } as c_char,
            lowest: 1,
            highest: as_int(count)?,
            tolerance: 0.0,
        })
    }
}

const WITH_VECTORS: c_char = b'V' as c_char;
const LOWER: c_char = b'L' as c_char;

fn real_driver(mut a: Vec<f64>, n: usize, count: usize) -> Result<(Vec<f64>, Vec<f64>)> {
    const ROUTINE: &str = "dsyevr";
    let request = Request::new(n, count, ROUTINE)?;
    let mut values = vec![0.0; n];
    let mut vectors = vec![0.0; n * count];
    let mut support = vec![0 as c_int; 2 * n];
    let mut call = |work: &mut [f64], lwork: c_int, iwork: &mut [c_int], liwork: c_int| {
        let (mut found, mut info) = (0, 0);
        // SAFETY: all pointers come from live buffers whose sizes are those LAPACK documents:
        // a n*n, values n, vectors n*count, support 2n, work and iwork as announced.
        unsafe {
            lapack_sys::dsyevr_(
                &WITH_VECTORS,
                &request.range,
                &LOWER,
                &request.size,
                a.as_mut_ptr(),
                &request.size,
                &0.0,
                &0.0,
                &request.lowest,
                &request.highest,
                &request.tolerance,
                &mut found,
                values.as_mut_ptr(),
                vectors.as_mut_ptr(),
                &request.size,
                support.as_mut_ptr(),
                work.as_mut_ptr(),
                &lwork,
                iwork.as_mut_ptr(),
                &liwork,
                &mut info,
            );
        }
        if info == 0 {
            Ok(found)
        } else {
            Err(lapack_failure(ROUTINE, info))
        }
    };
    let (mut size, mut isize) = ([0.0], [0]);
    call(&mut size, -1, &mut isize, -1)?;
    let (lwork, liwork) = (size[0] as c_int, isize[0]);
    let found = call(
        &mut vec![0.0; lwork as usize],
        lwork,
        &mut vec![0; liwork as usize],
        liwork,
    )?;
    complete(ROUTINE, found, count)?;
    values.truncate(count);
    Ok((values, vectors))
}

fn complex_driver(
    mut a: Vec<Complex64>,
    n: usize,
    count: usize,
) -> Result<(Vec<f64>, Vec<Complex64>)> {
    const ROUTINE: &str = "zheevr";
    let request = Request::new(n, count, ROUTINE)?;
    let mut values = vec![0.0; n];
    let mut vectors = vec![Complex64::default(); n * count];
    let mut support = vec![0 as c_int; 2 * n];
    let mut call = |work: &mut [Complex64], rwork: &mut [f64], iwork: &mut [c_int], query: bool| {
        let length = |size: usize| if query { -1 } else { size as c_int };
        let (lwork, lrwork, liwork) =
            (length(work.len()), length(rwork.len()), length(iwork.len()));
        let (mut found, mut info) = (0, 0);
        // SAFETY: as for the real driver; Complex64 has the layout of LAPACK's complex numbers.
        unsafe {
            lapack_sys::zheevr_(
                &WITH_VECTORS,
                &request.range,
                &LOWER,
                &request.size,
                a.as_mut_ptr().cast(),
                &request.size,
                &0.0,
                &0.0,
                &request.lowest,
                &request.highest,
                &request.tolerance,
                &mut found,
                values.as_mut_ptr(),
                vectors.as_mut_ptr().cast(),
                &request.size,
                support.as_mut_ptr(),
                work.as_mut_ptr().cast(),
                &lwork,
                rwork.as_mut_ptr(),
                &lrwork,
                iwork.as_mut_ptr(),
                &liwork,
                &mut info,
            );
        }
        if info == 0 {
            Ok(found)
        } else {
            Err(lapack_failure(ROUTINE, info))
        }
    };
    let (mut size, mut rsize, mut isize) = ([Complex64::default()], [0.0], [0]);
    call(&mut size, &mut rsize, &mut isize, true)?;
    let found = call(
        &mut vec![Complex64::default(); size[0].re as usize],
        &mut vec![0.0; rsize[0] as usize],
        &mut vec![0; isize[0] as usize],
        false,
    )?;
    complete(ROUTINE, found, count)?;
    values.truncate(count);
    Ok((values, vectors))
}

fn complete(routine: &'static str, found: c_int, count: usize) -> Result<()> {
    if usize::try_from(found) == Ok(count) {
        Ok(())
    } else {
        Err(lapack_failure(routine, found))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use approx::assert_abs_diff_eq;
    use rand::SeedableRng;
    use rand_chacha::ChaCha8Rng;

    fn random_hermitian<T: Scalar>(n: usize, seed: u64) -> Array2<T> {
        let mut generator = ChaCha8Rng::seed_from_u64(seed);
        let a = Array2::from_shape_fn((n, n), |_| T::random_normal(&mut generator));
        Array2::from_shape_fn((n, n), |(i, j)| (a[[i, j]] + a[[j, i]].conj()) * 0.5)
    }

    /// Largest element of A V - V diag(values), and of V^H V - 1.
    fn defects<T: Scalar>(a: &Array2<T>, eigen: &DenseEigen<T>) -> (f64, f64) {
        let largest = |m: Array2<T>| m.iter().map(|x| x.abs()).fold(0.0, f64::max);
        let values = eigen.values.mapv(T::from_real);
        let v = &eigen.vectors;
        let overlap = v.t().mapv(T::conj).dot(v);
        (
            largest(a.dot(v) - v * &values),
            largest(overlap - Array2::<T>::eye(v.ncols())),
        )
    }

    fn check<T: Scalar>() {
        for (n, count) in [(1, 1), (2, 1), (7, 7), (40, 5), (40, 40)] {
            let a = random_hermitian::<T>(n, 3);
            // both storage orders: one of them reads as the conjugate when handled wrongly
            for matrix in [
                a.clone(),
                a.t().as_standard_layout().reversed_axes().to_owned(),
            ] {
                let eigen = eigh_lowest(matrix.view(), count).unwrap();
                let (residual, overlap) = defects(&matrix, &eigen);
                assert_abs_diff_eq!(residual, 0.0, epsilon = 1e-12 * n as f64);
                assert_abs_diff_eq!(overlap, 0.0, epsilon = 1e-13 * n as f64);
                assert!(eigen.values.windows(2).into_iter().all(|w| w[0] <= w[1]));
            }
        }
    }

    #[test]
    fn real_eigenpairs() {
        check::<f64>();
    }

    #[test]
    fn complex_eigenpairs() {
        check::<Complex64>();
    }
}
