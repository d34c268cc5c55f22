//! Lowest levels of Hermitian operators, certified.
//!
//! [`lowest_levels`] knows only [`LinearOperator`]. Small problems go to LAPACK; large ones to a
//! block Lanczos iteration with thick restarts (through a polynomial filter where vectors are
//! long), followed by a search for missed levels in the orthogonal complement of what was found.

mod certify;
mod dense;
mod filter;
mod filtering;
mod lanczos;
mod multiplet;
mod orthogonal;
mod probe;
mod ritz;
mod search;
mod single;
mod whitening;

use crate::error::{Error, Result};
use crate::linear_operator::LinearOperator;
use crate::progress::Monitor;
use crate::scalar::Scalar;
use ndarray::{Array1, Array2, ArrayView2};
use search::LONG_VECTOR;
use std::ops::Range;

/// What [`lowest_levels`] is asked for.
#[derive(Debug, Clone)]
pub struct LevelRequest<'a, T> {
    /// Number of levels wanted, r >= 1.
    pub levels: usize,
    /// A level counts as converged when its residual norm |H x - E x| is at most this times the
    /// largest |E| of the levels found, or first taken for them (at least 1 % of the operator's
    /// norm), or at rounding level of that norm. Levels closer than twice that are one multiplet.
    /// Nothing depends on the unit of energy.
    pub tolerance: f64,
    /// Rows to start from, `(k, dimension)`; random rows are always added.
    pub start: Option<ArrayView2<'a, T>>,
    /// Seed of all random numbers.
    pub seed: u64,
    /// The iteration stops as not converged before it exceeds this number of products (but the
    /// first block is always multiplied).
    pub max_products: usize,
    /// Bytes for the basis; 0 stands for what the iteration likes (about 24 vectors for a few
    /// levels, more where they are short, 2r + 6 for many levels).
    pub memory_limit: usize,
    /// Dimension up to which a dense matrix is diagonalised; up to four times that, if the
    /// iteration does not converge in twice as many products as a dense matrix takes.
    pub dense_limit: usize,
}

impl<T> LevelRequest<'_, T> {
    /// The usual settings for `levels` levels.
    pub fn new(levels: usize) -> Self {
        LevelRequest {
            levels,
            tolerance: 1e-10,
            start: None,
            seed: 0,
            max_products: usize::MAX,
            memory_limit: 0,
            dense_limit: 600,
        }
    }
}

/// How sure it is that no level below those found is missing.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum LevelCount {
    /// The whole space was diagonalised.
    Proved,
    /// A search from a random start in the orthogonal complement found nothing.
    Probed {
        /// Bound on the probability that this search overlooks a missed level.
        failure_probability: f64,
    },
    /// Nothing is known.
    Unchecked,
}

/// How the work ended.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Status {
    /// All levels reached the tolerance.
    Converged,
    /// The allowed products were used up, or rounding forbids the tolerance.
    NotConverged,
    /// The monitor, or the operator, stopped the work.
    Interrupted,
}

/// The lowest levels, or the best approximations to them if `status` is not converged.
#[derive(Debug, Clone)]
pub struct Levels<T> {
    /// Increasing: those wanted, then those that complete the last multiplet.
    pub energies: Array1<f64>,
    /// One row a level, orthonormal; the first component within 1e-8 of the largest is real and
    /// positive.
    pub vectors: Array2<T>,
    /// Residual norms |H x - E x|.
    pub residuals: Array1<f64>,
    /// Bounds on the distance of each energy to the operator's spectrum: the residual norm, or
    /// the Kato-Temple bound (squared residuals over the gap) where it is smaller and the level
    /// count was checked; plus a rounding term.
    pub error_bounds: Array1<f64>,
    /// The first level above the last multiplet; none if there is none or it was not found.
    pub next_energy: Option<f64>,
    /// Its residual norm, which bounds its error. Looking ahead stops at a residual norm of
    /// sqrt(tolerance) (1e-3 at most) relative to the levels, and of a tenth of the gap.
    pub next_error: Option<f64>,
    /// Ranges of levels that are equal within tolerance.
    pub multiplets: Vec<Range<usize>>,
    /// Whether the last multiplet is known to end with the last level.
    pub last_multiplet_complete: bool,
    /// How sure it is that no level is missing.
    pub level_count: LevelCount,
    /// How the work ended.
    pub status: Status,
    /// Products of the operator with a vector.
    pub products: usize,
    /// "dense" or "block Lanczos".
    pub method: &'static str,
}

/// The lowest levels of a Hermitian operator.
///
/// Levels beyond those wanted are added until the last multiplet is complete (at most
/// max(16, r) when iterating), and one more is looked at. The monitor is called from the
/// calling thread once a block step. Not converging and being interrupted are a status.
///
/// # Errors
/// [`Error::Argument`] for a request that makes no sense, [`Error::Memory`] if the basis does
/// not fit, [`Error::Lapack`].
pub fn lowest_levels<T: Scalar>(
    operator: &dyn LinearOperator<T>,
    request: &LevelRequest<'_, T>,
    monitor: &mut Monitor<'_>,
) -> Result<Levels<T>> {
    validate(operator.dimension(), request)?;
    if dense::suits(operator.dimension(), request) {
        return dense::lowest_levels(operator, request, monitor);
    }
    if !dense::can_replace(operator.dimension(), request) {
        return search::lowest_levels(operator, request, LONG_VECTOR, monitor);
    }
    let patience = LevelRequest {
        max_products: 2 * operator.dimension(),
        ..request.clone()
    };
    let mut iterated = search::lowest_levels(operator, &patience, LONG_VECTOR, monitor)?;
    let certain = iterated.level_count != LevelCount::Unchecked;
    if iterated.status == Status::Interrupted || iterated.status == Status::Converged && certain {
        return Ok(iterated);
    }
    let mut levels = dense::lowest_levels(operator, request, monitor)?;
    if levels.status == Status::Interrupted {
        iterated.status = Status::Interrupted;
        return Ok(iterated);
    }
    levels.products += iterated.products;
    Ok(levels)
}

fn validate<T: Scalar>(dimension: usize, request: &LevelRequest<'_, T>) -> Result<()> {
    if request.levels == 0 || request.levels > dimension {
        let expected = format!("between 1 and the dimension, {dimension}");
        return Err(Error::argument("levels", request.levels, expected));
    }
    if !(request.tolerance.is_finite() && request.tolerance > 0.0) {
        let expected = "a positive number, such as 1e-10";
        return Err(Error::argument("tolerance", request.tolerance, expected));
    }
    if let Some(start) = &request.start {
        if start.ncols() != dimension {
            let expected = format!("rows of length {dimension}, the dimension");
            let given = format!("an array of shape {:?}", start.dim());
            return Err(Error::argument("start", given, expected));
        }
        if start.iter().any(|x| !x.is_finite()) {
            return Err(Error::argument(
                "start",
                "NaN or infinity",
                "finite numbers",
            ));
        }
    }
    Ok(())
}

#[cfg(test)]
mod tests;
