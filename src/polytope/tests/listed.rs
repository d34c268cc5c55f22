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
            .project_batch(batch.view(), &options, None, &mut silent)
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

#[test]
fn earlier_projections_save_oracle_calls_and_change_nothing_else() {
    let sector = Sector::fermions(12, 6).unwrap();
    let raw: Vec<f64> = (0..60).map(|k| 2.0 - k as f64 / 60.0).collect();
    let sum: f64 = raw.iter().sum();
    let weights = Weights::new(&raw.iter().map(|w| w / sum).collect::<Vec<_>>()).unwrap();
    let polytope = ExclusionPolytope::new(sector, weights, Domain::Spinless).unwrap();
    let point = |x: f64| {
        let occupation = |k: usize| 1.0 / (1.0 + ((k as f64 - 5.5) / (0.6 + x)).exp());
        Array3::from_shape_fn((1, 1, 12), |(_, _, k)| occupation(k))
    };
    let options = ProjectionOptions::default();
    let first = polytope
        .project_batch(point(0.0).view(), &options, None, &mut silent)
        .unwrap();
    let start = Start {
        earlier: &first,
        member: None,
    };
    for x in [0.0, 1e-3, -0.05] {
        let run = |start| {
            let found = polytope.project_batch(point(x).view(), &options, start, &mut silent);
            let found = found.unwrap();
            let calls = found.searched[0].1.oracle_calls;
            (found, calls)
        };
        let ((cold, cold_calls), (warm, warm_calls)) = (run(None), run(Some(start)));
        assert!(
            warm_calls < cold_calls,
            "{x}: {warm_calls} against {cold_calls}"
        );
        assert!(
            (&warm.occupations - &cold.occupations)
                .iter()
                .all(|d| d.abs() < 1e-6)
        );
        assert!((warm.distances[0] - cold.distances[0]).abs() < 1e-10);
    }
    let other = ExclusionPolytope::new(sector, Weights::new(&[1.0]).unwrap(), Domain::Spinless);
    let refused = |polytope: &ExclusionPolytope, points: Array3<f64>, member| {
        let start = Start {
            earlier: &first,
            member,
        };
        polytope.project_batch(points.view(), &options, Some(start), &mut silent)
    };
    assert!(refused(&other.unwrap(), point(0.0), None).is_err());
    let two = Array3::from_elem((2, 1, 12), 0.5);
    assert!(refused(&polytope, two.clone(), None).is_err());
    assert!(refused(&polytope, two.clone(), Some(1)).is_err());
    assert!(refused(&polytope, two, Some(0)).is_ok());
}
