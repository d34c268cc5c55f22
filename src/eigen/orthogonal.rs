//! Block Gram-Schmidt on row-major blocks, in sweeps over column chunks.
//!
//! Out of cache these kernels are bound by memory, so each sweep reads the basis once and does
//! all it can with a chunk while that lies in cache. Partial sums are added in the order of the
//! chunks: results do not depend on the number of threads.
//!
//! A basis is a `(rows, n)` array V with orthonormal rows, a block a `(p, n)` array W; their
//! overlaps are the `(rows, p)` matrix <v_i, w_a>.

use super::single;
use super::whitening::Whitening;
use crate::dense::{Conjugate, Threads, multiply};
use crate::error::Result;
use crate::scalar::Scalar;
use ndarray::parallel::prelude::*;
use ndarray::{Array2, ArrayView2, ArrayViewMut1, ArrayViewMut2, Axis, s};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;

/// Columns handled at once: two dozen rows of them fit in a second-level cache.
const CHUNK: usize = 4096;
/// Largest overlap with the basis, and deviation of a Gram matrix from one, that ever passes.
pub(super) const ORTHOGONALITY: f64 = 1e-12;
/// The same that two sweeps always reach.
const BEST_ORTHOGONALITY: f64 = 1e-14;
/// Ratio of Gram eigenvalues beyond which overlaps are measured anew, not predicted.
const WELL_CONDITIONED: f64 = 1e-6;
/// Sweeps after which a block is taken as it is.
const MOST_SWEEPS: usize = 8;

/// What one sweep measures on the block it leaves behind.
pub(super) struct Measured<T> {
    pub overlaps: Array2<T>,
    pub gram: Array2<T>,
}

/// W = C^T V + B^T Q: a block split into its part inside the basis and new orthonormal rows Q.
pub(super) struct Split<T> {
    /// C, `(rows of V, rows of W)`.
    pub inside: Array2<T>,
    /// B, `(rows of Q, rows of W)`; the rows of random replacements are zero.
    pub outside: Array2<T>,
}

pub(super) fn conjugate_product<T: Scalar>(
    left: ArrayView2<'_, T>,
    right: ArrayView2<'_, T>,
) -> Array2<T> {
    if let Some(overlaps) = single::overlaps(left, right) {
        return overlaps;
    }
    let mut out = Array2::zeros((left.nrows(), right.nrows()));
    if !out.is_empty() {
        multiply(
            T::one(),
            (left, Conjugate::Yes),
            (right.t(), Conjugate::No),
            T::zero(),
            out.view_mut(),
            Threads::One,
        );
    }
    out
}

/// The overlaps <v_i, w_a> and the Gram matrix <w_a, w_b>.
fn measure<T: Scalar>(basis: ArrayView2<'_, T>, block: ArrayView2<'_, T>) -> Measured<T> {
    let partial: Vec<_> = chunks(basis)
        .zip(chunks(block))
        .map(|(v, w)| (conjugate_product(v, w), conjugate_product(w, w)))
        .collect();
    total(partial, basis.nrows(), block.nrows())
}

/// The overlaps <v_i, w_a>.
pub(super) fn overlaps<T: Scalar>(basis: ArrayView2<'_, T>, block: ArrayView2<'_, T>) -> Array2<T> {
    measure(basis, block).overlaps
}

fn chunks<T: Scalar>(
    matrix: ArrayView2<'_, T>,
) -> impl IndexedParallelIterator<Item = ArrayView2<'_, T>> {
    let count = matrix.ncols().div_ceil(CHUNK);
    (0..count).into_par_iter().map(move |k| {
        let end = ((k + 1) * CHUNK).min(matrix.ncols());
        matrix.slice_move(s![.., k * CHUNK..end])
    })
}

/// Adds what the chunks measured, in their order.
fn total<T: Scalar>(
    partial: Vec<(Array2<T>, Array2<T>)>,
    rows: usize,
    width: usize,
) -> Measured<T> {
    let zero = Measured {
        overlaps: Array2::zeros((rows, width)),
        gram: Array2::zeros((width, width)),
    };
    partial
        .into_iter()
        .fold(zero, |sum, (overlaps, gram)| Measured {
            overlaps: sum.overlaps + overlaps,
            gram: sum.gram + gram,
        })
}

