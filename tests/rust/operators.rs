//! Hamiltonians against matrices built naively from strings of creation and annihilation
//! operators on occupations, entry by entry.

use approx::assert_abs_diff_eq;
use fockhull::linear_operator::{LinearOperator, Recurrence, Subtrahend};
use fockhull::operator::{Entry, Hamiltonian, Interaction, TensorOrder};
use fockhull::scalar::Scalar;
use fockhull::sector::Sector;
use ndarray::{Array2, Array3, Array4, ArrayView3};
use num_complex::Complex64;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use std::sync::Arc;

/// (creates, spin, mode), applied from the right.
type Ladder = (bool, usize, usize);

fn apply_string(sector: &Sector, n: &Array2<u32>, string: &[Ladder]) -> Option<(Array2<u32>, f64)> {
    let mut n = n.clone();
    let mut factor = 1.0;
    for &(creates, spin, mode) in string.iter().rev() {
        if sector.is_fermionic() {
            let before: u32 = n.iter().take(spin * n.ncols() + mode).sum();
            factor *= if before.is_multiple_of(2) { 1.0 } else { -1.0 };
        }
        let count = &mut n[[spin, mode]];
        if creates {
            if sector.is_fermionic() && *count == 1 {
                return None;
            }
            *count += 1;
            factor *= f64::from(*count).sqrt();
        } else {
            if *count == 0 {
                return None;
            }
            factor *= f64::from(*count).sqrt();
            *count -= 1;
        }
    }
    Some((n, factor))
}

fn naive_matrix<T: Scalar>(sector: &Sector, h: ArrayView3<T>, v: &Array4<T>) -> Array2<T> {
    let configurations = sector.configurations().unwrap();
    let dimension = configurations.dimension() as usize;
    let spins = sector.spins();
    let mut matrix = Array2::zeros((dimension, dimension));
    for column in 0..dimension {
        let n = configurations.occupations(column as u64).unwrap();
        let mut add = |string: &[Ladder], value: T| {
            if let Some((result, factor)) = apply_string(sector, &n, string) {
                let row = configurations.index(result.view()).unwrap() as usize;
                matrix[[row, column]] += value * factor;
            }
        };
        for ((spin, p, q), &value) in h.indexed_iter() {
            add(&[(true, spin, p), (false, spin, q)], value);
        }
        for ((p, q, r, s), &value) in v.indexed_iter() {
            for (a, b) in (0..spins).flat_map(|a| (0..spins).map(move |b| (a, b))) {
                let string = [(true, a, p), (true, b, q), (false, b, s), (false, a, r)];
                add(&string, value * 0.5);
            }
        }
    }
    matrix
}

fn random_one_body<T: Scalar>(sector: &Sector, generator: &mut ChaCha8Rng) -> Array3<T> {
    let d = sector.modes();
    let a = Array3::from_shape_fn((sector.spins(), d, d), |_| T::random_normal(generator));
    Array3::from_shape_fn(a.dim(), |(s, p, q)| a[[s, p, q]] + a[[s, q, p]].conj())
}

/// With v_pqrs = v_qpsr = conj(v_rspq), and for `orbital` also v_pqrs = v_psrq (real orbitals).
fn random_tensor<T: Scalar>(d: usize, orbital: bool, generator: &mut ChaCha8Rng) -> Array4<T> {
    let a = Array4::from_shape_fn((d, d, d, d), |_| T::random_normal(generator));
    let symmetric = |a: &Array4<T>| {
        Array4::from_shape_fn(a.dim(), |(p, q, r, s)| {
            a[[p, q, r, s]] + a[[q, p, s, r]] + a[[r, s, p, q]].conj() + a[[s, r, q, p]].conj()
        })
    };
    let v = symmetric(&a);
    if orbital {
        let swapped =
            Array4::from_shape_fn(v.dim(), |(p, q, r, s)| v[[p, q, r, s]] + v[[p, s, r, q]]);
        symmetric(&swapped)
    } else {
        v
    }
}

