//! Very many lowest configurations of fermions, by particle-hole excitations.
//!
//! Every configuration is the lowest one with k holes below the Fermi level and k particles
//! above it; its energy above the lowest is the sum of a hole part and a particle part. There
//! are far fewer sets of holes and sets of particles than pairs of them. With both lists sorted,
//! the pairs up to an energy are counted in one pass over the lists (selection in X + Y), which
//! brackets the energy of the last configuration wanted. Only then the pairs are written out,
//! band of energy by band, and sorted by buckets. A mixture needs one addition to the holes and
//! one to the particles of each pair, and a pass over the lists at the end.

use super::bucket_sort::{Entry, Sorter};
use super::excitation_lists::Lists;
use crate::weights::CompensatedSum;
use ndarray::{Array2, Array3};
use rayon::prelude::*;

/// Pairs written out beyond the number wanted, as a share.
const EXCESS: f64 = 0.04;
/// Configurations in a band, about: they stay in the cache and occupy one thread.
const BAND: usize = 16_384;
/// Enumerations of the lists for growing limits.
const TRIALS: usize = 64;
/// Of these, how many may end with too long lists before this is left to the search.
const FAILURES: usize = 6;
/// Guess of how the energy grows with the logarithm of the number: as this power.
const GROWTH: f64 = 1.5;
/// Steps after which a bracket holds no more than one degenerate multiplet.
const STEPS: usize = 100;

/// Energies above the lowest: fewer than wanted up to `low`, at least as many up to `high`.
#[derive(Debug, Clone, Copy)]
struct Bracket {
    low: f64,
    below: usize,
    high: f64,
    reached: usize,
}

/// Energies above `low` and up to `high`, and the configurations to be found there.
#[derive(Debug, Clone)]
struct Band {
    low: f64,
    high: f64,
    ranks: std::ops::Range<usize>,
    /// All of one energy, of which the first are taken.
    degenerate: bool,
}

/// The lists, and the bands that hold the configurations wanted.
#[derive(Debug, Clone)]
pub(super) struct ParticleHole {
    /// Modes by increasing energy.
    order: Vec<usize>,
    particles: usize,
    ground: f64,
    lists: Lists,
    bands: Vec<Band>,
}

impl ParticleHole {
    /// The `count` lowest configurations in order of energy; equal energies by the number of
    /// holes, then by the holes, then by the particles. None if degeneracies make the lists long.
    pub fn lowest(energies: &[f64], particles: usize, count: usize) -> Option<Self> {
        let mut order: Vec<usize> = (0..energies.len()).collect();
        order.sort_by(|&a, &b| energies[a].total_cmp(&energies[b]).then(a.cmp(&b)));
        let (below, above) = order.split_at(particles);
        let fermi = match (below.last(), above.first()) {
            (Some(&highest), Some(&lowest)) => 0.5 * energies[highest] + 0.5 * energies[lowest],
            (Some(&only), None) | (None, Some(&only)) => energies[only],
            (None, None) => 0.0,
        };
        let holes: Vec<f64> = below.iter().rev().map(|&m| fermi - energies[m]).collect();
        let raised: Vec<f64> = above.iter().map(|&m| energies[m] - fermi).collect();
        let (lists, bracket) = enumerate(&holes, &raised, count)?;
        Some(ParticleHole {
            particles,
            ground: below.iter().map(|&m| energies[m]).sum(),
            bands: bands(&lists, bracket, count),
            lists,
            order,
        })
    }

    /// Energies, and the set of holes and the set of particles of each configuration.
    pub fn write_out(&self) -> (Vec<f64>, Vec<[u32; 2]>) {
        let (mut energies, mut pairs) = (Vec::new(), Vec::new());
        let (mut sorter, mut found) = (Sorter::default(), Vec::new());
        for band in &self.bands {
            self.fill(band, &mut sorter, &mut found);
            energies.extend(found.iter().map(|pair| self.ground + pair.energy));
            pairs.extend(found.iter().map(|pair| pair.label));
        }
        (energies, pairs)
    }

    /// The configurations of a band in order.
    fn fill(&self, band: &Band, sorter: &mut Sorter<[u32; 2]>, found: &mut Vec<Entry<[u32; 2]>>) {
        let wanted = band.ranks.len();
        let most = if band.degenerate { wanted } else { usize::MAX };
        self.lists.between(band.low, band.high, most, found);
        sorter.sort(found);
        found.truncate(wanted);
    }

    /// Occupations `(count, 1, modes)` of pairs.
    pub fn occupations(&self, pairs: &[[u32; 2]]) -> Array3<u32> {
        let mut result = Array3::zeros((pairs.len(), 1, self.order.len()));
        let (below, above) = self.order.split_at(self.particles);
        for (mut row, [holes, raised]) in result.outer_iter_mut().zip(pairs) {
            for &mode in below {
                row[[0, mode]] = 1;
            }
            for level in self.lists.holes.members(*holes) {
                row[[0, below[self.particles - 1 - level]]] = 0;
            }
            for level in self.lists.raised.members(*raised) {
                row[[0, above[level]]] = 1;
            }
        }
        result
    }

