//! The r configurations of lowest one-particle energy, by best-first search.
//!
//! With the modes sorted by energy, the configurations of one spin component are the partitions
//! in a box: row i is how far particle i, counted from the highest, stands above its place in
//! the lowest configuration. Adding a box raises one particle to the next mode, so energies
//! grow along the Gale order. Each partition has one parent (remove a box from its last row),
//! hence at most two children, and the search needs no record of what was visited: r steps of
//! O(log r), whatever the numbers of particles and modes. Pairs of two such streams serve
//! spin-1/2.

use super::configuration::Sector;
use crate::error::{Error, Result};
use crate::memory;
use crate::weights::{CompensatedSum, compensated_sum};
use ndarray::{Array2, Array3, ArrayView2};
use num_bigint::BigUint;
use std::cmp::{Ordering, Reverse};
use std::collections::BinaryHeap;

/// The lowest configurations in order of energy (equal energies in a fixed order).
#[derive(Debug, Clone)]
pub struct LowestConfigurations {
    energies: Vec<f64>,
    streams: Vec<Stream>,
    /// Node of each stream for each configuration.
    nodes: Vec<[u32; 2]>,
}

/// Nodes, candidates and queue entries, for each configuration found.
const BYTES_PER_CONFIGURATION: u128 = 160;

impl Sector {
    /// The `count` configurations of lowest energy for one-particle energies `(spins, modes)`.
    ///
    /// # Errors
    /// [`Error::Argument`] for a wrong shape, energies that are not finite, or a count of zero
    /// or above the dimension; [`Error::Memory`] if the search does not fit.
    pub fn lowest_configurations(
        &self,
        energies: ArrayView2<'_, f64>,
        count: usize,
    ) -> Result<LowestConfigurations> {
        const ARGUMENT: &str = "one_particle_energies";
        if energies.dim() != (self.spins(), self.modes()) {
            return Err(Error::argument(
                ARGUMENT,
                format!("shape {:?}", energies.shape()),
                format!(
                    "{} energies for each of {} component(s)",
                    self.modes(),
                    self.spins()
                ),
            ));
        }
        if energies.iter().any(|e| !e.is_finite()) {
            return Err(Error::argument(
                ARGUMENT,
                "NaN or infinity",
                "finite numbers",
            ));
        }
        let dimension = self.dimension();
        if count == 0 || BigUint::from(count) > dimension || u32::try_from(count).is_err() {
            return Err(Error::argument(
                "r",
                count,
                format!("1 to {dimension}, the dimension (and below 2^32)"),
            ));
        }
        memory::require(
            format!("the search for the {count} lowest configurations"),
            count as u128 * BYTES_PER_CONFIGURATION,
        )?;
        let streams: Vec<Stream> = energies
            .rows()
            .into_iter()
            .zip(self.particles_by_spin())
            .map(|(row, particles)| Stream::new(&row.to_vec(), particles, self.is_fermionic()))
            .collect();
        Ok(LowestConfigurations::search(streams, count))
    }
}

impl LowestConfigurations {
    fn search(mut streams: Vec<Stream>, count: usize) -> Self {
        let mut energies = Vec::with_capacity(count);
        let mut nodes = Vec::with_capacity(count);
        if let [only] = streams.as_mut_slice() {
            for i in 0..count {
                energies.push(only.energy(i).unwrap_or(f64::INFINITY));
                nodes.push([i as u32, 0]);
            }
        } else {
            let mut queue = BinaryHeap::new();
            push_pair(&mut queue, &mut streams, [0, 0]);
            while energies.len() < count {
                let Some(Reverse(Keyed {
                    energy,
                    order: [i, j],
                })) = queue.pop()
                else {
                    break;
                };
                energies.push(energy);
                nodes.push([i, j]);
                push_pair(&mut queue, &mut streams, [i, j + 1]);
                // a new first index enters once, with the lowest second one
                if j == 0 {
                    push_pair(&mut queue, &mut streams, [i + 1, 0]);
                }
            }
        }
        LowestConfigurations {
            energies,
            streams,
            nodes,
        }
    }

    /// Energies, increasing.
    pub fn energies(&self) -> &[f64] {
        &self.energies
    }