fn sectors() -> Vec<Sector> {
    vec![
        Sector::fermions(5, 2).unwrap(),
        Sector::fermions(5, 3).unwrap(),
        Sector::fermions(4, 0).unwrap(),
        Sector::fermions(4, 4).unwrap(),
        Sector::spin_half(4, 2, 1).unwrap(),
        Sector::spin_half(3, 2, 2).unwrap(),
        Sector::spin_half(3, 0, 2).unwrap(),
        Sector::spin_half(3, 3, 1).unwrap(),
        Sector::bosons(3, 4).unwrap(),
        Sector::bosons(4, 2).unwrap(),
        Sector::bosons(1, 3).unwrap(),
    ]
}

/// Stored matrix, products of blocks and the diagonal against the naive matrix.
fn assert_matches<T: Scalar>(hamiltonian: &Hamiltonian<T>, expected: &Array2<T>, seed: u64) {
    let dimension = expected.nrows();
    let sparse = hamiltonian.to_sparse().unwrap();
    let mut dense = Array2::<T>::zeros(expected.dim());
    for row in 0..dimension {
        let (columns, values) = sparse.row(row);
        for (&column, &value) in columns.iter().zip(values) {
            dense[[row, column as usize]] = value;
        }
    }
    let worst = |a: &Array2<T>, b: &Array2<T>| {
        a.iter()
            .zip(b)
            .map(|(x, y)| (*x - *y).abs())
            .fold(0.0, f64::max)
    };
    assert_abs_diff_eq!(worst(&dense, expected), 0.0, epsilon = 1e-11);
    let mut generator = ChaCha8Rng::seed_from_u64(seed);
    for width in [1, 3] {
        let block = Array2::from_shape_fn((width, dimension), |_| T::random_normal(&mut generator));
        let mut out = Array2::from_elem((width, dimension), T::from_real(7.0));
        hamiltonian.apply(block.view(), out.view_mut()).unwrap();
        let product = block.dot(&expected.t());
        assert_abs_diff_eq!(worst(&out, &product), 0.0, epsilon = 1e-10);
        let (factor, shift) = (0.5, 1.5);
        let step = (product - &block * T::from_real(shift)) * T::from_real(factor);
        let other = Array2::from_shape_fn(out.dim(), |_| T::random_normal(&mut generator));
        let mut scratch = Vec::new();
        for (subtrahend, subtracted) in [
            (Subtrahend::Nothing, Array2::zeros(out.dim())),
            (Subtrahend::Overwritten, out.clone()),
            (Subtrahend::Block(other.view()), other.clone()),
        ] {
            let recurrence = Recurrence {
                factor,
                shift,
                subtrahend,
            };
            let mut next = out.clone();
            hamiltonian
                .apply_recurrence(block.view(), recurrence, next.view_mut(), &mut scratch)
                .unwrap();
            assert_abs_diff_eq!(worst(&next, &(&step - &subtracted)), 0.0, epsilon = 1e-10);
        }
    }
    let diagonal = hamiltonian.diagonal_elements().unwrap();
    for (value, reference) in diagonal.iter().zip(expected.diag()) {
        assert_abs_diff_eq!(*value, reference.re(), epsilon = 1e-11);
    }
}

fn check_tensors<T: Scalar>(orbital: bool) {
    for (seed, sector) in sectors().into_iter().enumerate() {
        let mut generator = ChaCha8Rng::seed_from_u64(seed as u64);
        let h = random_one_body::<T>(&sector, &mut generator);
        let v = random_tensor::<T>(sector.modes(), orbital, &mut generator);
        let mut expected = naive_matrix(&sector, h.view(), &v);
        expected = expected + Array2::<T>::eye(v_dimension(&sector)) * T::from_real(0.25);
        let interaction = Interaction::from_two_body(sector, v.view(), TensorOrder::Dirac).unwrap();
        let hamiltonian =
            Hamiltonian::new(sector, h.view(), Some(Arc::new(interaction)), 0.25).unwrap();
        assert_matches(&hamiltonian, &expected, seed as u64);
    }
}

fn v_dimension(sector: &Sector) -> usize {
    sector.enumerable_dimension().unwrap()
}

#[test]
fn dense_tensors() {
    check_tensors::<f64>(false);
    check_tensors::<f64>(true);
    check_tensors::<Complex64>(false);
}

