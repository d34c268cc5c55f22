//! One-body density matrices of states given as vectors.

use super::split;
use crate::error::{Error, Result};
use crate::operator::{HopTable, ModeSpace};
use crate::scalar::Scalar;
use crate::sector::Sector;
use ndarray::{Array2, Array4, ArrayView1, ArrayView2};
use rayon::prelude::*;

/// Configurations that one task visits.
const ROWS_PER_TASK: usize = 4096;
/// Configurations of one spin that one task visits.
const STRINGS_PER_TASK: usize = 16;

/// Density matrices `(states, spins, d, d)` of the rows of `vectors`.
///
/// # Errors
/// [`crate::error::Error::TooManyConfigurations`] beyond 64-bit indices.
pub fn state_density_matrices<T: Scalar>(
    sector: &Sector,
    vectors: ArrayView2<'_, T>,
) -> Result<Array4<T>> {
    let modes = sector.modes();
    let spaces = ModeSpace::of(sector)?;
    let mut gamma = Array4::zeros((vectors.nrows(), sector.spins(), modes, modes));
    for (vector, mut of_state) in vectors.outer_iter().zip(gamma.outer_iter_mut()) {
        let mut of_spins = of_state.outer_iter_mut();
        match spaces.as_slice() {
            [up, down] => {
                // a row for each up configuration; its transpose has one for each down one
                let shape = (up.dimension(), down.dimension());
                let rows = vector
                    .to_shape(shape)
                    .map_err(|_| shape_error(vector.len(), shape))?;
                for (space, view) in [(up, rows.view()), (down, rows.t())] {
                    if let Some(mut target) = of_spins.next() {
                        target.assign(&of_strings(space, view)?);
                    }
                }
            }
            _ => {
                if let (Some(space), Some(mut target)) = (spaces.first(), of_spins.next()) {
                    let gamma = if split::suits(space) {
                        split::of_low_and_high(space, vector)?
                    } else {
                        of_configurations(space, vector)?
                    };
                    target.assign(&gamma);
                }
            }
        }
    }
    Ok(gamma)
}

pub(super) fn shape_error(length: usize, (up, down): (usize, usize)) -> Error {
    let expected = format!("{up} x {down} components, the dimension of the sector");
    Error::argument("vectors", format!("{length} components"), expected)
}

/// Spinless particles: a hop from each configuration at a time.
fn of_configurations<T: Scalar>(space: &ModeSpace, vector: ArrayView1<'_, T>) -> Result<Array2<T>> {
    let modes = space.modes();
    let tasks = space.dimension().div_ceil(ROWS_PER_TASK);
    let parts: Result<Vec<Array2<T>>> = (0..tasks)
        .into_par_iter()
        .map(|task| {
            let first = task * ROWS_PER_TASK;
            let last = (first + ROWS_PER_TASK).min(space.dimension());
            let mut gamma = Array2::zeros((modes, modes));
            let mut walker = space.walker(first)?;
            for index in first..last {
                for p in 0..modes {
                    // the other triangle is the adjoint
                    for q in 0..=p {
                        if let Some((target, factor)) = walker.hop(q, p) {
                            gamma[[p, q]] += vector[target].conj() * vector[index] * factor;
                        }
                    }
                }
                walker.advance();
            }
            Ok(gamma)
        })
        .collect();
    Ok(completed(parts?, modes))
}

/// One spin: the overlap of whole rows for each hop between its configurations.
fn of_strings<T: Scalar>(space: &ModeSpace, rows: ArrayView2<'_, T>) -> Result<Array2<T>> {
    let modes = space.modes();
    let hops = HopTable::new(space)?;
    let rows = rows.as_standard_layout();
    let tasks = space.dimension().div_ceil(STRINGS_PER_TASK);
    let parts: Vec<Array2<T>> = (0..tasks)
        .into_par_iter()
        .map(|task| {
            let mut gamma = Array2::zeros((modes, modes));
            for target in
                task * STRINGS_PER_TASK..((task + 1) * STRINGS_PER_TASK).min(space.dimension())
            {
                for hop in hops.into_configuration(target) {
                    // <target|a+_q a_p|from>
                    let (q, p) = (hop.pair as usize / modes, hop.pair as usize % modes);
                    if q <= p {
                        let (bra, ket) = (rows.row(target), rows.row(hop.from as usize));
                        gamma[[p, q]] += overlap(bra, ket) * hop.factor;
                    }
                }
            }
            gamma
        })
        .collect();
    Ok(completed(parts, modes))
}

