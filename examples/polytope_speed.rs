//! Times projections on the exclusion polytope: `cargo run --release --example polytope_speed`.

use fockhull::polytope::{Domain, ExclusionPolytope, ProjectionOptions};
use fockhull::sector::Sector;
use fockhull::weights::Weights;
use ndarray::Array2;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use std::time::Instant;

fn decaying_weights(count: usize, rate: f64) -> Result<Weights, fockhull::error::Error> {
    let raw: Vec<f64> = (0..count)
        .map(|j| (-rate * j as f64 / count as f64).exp())
        .collect();
    let sum: f64 = raw.iter().sum();
    Weights::new(&raw.iter().map(|w| w / sum).collect::<Vec<_>>())
}

fn main() -> Result<(), fockhull::error::Error> {
    println!("count modes particles | distance    gap     error of distance  calls  terms  time");
    for (count, modes, particles, samples) in [
        (6, 24, 12, 2000),
        (12, 24, 12, 2000),
        (1000, 60, 30, 5),
        (100_000, 100, 50, 3),
    ] {
        let sector = Sector::fermions(modes, particles)?;
        for (rate, noise, width) in [(2.0, 0.2, 0.4), (0.0, 0.2, 2.0), (0.5, 1.0, 20.0)] {
            let weights = decaying_weights(count, rate)?;
            let polytope = ExclusionPolytope::new(sector, weights, Domain::Spinless)?;
            let points = noisy_steps(&sector, noise, width, samples);
            time_projections(&polytope, &points)?;
        }
    }
    Ok(())
}

/// Smooth Fermi steps of some width with noise, summing to the particle number.
fn noisy_steps(sector: &Sector, noise: f64, width: f64, samples: usize) -> Vec<Array2<f64>> {
    let mut generator = ChaCha8Rng::seed_from_u64(7);
    let (modes, particles) = (sector.modes(), sector.particles() as f64);
    let mut sample = || {
        let step = |i: usize| 1.0 / (1.0 + ((i as f64 + 0.5 - particles) / width).exp());
        let mut n = Array2::from_shape_fn((1, modes), |(_, i)| {
            step(i) + noise * (generator.random::<f64>() - 0.5)
        });
        n += (particles - n.sum()) / modes as f64;
        n
    };
    (0..samples).map(|_| sample()).collect()
}

fn time_projections(
    polytope: &ExclusionPolytope,
    points: &[Array2<f64>],
) -> Result<(), fockhull::error::Error> {
    let options = ProjectionOptions::default();
    let start = Instant::now();
    let mut projections = Vec::with_capacity(points.len());
    for n in points {
        projections.push(polytope.project(n.view(), &options)?);
    }
    let time = start.elapsed().as_secs_f64() / points.len() as f64;
    let calls: usize = projections.iter().map(|p| p.oracle_calls).sum();
    let Some(last) = projections.last() else {
        return Ok(());
    };
    let ensemble = last.ensemble();
    println!(
        "{:6} {:4} {:4} | {:.8} {:.1e} {:.1e} {:8.1} {:5}x{:<4} {time:.3e} s{}",
        polytope.weights().count(),
        polytope.shape().1,
        polytope.sector().particles(),
        last.distance,
        last.gap,
        last.distance - last.distance_lower,
        calls as f64 / points.len() as f64,
        ensemble.line_ups().len(),
        ensemble.permutations().len(),
        if projections.iter().all(|p| p.converged) {
            ""
        } else {
            "  not all certified"
        },
    );
    Ok(())
}
