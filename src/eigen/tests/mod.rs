//! Against dense diagonalisation and spectra known in closed form; always by iteration unless
//! said otherwise.

mod filtered;
mod requests;
mod searches;

use super::*;
use crate::dense::{Conjugate, Threads, eigh, multiply};
use crate::progress::{Progress, silent};
use ndarray::{ArrayViewMut2, Axis, s};
use num_complex::Complex64;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use std::ops::ControlFlow;

struct Matrix<T>(Array2<T>);

impl<T: Scalar> LinearOperator<T> for Matrix<T> {
    fn dimension(&self) -> usize {
        self.0.nrows()
    }
    fn apply(&self, block: ArrayView2<'_, T>, out: ArrayViewMut2<'_, T>) -> Result<()> {
        let (left, right) = ((block, Conjugate::No), (self.0.t(), Conjugate::No));
        multiply(T::one(), left, right, T::zero(), out, Threads::All);
        Ok(())
    }
    fn diagonal(&self) -> Array1<f64> {
        self.0.diag().mapv(T::re)
    }
}

struct Diagonal(Vec<f64>);

impl<T: Scalar> LinearOperator<T> for Diagonal {
    fn dimension(&self) -> usize {
        self.0.len()
    }
    fn apply(&self, block: ArrayView2<'_, T>, mut out: ArrayViewMut2<'_, T>) -> Result<()> {
        out.assign(&block);
        for (mut column, &level) in out.axis_iter_mut(Axis(1)).zip(&self.0) {
            column.mapv_inplace(|x| x * level);
        }
        Ok(())
    }
    fn diagonal(&self) -> Array1<f64> {
        Array1::from(self.0.clone())
    }
}

fn random_hermitian<T: Scalar>(n: usize, seed: u64) -> Array2<T> {
    let mut generator = ChaCha8Rng::seed_from_u64(seed);
    let a = Array2::from_shape_fn((n, n), |_| T::random_normal(&mut generator));
    Array2::from_shape_fn((n, n), |(i, j)| (a[[i, j]] + a[[j, i]].conj()) * 0.5)
}

fn iterative<'a, T>(levels: usize) -> LevelRequest<'a, T> {
    LevelRequest {
        dense_limit: 0,
        ..LevelRequest::new(levels)
    }
}

fn solve<T: Scalar>(operator: &dyn LinearOperator<T>, request: &LevelRequest<'_, T>) -> Levels<T> {
    lowest_levels(operator, request, &mut silent).unwrap()
}

/// Everything that must hold for any converged result, given the exact spectrum.
fn check<T: Scalar>(operator: &dyn LinearOperator<T>, result: &Levels<T>, spectrum: &[f64]) {
    assert_eq!(result.status, Status::Converged);
    let found = result.energies.len();
    let scale = spectrum.iter().fold(1.0, |top: f64, e| top.max(e.abs()));
    for (k, (&energy, &bound)) in result.energies.iter().zip(&result.error_bounds).enumerate() {
        let error = (energy - spectrum[k]).abs();
        assert!(
            error < 1e-9,
            "level {k}: {energy} but exactly {}",
            spectrum[k]
        );
        assert!(
            error <= bound + 1e-14 * scale,
            "level {k}: {error:e} > {bound:e}"
        );
    }
    let v = &result.vectors;
    assert_eq!(v.dim(), (found, operator.dimension()));
    let overlap = v.mapv(T::conj).dot(&v.t()) - Array2::<T>::eye(found);
    assert!(overlap.iter().all(|x| x.abs() < 1e-11), "not orthonormal");
    let mut images = Array2::zeros(v.dim());
    operator.apply(v.view(), images.view_mut()).unwrap();
    for k in 0..found {
        let difference = &images.row(k) - &(&v.row(k) * T::from_real(result.energies[k]));
        let norm = difference.iter().map(|x| x.abs_sqr()).sum::<f64>().sqrt();
        assert!(norm < 4e-10 * scale, "residual {norm:e}");
        assert!((norm - result.residuals[k]).abs() < 1e-12 * scale);
        let top = v.row(k).iter().fold(0.0, |top: f64, x| top.max(x.abs()));
        let leader = v
            .row(k)
            .iter()
            .find(|x| x.abs() >= top * (1.0 - 1e-8))
            .copied()
            .unwrap();
        assert!(leader.re() > 0.0 && leader.im().abs() < 1e-14);
    }
    if result.last_multiplet_complete {
        let next = spectrum.get(found).copied();
        assert_eq!(result.next_energy.is_some(), next.is_some());
        if let (Some(next), Some(got), Some(error)) = (next, result.next_energy, result.next_error)
        {
            assert!(
                (next - got).abs() <= error + 1e-14 * scale,
                "next {got}, exactly {next}"
            );
            assert!(next - spectrum[found - 1] > 1e-9);
        }
    }
    let covered: Vec<usize> = result.multiplets.iter().cloned().flatten().collect();
    assert_eq!(covered, (0..found).collect::<Vec<_>>());
}

