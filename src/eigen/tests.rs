//! Against dense diagonalisation and spectra known in closed form; always by iteration unless
//! said otherwise.

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

#[test]
fn a_good_start_saves_products() {
    let matrix = random_hermitian::<f64>(800, 5);
    let operator = Matrix(matrix);
    let cold = solve(&operator, &iterative(3));
    let warm = LevelRequest {
        start: Some(cold.vectors.view()),
        ..iterative(3)
    };
    let warm = solve(&operator, &warm);
    let spectrum = eigh(operator.0.view()).unwrap().values.to_vec();
    check(&operator, &warm, &spectrum);
    assert!(
        warm.products < cold.products,
        "{} {}",
        warm.products,
        cold.products
    );
}

#[test]
fn a_misleading_start_hides_nothing() {
    let spectrum: Vec<f64> = (0..700).map(|k| (k as f64).sqrt()).collect();
    let operator = Diagonal(spectrum.clone());
    // exact excited states, twice, and a zero row
    let mut start = Array2::<f64>::zeros((4, 700));
    start[[0, 5]] = 1.0;
    start[[1, 5]] = -2.0;
    start[[2, 9]] = 1e-3;
    let request = LevelRequest {
        start: Some(start.view()),
        ..iterative(3)
    };
    check(&operator, &solve(&operator, &request), &spectrum);
}

#[test]
fn interruption_gives_what_there_is() {
    let operator = Matrix(random_hermitian::<f64>(600, 6));
    for steps in [1, 2, 30] {
        let mut calls = 0;
        let mut monitor = |_: &Progress| {
            calls += 1;
            if calls == steps {
                ControlFlow::Break(())
            } else {
                ControlFlow::Continue(())
            }
        };
        let result = lowest_levels(&operator, &iterative(3), &mut monitor).unwrap();
        assert_eq!(result.status, Status::Interrupted);
        assert_eq!(result.products, steps);
        assert_eq!(result.level_count, LevelCount::Unchecked);
        assert_eq!(result.energies.len(), steps.min(3));
        let norms = result.vectors.map_axis(Axis(1), |row| row.dot(&row));
        assert!(norms.iter().all(|n| (n - 1.0).abs() < 1e-10));
    }
    let mut stop = |_: &Progress| ControlFlow::Break(());
    let dense = LevelRequest {
        dense_limit: 600,
        ..iterative(3)
    };
    let result = lowest_levels(&operator, &dense, &mut stop).unwrap();
    assert_eq!(
        (result.status, result.energies.len()),
        (Status::Interrupted, 0)
    );
}

#[test]
fn too_few_products_give_true_partial_results() {
    let operator = Matrix(random_hermitian::<Complex64>(600, 7));
    let request = LevelRequest {
        max_products: 80,
        ..iterative(3)
    };
    let result = solve(&operator, &request);
    assert_eq!(result.status, Status::NotConverged);
    assert!(result.products <= 80);
    let mut images = Array2::zeros(result.vectors.dim());
    operator
        .apply(result.vectors.view(), images.view_mut())
        .unwrap();
    for (k, &energy) in result.energies.iter().enumerate() {
        let difference = &images.row(k) - &(&result.vectors.row(k) * Complex64::from(energy));
        let norm = difference.iter().map(|x| x.abs_sqr()).sum::<f64>().sqrt();
        assert!((norm - result.residuals[k]).abs() < 1e-10 && norm > 1e-8);
        assert!(result.error_bounds[k] >= norm * 0.999);
    }
}

#[test]
fn the_same_seed_gives_the_same_bits_on_any_number_of_threads() {
    let operator = Diagonal((0..20_000).map(|k| (k as f64).powf(0.3)).collect());
    let on = |threads| {
        let pool = rayon::ThreadPoolBuilder::new()
            .num_threads(threads)
            .build()
            .unwrap();
        pool.install(|| solve::<f64>(&operator, &iterative(2)))
    };
    let (one, two) = (on(1), on(2));
    assert_eq!(one.energies, two.energies);
    assert_eq!(one.vectors, two.vectors);
    assert_eq!(one.products, two.products);
}