/// A few random elements with all their symmetry partners.
fn random_entries<T: Scalar>(d: usize, generator: &mut ChaCha8Rng) -> (Vec<Entry<T>>, Array4<T>) {
    let full = random_tensor::<T>(d, false, generator);
    let mut sparse = Array4::zeros(full.dim());
    for (k, (index, &value)) in full.indexed_iter().enumerate() {
        if k % 11 == 0 {
            let (p, q, r, s) = index;
            sparse[[p, q, r, s]] = value;
            sparse[[q, p, s, r]] = value;
            sparse[[r, s, p, q]] = value.conj();
            sparse[[s, r, q, p]] = value.conj();
        }
    }
    // partners of partners: diagonal elements must be real
    let exact = Array4::from_shape_fn(sparse.dim(), |(p, q, r, s)| {
        (sparse[[p, q, r, s]] + sparse[[r, s, p, q]].conj()) * 0.5
    });
    let list = exact
        .indexed_iter()
        .filter(|(_, v)| **v != T::zero())
        .map(|((p, q, r, s), &v)| ([p, q, r, s], v))
        .collect();
    (list, exact)
}

fn check_sums<T: Scalar>() {
    for (seed, sector) in sectors().into_iter().enumerate() {
        let mut generator = ChaCha8Rng::seed_from_u64(100 + seed as u64);
        let d = sector.modes();
        let h = random_one_body::<T>(&sector, &mut generator);
        let spinless = matches!(sector, Sector::Fermions { .. });
        let a = Array2::from_shape_fn((d, d), |_| f64::random_normal(&mut generator));
        let density = Array2::from_shape_fn((d, d), |(p, q)| {
            if spinless && p == q {
                0.0
            } else {
                a[[p, q]] + a[[q, p]]
            }
        });
        let (list, mut v) = random_entries::<T>(d, &mut generator);
        let sparse = Interaction::from_entries(sector, &list).unwrap();
        let pairs = Interaction::<T>::from_density_density(sector, density.view()).unwrap();
        let only_density = Arc::new(pairs.clone());
        let both = pairs.plus(&sparse.times(2.0).unwrap()).unwrap();
        v.mapv_inplace(|x| x * 2.0);
        let mut density_tensor = Array4::zeros(v.dim());
        for ((p, q), &value) in density.indexed_iter() {
            density_tensor[[p, q, p, q]] += T::from_real(value);
        }
        for (interaction, tensor) in [
            (only_density, density_tensor.clone()),
            (Arc::new(both), density_tensor + v),
        ] {
            let expected = naive_matrix(&sector, h.view(), &tensor);
            let hamiltonian = Hamiltonian::new(sector, h.view(), Some(interaction), 0.0).unwrap();
            assert_matches(&hamiltonian, &expected, seed as u64);
        }
    }
}

#[test]
fn sums_of_density_couplings_and_entries() {
    check_sums::<f64>();
    check_sums::<Complex64>();
}

#[test]
fn many_strings_of_tiles_and_strips() {
    // a sparse one-spin part needs more strings than a tile holds
    let sector = Sector::spin_half(7, 3, 4).unwrap();
    let mut h = Array3::<f64>::zeros((2, 7, 7));
    for spin in 0..2 {
        for p in 0..7 {
            let q = (p + 1) % 7;
            h[[spin, p, q]] = -1.0 - 0.1 * p as f64;
            h[[spin, q, p]] = h[[spin, p, q]];
        }
    }
    let u = Array2::from_diag(&ndarray::Array1::linspace(1.0, 4.0, 7));
    let mut tensor = Array4::zeros((7, 7, 7, 7));
    for p in 0..7 {
        tensor[[p, p, p, p]] = u[[p, p]];
    }
    let interaction = Interaction::from_density_density(sector, u.view()).unwrap();
    let hamiltonian = Hamiltonian::new(sector, h.view(), Some(Arc::new(interaction)), 0.0).unwrap();
    assert_matches(&hamiltonian, &naive_matrix(&sector, h.view(), &tensor), 3);
}