fn against_dense<T: Scalar>(n: usize, levels: usize, seed: u64) {
    let matrix = random_hermitian::<T>(n, seed);
    let spectrum = eigh(matrix.view()).unwrap().values.to_vec();
    let operator = Matrix(matrix);
    let result = solve(&operator, &iterative(levels));
    check(&operator, &result, &spectrum);
    assert_eq!(result.energies.len(), levels);
    assert_eq!(result.method, "block Lanczos");
    let LevelCount::Probed {
        failure_probability,
    } = result.level_count
    else {
        panic!("level count {:?}", result.level_count);
    };
    assert!(failure_probability < 0.1, "{failure_probability}");
}

#[test]
fn random_real_matrices() {
    against_dense::<f64>(600, 3, 1);
    against_dense::<f64>(700, 8, 2);
}

#[test]
fn random_complex_matrices() {
    against_dense::<Complex64>(600, 4, 3);
    against_dense::<Complex64>(700, 1, 4);
}

#[test]
fn multiplets_come_out_complete() {
    // multiplicities 7, 5, 3, then distinct levels
    let mut levels = vec![-2.0; 7];
    levels.extend([-1.0; 5]);
    levels.extend([-0.5; 3]);
    levels.extend((0..785).map(|k| 0.01 * k as f64));
    let mut operator = Diagonal(levels.clone());
    operator.0.rotate_left(300);
    for (wanted, found) in [
        (1, 7),
        (6, 7),
        (7, 7),
        (8, 12),
        (13, 15),
        (15, 15),
        (16, 16),
    ] {
        let result = solve::<f64>(&operator, &iterative(wanted));
        check(&operator, &result, &levels);
        assert_eq!(result.energies.len(), found, "{wanted} wanted");
        assert!(result.last_multiplet_complete);
    }
    let result = solve::<Complex64>(&operator, &iterative(8));
    check(&operator, &result, &levels);
    assert_eq!(result.multiplets, [0..7, 7..12]);
}

#[test]
fn one_level_only() {
    for value in [0.0, 1.0, -3.5] {
        let operator = Diagonal(vec![value; 500]);
        let result = solve::<f64>(&operator, &iterative(3));
        check(&operator, &result, &[value; 500]);
        assert_eq!(result.energies.len(), 3 + 16);
        assert!(!result.last_multiplet_complete);
        assert_eq!(result.next_energy, None);
    }
}

#[test]
fn tiny_dimensions_are_exhausted() {
    for n in 1..=6 {
        let spectrum: Vec<f64> = (0..n).map(|k| (k / 2) as f64 - 1.0).collect();
        let operator = Diagonal(spectrum.clone());
        for wanted in 1..=n {
            let result = solve::<f64>(&operator, &iterative(wanted));
            check(&operator, &result, &spectrum);
            assert!(result.last_multiplet_complete);
        }
        let zero = Diagonal(vec![0.0; n]);
        let result = solve::<Complex64>(&zero, &iterative(1));
        check(&zero, &result, &vec![0.0; n]);
        assert_eq!(result.level_count, LevelCount::Proved);
        assert_eq!(result.energies.len(), n);
    }
}

#[test]
fn all_levels_of_a_space() {
    let matrix = random_hermitian::<Complex64>(60, 8);
    let spectrum = eigh(matrix.view()).unwrap().values.to_vec();
    let operator = Matrix(matrix);
    for request in [iterative(60), LevelRequest::new(60)] {
        let result = solve(&operator, &request);
        check(&operator, &result, &spectrum);
        assert_eq!(result.level_count, LevelCount::Proved);
        assert_eq!(result.next_energy, None);
    }
}

/// One particle on a ring: 2 - 2 cos(2 pi m / n) by closed form, doubly degenerate.
fn ring(n: usize) -> (Matrix<f64>, Vec<f64>) {
    let mut matrix = Array2::eye(n) * 2.0;
    for i in 0..n {
        matrix[[i, (i + 1) % n]] -= 1.0;
        matrix[[(i + 1) % n, i]] -= 1.0;
    }
    let angle = |m: usize| 2.0 * std::f64::consts::PI * m as f64 / n as f64;
    let mut levels: Vec<f64> = (0..n).map(|m| 2.0 - 2.0 * angle(m).cos()).collect();
    levels.sort_by(f64::total_cmp);
    (Matrix(matrix), levels)
}

#[test]
fn degenerate_pairs_of_a_ring() {
    let (operator, levels) = ring(240);
    for (wanted, found) in [(1, 1), (2, 3), (3, 3), (6, 7)] {
        let result = solve(&operator, &iterative(wanted));
        check(&operator, &result, &levels);
        assert_eq!(result.energies.len(), found);
    }
}

#[test]
fn dense_and_iterative_agree() {
    let (operator, levels) = ring(200);
    let dense = solve(&operator, &LevelRequest::new(2));
    check(&operator, &dense, &levels);
    assert_eq!(
        (dense.method, dense.level_count),
        ("dense", LevelCount::Proved)
    );
    assert_eq!(dense.energies.len(), 3);
    let limit = LevelRequest {
        memory_limit: 40 * 200 * 8,
        ..LevelRequest::new(2)
    };
    assert_eq!(solve(&operator, &limit).method, "block Lanczos");
}