/// <bra|ket>.
pub(super) fn overlap<T: Scalar>(bra: ArrayView1<'_, T>, ket: ArrayView1<'_, T>) -> T {
    match (bra.as_slice(), ket.as_slice()) {
        (Some(bra), Some(ket)) => pulp::Arch::new().dispatch(Overlap { bra, ket }),
        _ => bra.iter().zip(ket).map(|(&x, &y)| x.conj() * y).sum(),
    }
}

/// <bra|ket>. (A struct, not a closure: only then it is compiled for the instruction set found at
/// run time.)
struct Overlap<'a, T> {
    bra: &'a [T],
    ket: &'a [T],
}

impl<T: Scalar> pulp::NullaryFnOnce for Overlap<'_, T> {
    type Output = T;

    #[inline(always)]
    fn call(self) -> T {
        dot(self.bra, self.ket)
    }
}

/// <bra|ket> in several running sums, so that it vectorises.
#[inline(always)]
fn dot<T: Scalar>(bra: &[T], ket: &[T]) -> T {
    const LANES: usize = 16;
    let mut sums = [T::zero(); LANES];
    let (bra_lanes, ket_lanes) = (bra.chunks_exact(LANES), ket.chunks_exact(LANES));
    let rest: T = bra_lanes
        .remainder()
        .iter()
        .zip(ket_lanes.remainder())
        .map(|(&x, &y)| x.conj() * y)
        .sum();
    for (x, y) in bra_lanes.zip(ket_lanes) {
        for k in 0..LANES {
            sums[k] += x[k].conj() * y[k];
        }
    }
    sums.into_iter().sum::<T>() + rest
}

/// Sum in a fixed order (it must not depend on the threads) with the upper triangle filled in.
pub(super) fn completed<T: Scalar>(parts: Vec<Array2<T>>, modes: usize) -> Array2<T> {
    let mut gamma = Array2::zeros((modes, modes));
    for part in parts {
        gamma += &part;
    }
    for p in 0..modes {
        gamma[[p, p]] = T::from_real(gamma[[p, p]].re());
        for q in 0..p {
            gamma[[q, p]] = gamma[[p, q]].conj();
        }
    }
    gamma
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::operator::Hamiltonian;
    use approx::assert_abs_diff_eq;
    use ndarray::Array3;
    use num_complex::Complex64;
    use rand::SeedableRng;
    use rand_chacha::ChaCha8Rng;

    /// Tr(h gamma) = <h> for random h tests every element and its orientation.
    fn check<T: Scalar>() {
        let mut generator = ChaCha8Rng::seed_from_u64(2);
        for sector in [
            Sector::fermions(6, 3).unwrap(),
            Sector::fermions(3, 0).unwrap(),
            Sector::bosons(4, 3).unwrap(),
            // large enough for low and high modes
            Sector::fermions(13, 5).unwrap(),
            Sector::fermions(12, 6).unwrap(),
            Sector::bosons(6, 6).unwrap(),
            Sector::bosons(7, 6).unwrap(),
            Sector::spin_half(5, 2, 3).unwrap(),
            Sector::spin_half(4, 0, 1).unwrap(),
        ] {
            let (d, spins) = (sector.modes(), sector.spins());
            let dimension = sector.enumerable_dimension().unwrap();
            let mut x = Array2::from_shape_fn((2, dimension), |_| T::random_normal(&mut generator));
            for mut row in x.rows_mut() {
                let norm: f64 = row.iter().map(|c| c.abs_sqr()).sum();
                row.mapv_inplace(|c| c * norm.sqrt().recip());
            }
            let a = Array3::from_shape_fn((spins, d, d), |_| T::random_normal(&mut generator));
            let h = Array3::from_shape_fn(a.dim(), |(s, p, q)| a[[s, p, q]] + a[[s, q, p]].conj());
            let energies = Hamiltonian::new(sector, h.view(), None, 0.0)
                .and_then(|hamiltonian| hamiltonian.expectation(x.view()))
                .unwrap();
            let gammas = state_density_matrices(&sector, x.view()).unwrap();
            for (gamma, energy) in gammas.outer_iter().zip(energies) {
                let swapped = gamma.permuted_axes([0, 2, 1]);
                let trace: T = h.iter().zip(swapped.iter()).map(|(&a, &b)| a * b).sum();
                assert_abs_diff_eq!(trace.re(), energy, epsilon = 1e-11);
                let number: f64 = gamma
                    .outer_iter()
                    .map(|g| g.diag().iter().map(|x| x.re()).sum::<f64>())
                    .sum();
                assert_abs_diff_eq!(number, sector.particles() as f64, epsilon = 1e-12);
            }
        }
    }

    #[test]
    fn traces_with_random_one_body_terms() {
        check::<f64>();
        check::<Complex64>();
    }
}
