//! Searches through a polynomial filter, forced on small spaces; and the filter itself.

use super::searches::Reflected;
use super::*;

/// With the filter wherever it suits.
fn filtered<T: Scalar>(
    operator: &dyn LinearOperator<T>,
    request: &LevelRequest<'_, T>,
) -> Levels<T> {
    search::lowest_levels(operator, request, 0, &mut silent).unwrap()
}

#[test]
fn filtered_random_matrices() {
    fn check_random<T: Scalar>(levels: usize, seed: u64) {
        let matrix = random_hermitian::<T>(700, seed);
        let spectrum = eigh(matrix.view()).unwrap().values.to_vec();
        let operator = Matrix(matrix);
        let (plain, result) = (
            solve(&operator, &iterative(levels)),
            filtered(&operator, &iterative(levels)),
        );
        check(&operator, &result, &spectrum);
        assert_eq!(result.energies.len(), levels);
        assert!(
            matches!(result.level_count, LevelCount::Probed { failure_probability }
            if failure_probability < 1e-5)
        );
        // a filter was used, and costs no more than it saves
        assert_ne!(result.products, plain.products);
        assert!(result.products < 3 * plain.products);
    }
    for levels in [1, 3, 6] {
        check_random::<f64>(levels, 21);
        check_random::<Complex64>(levels, 22);
    }
}

#[test]
fn filtered_spectra_with_multiplicities() {
    use rand::Rng;
    let mut generator = ChaCha8Rng::seed_from_u64(78);
    for _ in 0..40 {
        let n = generator.random_range(300..700);
        let distinct = generator.random_range(1..=n);
        let (shift, width) = (
            generator.random_range(-60.0..60.0),
            10f64.powf(generator.random_range(-1.0..2.0)),
        );
        let values: Vec<f64> = (0..distinct)
            .map(|_| shift + width * f64::random_normal(&mut generator))
            .collect();
        let mut spectrum: Vec<f64> = (0..n)
            .map(|_| values[generator.random_range(0..distinct)])
            .collect();
        let operator = Diagonal(spectrum.clone());
        spectrum.sort_by(f64::total_cmp);
        let levels = generator.random_range(1..=8);
        let request = LevelRequest {
            seed: generator.random(),
            ..iterative(levels)
        };
        let result = filtered::<Complex64>(&operator, &request);
        check(&operator, &result, &spectrum);
        let result = filtered::<f64>(
            &operator,
            &LevelRequest {
                start: None,
                ..iterative(levels)
            },
        );
        check(&operator, &result, &spectrum);
    }
}

#[test]
fn filtered_multiplets_and_spectra_much_wider_than_the_lowest_levels() {
    let triplets: Vec<f64> = (0..600)
        .map(|k| 2.0 + 100.0 * ((k / 3) as f64 / 200.0).sqrt())
        .collect();
    let mut wide = vec![-1.2, 10.71, 10.78, 11.91, 11.92, 12.9, 12.96, 13.05];
    for pairs in 2..17 {
        wide.extend((0..30).map(|k| 16.0 * pairs as f64 - 4.0 + 0.27 * k as f64));
    }
    wide.sort_by(f64::total_cmp);
    for levels in [&triplets, &wide] {
        let operator = Reflected::new(levels);
        for wanted in 1..8 {
            for seed in 0..3 {
                let request = LevelRequest {
                    seed,
                    max_products: 4000,
                    ..iterative(wanted)
                };
                let result = filtered(&operator, &request);
                check(&operator, &result, levels);
                assert_ne!(result.level_count, LevelCount::Unchecked);
            }
        }
    }
}

#[test]
fn nothing_to_filter() {
    for value in [0.0, 1.0, -3.5] {
        let operator = Diagonal(vec![value; 500]);
        let plain = solve::<f64>(&operator, &iterative(3));
        let result = filtered::<f64>(&operator, &iterative(3));
        assert_eq!(result.energies, plain.energies);
        assert_eq!(result.products, plain.products);
    }
}

#[test]
fn a_filtered_search_stops_when_told() {
    let operator = Matrix(random_hermitian::<f64>(700, 23));
    let whole = filtered(&operator, &iterative(3)).products;
    for most in 1..whole + 1 {
        let request = LevelRequest {
            max_products: most,
            ..iterative(3)
        };
        let result = filtered(&operator, &request);
        assert!(result.products <= most);
        stopped_with_true_bounds(&operator, &result);
    }
    for steps in 20..40 {
        let mut calls = 0;
        let mut monitor = |_: &Progress| {
            calls += 1;
            if calls == steps {
                ControlFlow::Break(())
            } else {
                ControlFlow::Continue(())
            }
        };
        let result = search::lowest_levels(&operator, &iterative(3), 0, &mut monitor).unwrap();
        assert_eq!(result.status, Status::Interrupted);
        stopped_with_true_bounds(&operator, &result);
    }
}

/// Some level, and residual norms that are not too small.
fn stopped_with_true_bounds(operator: &Matrix<f64>, result: &Levels<f64>) {
    assert!(!result.energies.is_empty());
    let images = result.vectors.dot(&operator.0);
    for (k, &energy) in result.energies.iter().enumerate() {
        let difference = &images.row(k) - &(&result.vectors.row(k) * energy);
        let norm = difference.dot(&difference).sqrt();
        assert!(norm <= result.residuals[k] * (1.0 + 1e-6) + 1e-10);
        assert!(result.error_bounds[k] >= 0.0);
    }
}

#[test]
fn the_image_of_a_level_and_back() {
    let filter = filter::Filter::<f64>::new((-5.0, 31.0), -7.0, -6.0).unwrap();
    assert!(filter.degree() % 2 == 1);
    for energy in [-7.0, -6.0, -5.1] {
        let image = filter.image(energy).unwrap();
        assert!((filter.energy(image).unwrap() - energy).abs() < 1e-12);
    }
    assert_eq!(filter.image(-4.9), None);
    assert_eq!(filter.energy(-0.9), None);
    // T_3 = 4 x^3 - 3 x, from the recurrence
    let filter = filter::Filter::<f64>::new((-1.0, 1.0), -2.0, -1.2);
    let mut filter = filter.unwrap();
    let m = filter.degree() as f64;
    let levels = [-2.0, -1.0, -0.3, 0.0, 0.7, 1.0];
    let operator = Diagonal(levels.to_vec());
    let ones = Array2::from_elem((2, 6), 1.0);
    let mut out = Array2::zeros((2, 6));
    filter
        .apply(&operator, ones.view(), out.view_mut(), &mut |_| {
            std::ops::ControlFlow::Continue(())
        })
        .unwrap();
    for (k, &x) in levels.iter().enumerate() {
        let exact: f64 = if x < -1.0 {
            filter.image(x).unwrap()
        } else {
            (m * f64::acos(x)).cos()
        };
        assert!((out[[0, k]] - exact).abs() < 1e-12 * exact.abs().max(1.0));
        assert_eq!(out[[0, k]], out[[1, k]]);
    }
}