#[test]
fn memory_limits_are_kept_or_refused() {
    let spectrum: Vec<f64> = (0..900).map(|k| (k as f64).sqrt()).collect();
    let operator = Diagonal(spectrum.clone());
    let rows = |count: usize| LevelRequest::<f64> {
        memory_limit: count * 900 * 8,
        ..iterative(3)
    };
    check(&operator, &solve(&operator, &rows(12)), &spectrum);
    let refused = lowest_levels(&operator, &rows(6), &mut silent);
    assert!(matches!(refused, Err(Error::Memory { .. })));
}

#[test]
fn requests_without_sense_are_refused() {
    let operator = Diagonal(vec![0.0; 10]);
    let start = Array2::<f64>::from_elem((1, 10), f64::NAN);
    let short = Array2::<f64>::zeros((1, 9));
    let base = || LevelRequest::<f64>::new(1);
    for request in [
        LevelRequest {
            levels: 0,
            ..base()
        },
        LevelRequest {
            levels: 11,
            ..base()
        },
        LevelRequest {
            tolerance: 0.0,
            ..base()
        },
        LevelRequest {
            tolerance: f64::NAN,
            ..base()
        },
        LevelRequest {
            start: Some(start.view()),
            ..base()
        },
        LevelRequest {
            start: Some(short.view()),
            ..base()
        },
    ] {
        let result = lowest_levels(&operator, &request, &mut silent);
        assert!(matches!(result, Err(Error::Argument { .. })), "{request:?}");
    }
    let nan = Diagonal(vec![f64::NAN; 10]);
    assert!(lowest_levels(&nan, &iterative::<f64>(1), &mut silent).is_err());
}

#[test]
fn a_probability_of_missing_a_level_is_kept() {
    // the lowest level has a tiny gap, so a short search cannot see it: the bound must say so
    let mut levels: Vec<f64> = (0..3000).map(|k| k as f64).collect();
    levels[0] = 0.5;
    let operator = Diagonal(levels);
    let run = |known: usize, budget| {
        let mut run = lanczos::BlockLanczos::<f64>::new(&operator, 10, 1e-10, 0).unwrap();
        let mut start = Array2::zeros((known, 3000));
        start.slice_mut(s![.., 1..=known]).diag_mut().fill(1.0);
        let generator = ChaCha8Rng::seed_from_u64(1);
        run.begin(0, known, None, generator).unwrap();
        let (_, mut rows) = run.split(0, known);
        rows.assign(&start);
        let bounds = vec![known as f64 + 0.1];
        let probe = probe::Probe {
            known,
            bounds,
            budget,
            levels: 3,
        };
        probe
            .search(
                &operator,
                &mut run,
                ChaCha8Rng::seed_from_u64(2),
                &mut silent,
            )
            .unwrap()
    };
    assert!(
        matches!(run(3, 20), probe::Finding::Nothing { failure_probability } if failure_probability > 0.5)
    );
    assert_eq!(run(3, 1000), probe::Finding::Missed { bound: 3.1 });
}

/// A diagonal matrix between two reflections I - 2 u u^T: full, with a spectrum of one's choice.
struct Reflected {
    levels: Vec<f64>,
    mirror: Array1<f64>,
}

impl Reflected {
    fn new(levels: &[f64]) -> Self {
        let mut generator = ChaCha8Rng::seed_from_u64(5);
        let mirror = Array1::from_shape_fn(levels.len(), |_| f64::random_normal(&mut generator));
        let norm = mirror.dot(&mirror).sqrt();
        Reflected {
            levels: levels.to_vec(),
            mirror: mirror / norm,
        }
    }

    fn reflect(&self, mut rows: ArrayViewMut2<'_, f64>) {
        for mut row in rows.rows_mut() {
            let inside = row.dot(&self.mirror);
            row.scaled_add(-2.0 * inside, &self.mirror);
        }
    }
}

impl LinearOperator<f64> for Reflected {
    fn dimension(&self) -> usize {
        self.levels.len()
    }
    fn apply(&self, block: ArrayView2<'_, f64>, mut out: ArrayViewMut2<'_, f64>) -> Result<()> {
        out.assign(&block);
        self.reflect(out.view_mut());
        for (mut column, &level) in out.axis_iter_mut(Axis(1)).zip(&self.levels) {
            column.mapv_inplace(|x| x * level);
        }
        self.reflect(out.view_mut());
        Ok(())
    }
    fn diagonal(&self) -> Array1<f64> {
        let pairs = self.mirror.iter().zip(&self.levels);
        let mean: f64 = pairs.map(|(u, level)| u * u * level).sum();
        let pairs = self.mirror.iter().zip(&self.levels);
        pairs
            .map(|(u, level)| level * (1.0 - 4.0 * u * u) + 4.0 * u * u * mean)
            .collect()
    }
}