/// Product of small matrices, on the calling thread, into `out`.
fn multiply_into<T: Scalar>(
    factor: T,
    left: ArrayView2<'_, T>,
    right: ArrayView2<'_, T>,
    keep: T,
    mut out: ArrayViewMut2<'_, T>,
) {
    if out.is_empty() || right.is_empty() {
        return;
    }
    if keep == T::one() && single::add_combination(factor, left, right, &mut out) {
        return;
    }
    let (left, right) = ((left, Conjugate::No), (right, Conjugate::No));
    multiply(factor, left, right, keep, out, Threads::One);
}

/// W <- M W - D^T V, with D given for the last rows of V only; measures what comes out.
///
/// M may have fewer rows than W: the rows of W beyond are left without meaning.
fn sweep<T: Scalar>(
    basis: ArrayView2<'_, T>,
    mut block: ArrayViewMut2<'_, T>,
    transform: Option<&Array2<T>>,
    subtract: Option<&Array2<T>>,
    measure_overlaps: bool,
) -> Measured<T> {
    let width = transform.map_or(block.nrows(), Array2::nrows);
    let rows = if measure_overlaps { basis.nrows() } else { 0 };
    let partial: Vec<(Array2<T>, Array2<T>)> = block
        .axis_chunks_iter_mut(Axis(1), CHUNK)
        .into_par_iter()
        .zip(chunks(basis))
        .map(|(mut whole, v)| {
            if let Some(matrix) = transform {
                if whole.nrows() == 1 && width == 1 {
                    whole.mapv_inplace(|x| matrix[[0, 0]] * x);
                } else {
                    let before = whole.to_owned();
                    let w = whole.slice_mut(s![..width, ..]);
                    multiply_into(T::one(), matrix.view(), before.view(), T::zero(), w);
                }
            }
            let mut w = whole.slice_mut(s![..width, ..]);
            if let Some(matrix) = subtract {
                let last = v.slice(s![v.nrows() - matrix.nrows().., ..]);
                multiply_into(-T::one(), matrix.t(), last, T::one(), w.view_mut());
            }
            let overlaps = conjugate_product(v.slice(s![..rows, ..]), w.view());
            (overlaps, conjugate_product(w.view(), w.view()))
        })
        .collect();
    total(partial, rows, width)
}

/// Subtracts from the block its part inside the basis, once; the coefficients subtracted, and
/// what is measured on the block afterwards.
///
/// `leak` holds the overlaps of the first rows of the basis with its last ones. Without regard
/// to it, subtracting those last rows would bring back what they contain of the first ones: in a
/// three-term recurrence that grows step by step.
pub(super) fn subtract_basis<T: Scalar>(
    basis: ArrayView2<'_, T>,
    block: ArrayViewMut2<'_, T>,
    leak: ArrayView2<'_, T>,
) -> (Array2<T>, Measured<T>) {
    let mut inside = overlaps(basis, block.view());
    let (mut first, last) = inside.view_mut().split_at(Axis(0), leak.nrows());
    first -= &leak.dot(&last);
    let after = sweep(basis, block, None, Some(&inside), true);
    (inside, after)
}

/// The first rows of the basis <- Y^T V, in place: column k of Y holds the coefficients of row k.
pub(super) fn rotate<T: Scalar>(mut basis: ArrayViewMut2<'_, T>, coefficients: ArrayView2<'_, T>) {
    basis
        .axis_chunks_iter_mut(Axis(1), CHUNK)
        .into_par_iter()
        .for_each(|mut chunk| {
            let before = chunk.to_owned();
            let rows = chunk.slice_mut(s![..coefficients.ncols(), ..]);
            multiply_into(T::one(), coefficients.t(), before.view(), T::zero(), rows);
        });
}

fn largest<T: Scalar>(matrix: &Array2<T>) -> f64 {
    matrix.iter().map(|value| value.abs()).fold(0.0, f64::max)
}

