//! Starts, interruption, limits and requests without sense.

use super::*;

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