    /// Occupations `(count, spins, modes)`.
    pub fn occupations(&self) -> Array3<u32> {
        let modes = self.streams.first().map_or(0, |stream| stream.order.len());
        let mut result = Array3::zeros((self.nodes.len(), self.streams.len(), modes));
        for (spin, stream) in self.streams.iter().enumerate() {
            let all = stream.all_occupations();
            for (k, node) in self.nodes.iter().enumerate() {
                result
                    .slice_mut(ndarray::s![k, spin, ..])
                    .assign(&all.row(node[spin] as usize));
            }
        }
        result
    }

    /// Occupations `(spins, modes)` of the configurations mixed with the given weights, without
    /// writing out any configuration: O(count + modes).
    pub fn weighted_occupations(&self, weights: &[f64]) -> Array2<f64> {
        debug_assert_eq!(weights.len(), self.nodes.len());
        let modes = self.streams.first().map_or(0, |stream| stream.order.len());
        let mut result = Array2::zeros((self.streams.len(), modes));
        // one total for all components, so that filled modes do not differ by rounding
        let total = compensated_sum(weights);
        for (spin, stream) in self.streams.iter().enumerate() {
            let mut marginal = vec![0.0; stream.found.len()];
            for (node, weight) in self.nodes.iter().zip(weights) {
                marginal[node[spin] as usize] += weight;
            }
            let mixed = stream.mixed_occupations(marginal, total);
            result
                .row_mut(spin)
                .assign(&ndarray::ArrayView1::from(&mixed));
        }
        result
    }
}

/// An entry of a priority queue: by energy, then by a fixed order.
#[derive(Debug, Clone, Copy)]
struct Keyed<K> {
    energy: f64,
    order: K,
}

impl<K: Ord> Ord for Keyed<K> {
    fn cmp(&self, other: &Self) -> Ordering {
        self.energy
            .total_cmp(&other.energy)
            .then_with(|| self.order.cmp(&other.order))
    }
}

impl<K: Ord> PartialOrd for Keyed<K> {
    fn partial_cmp(&self, other: &Self) -> Option<Ordering> {
        Some(self.cmp(other))
    }
}

impl<K: Ord> PartialEq for Keyed<K> {
    fn eq(&self, other: &Self) -> bool {
        self.cmp(other) == Ordering::Equal
    }
}

impl<K: Ord> Eq for Keyed<K> {}

fn push_pair(
    queue: &mut BinaryHeap<Reverse<Keyed<[u32; 2]>>>,
    streams: &mut [Stream],
    pair: [u32; 2],
) {
    let [up, down] = streams else { return };
    if let (Some(a), Some(b)) = (up.energy(pair[0] as usize), down.energy(pair[1] as usize)) {
        queue.push(Reverse(Keyed {
            energy: a + b,
            order: pair,
        }));
    }
}

const NO_PARENT: u32 = u32::MAX;

/// A partition: its last row, and how it came about.
#[derive(Debug, Clone, Copy)]
struct Node {
    energy: f64,
    parent: u32,
    /// Sorted mode that the last added box left; the particle went to the next one.
    from: u32,
    row: u32,
    length: u32,
    /// Length of the row before the last.
    previous: u32,
}

/// The configurations of one spin component in order of energy, found as they are asked for.
#[derive(Debug, Clone)]
struct Stream {
    /// Modes by increasing energy.
    order: Vec<usize>,
    /// Their energies.
    sorted: Vec<f64>,
    particles: usize,
    /// Fermions: particle i starts i modes below the highest; bosons: all start at the bottom.
    fermionic: bool,
    longest_row: u32,
    found: Vec<Node>,
    queue: BinaryHeap<Reverse<Keyed<u32>>>,
    /// Partitions pushed so far, in the order of pushing.
    candidates: Vec<Node>,
}

