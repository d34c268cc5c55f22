//! Checks against enumeration and against each other.

mod inequalities;
mod listed;
mod stretching;

use super::*;

use ndarray::{Array1, array};
use rand::seq::SliceRandom;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;

fn generator(seed: u64) -> ChaCha8Rng {
    ChaCha8Rng::seed_from_u64(seed)
}

fn random_weights(generator: &mut ChaCha8Rng, count: usize) -> Weights {
    let mut raw: Vec<f64> = (0..count)
        .map(|_| generator.random::<f64>() + 0.05)
        .collect();
    if generator.random_bool(0.3) {
        let middle = raw[count / 2];
        raw.iter_mut().take(count / 2).for_each(|w| *w = middle);
    }
    raw.sort_by(|a, b| b.total_cmp(a));
    let sum: f64 = raw.iter().sum();
    Weights::new(&raw.iter().map(|w| w / sum).collect::<Vec<_>>()).unwrap()
}

fn domains(sector: &Sector) -> Vec<Domain> {
    match sector {
        Sector::SpinHalf { .. } => vec![Domain::SpinResolved, Domain::SpinSummed],
        _ => vec![Domain::Spinless],
    }
}

/// Small polytopes of all kinds, with counts of weights from one to the dimension.
fn small_polytopes(generator: &mut ChaCha8Rng) -> Vec<ExclusionPolytope> {
    let sectors = [
        Sector::fermions(6, 3),
        Sector::fermions(5, 1),
        Sector::fermions(4, 4),
        Sector::fermions(4, 0),
        Sector::bosons(4, 3),
        Sector::bosons(1, 3),
        Sector::bosons(3, 0),
        Sector::spin_half(4, 2, 1),
        Sector::spin_half(3, 1, 1),
        Sector::spin_half(2, 1, 1),
        Sector::spin_half(3, 3, 1),
        Sector::spin_half(4, 0, 2),
    ];
    let mut polytopes = Vec::new();
    for sector in sectors.into_iter().map(|s| s.unwrap()) {
        let dimension = sector.enumerable_dimension().unwrap();
        for count in [1, 2, 3, 4, 7, 12, dimension] {
            if count > dimension {
                continue;
            }
            for domain in domains(&sector) {
                let weights = random_weights(generator, count);
                polytopes.push(ExclusionPolytope::new(sector, weights, domain).unwrap());
            }
        }
    }
    polytopes
}

fn uniform(polytope: &ExclusionPolytope) -> Array2<f64> {
    let (components, modes) = polytope.shape();
    let particles = polytope.oracle.particles();
    Array2::from_shape_fn((components, modes), |(s, _)| particles[s] / modes as f64)
}

fn noise(generator: &mut ChaCha8Rng, shape: (usize, usize)) -> Array2<f64> {
    Array2::from_shape_simple_fn(shape, || generator.random::<f64>() - 0.5)
}

/// Noise about the centre with the right sums.
fn random_point(
    generator: &mut ChaCha8Rng,
    polytope: &ExclusionPolytope,
    size: f64,
) -> Array2<f64> {
    let mut n = noise(generator, polytope.shape()) * size;
    for mut row in n.rows_mut() {
        let mean = row.sum() / row.len() as f64;
        row -= mean;
    }
    n + uniform(polytope)
}

fn project(polytope: &ExclusionPolytope, n: &Array2<f64>) -> Projection {
    polytope
        .project(n.view(), &ProjectionOptions::default())
        .unwrap()
}

fn length(values: &Array2<f64>) -> f64 {
    values.iter().map(|x| x * x).sum::<f64>().sqrt()
}

/// f_w(h) by enumerating all configurations.
fn enumerated_support(polytope: &ExclusionPolytope, h: &Array2<f64>) -> f64 {
    let sector = polytope.sector();
    let configurations = sector.configurations().unwrap();
    let row = |s: usize| {
        if polytope.domain() == Domain::SpinSummed {
            0
        } else {
            s
        }
    };
    let mut energies: Vec<f64> = (0..configurations.dimension())
        .map(|index| {
            let n = configurations.occupations(index).unwrap();
            n.indexed_iter()
                .map(|((s, m), &n)| f64::from(n) * h[[row(s), m]])
                .sum()
        })
        .collect();
    energies.sort_by(f64::total_cmp);
    let weights = polytope.weights().as_slice();
    energies.iter().zip(weights).map(|(e, w)| e * w).sum()
}