/// Converged, probed to the usual certainty, and in a reasonable number of products.
fn check_search(levels: &[f64], wanted: usize, seed: u64) {
    let operator = Reflected::new(levels);
    let request = LevelRequest {
        seed,
        max_products: 600,
        ..iterative(wanted)
    };
    let result = solve(&operator, &request);
    check(&operator, &result, levels);
    let LevelCount::Probed {
        failure_probability,
    } = result.level_count
    else {
        panic!("{wanted} levels, seed {seed}: {:?}", result.level_count);
    };
    assert!(failure_probability < 1e-5);
}

#[test]
fn the_search_for_missed_levels_raises_no_false_alarm() {
    // a constant much larger than the spread: rounding brings the known vectors back into the
    // recurrence, and each step would magnify them
    let levels: Vec<f64> = (0..500).map(|k| -60.0 + (0.1 * k as f64).sqrt()).collect();
    for seed in 0..4 {
        check_search(&levels, 1 + seed as usize, seed);
    }
}

#[test]
fn a_spectrum_much_wider_than_the_lowest_levels_leaves_the_tolerance_in_reach() {
    // like particles under strong repulsion
    let mut levels = vec![-1.2, 10.71, 10.78, 11.91, 11.92, 12.9, 12.96, 13.05];
    for pairs in 2..17 {
        levels.extend((0..30).map(|k| 16.0 * pairs as f64 - 4.0 + 0.27 * k as f64));
    }
    levels.sort_by(f64::total_cmp);
    for wanted in 1..8 {
        for seed in 0..4 {
            check_search(&levels, wanted, seed);
        }
    }
}

#[test]
fn partners_found_late_do_not_stall_the_search() {
    // triplets, seen one member at a time: each one found lowers the highest level wanted, and
    // with it the tolerance
    let levels: Vec<f64> = (0..600)
        .map(|k| 2.0 + 100.0 * ((k / 3) as f64 / 200.0).sqrt())
        .collect();
    for wanted in 1..9 {
        for seed in 0..4 {
            let request = LevelRequest {
                seed,
                max_products: 2000,
                ..iterative(wanted)
            };
            let operator = Reflected::new(&levels);
            let result = solve(&operator, &request);
            check(&operator, &result, &levels);
            assert_eq!(result.energies.len(), wanted.next_multiple_of(3));
            assert_ne!(result.level_count, LevelCount::Unchecked);
        }
    }
}

#[test]
fn a_dense_matrix_takes_over_where_the_iteration_is_slow() {
    // gaps of 1e-9 of the spectrum
    let levels: Vec<f64> = (0..700).map(|k| 1e-8 * (k as f64).powi(4)).collect();
    let operator = Reflected::new(&levels);
    let request = LevelRequest {
        dense_limit: 300,
        tolerance: 1e-13,
        ..LevelRequest::new(5)
    };
    let result = solve(&operator, &request);
    check(&operator, &result, &levels);
    assert_eq!(
        (result.method, result.level_count),
        ("dense", LevelCount::Proved)
    );
    assert!(result.products > 700);
}

#[test]
fn random_spectra_with_multiplicities_in_little_memory() {
    use rand::Rng;
    let mut generator = ChaCha8Rng::seed_from_u64(77);
    for _ in 0..12 {
        let n = generator.random_range(1..250);
        let distinct = generator.random_range(1..=n);
        let values: Vec<f64> = (0..distinct)
            .map(|_| f64::random_normal(&mut generator))
            .collect();
        let mut spectrum: Vec<f64> = (0..n)
            .map(|_| values[generator.random_range(0..distinct)])
            .collect();
        let operator = Diagonal(spectrum.clone());
        spectrum.sort_by(f64::total_cmp);
        let levels = generator.random_range(1..=n.min(10));
        let rows = levels + generator.random_range(8..16);
        let request = LevelRequest::<Complex64> {
            seed: generator.random(),
            memory_limit: rows * n * size_of::<Complex64>(),
            ..iterative(levels)
        };
        check::<Complex64>(&operator, &solve(&operator, &request), &spectrum);
    }
}

mod filtered;