fn deviation_from_one<T: Scalar>(gram: &Array2<T>) -> f64 {
    largest(&(gram - &Array2::<T>::eye(gram.nrows())))
}

/// Fills a row with random numbers, of norm one on average; each chunk has a stream of its own.
pub(super) fn fill_random<T: Scalar, R: Rng>(mut row: ArrayViewMut1<'_, T>, generator: &mut R) {
    let scale = 1.0 / (row.len() as f64).sqrt();
    let start = ChaCha8Rng::from_seed(generator.random());
    let chunks = row.axis_chunks_iter_mut(Axis(0), CHUNK).into_par_iter();
    chunks.enumerate().for_each(|(k, mut chunk)| {
        let mut generator = start.clone();
        generator.set_stream(k as u64);
        chunk.mapv_inplace(|_| T::random_normal(&mut generator) * scale);
    });
}

/// Replaces the rows whose weight in the original block is rounding noise; whether there were any.
fn replace_noise<T: Scalar, R: Rng>(
    mut block: ArrayViewMut2<'_, T>,
    outside: &mut Array2<T>,
    noise: f64,
    generator: &mut R,
) -> bool {
    let mut any = false;
    for (row, mut weights) in block.rows_mut().into_iter().zip(outside.rows_mut()) {
        let norm = weights.iter().map(|w| w.abs_sqr()).sum::<f64>().sqrt();
        if norm <= noise {
            weights.fill(T::zero());
            fill_random(row, generator);
            any = true;
        }
    }
    any
}

/// How [`orthonormalize`] is to treat a block.
pub(super) struct Purge {
    /// First row of the basis that the block is known to overlap with; earlier rows are
    /// measured, and subtracted only if need be.
    pub first_expected: usize,
    /// Norm up to which a row outside the basis counts as rounding noise.
    pub noise: f64,
    /// Largest overlap that may remain, within what is possible and usual.
    pub overlap: f64,
}

/// Splits the block into its part inside the basis and orthonormal rows, which replace it.
///
/// Rows lost to rank deficiency are replaced by random ones, as long as the space has room:
/// `outside.nrows()` rows of the block are valid afterwards. Overlaps are measured on the final
/// rows and removed until they vanish: two passes are enough (Daniel, Gragg, Kaufman and
/// Stewart, Math. Comp. 30, 772 (1976); recalled), and one often is.
///
/// # Errors
/// [`Error::Argument`] if the block has components that are not finite.
pub(super) fn orthonormalize<T: Scalar, R: Rng>(
    basis: ArrayView2<'_, T>,
    mut block: ArrayViewMut2<'_, T>,
    purge: &Purge,
    generator: &mut R,
) -> Result<Split<T>> {
    let room = basis.ncols() - basis.nrows();
    let passes = purge.overlap.clamp(BEST_ORTHOGONALITY, ORTHOGONALITY);
    let expected = measure(basis.slice(s![purge.first_expected.., ..]), block.view());
    let mut inside = Array2::zeros((basis.nrows(), block.nrows()));
    let mut rows = inside.slice_mut(s![purge.first_expected.., ..]);
    rows.assign(&expected.overlaps);
    let mut outside = Array2::<T>::eye(block.nrows());
    let mut measured = match Whitening::predicted(&expected, room)? {
        Some(Whitening {
            transform, inverse, ..
        }) => {
            outside = inverse;
            let subtract = expected.overlaps.dot(&transform.t());
            sweep(
                basis,
                block.view_mut(),
                Some(&transform),
                Some(&subtract),
                true,
            )
        }
        None => sweep(
            basis,
            block.view_mut(),
            None,
            Some(&expected.overlaps),
            true,
        ),
    };
    for count in 0..MOST_SWEEPS {
        let whitening = Whitening::new(&measured.gram, room)?;
        let remaining = measured.overlaps.dot(&whitening.transform.t());
        let width = whitening.transform.nrows();
        let aligned = largest(&remaining) <= passes;
        let complete = width == outside.nrows();
        if complete && aligned && deviation_from_one(&measured.gram) <= ORTHOGONALITY {
            break;
        }
        let measure = !aligned || whitening.condition < WELL_CONDITIONED;
        let subtract = (!aligned).then_some(&remaining);
        let rows = block.slice_mut(s![..outside.nrows(), ..]);
        measured = sweep(basis, rows, Some(&whitening.transform), subtract, measure);
        outside = whitening.inverse.dot(&outside);
        if !aligned {
            inside = inside + remaining.dot(&outside);
        }
        let rows = block.slice_mut(s![..width, ..]);
        if count < 3 && replace_noise(rows, &mut outside, purge.noise, generator) {
            measured = sweep(basis, block.slice_mut(s![..width, ..]), None, None, true);
        } else if !measure {
            measured.overlaps = remaining;
        }
    }
    Ok(Split { inside, outside })
}