impl Stream {
    fn new(energies: &[f64], particles: usize, fermionic: bool) -> Self {
        let mut order: Vec<usize> = (0..energies.len()).collect();
        order.sort_by(|&a, &b| energies[a].total_cmp(&energies[b]).then(a.cmp(&b)));
        let sorted: Vec<f64> = order.iter().map(|&mode| energies[mode]).collect();
        let longest_row = if fermionic {
            sorted.len() - particles
        } else {
            sorted.len() - 1
        } as u32;
        let energy = if fermionic {
            sorted[..particles].iter().sum()
        } else {
            particles as f64 * sorted[0]
        };
        let mut stream = Stream {
            order,
            sorted,
            particles,
            fermionic,
            longest_row,
            found: Vec::new(),
            queue: BinaryHeap::new(),
            candidates: Vec::new(),
        };
        stream.push(Node {
            energy,
            parent: NO_PARENT,
            from: 0,
            row: 0,
            length: 0,
            previous: longest_row,
        });
        stream
    }

    /// Energy of the `index`-th lowest configuration, if there are so many.
    fn energy(&mut self, index: usize) -> Option<f64> {
        while self.found.len() <= index {
            let Reverse(Keyed { order, .. }) = self.queue.pop()?;
            let node = self.candidates[order as usize];
            let parent = self.found.len() as u32;
            self.found.push(node);
            self.push_children(parent, node);
        }
        Some(self.found[index].energy)
    }

    fn push(&mut self, node: Node) {
        self.queue.push(Reverse(Keyed {
            energy: node.energy,
            order: self.candidates.len() as u32,
        }));
        self.candidates.push(node);
    }

    fn push_children(&mut self, parent: u32, node: Node) {
        let empty = node.length == 0;
        if !empty && node.length < node.previous {
            self.push_box(parent, node, node.row, node.length, node.previous);
        }
        let next_row = if empty { 0 } else { node.row + 1 };
        let room = if empty { self.longest_row } else { node.length };
        if (next_row as usize) < self.particles && room > 0 {
            self.push_box(parent, node, next_row, 0, room);
        }
    }

    /// The child with one more box in `row`, which had `length` of at most `previous` boxes.
    fn push_box(&mut self, parent: u32, node: Node, row: u32, length: u32, previous: u32) {
        let start = if self.fermionic {
            self.particles - 1 - row as usize
        } else {
            0
        };
        let from = start + length as usize;
        self.push(Node {
            energy: node.energy + (self.sorted[from + 1] - self.sorted[from]),
            parent,
            from: from as u32,
            row,
            length: length + 1,
            previous,
        });
    }

    /// Occupations of the sorted modes in the lowest configuration.
    fn ground_occupations(&self) -> Vec<u32> {
        let mut occupations = vec![0; self.sorted.len()];
        if self.fermionic {
            occupations[..self.particles].fill(1);
        } else {
            occupations[0] = self.particles as u32;
        }
        occupations
    }

    /// Occupations `(found, modes)`, each from its parent's by one raised particle.
    fn all_occupations(&self) -> Array2<u32> {
        let mut result = Array2::zeros((self.found.len(), self.order.len()));
        let ground = self.ground_occupations();
        for (k, node) in self.found.iter().enumerate() {
            if node.parent == NO_PARENT {
                for (level, &mode) in self.order.iter().enumerate() {
                    result[[k, mode]] = ground[level];
                }
                continue;
            }
            let (done, mut rest) = result.view_mut().split_at(ndarray::Axis(0), k);
            let mut row = rest.row_mut(0);
            row.assign(&done.row(node.parent as usize));
            row[self.order[node.from as usize]] -= 1;
            row[self.order[node.from as usize + 1]] += 1;
        }
        result
    }

