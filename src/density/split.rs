//! Density matrices of spinless particles from the product structure of low and high modes.

use super::one_body::{completed, overlap};
use crate::error::Result;
use crate::operator::{HalfSpaces, ModeSpace};
use crate::scalar::Scalar;
use ndarray::{Array2, ArrayView1, ArrayView2, s};
use rayon::prelude::*;

/// Configurations of one group that one task visits.
const PER_TASK: usize = 16;

/// Whether the groups are large enough to be worth it.
pub(super) fn suits(space: &ModeSpace) -> bool {
    space.modes() > 1 && space.dimension() >= 1000.max(50 * (space.particles() + 1))
}

/// gamma of one vector.
pub(super) fn of_low_and_high<T: Scalar>(
    space: &ModeSpace,
    vector: ArrayView1<'_, T>,
) -> Result<Array2<T>> {
    let halves = HalfSpaces::new(space)?;
    let (modes, low_modes) = (space.modes(), halves.low_modes());
    let classes = (0..halves.classes())
        .map(|class| class_matrix(&halves, class, vector))
        .collect::<Result<Vec<_>>>()?;
    let mut parts = Vec::new();
    for (class, rows) in classes.iter().enumerate() {
        let (low, high) = halves.spaces(class);
        let columns = rows.t().as_standard_layout().into_owned();
        let mut gamma = Array2::zeros((modes, modes));
        let mut add = |modes: std::ops::Range<usize>, part: Array2<T>| {
            let mut block = gamma.slice_mut(s![modes.clone(), modes]);
            block += &part;
        };
        let (range_low, range_high) = halves.ranges();
        add(range_low, within(low, columns.view())?);
        add(range_high, within(high, rows.view())?);
        parts.push(gamma);
        if let Some(from) = halves.neighbour(class, true) {
            let across = across(&halves, class, rows.view(), from, classes[from].view())?;
            let mut gamma = Array2::zeros((modes, modes));
            gamma
                .slice_mut(s![low_modes.., ..low_modes])
                .assign(&across);
            parts.push(gamma);
        }
    }
    Ok(completed(parts, modes))
}

/// The segments of a class as the rows of a matrix.
fn class_matrix<T: Scalar>(
    halves: &HalfSpaces<'_>,
    class: usize,
    vector: ArrayView1<'_, T>,
) -> Result<Array2<T>> {
    let width = halves.spaces(class).0.dimension();
    let segments = halves.segments(class)?;
    let mut rows = Array2::zeros((segments.len(), width));
    for (&start, mut row) in segments.iter().zip(rows.rows_mut()) {
        row.assign(&vector.slice(s![start..start + width]));
    }
    Ok(rows)
}

/// Lower triangle of <a+_q a_p> within one group; a row for each of its configurations.
fn within<T: Scalar>(group: &ModeSpace, rows: ArrayView2<'_, T>) -> Result<Array2<T>> {
    let modes = group.modes();
    let parts: Result<Vec<Array2<T>>> = (0..group.dimension().div_ceil(PER_TASK))
        .into_par_iter()
        .map(|task| {
            let first = task * PER_TASK;
            let mut gamma = Array2::zeros((modes, modes));
            let mut walker = group.walker(first)?;
            for from in first..(first + PER_TASK).min(group.dimension()) {
                for &p in walker.occupied() {
                    let p = p as usize;
                    for q in 0..=p {
                        if let Some((target, factor)) = walker.hop(q, p) {
                            gamma[[p, q]] += overlap(rows.row(target), rows.row(from)) * factor;
                        }
                    }
                }
                walker.advance();
            }
            Ok(gamma)
        })
        .collect();
    let mut total = Array2::zeros((modes, modes));
    for part in parts? {
        total += &part;
    }
    Ok(total)
}

/// gamma_pq = <a+_q a_p> for p high and q low: the adjoint of <a+_p a_q>, which leads from class
/// `from` into `class`.
fn across<T: Scalar>(
    halves: &HalfSpaces<'_>,
    class: usize,
    rows: ArrayView2<'_, T>,
    from: usize,
    other_rows: ArrayView2<'_, T>,
) -> Result<Array2<T>> {
    let (low, high) = halves.spaces(class);
    let (other_low, other_high) = halves.spaces(from);
    let passing = halves.passing_sign(class, true);
    let annihilations = (0..low.modes())
        .map(|q| low.ladder_row(other_low, q, false))
        .collect::<Result<Vec<_>>>()?;
    let creations = (0..high.modes())
        .map(|p| high.ladder_row(other_high, p, true))
        .collect::<Result<Vec<_>>>()?;
    let elements: Vec<Vec<T>> = creations
        .par_iter()
        .map(|creation| {
            let mut sums = vec![T::zero(); annihilations.len()];
            for (target, source) in creation.iter().enumerate() {
                let Some((source, factor)) = *source else {
                    continue;
                };
                let (bra, ket) = (rows.row(target), other_rows.row(source as usize));
                for (sum, annihilation) in sums.iter_mut().zip(&annihilations) {
                    let mut total = T::zero();
                    for (x, from) in bra.iter().zip(annihilation) {
                        if let &Some((a, low_factor)) = from {
                            total += x.conj() * ket[a as usize] * low_factor;
                        }
                    }
                    *sum += total.conj() * (factor * passing);
                }
            }
            sums
        })
        .collect();
    Ok(Array2::from_shape_fn(
        (high.modes(), low.modes()),
        |(p, q)| elements[p][q],
    ))
}
