//! Products through low and high modes against the matrix built row by row.

use super::modes::ModeOperator;
use super::split::SplitOperator;
use super::terms::ModeTerms;
use super::walker::ModeSpace;
use crate::operator::Interaction;
use crate::scalar::Scalar;
use crate::sector::Sector;
use ndarray::{Array2, ShapeBuilder};
use num_complex::Complex64;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;

/// Which modes hop to each other.
#[derive(Clone, Copy)]
enum Hops {
    Ring,
    Some,
    All,
}

fn random_terms<T: Scalar>(
    sector: &Sector,
    hops: Hops,
    coupled: bool,
    generator: &mut ChaCha8Rng,
) -> ModeTerms<T> {
    let d = sector.modes();
    let mut h = Array2::<T>::zeros((d, d));
    for p in 0..d {
        h[[p, p]] = T::from_real(generator.random());
        for q in 0..p {
            let present = match hops {
                Hops::Ring => p - q == 1 || p - q == d - 1,
                Hops::Some => generator.random_bool(0.3),
                Hops::All => true,
            };
            if present {
                h[[p, q]] = T::random_normal(generator);
                h[[q, p]] = h[[p, q]].conj();
            }
        }
    }
    let interaction = coupled.then(|| {
        let a = Array2::from_shape_fn((d, d), |_| f64::random_normal(generator));
        let v = Array2::from_shape_fn((d, d), |(p, q)| {
            if p == q && sector.is_fermionic() {
                0.0
            } else {
                a[[p, q]] + a[[q, p]]
            }
        });
        Interaction::from_density_density(*sector, v.view()).unwrap()
    });
    ModeTerms::new(h.view(), interaction.as_ref(), sector.is_fermionic())
}

fn worst<T: Scalar>(a: &Array2<T>, b: &Array2<T>) -> f64 {
    let differences = a.iter().zip(b).map(|(x, y)| (*x - *y).abs());
    differences.fold(0.0, f64::max)
}

fn check<T: Scalar>(sector: &Sector, hops: Hops, coupled: bool, widths: &[usize], seed: u64) {
    let mut generator = ChaCha8Rng::seed_from_u64(seed);
    let terms = random_terms::<T>(sector, hops, coupled, &mut generator);
    let space = ModeSpace::of(sector).unwrap().swap_remove(0);
    let split = SplitOperator::new(&space, &terms).unwrap();
    let matrix = ModeOperator::new(space, terms).to_sparse();
    let n = matrix.rows();
    let scale = matrix.values.iter().map(|x| x.abs()).fold(1.0, f64::max);
    for &width in widths {
        let block = Array2::from_shape_fn((width, n), |_| T::random_normal(&mut generator));
        let mut expected = Array2::zeros((width, n));
        matrix.apply(block.view(), expected.view_mut());
        let mut out = Array2::from_elem((width, n), T::from_real(7.0));
        split.apply(block.view(), out.view_mut());
        let error = worst(&out, &expected);
        assert!(
            error < 1e-12 * scale * 50.0,
            "{sector:?}, {width} vectors: {error:e}"
        );
        let mut columns = Array2::zeros((width, n).f());
        split.apply(block.view(), columns.view_mut());
        assert_eq!(columns, out, "another layout, another result");
    }
    let differences = &split.diagonal() - &matrix.diagonal();
    assert!(differences.iter().all(|x| x.abs() < 1e-12 * scale * 50.0));
}

#[test]
fn tiny_sectors() {
    let mut sectors = Vec::new();
    for d in 2..7 {
        sectors.extend((0..=d).map(|n| Sector::fermions(d, n).unwrap()));
        sectors.extend((0..5).map(|n| Sector::bosons(d, n).unwrap()));
    }
    for (seed, sector) in sectors.iter().enumerate() {
        for hops in [Hops::Ring, Hops::Some, Hops::All] {
            for coupled in [false, true] {
                check::<f64>(sector, hops, coupled, &[1, 3], seed as u64);
                check::<Complex64>(sector, hops, coupled, &[1, 8], seed as u64);
            }
        }
    }
}

#[test]
fn every_width_of_blocks() {
    let widths: Vec<usize> = (1..=9).chain([17]).collect();
    for sector in [
        Sector::fermions(12, 5).unwrap(),
        Sector::bosons(6, 6).unwrap(),
    ] {
        check::<f64>(&sector, Hops::Some, true, &widths, 1);
        check::<Complex64>(&sector, Hops::Ring, true, &widths, 2);
    }
}

#[test]
fn several_blocks_and_long_shifts() {
    for (seed, sector) in [
        Sector::fermions(18, 7).unwrap(),
        Sector::fermions(34, 3).unwrap(),
        Sector::fermions(80, 2).unwrap(),
        Sector::bosons(8, 9).unwrap(),
        Sector::bosons(3, 60).unwrap(),
        Sector::bosons(2, 300).unwrap(),
        Sector::bosons(20, 3).unwrap(),
    ]
    .iter()
    .enumerate()
    {
        check::<f64>(sector, Hops::Ring, true, &[1, 5], seed as u64);
        check::<Complex64>(sector, Hops::Ring, false, &[2], seed as u64);
        check::<f64>(sector, Hops::Some, false, &[1, 8], seed as u64);
    }
}
