//! Lowest levels of the half-filled ring with on-site repulsion, 6 up and 6 down on 12 sites:
//! products, time, and the share of it spent outside the products.
//!
//! Run with `cargo bench --bench eigen [sites] [levels]`.

use fockhull::eigen::{LevelRequest, lowest_levels};
use fockhull::error::Result;
use fockhull::linear_operator::LinearOperator;
use fockhull::progress::silent;
use ndarray::{Array1, ArrayView1, ArrayView2, ArrayViewMut2, Axis};
use rayon::prelude::*;
use std::sync::atomic::{AtomicU64, AtomicUsize, Ordering::Relaxed};
use std::time::Instant;

/// Kronecker sum of two hopping matrices plus a diagonal repulsion.
struct Ring {
    masks: Vec<u32>,
    /// For each configuration of one spin: where hopping leads, and the matrix element.
    hops: Vec<Vec<(usize, f64)>>,
    repulsion: f64,
    nanoseconds: AtomicU64,
    calls: AtomicUsize,
}

impl Ring {
    fn new(sites: usize, particles: u32, repulsion: f64) -> Self {
        let masks: Vec<u32> = (0..1u32 << sites)
            .filter(|mask| mask.count_ones() == particles)
            .collect();
        let hops = masks
            .iter()
            .map(|&mask| hops(mask, sites, &masks))
            .collect();
        Ring {
            masks,
            hops,
            repulsion,
            nanoseconds: AtomicU64::new(0),
            calls: AtomicUsize::new(0),
        }
    }

    fn multiply(&self, vector: ArrayView1<'_, f64>, image: &mut [f64]) {
        let n = self.masks.len();
        let vector = vector.to_slice().expect("contiguous rows");
        image.par_chunks_mut(n).enumerate().for_each(|(up, out)| {
            let own = &vector[up * n..(up + 1) * n];
            for (down, out) in out.iter_mut().enumerate() {
                let pairs = (self.masks[up] & self.masks[down]).count_ones();
                *out = self.repulsion * f64::from(pairs) * own[down];
                for &(to, element) in &self.hops[down] {
                    *out += element * own[to];
                }
            }
            for &(to, element) in &self.hops[up] {
                let row = &vector[to * n..(to + 1) * n];
                out.iter_mut().zip(row).for_each(|(o, x)| *o += element * x);
            }
        });
    }
}

fn hops(mask: u32, sites: usize, masks: &[u32]) -> Vec<(usize, f64)> {
    let mut list = Vec::new();
    for site in 0..sites {
        let neighbour = (site + 1) % sites;
        let (a, b) = (1u32 << site, 1u32 << neighbour);
        if (mask & a == 0) != (mask & b == 0) {
            // across the border the particle passes all the others
            let others = (mask & !(a | b)).count_ones();
            let sign = if neighbour == 0 && others % 2 == 1 {
                1.0
            } else {
                -1.0
            };
            let index = masks
                .binary_search(&(mask ^ a ^ b))
                .expect("same particle number");
            list.push((index, sign));
        }
    }
    list
}

impl LinearOperator<f64> for Ring {
    fn dimension(&self) -> usize {
        self.masks.len() * self.masks.len()
    }

    fn apply(&self, block: ArrayView2<'_, f64>, mut out: ArrayViewMut2<'_, f64>) -> Result<()> {
        let begun = Instant::now();
        for (vector, mut image) in block.axis_iter(Axis(0)).zip(out.axis_iter_mut(Axis(0))) {
            self.multiply(vector, image.as_slice_mut().expect("contiguous rows"));
        }
        self.nanoseconds
            .fetch_add(begun.elapsed().as_nanos() as u64, Relaxed);
        self.calls.fetch_add(block.nrows(), Relaxed);
        Ok(())
    }

    fn diagonal(&self) -> Array1<f64> {
        let n = self.masks.len();
        Array1::from_shape_fn(n * n, |i| {
            self.repulsion * f64::from((self.masks[i / n] & self.masks[i % n]).count_ones())
        })
    }
}

fn main() {
    let numbers: Vec<usize> = std::env::args().filter_map(|a| a.parse().ok()).collect();
    let sites = numbers.first().copied().unwrap_or(12);
    let levels = numbers.get(1).copied().unwrap_or(3);
    let ring = Ring::new(sites, sites as u32 / 2, 4.0);
    let request = LevelRequest::new(levels);
    let begun = Instant::now();
    let mut search = None;
    let mut monitor = |progress: &fockhull::progress::Progress| {
        if progress.stage == "level count" && search.is_none() {
            search = Some((progress.products, begun.elapsed().as_secs_f64()));
        }
        silent(progress)
    };
    let result = lowest_levels(&ring, &request, &mut monitor).expect("a legal request");
    let total = begun.elapsed().as_secs_f64();
    let products = ring.nanoseconds.load(Relaxed) as f64 * 1e-9;
    println!("dimension {}, {levels} levels", ring.dimension());
    println!("energies {:.10}", result.energies);
    println!("residuals {:.1e}", result.residuals);
    println!("error bounds {:.1e}", result.error_bounds);
    println!("next {:?} +- {:?}", result.next_energy, result.next_error);
    println!("{:?}, {:?}", result.status, result.level_count);
    println!("levels found after (products, seconds) {search:?}");
    let (warm, time) = warm_start(sites, &result.vectors, levels);
    println!("at repulsion 4.1 from these vectors: {warm} products, {time:.2} s");
    println!(
        "{} products, {total:.2} s, of which {:.2} s ({:.0} %) outside the products ({:.2} ms each)",
        result.products,
        total - products,
        100.0 * (1.0 - products / total),
        1e3 * products / ring.calls.load(Relaxed) as f64
    );
}

/// Products and seconds at a slightly stronger repulsion, begun from the levels given.
fn warm_start(sites: usize, start: &ndarray::Array2<f64>, levels: usize) -> (usize, f64) {
    let ring = Ring::new(sites, sites as u32 / 2, 4.1);
    let request = LevelRequest {
        start: Some(start.view()),
        ..LevelRequest::new(levels)
    };
    let begun = Instant::now();
    let result = lowest_levels(&ring, &request, &mut silent).expect("a legal request");
    (result.products, begun.elapsed().as_secs_f64())
}
