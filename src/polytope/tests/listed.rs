//! Projections by the list of inequalities against those by the oracle.

use super::*;
use crate::progress::silent;
use ndarray::{Array3, Axis};

/// A polytope that knows its list, if that is short enough.
fn listing(polytope: &ExclusionPolytope) -> Option<ExclusionPolytope> {
    let known = ExclusionPolytope::new(
        *polytope.sector(),
        polytope.weights().clone(),
        polytope.domain(),
    )
    .unwrap();
    known.inequalities(20_000, &mut silent).ok()?;
    Some(known)
}

/// Vertices, points on faces, ties, tiny and large noise, wrong sums.
fn points(generator: &mut ChaCha8Rng, polytope: &ExclusionPolytope, count: usize) -> Array3<f64> {
    let (components, modes) = polytope.shape();
    let mut points = Array3::zeros((count, components, modes));
    for mut point in points.outer_iter_mut() {
        let h = noise(generator, polytope.shape());
        let (_, vertex) = polytope.support(h.view()).unwrap();
        let (_, other) = polytope
            .support((&h + &noise(generator, h.dim())).view())
            .unwrap();
        let share = [0.0, 0.3, 1.0][generator.random_range(0..3)];
        let middle = uniform(polytope);
        let mut n = &vertex * (1.0 - share) + &other * share;
        let factor = [0.4, 1.0, 1.0, 1.3][generator.random_range(0..4)];
        n = &middle + &((n - &middle) * factor);
        let size = [0.0, 1e-14, 1e-9, 1e-3, 0.3, 20.0][generator.random_range(0..6)];
        n += &(random_point(generator, polytope, size) - &middle);
        if generator.random_bool(0.2) {
            n.mapv_inplace(|x| (4.0 * x).round() / 4.0);
        }
        if generator.random_bool(0.2) {
            n += generator.random::<f64>() - 0.5;
        }
        point.assign(&n);
    }
    points
}

#[test]
fn the_list_and_the_oracle_find_the_same_points() {
    let mut generator = generator(23);
    let options = ProjectionOptions::default();
    for polytope in small_polytopes(&mut generator) {
        let Some(known) = listing(&polytope) else {
            continue;
        };
        let batch = points(&mut generator, &polytope, 40);
        let found = known
            .project_batch(batch.view(), &options, &mut silent)
            .unwrap();
        let far = found.distances.iter().filter(|&&distance| distance > 3.0);
        assert!(found.searched() <= far.count(), "{polytope:?}");
        for (k, point) in batch.outer_iter().enumerate() {
            let single = polytope.project(point, &options).unwrap();
            let scale = point.iter().fold(1.0f64, |m, n| m.max(n.abs()));
            let label = format!("{polytope:?} {point} {k}");
            let difference = &found.occupations.index_axis(Axis(0), k) - &single.occupations;
            assert!(
                length(&difference) < 1e-8 * scale,
                "{label}: {}",
                length(&difference)
            );
            assert!(
                (found.distances[k] - single.distance).abs() < 1e-10 * scale,
                "{label}"
            );
            assert!(found.distances_lower[k] <= found.distances[k], "{label}");
            assert!(
                found.distances[k] - found.distances_lower[k] < 1e-10 * scale,
                "{label} {} {}",
                found.distances[k],
                found.distances_lower[k]
            );
            assert!(
                (0.0..1e-10).contains(&found.gaps[k]),
                "{label} {}",
                found.gaps[k]
            );
        }
    }
}