/// One-body terms and density couplings in spaces large enough for low and high modes.
fn check_low_and_high<T: Scalar>() {
    for (seed, sector) in [
        Sector::fermions(14, 6).unwrap(),
        Sector::fermions(14, 9).unwrap(),
        Sector::bosons(7, 8).unwrap(),
        Sector::fermions(64, 2).unwrap(),
    ]
    .into_iter()
    .enumerate()
    {
        let mut generator = ChaCha8Rng::seed_from_u64(200 + seed as u64);
        let d = sector.modes();
        let mut h = random_one_body::<T>(&sector, &mut generator);
        // some vanish, so that some crossings do
        h.indexed_iter_mut()
            .filter(|((_, p, q), _)| (p + q) % 3 == 0 || p.abs_diff(*q) > 40)
            .for_each(|(_, x)| *x = T::zero());
        let a = Array2::from_shape_fn((d, d), |_| f64::random_normal(&mut generator));
        let density = Array2::from_shape_fn((d, d), |(p, q)| {
            if p == q && sector.is_fermionic() {
                0.0
            } else {
                a[[p, q]] + a[[q, p]]
            }
        });
        let interaction = Interaction::<T>::from_density_density(sector, density.view()).unwrap();
        let hamiltonian =
            Hamiltonian::new(sector, h.view(), Some(Arc::new(interaction)), 0.5).unwrap();
        assert_eq!(
            hamiltonian.representation_name().unwrap(),
            "low and high modes"
        );
        // the stored matrix is built another way and is checked above
        let sparse = hamiltonian.to_sparse().unwrap();
        let n = sparse.rows();
        let block = Array2::from_shape_fn((2, n), |_| T::random_normal(&mut generator));
        let (mut out, mut expected) = (Array2::zeros((2, n)), Array2::zeros((2, n)));
        hamiltonian.apply(block.view(), out.view_mut()).unwrap();
        sparse.apply(block.view(), expected.view_mut());
        let worst = out
            .iter()
            .zip(&expected)
            .map(|(x, y)| (*x - *y).abs())
            .fold(0.0, f64::max);
        assert_abs_diff_eq!(worst, 0.0, epsilon = 1e-10);
        let diagonal = hamiltonian.diagonal_elements().unwrap();
        assert_abs_diff_eq!(diagonal, sparse.diagonal(), epsilon = 1e-11);
    }
}

#[test]
fn low_and_high_modes() {
    check_low_and_high::<f64>();
    check_low_and_high::<Complex64>();
}

/// Products of sectors that fill several tiles against the stored matrix.
fn check_tiles<T: Scalar>() {
    for (seed, (d, up, down)) in [(8, 4, 3), (7, 3, 1), (9, 1, 4)].into_iter().enumerate() {
        let sector = Sector::spin_half(d, up, down).unwrap();
        let mut generator = ChaCha8Rng::seed_from_u64(200 + seed as u64);
        let h = random_one_body::<T>(&sector, &mut generator);
        // few enough hops for sparse one-spin matrices
        let near = |p: usize, q: usize| p.abs_diff(q) <= 1;
        let h = Array3::from_shape_fn(
            h.dim(),
            |(s, p, q)| {
                if near(p, q) { h[[s, p, q]] } else { T::zero() }
            },
        );
        let a = Array2::from_shape_fn((d, d), |_| f64::random_normal(&mut generator));
        let density = &a + &a.t();
        let interaction = Interaction::from_density_density(sector, density.view()).unwrap();
        for interaction in [None, Some(Arc::new(interaction))] {
            let hamiltonian = Hamiltonian::new(sector, h.view(), interaction, -0.5).unwrap();
            let n = v_dimension(&sector);
            let sparse = hamiltonian.to_sparse().unwrap();
            let mut expected = Array2::zeros((n, n));
            for row in 0..n {
                let (columns, values) = sparse.row(row);
                for (&column, &value) in columns.iter().zip(values) {
                    expected[[row, column as usize]] = value;
                }
            }
            assert_matches(&hamiltonian, &expected, seed as u64);
        }
    }
}

#[test]
fn several_tiles() {
    check_tiles::<f64>();
    check_tiles::<Complex64>();
}