#[test]
fn the_support_function_is_that_of_the_enumerated_spectrum() {
    let mut generator = generator(1);
    for polytope in small_polytopes(&mut generator) {
        for _ in 0..5 {
            let h = noise(&mut generator, polytope.shape());
            let (value, minimiser) = polytope.support(h.view()).unwrap();
            assert!((value - enumerated_support(&polytope, &h)).abs() < 1e-13);
            assert!((value - (&h * &minimiser).sum()).abs() < 1e-13);
        }
    }
}

#[test]
fn projections_are_certified_by_the_enumerated_support() {
    let mut generator = generator(2);
    for polytope in small_polytopes(&mut generator) {
        for size in [0.1, 1.0, 4.0, 40.0] {
            let y = random_point(&mut generator, &polytope, size);
            let projection = project(&polytope, &y);
            let x = &projection.occupations;
            let h = x - &y;
            assert!(projection.converged, "{polytope:?} {projection:?}");
            assert!((length(&h) - projection.distance).abs() < 1e-13 * size.max(1.0));
            assert!(length(&(&h - &projection.normal)) < 1e-13 * size.max(1.0));
            // x is in the polytope, and nothing in it is nearer: recomputed independently
            let gap =
                (&projection.normal * x).sum() - enumerated_support(&polytope, &projection.normal);
            assert!(
                gap.abs() < 1e-13 * size.max(1.0) * size.max(1.0),
                "gap {gap:e} {polytope:?}"
            );
            let missing = projection.distance - projection.distance_lower;
            assert!(
                (0.0..1e-12).contains(&missing),
                "{missing:e} of {:e}",
                projection.distance
            );
            for _ in 0..20 {
                let k = noise(&mut generator, polytope.shape());
                let slack = (&k * x).sum() - enumerated_support(&polytope, &k);
                assert!(slack > -1e-12, "outside by {slack:e}");
            }
        }
    }
}

#[test]
fn ensembles_reproduce_the_projection_and_hold_line_ups() {
    let mut generator = generator(3);
    for polytope in small_polytopes(&mut generator) {
        for size in [0.1, 1.0, 4.0] {
            let y = random_point(&mut generator, &polytope, size);
            let projection = project(&polytope, &y);
            let ensemble = projection.ensemble();
            let x = &projection.occupations;
            assert!(length(&(ensemble.occupations().unwrap() - x)) < 1e-12);
            let weights = polytope.weights().as_slice();
            let mut mixed = Array2::<f64>::zeros(x.dim());
            let mut total = 0.0;
            for term in ensemble.terms() {
                assert!(term.probability >= 0.0);
                total += term.probability;
                let configurations = ensemble.configurations(&term).unwrap();
                let mut seen: Vec<Vec<u32>> = Vec::new();
                for (configuration, weight) in configurations.outer_iter().zip(weights) {
                    polytope.sector().check_occupations(configuration).unwrap();
                    seen.push(configuration.iter().copied().collect());
                    for ((s, m), &n) in configuration.indexed_iter() {
                        let row = if polytope.domain() == Domain::SpinResolved {
                            s
                        } else {
                            0
                        };
                        mixed[[row, m]] += term.probability * weight * f64::from(n);
                    }
                }
                seen.sort();
                seen.dedup();
                assert_eq!(seen.len(), weights.len(), "configurations must differ");
            }
            assert!((total - 1.0).abs() < 1e-13);
            assert!(length(&(mixed - x)) < 1e-12);
        }
    }
}

#[test]
fn projection_is_idempotent_non_expansive_and_equivariant() {
    let mut generator = generator(4);
    for polytope in small_polytopes(&mut generator) {
        let y = random_point(&mut generator, &polytope, 3.0);
        let z = random_point(&mut generator, &polytope, 3.0);
        let (py, pz) = (project(&polytope, &y), project(&polytope, &z));
        let again = project(&polytope, &py.occupations);
        assert!(
            again.distance < 1e-13,
            "{:e} {polytope:?} {y} {again:?}",
            again.distance
        );
        assert!(length(&(&again.occupations - &py.occupations)) < 1e-13);
        let moved = length(&(&py.occupations - &pz.occupations));
        assert!(moved <= length(&(&y - &z)) + 1e-12);
        let mut order: Vec<usize> = (0..polytope.shape().1).collect();
        order.shuffle(&mut generator);
        let permuted = |n: &Array2<f64>| n.select(ndarray::Axis(1), &order);
        let shuffled = project(&polytope, &permuted(&y));
        assert!(length(&(shuffled.occupations - permuted(&py.occupations))) < 1e-12);
    }
}

