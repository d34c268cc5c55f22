//! One benchmark a kernel, to notice regressions: `cargo bench --bench kernels`.

use criterion::{Criterion, criterion_group, criterion_main};
use fockhull::density::state_density_matrices;
use fockhull::linear_operator::LinearOperator;
use fockhull::operator::{Hamiltonian, Interaction, TensorOrder};
use fockhull::polytope::{Domain, ExclusionPolytope, ProjectionOptions};
use fockhull::scalar::Scalar;
use fockhull::sector::Sector;
use fockhull::weights::Weights;
use ndarray::{Array2, Array3, Array4};
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use std::hint::black_box;
use std::sync::Arc;

fn ring(spins: usize, sites: usize) -> Array3<f64> {
    let mut h = Array3::zeros((spins, sites, sites));
    for spin in 0..spins {
        for p in 0..sites {
            let q = (p + 1) % sites;
            h[[spin, p, q]] = -1.0;
            h[[spin, q, p]] = -1.0;
        }
    }
    h
}

fn random_vectors(count: usize, dimension: usize) -> Array2<f64> {
    let mut generator = ChaCha8Rng::seed_from_u64(0);
    Array2::from_shape_fn((count, dimension), |_| f64::random_normal(&mut generator))
}

/// v_pqrs = 1 / (1 + |p - r| + |q - s| + |p - q|), with the symmetries of real orbitals.
fn smooth_tensor(d: usize) -> Array4<f64> {
    let raw = |p: usize, q: usize, r: usize, s: usize| {
        1.0 / (1.0 + (p.abs_diff(r) + q.abs_diff(s) + p.abs_diff(q)) as f64)
    };
    Array4::from_shape_fn((d, d, d, d), |(p, q, r, s)| {
        [(p, r), (r, p)]
            .into_iter()
            .flat_map(|(a, c)| [(q, s), (s, q)].map(|(b, e)| raw(a, b, c, e) + raw(b, a, e, c)))
            .sum()
    })
}

fn hamiltonian(sector: Sector, interaction: Interaction<f64>) -> Hamiltonian<f64> {
    let h = ring(sector.spins(), sector.modes());
    Hamiltonian::new(sector, h.view(), Some(Arc::new(interaction)), 0.0).expect("a legal system")
}

fn products(criterion: &mut Criterion) {
    let on_site = |sector: Sector| {
        let v = Array2::from_diag_elem(sector.modes(), 4.0);
        hamiltonian(
            sector,
            Interaction::from_density_density(sector, v.view()).expect("legal"),
        )
    };
    let spinless = Sector::fermions(18, 9).expect("legal");
    let neighbours = ring(1, 18)
        .index_axis_move(ndarray::Axis(0), 0)
        .mapv(|x| -2.0 * x);
    let dense = Sector::spin_half(8, 4, 4).expect("legal");
    let integrals = Interaction::from_two_body(dense, smooth_tensor(8).view(), TensorOrder::Dirac);
    let cases = [
        (
            "spin-1/2 ring of 10",
            on_site(Sector::spin_half(10, 5, 5).expect("legal")),
        ),
        (
            "bosons, 8 in 8 modes",
            on_site(Sector::bosons(8, 8).expect("legal")),
        ),
        (
            "spinless, 9 in 18 modes",
            hamiltonian(
                spinless,
                Interaction::from_density_density(spinless, neighbours.view()).expect("legal"),
            ),
        ),
        (
            "dense integrals, 8 in 8 orbitals",
            hamiltonian(dense, integrals.expect("symmetric")),
        ),
    ];
    for (name, operator) in &cases {
        let x = random_vectors(4, operator.dimension());
        let mut out = Array2::zeros(x.dim());
        criterion.bench_function(&format!("4 products: {name}"), |bencher| {
            bencher.iter(|| operator.apply(black_box(x.view()), out.view_mut()));
        });
    }
}

fn density_matrices(criterion: &mut Criterion) {
    for (name, sector) in [
        (
            "spin-1/2 ring of 10",
            Sector::spin_half(10, 5, 5).expect("legal"),
        ),
        (
            "spinless, 9 in 18 modes",
            Sector::fermions(18, 9).expect("legal"),
        ),
    ] {
        let x = random_vectors(2, sector.enumerable_dimension().expect("small"));
        criterion.bench_function(&format!("2 density matrices: {name}"), |bencher| {
            bencher.iter(|| state_density_matrices(&sector, black_box(x.view())));
        });
    }
}

fn projections(criterion: &mut Criterion) {
    for (modes, particles, r) in [(24, 12, 6), (60, 30, 1000)] {
        let sector = Sector::fermions(modes, particles).expect("legal");
        let total = (r * (r + 1)) as f64 / 2.0;
        let weights: Vec<f64> = (0..r).map(|k| (r - k) as f64 / total).collect();
        let weights = Weights::new(&weights).expect("decreasing");
        let polytope = ExclusionPolytope::new(sector, weights, Domain::Spinless).expect("legal");
        let n = Array2::from_shape_fn((1, modes), |(_, p)| f64::from(p < particles));
        criterion.bench_function(&format!("projection: r = {r}, d = {modes}"), |bencher| {
            bencher.iter(|| polytope.project(black_box(n.view()), &ProjectionOptions::default()));
        });
    }
}

criterion_group!(kernels, products, density_matrices, projections);
criterion_main!(kernels);
