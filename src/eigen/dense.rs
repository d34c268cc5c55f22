//! Small problems: the matrix from products with unit vectors, then LAPACK.

use super::multiplet::{Above, Goal, Level, error_bounds, fix_phases, multiplets};
use super::{LevelCount, LevelRequest, Levels, Status};
use crate::dense::{Conjugate, Threads, eigh_lowest, multiply};
use crate::error::Result;
use crate::linear_operator::LinearOperator;
use crate::progress::{Monitor, Progress};
use crate::scalar::Scalar;
use ndarray::{Array1, Array2, ArrayView2, Axis, s};

/// Rows multiplied at once.
const BLOCK: usize = 64;
const METHOD: &str = "dense";

/// Whether the request is served by a dense matrix: small, or moderate with many levels wanted.
pub(super) fn suits<T: Scalar>(dimension: usize, request: &LevelRequest<'_, T>) -> bool {
    let small = dimension <= request.dense_limit;
    let many = dimension / 4 <= request.dense_limit && request.levels >= dimension / 8;
    fits(dimension, request) && (small || many && request.dense_limit > 0)
}

/// Whether a dense matrix may take over from an iteration that has used twice its products.
pub(super) fn can_replace<T: Scalar>(dimension: usize, request: &LevelRequest<'_, T>) -> bool {
    let moderate = dimension / 4 <= request.dense_limit && request.dense_limit > 0;
    moderate && fits(dimension, request) && request.max_products >= 3 * dimension
}

fn fits<T: Scalar>(dimension: usize, request: &LevelRequest<'_, T>) -> bool {
    let bytes = 3 * dimension as u128 * dimension as u128 * size_of::<T>() as u128;
    request.memory_limit == 0 || bytes <= request.memory_limit as u128
}

/// The lowest levels from the full matrix; the count of levels is proved.
pub(super) fn lowest_levels<T: Scalar>(
    operator: &dyn LinearOperator<T>,
    request: &LevelRequest<'_, T>,
    monitor: &mut Monitor<'_>,
) -> Result<Levels<T>> {
    let n = operator.dimension();
    let Some(images) = images_of_unit_vectors(operator, request.levels, monitor)? else {
        return Ok(interrupted(n));
    };
    let matrix = images.t();
    let goal = Goal {
        levels: request.levels,
        most_extra: n,
        tolerance: request.tolerance,
        granted: 0.0,
    };
    // an upper bound of the norm
    let scale = images
        .rows()
        .into_iter()
        .map(|row| row.iter().map(|x| x.abs()).sum())
        .fold(0.0, f64::max);
    let mut count = (request.levels + 1).min(n);
    let (eigen, found, tolerance) = loop {
        let eigen = eigh_lowest(matrix, count)?;
        let levels: Vec<Level> = eigen.values.iter().map(|&energy| exact(energy)).collect();
        let tolerance = 2.0 * goal.residual_tolerance(&levels, scale);
        let values = eigen.values.as_slice().unwrap_or_default();
        let gap_after =
            |k: &usize| *k >= n || (*k < count && values[*k] - values[k - 1] > tolerance);
        match (request.levels..=count).find(gap_after) {
            Some(found) => break (eigen, found, tolerance),
            None => count = (2 * count).min(n),
        }
    };
    let residuals = residual_norms(matrix, eigen.vectors.view(), &eigen.values);
    let energies = eigen.values.slice(s![..found]).to_owned();
    let ranges = multiplets(&energies.to_vec(), tolerance);
    let rounding = 8.0 * f64::EPSILON * scale;
    let (above, next) = match eigen.values.get(found) {
        Some(&energy) => (Above::Level(energy, residuals[found]), Some(energy)),
        None => (Above::Nothing, None),
    };
    let bounds = error_bounds(
        &energies.to_vec(),
        &residuals[..found],
        &ranges,
        above,
        true,
        rounding,
    );
    let mut vectors = eigen
        .vectors
        .t()
        .slice(s![..found, ..])
        .as_standard_layout()
        .into_owned();
    fix_phases(&mut vectors);
    Ok(Levels {
        energies,
        vectors,
        error_bounds: bounds,
        next_energy: next,
        next_error: next.map(|_| residuals[found] + rounding),
        residuals: residuals[..found].iter().copied().collect(),
        multiplets: ranges,
        last_multiplet_complete: true,
        level_count: LevelCount::Proved,
        status: Status::Converged,
        products: n,
        method: METHOD,
    })
}

fn exact(energy: f64) -> Level {
    Level {
        energy,
        residual: 0.0,
        origin: 0,
    }
}

/// Row k is the image of unit vector k, the matrix's column k; none if the work was stopped.
fn images_of_unit_vectors<T: Scalar>(
    operator: &dyn LinearOperator<T>,
    levels: usize,
    monitor: &mut Monitor<'_>,
) -> Result<Option<Array2<T>>> {
    let n = operator.dimension();
    let mut images = Array2::zeros((n, n));
    let mut units = Array2::zeros((BLOCK.min(n), n));
    for (index, mut out) in images.axis_chunks_iter_mut(Axis(0), BLOCK).enumerate() {
        let (first, count) = (index * BLOCK, out.nrows());
        units.fill(T::zero());
        for k in 0..count {
            units[[k, first + k]] = T::one();
        }
        match operator.apply(units.slice(s![..count, ..]), out.view_mut()) {
            Err(crate::error::Error::Interrupted) => return Ok(None),
            other => other?,
        }
        let progress = Progress {
            stage: "matrix",
            done: 0,
            total: levels,
            products: first + count,
            residual: f64::INFINITY,
        };
        if monitor(&progress).is_break() {
            return Ok(None);
        }
    }
    Ok(Some(images))
}

fn residual_norms<T: Scalar>(
    matrix: ArrayView2<'_, T>,
    vectors: ArrayView2<'_, T>,
    values: &Array1<f64>,
) -> Vec<f64> {
    let mut difference = &vectors * &values.mapv(T::from_real);
    let (left, right) = ((matrix, Conjugate::No), (vectors, Conjugate::No));
    multiply(
        T::one(),
        left,
        right,
        -T::one(),
        difference.view_mut(),
        Threads::All,
    );
    let columns = difference.columns().into_iter();
    columns
        .map(|column| column.iter().map(|x| x.abs_sqr()).sum::<f64>().sqrt())
        .collect()
}

fn interrupted<T: Scalar>(dimension: usize) -> Levels<T> {
    Levels {
        energies: Array1::zeros(0),
        vectors: Array2::zeros((0, dimension)),
        residuals: Array1::zeros(0),
        error_bounds: Array1::zeros(0),
        next_energy: None,
        next_error: None,
        multiplets: Vec::new(),
        last_multiplet_complete: false,
        level_count: LevelCount::Unchecked,
        status: Status::Interrupted,
        products: 0,
        method: METHOD,
    }
}
