//! Transition density matrices between states given as vectors.

use super::one_body::{overlap, shape_error};
use crate::error::Result;
use crate::operator::{HopTable, ModeSpace};
use crate::scalar::Scalar;
use crate::sector::Sector;
use ndarray::{Array3, Array4, Array5, ArrayView2, ArrayView3, s};
use rayon::prelude::*;

/// Configurations that one task visits.
const ROWS_PER_TASK: usize = 4096;
/// Configurations of one spin that one task visits.
const STRINGS_PER_TASK: usize = 16;

/// gamma_pq = <bra|a+_q a_p|ket> of all pairs, `(bras, kets, spins, d, d)`; vectors are rows.
///
/// # Errors
/// [`crate::error::Error::TooManyConfigurations`] beyond 64-bit indices;
/// [`crate::error::Error::Argument`] if the vectors do not fit the sector.
pub fn transition_density_matrices<T: Scalar>(
    sector: &Sector,
    bras: ArrayView2<'_, T>,
    kets: ArrayView2<'_, T>,
) -> Result<Array5<T>> {
    let modes = sector.modes();
    let spaces = ModeSpace::of(sector)?;
    let (count, others) = (bras.nrows(), kets.nrows());
    let mut gamma = Array5::zeros((count, others, sector.spins(), modes, modes));
    if let [up, down] = spaces.as_slice() {
        let shape = (up.dimension(), down.dimension());
        let (bras, kets) = (blocks(bras, shape)?, blocks(kets, shape)?);
        // a row for each up configuration; transposed, one for each down configuration
        let flipped = |x: &Array3<T>| {
            x.view()
                .permuted_axes([0, 2, 1])
                .as_standard_layout()
                .into_owned()
        };
        let of_up = of_strings(up, bras.view(), kets.view())?;
        gamma.slice_mut(s![.., .., 0, .., ..]).assign(&of_up);
        let of_down = of_strings(down, flipped(&bras).view(), flipped(&kets).view())?;
        gamma.slice_mut(s![.., .., 1, .., ..]).assign(&of_down);
    } else if let Some(space) = spaces.first() {
        let of_modes = of_configurations(space, bras, kets)?;
        gamma.slice_mut(s![.., .., 0, .., ..]).assign(&of_modes);
    }
    Ok(gamma)
}

/// Each vector as a matrix of up by down configurations.
fn blocks<T: Scalar>(vectors: ArrayView2<'_, T>, shape: (usize, usize)) -> Result<Array3<T>> {
    let length = vectors.ncols();
    vectors
        .to_shape((vectors.nrows(), shape.0, shape.1))
        .map(|view| view.into_owned())
        .map_err(|_| shape_error(length, shape))
}

/// Spinless particles: a hop from each configuration at a time.
fn of_configurations<T: Scalar>(
    space: &ModeSpace,
    bras: ArrayView2<'_, T>,
    kets: ArrayView2<'_, T>,
) -> Result<Array4<T>> {
    let modes = space.modes();
    let shape = (bras.nrows(), kets.nrows(), modes, modes);
    // components of all vectors side by side
    let (bras, kets) = (bras.t(), kets.t());
    let (bras, kets) = (bras.as_standard_layout(), kets.as_standard_layout());
    let tasks = space.dimension().div_ceil(ROWS_PER_TASK);
    let parts: Result<Vec<Array4<T>>> = (0..tasks)
        .into_par_iter()
        .map(|task| {
            let first = task * ROWS_PER_TASK;
            let last = (first + ROWS_PER_TASK).min(space.dimension());
            let mut gamma = Array4::zeros(shape);
            let mut walker = space.walker(first)?;
            for index in first..last {
                for p in 0..modes {
                    for q in 0..modes {
                        if let Some((target, factor)) = walker.hop(q, p) {
                            for (i, bra) in bras.row(target).iter().enumerate() {
                                let left = bra.conj() * factor;
                                for (j, &ket) in kets.row(index).iter().enumerate() {
                                    gamma[[i, j, p, q]] += left * ket;
                                }
                            }
                        }
                    }
                }
                walker.advance();
            }
            Ok(gamma)
        })
        .collect();
    Ok(summed(parts?, shape))
}

/// One spin: the overlap of whole rows for each hop between its configurations.
fn of_strings<T: Scalar>(
    space: &ModeSpace,
    bras: ArrayView3<'_, T>,
    kets: ArrayView3<'_, T>,
) -> Result<Array4<T>> {
    let modes = space.modes();
    let hops = HopTable::new(space)?;
    let shape = (bras.dim().0, kets.dim().0, modes, modes);
    let tasks = space.dimension().div_ceil(STRINGS_PER_TASK);
    let parts: Vec<Array4<T>> = (0..tasks)
        .into_par_iter()
        .map(|task| {
            let mut gamma = Array4::zeros(shape);
            let first = task * STRINGS_PER_TASK;
            for target in first..(first + STRINGS_PER_TASK).min(space.dimension()) {
                for hop in hops.into_configuration(target) {
                    // <target|a+_q a_p|from>
                    let (q, p) = (hop.pair as usize / modes, hop.pair as usize % modes);
                    for (i, bra) in bras.outer_iter().enumerate() {
                        for (j, ket) in kets.outer_iter().enumerate() {
                            let rows = (bra.row(target), ket.row(hop.from as usize));
                            gamma[[i, j, p, q]] += overlap(rows.0, rows.1) * hop.factor;
                        }
                    }
                }
            }
            gamma
        })
        .collect();
    Ok(summed(parts, shape))
}

/// Sum in a fixed order: it must not depend on the threads.
fn summed<T: Scalar>(parts: Vec<Array4<T>>, shape: (usize, usize, usize, usize)) -> Array4<T> {
    let mut total = Array4::zeros(shape);
    for part in parts {
        total += &part;
    }
    total
}

#[cfg(test)]
mod tests {
    use super::super::state_density_matrices;
    use super::*;
    use approx::assert_abs_diff_eq;
    use ndarray::{Array2, Axis};
    use num_complex::Complex64;
    use rand::SeedableRng;
    use rand_chacha::ChaCha8Rng;

    /// gamma of x + c y, for a random c, is bilinear in the transition density matrices.
    fn check<T: Scalar>() {
        let mut generator = ChaCha8Rng::seed_from_u64(3);
        for sector in [
            Sector::fermions(6, 3).unwrap(),
            Sector::bosons(4, 3).unwrap(),
            Sector::spin_half(5, 2, 3).unwrap(),
            Sector::spin_half(4, 0, 1).unwrap(),
        ] {
            let dimension = sector.enumerable_dimension().unwrap();
            let x = Array2::from_shape_fn((2, dimension), |_| T::random_normal(&mut generator));
            let c = T::random_normal(&mut generator);
            let mixed = (&x.row(0) + &x.row(1).mapv(|y| c * y)).insert_axis(Axis(0));
            let direct = state_density_matrices(&sector, mixed.view()).unwrap();
            let pairs = transition_density_matrices(&sector, x.view(), x.view()).unwrap();
            for ((s, p, q), &value) in direct.index_axis(Axis(0), 0).indexed_iter() {
                let of = |i, j| pairs[[i, j, s, p, q]];
                let sum = of(0, 0) + c * of(0, 1) + c.conj() * (of(1, 0) + c * of(1, 1));
                assert_abs_diff_eq!(sum.re(), value.re(), epsilon = 1e-10);
                assert_abs_diff_eq!((sum - value).abs_sqr(), 0.0, epsilon = 1e-18);
            }
        }
    }

    #[test]
    fn bilinear_in_the_states() {
        check::<f64>();
        check::<Complex64>();
    }
}