    /// sum_k weights[k] x occupations of configuration k; each box counts for all descendants.
    fn mixed_occupations(&self, mut weights: Vec<f64>, total: f64) -> Vec<f64> {
        // what passes from each sorted mode to the next
        let mut flows = vec![CompensatedSum::default(); self.sorted.len()];
        // descendants come after their parents, so a backward pass has complete sums
        for (k, node) in self.found.iter().enumerate().rev() {
            if node.parent == NO_PARENT {
                continue;
            }
            let weight = weights[k];
            weights[node.parent as usize] += weight;
            flows[node.from as usize].add(weight);
        }
        let mut levels: Vec<f64> = self
            .ground_occupations()
            .iter()
            .map(|&n| f64::from(n) * total)
            .collect();
        for (level, flow) in flows.iter().map(CompensatedSum::value).enumerate() {
            levels[level] -= flow;
            if let Some(next) = levels.get_mut(level + 1) {
                *next += flow;
            }
        }
        let mut occupations = vec![0.0; levels.len()];
        for (level, &mode) in self.order.iter().enumerate() {
            occupations[mode] = levels[level];
        }
        occupations
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use approx::assert_abs_diff_eq;
    use rand::{Rng, SeedableRng};
    use rand_chacha::ChaCha8Rng;

    fn all_energies(sector: &Sector, h: &Array2<f64>) -> Vec<f64> {
        let configurations = sector.configurations().unwrap();
        let mut energies: Vec<f64> = (0..configurations.dimension())
            .map(|i| {
                let n = configurations.occupations(i).unwrap();
                n.iter().zip(h).map(|(&n, e)| f64::from(n) * e).sum()
            })
            .collect();
        energies.sort_by(f64::total_cmp);
        energies
    }

    #[test]
    fn the_search_finds_all_configurations_in_order() {
        let mut generator = ChaCha8Rng::seed_from_u64(1);
        for sector in [
            Sector::fermions(7, 3).unwrap(),
            Sector::fermions(4, 0).unwrap(),
            Sector::fermions(4, 4).unwrap(),
            Sector::spin_half(4, 2, 1).unwrap(),
            Sector::spin_half(3, 3, 0).unwrap(),
            Sector::bosons(4, 3).unwrap(),
            Sector::bosons(1, 3).unwrap(),
            Sector::bosons(3, 0).unwrap(),
        ] {
            for degenerate in [false, true] {
                let h = Array2::from_shape_fn((sector.spins(), sector.modes()), |_| {
                    let e: f64 = generator.random();
                    if degenerate { (3.0 * e).floor() } else { e }
                });
                let expected = all_energies(&sector, &h);
                let r = expected.len();
                let lowest = sector.lowest_configurations(h.view(), r).unwrap();
                let occupations = lowest.occupations();
                let mut seen: Vec<Vec<u32>> = Vec::new();
                let weights: Vec<f64> = (0..r).map(|_| generator.random()).collect();
                let mut mixed = Array2::zeros(h.dim());
                for (k, n) in occupations.outer_iter().enumerate() {
                    sector.check_occupations(n).unwrap();
                    let energy: f64 = n.iter().zip(&h).map(|(&n, e)| f64::from(n) * e).sum();
                    assert_abs_diff_eq!(energy, expected[k], epsilon = 1e-12);
                    assert_abs_diff_eq!(lowest.energies()[k], energy, epsilon = 1e-12);
                    seen.push(n.iter().copied().collect());
                    mixed = mixed + n.mapv(f64::from) * weights[k];
                }
                seen.sort();
                seen.dedup();
                assert_eq!(seen.len(), r);
                let direct = lowest.weighted_occupations(&weights);
                assert_abs_diff_eq!(direct, mixed, epsilon = 1e-11);
            }
        }
    }

    #[test]
    fn large_sectors_need_no_enumeration() {
        let sector = Sector::fermions(100, 50).unwrap();
        let h = Array2::from_shape_fn((1, 100), |(_, i)| (i as f64).sqrt());
        let lowest = sector.lowest_configurations(h.view(), 10_000).unwrap();
        assert!(lowest.energies().windows(2).all(|w| w[0] <= w[1]));
        let sum = lowest.weighted_occupations(&vec![1e-4; 10_000]).sum();
        assert_abs_diff_eq!(sum, 50.0, epsilon = 1e-9);
    }

    #[test]
    fn bad_requests_are_refused() {
        let sector = Sector::fermions(3, 1).unwrap();
        let h = ndarray::array![[0.0, 1.0, 2.0]];
        assert!(sector.lowest_configurations(h.view(), 0).is_err());
        assert!(sector.lowest_configurations(h.view(), 4).is_err());
        let wrong = ndarray::array![[0.0, f64::NAN, 2.0]];
        assert!(sector.lowest_configurations(wrong.view(), 1).is_err());
    }
}
