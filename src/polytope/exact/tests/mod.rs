mod geometry;
mod published;

use super::{DEFAULT_LIMIT, Domain, LineUps};
use crate::progress::silent;
use crate::sector::Sector;
use crate::weights::Weights;

fn decreasing(r: usize) -> Weights {
    let total = (r * (r + 1) / 2) as f64;
    Weights::new(&(0..r).map(|k| (r - k) as f64 / total).collect::<Vec<_>>()).unwrap()
}

fn line_ups(sector: Sector, weights: &Weights, domain: Domain) -> LineUps {
    LineUps::enumerate(&sector, weights, domain, DEFAULT_LIMIT, &mut silent).unwrap()
}

fn fermions(modes: usize, particles: usize) -> Sector {
    Sector::fermions(modes, particles).unwrap()
}

fn bosons(modes: usize, particles: usize) -> Sector {
    Sector::bosons(modes, particles).unwrap()
}

fn spin_half(orbitals: usize, up: usize, down: usize) -> Sector {
    Sector::spin_half(orbitals, up, down).unwrap()
}