#[cfg(test)]
mod tests {
    use super::*;
    use num_complex::Complex64;
    use rand::SeedableRng;
    use rand_chacha::ChaCha8Rng;

    fn random<T: Scalar>(rows: usize, n: usize, generator: &mut ChaCha8Rng) -> Array2<T> {
        let mut out = Array2::zeros((rows, n));
        for row in out.rows_mut() {
            fill_random(row, generator);
        }
        out
    }

    /// Splits `block` against `basis`; checks orthonormality and W = C^T V + B^T Q.
    fn check<T: Scalar>(basis: &Array2<T>, block: &Array2<T>) -> Split<T> {
        let mut generator = ChaCha8Rng::seed_from_u64(2);
        let purge = Purge {
            first_expected: 0,
            noise: 1e-15,
            overlap: ORTHOGONALITY,
        };
        let mut rows = block.clone();
        let split = orthonormalize(basis.view(), rows.view_mut(), &purge, &mut generator).unwrap();
        let new = rows.slice(s![..split.outside.nrows(), ..]);
        assert!(deviation_from_one(&overlaps(new, new)) < 2e-12);
        assert!(largest(&overlaps(basis.view(), new)) < 2e-12);
        let rebuilt = split.inside.t().dot(basis) + split.outside.t().dot(&new);
        assert!(largest(&(&rebuilt - block)) < 1e-13);
        split
    }

    fn cases<T: Scalar>() {
        let mut generator = ChaCha8Rng::seed_from_u64(1);
        let (n, none) = (2 * CHUNK + 17, Array2::zeros((0, 2 * CHUNK + 17)));
        let mut basis = random::<T>(3, n, &mut generator);
        let purge = Purge {
            first_expected: 0,
            noise: 0.0,
            overlap: ORTHOGONALITY,
        };
        orthonormalize(none.view(), basis.view_mut(), &purge, &mut generator).unwrap();
        let block = random::<T>(4, n, &mut generator);
        assert_eq!(check(&basis, &block).outside.nrows(), 4);
        // nearly inside the basis: cancellation in most digits
        let inside = random::<T>(4, 3, &mut generator).dot(&basis);
        check(&basis, &(&inside + &(&block * T::from_real(1e-9))));
        // dependent rows, and rows inside the basis or zero, give way to random ones
        let mut poor = block.clone();
        let twice = &poor.row(0) * T::from_real(2.0) + inside.row(0);
        poor.row_mut(1).assign(&twice);
        poor.row_mut(2).assign(&basis.row(1));
        poor.row_mut(3).fill(T::zero());
        assert_eq!(check(&basis, &poor).outside.nrows(), 4);
        check(&basis, &Array2::zeros((2, n)));
    }

    #[test]
    fn blocks_of_any_rank_are_split() {
        cases::<f64>();
        cases::<Complex64>();
    }

    #[test]
    fn a_full_space_has_no_room() {
        let mut generator = ChaCha8Rng::seed_from_u64(3);
        let basis = Array2::<f64>::eye(5).slice(s![..4, ..]).to_owned();
        let block = random::<f64>(3, 5, &mut generator);
        assert_eq!(check(&basis, &block).outside.nrows(), 1);
        let block = random::<f64>(2, 5, &mut generator);
        assert_eq!(check(&Array2::eye(5), &block).outside.nrows(), 0);
    }
}
