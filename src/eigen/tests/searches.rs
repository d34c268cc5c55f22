//! The search for missed levels, and spectra that are hard on it.

use super::*;

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
pub(super) struct Reflected {
    levels: Vec<f64>,
    mirror: Array1<f64>,
}

impl Reflected {
    pub(super) fn new(levels: &[f64]) -> Self {
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