#[test]
fn vertices_and_their_mixtures_are_inside() {
    let mut generator = generator(5);
    for polytope in small_polytopes(&mut generator) {
        let mut mixture = Array2::zeros(polytope.shape());
        for _ in 0..3 {
            let h = noise(&mut generator, polytope.shape());
            let vertex = polytope.support(h.view()).unwrap().1;
            let projection = project(&polytope, &vertex);
            assert_eq!(projection.distance, 0.0);
            assert!(polytope.contains(vertex.view(), 1e-9).unwrap());
            assert!(length(&(projection.ensemble().occupations().unwrap() - &vertex)) < 1e-13);
            mixture = mixture + vertex / 3.0;
        }
        assert!(project(&polytope, &mixture).distance < 1e-13);
        assert!(project(&polytope, &uniform(&polytope)).distance < 1e-13);
    }
}

#[test]
fn one_weight_is_paulis_principle() {
    let sector = Sector::fermions(4, 2).unwrap();
    let pauli = ExclusionPolytope::new(sector, Weights::new(&[1.0]).unwrap(), Domain::Spinless);
    let pauli = pauli.unwrap();
    // clip to [0, 1] with the shift that restores the sum (the textbook projection on a
    // hypersimplex): here 0.15
    let n = array![[-0.4, 1.5, 0.2, 0.7]];
    let x = project(&pauli, &n).occupations;
    for (value, expected) in x.iter().zip([0.0, 1.0, 0.25, 0.75]) {
        assert!((value - expected).abs() < 1e-14);
    }
}

#[test]
fn an_excess_of_particles_is_removed_uniformly() {
    let sector = Sector::fermions(4, 2).unwrap();
    let weights = Weights::new(&[0.6, 0.4]).unwrap();
    let polytope = ExclusionPolytope::new(sector, weights, Domain::Spinless).unwrap();
    let n = array![[0.9, 0.8, 0.3, 0.2]];
    let projection = project(&polytope, &n);
    assert!((projection.occupations.sum() - 2.0).abs() < 1e-14);
    let shifted = project(&polytope, &(&n - 0.05));
    assert!(length(&(&projection.occupations - &shifted.occupations)) < 1e-14);
    let expected = (0.1f64 * 0.1 + shifted.distance * shifted.distance).sqrt();
    assert!((projection.distance - expected).abs() < 1e-14);
    assert!(polytope.contains(n.view(), 0.2).unwrap());
    assert!(!polytope.contains(n.view(), 0.09).unwrap());
}

#[test]
fn many_weights_are_certified() {
    let mut generator = generator(6);
    let raw: Vec<f64> = (0..1000).map(|j| (-f64::from(j) / 300.0).exp()).collect();
    let sum: f64 = raw.iter().sum();
    let weights = Weights::new(&raw.iter().map(|w| w / sum).collect::<Vec<_>>()).unwrap();
    for (sector, domain) in [
        (Sector::fermions(60, 30).unwrap(), Domain::Spinless),
        (Sector::bosons(60, 5).unwrap(), Domain::Spinless),
        (Sector::spin_half(60, 30, 28).unwrap(), Domain::SpinResolved),
        (Sector::spin_half(60, 30, 28).unwrap(), Domain::SpinSummed),
    ] {
        let polytope = ExclusionPolytope::new(sector, weights.clone(), domain).unwrap();
        let h = Array2::from_shape_fn(polytope.shape(), |(_, i)| (i as f64).sqrt());
        let vertex = polytope.support(h.view()).unwrap().1;
        let y = vertex + random_point(&mut generator, &polytope, 0.1) - uniform(&polytope);
        let projection = project(&polytope, &y);
        assert!(
            projection.converged && projection.gap < 1e-14,
            "{projection:?}"
        );
        assert!(projection.distance > 0.01);
        assert!(projection.distance - projection.distance_lower < 1e-11);
        let stretch = polytope.stretch(y.view()).unwrap();
        assert!(stretch.value < 1.0 && stretch.value > 0.5);
        assert!(stretch.value - stretch.lower < 1e-11, "{stretch:?}");
        assert!(project(&polytope, &stretch.boundary).distance < 1e-11);
        let ensemble = projection.ensemble().occupations().unwrap();
        assert!(length(&(ensemble - &projection.occupations)) < 1e-12);
    }
}