    /// sum_k weights[k] x occupations of configuration k.
    pub fn mixed_occupations(&self, weights: &[f64]) -> Array2<f64> {
        let shares: Vec<_> = self
            .bands
            .par_iter()
            .map(|band| self.weights_of_sets(band, &weights[band.ranks.clone()]))
            .collect();
        let add = |sums: &mut Vec<f64>, more: Vec<f64>| {
            sums.iter_mut().zip(more).for_each(|(sum, x)| *sum += x);
        };
        let (holes, raised) = shares
            .into_iter()
            .reduce(|(mut holes, mut raised), (more_holes, more_raised)| {
                add(&mut holes, more_holes);
                add(&mut raised, more_raised);
                (holes, raised)
            })
            .unwrap_or_default();
        let mut total = CompensatedSum::default();
        holes.iter().for_each(|&weight| total.add(weight));
        let mut occupations = Array2::zeros((1, self.order.len()));
        let (below, above) = self.order.split_at(self.particles);
        let emptied = self.lists.holes.weights_of_levels(holes);
        for (&mode, weight) in below.iter().rev().zip(emptied) {
            occupations[[0, mode]] = total.value() - weight;
        }
        let filled = self.lists.raised.weights_of_levels(raised);
        for (&mode, weight) in above.iter().zip(filled) {
            occupations[[0, mode]] = weight;
        }
        occupations
    }

    fn weights_of_sets(&self, band: &Band, weights: &[f64]) -> (Vec<f64>, Vec<f64>) {
        let mut holes = vec![0.0; self.lists.holes.len()];
        let mut raised = vec![0.0; self.lists.raised.len()];
        let mut found = Vec::new();
        self.fill(band, &mut Sorter::default(), &mut found);
        for (pair, weight) in found.iter().zip(weights) {
            let [hole, particle] = pair.label;
            holes[hole as usize] += weight;
            raised[particle as usize] += weight;
        }
        (holes, raised)
    }
}

/// Lists long enough for `count` configurations, and a bracket of their number.
fn enumerate(holes: &[f64], raised: &[f64], count: usize) -> Option<(Lists, Bracket)> {
    // a set that is needed makes at least one configuration
    let most = count + 1000;
    u32::try_from(most).ok()?;
    let width = holes.iter().chain(raised).fold(0.0f64, |m, &e| m.max(e));
    if !(width * (holes.len() + raised.len()) as f64).is_finite() {
        return None;
    }
    let gap = holes.first().unwrap_or(&0.0) + raised.first().unwrap_or(&0.0);
    let mut limit = (2.0 * gap).max(1e-3 * width);
    let mut bracket = Bracket {
        low: -f64::MIN_POSITIVE,
        below: 0,
        high: f64::INFINITY,
        reached: usize::MAX,
    };
    let mut failures = 0;
    for _ in 0..TRIALS {
        if let Some(lists) = Lists::up_to(holes, raised, limit, most) {
            let reached = lists.count(limit);
            if reached >= count {
                (bracket.high, bracket.reached) = (limit, reached);
                let enough = count + (EXCESS * count as f64) as usize;
                let bracket = bracket.narrowed(&lists, count, enough, STEPS);
                return Some((lists, bracket));
            }
            (bracket.low, bracket.below) = (limit, reached);
            let growth = (1.1 * count as f64).ln() / (1.0 + reached as f64).ln();
            let most = if reached < 1000 { 2.0 } else { 1.3 };
            limit *= growth.powf(GROWTH).clamp(1.02, most);
        } else {
            failures += 1;
            bracket.high = limit;
        }
        if limit >= bracket.high {
            limit = bracket.low + 0.5 * (bracket.high - bracket.low);
        }
        if failures > FAILURES || limit >= bracket.high {
            break;
        }
    }
    None
}

impl Bracket {
    /// Moves the ends until `least` to `most` configurations are reached, or gives up.
    fn narrowed(mut self, lists: &Lists, least: usize, most: usize, steps: usize) -> Self {
        let logarithm = |n: usize| (1.0 + n as f64).ln();
        let target = logarithm(least + (most - least) / 2);
        for step in 0..steps {
            if self.reached <= most {
                break;
            }
            // false position on the logarithm, halving where that does not end soon
            let share = if step % 4 == 3 || steps > 8 && step > 8 {
                0.5
            } else {
                (target - logarithm(self.below)) / (logarithm(self.reached) - logarithm(self.below))
            };
            let middle = self.low + share.clamp(0.0, 1.0) * (self.high - self.low);
            if middle <= self.low || middle >= self.high {
                if share == 0.5 {
                    break;
                }
                continue;
            }
            let number = lists.count(middle);
            if number >= least {
                (self.high, self.reached) = (middle, number);
            } else {
                (self.low, self.below) = (middle, number);
            }
        }
        self
    }
}

/// Bands with about equally many configurations.
fn bands(lists: &Lists, bracket: Bracket, count: usize) -> Vec<Band> {
    let degenerate = bracket.reached > 2 * count;
    // a large degenerate multiplet at the end is not written out
    let (end, last) = if degenerate {
        (bracket.low, bracket.below)
    } else {
        (bracket.high, count)
    };
    let pieces = last.div_ceil(BAND);
    let size = last.div_ceil(pieces.max(1));
    let whole = Bracket {
        low: -f64::MIN_POSITIVE,
        below: 0,
        high: end,
        reached: last,
    };
    let mut edges: Vec<(f64, usize)> = (1..pieces)
        .into_par_iter()
        .map(|piece| {
            let wanted = piece * size;
            let edge = whole.narrowed(lists, wanted - size / 8, wanted + size / 8, 6);
            (edge.high, edge.reached)
        })
        .filter(|edge| edge.1 < last)
        .collect();
    edges.push((end, last));
    if degenerate {
        edges.push((bracket.high, count));
    }
    let mut low = (-f64::MIN_POSITIVE, 0);
    let mut bands = Vec::with_capacity(edges.len());
    for high in edges {
        if high.1 > low.1 {
            bands.push(Band {
                low: low.0,
                high: high.0,
                ranks: low.1..high.1,
                degenerate: degenerate && high.0 == bracket.high,
            });
            low = high;
        }
    }
    bands
}