#[test]
fn smooth_occupations_are_certified_for_many_weights() {
    let count = 3000;
    let raw: Vec<f64> = (0..count).map(|j| f64::from(2 * count - j)).collect();
    let sum: f64 = raw.iter().sum();
    let weights = Weights::new(&raw.iter().map(|w| w / sum).collect::<Vec<_>>()).unwrap();
    let sector = Sector::fermions(40, 20).unwrap();
    let polytope = ExclusionPolytope::new(sector, weights, Domain::Spinless).unwrap();
    let mut generator = generator(7);
    let smooth = noise(&mut generator, (1, 40)) * 0.02
        + Array2::from_shape_fn((1, 40), |(_, m)| {
            1.0 / (1.0 + ((m as f64 - 19.5) / 0.9).exp())
        });
    let projection = project(&polytope, &smooth);
    let tolerance = ProjectionOptions::default().point_tolerance;
    assert!(projection.converged, "{projection:?}");
    assert!(projection.distance > 0.01);
    assert!(projection.gap <= tolerance * tolerance);
    assert!(projection.distance - projection.distance_lower < 1e-11);
    // the bound belongs to a direction, and the point to an ensemble
    let (value, _) = polytope.support(projection.normal.view()).unwrap();
    let norm = length(&projection.normal);
    let bound = (value - (&projection.normal * &smooth).sum()) / norm;
    assert!(bound > projection.distance - 1e-8 && bound < projection.distance + 1e-13);
    let ensemble = projection.ensemble().occupations().unwrap();
    assert!(length(&(ensemble - &projection.occupations)) < 1e-12);
}

#[test]
fn bad_input_is_refused() {
    let weights = Weights::new(&[0.6, 0.4]).unwrap();
    let fermions = Sector::fermions(4, 2).unwrap();
    let spin = Sector::spin_half(4, 2, 2).unwrap();
    let new = |sector, domain| ExclusionPolytope::new(sector, weights.clone(), domain);
    assert!(new(fermions, Domain::SpinSummed).is_err());
    assert!(new(spin, Domain::Spinless).is_err());
    assert!(new(Sector::fermions(1, 1).unwrap(), Domain::Spinless).is_err());
    let polytope = new(fermions, Domain::Spinless).unwrap();
    let options = ProjectionOptions::default();
    for n in [
        Array2::zeros((2, 4)),
        Array2::zeros((1, 3)),
        array![[f64::NAN, 0.0, 1.0, 1.0]],
        array![[1e30, 0.0, 1.0, 1.0]],
    ] {
        assert!(polytope.project(n.view(), &options).is_err());
        assert!(polytope.stretch(n.view()).is_err());
    }
    let n = Array2::from_elem((1, 4), 0.5);
    assert!(polytope.contains(n.view(), 0.0).is_err());
    let options = ProjectionOptions {
        point_tolerance: -1.0,
        ..options
    };
    assert!(polytope.project(n.view(), &options).is_err());
}

#[test]
fn weights_that_majorise_give_a_larger_polytope() {
    let sector = Sector::fermions(6, 3).unwrap();
    let polytope = |w: &[f64]| {
        ExclusionPolytope::new(sector, Weights::new(w).unwrap(), Domain::Spinless).unwrap()
    };
    let (outer, inner) = (polytope(&[0.6, 0.3, 0.1]), polytope(&[0.5, 0.3, 0.2]));
    let mut generator = generator(9);
    for _ in 0..20 {
        let h = noise(&mut generator, (1, 6));
        let vertex = inner.support(h.view()).unwrap().1;
        assert!(outer.contains(vertex.view(), 1e-12).unwrap());
    }
    let h = Array1::linspace(0.0, 1.0, 6).insert_axis(ndarray::Axis(0));
    let vertex = outer.support(h.view()).unwrap().1;
    assert!(!inner.contains(vertex.view(), 1e-3).unwrap());
}
