//! The configurations of lowest energy one after the other, by best-first search.
//!
//! With the modes sorted by energy, the configurations of one spin component are the partitions
//! in a box: row i is how far particle i, counted from the highest, stands above its place in
//! the lowest configuration. Adding a box raises one particle to the next mode, so energies
//! grow along the Gale order. Each partition has one parent (remove a box from its last row),
//! hence at most two children, and the search needs no record of what was visited: r steps of
//! O(log r), whatever the numbers of particles and modes. Pairs of two such streams serve
//! spin-1/2.

use crate::weights::{CompensatedSum, compensated_sum};
use ndarray::{Array2, Array3, ArrayView1, ArrayView2};
use std::cmp::{Ordering, Reverse};
use std::collections::BinaryHeap;

/// What a search has found.
#[derive(Debug, Clone)]
pub(super) struct BestFirst {
    streams: Vec<Stream>,
    /// Node of each stream for each configuration.
    nodes: Vec<[u32; 2]>,
}

impl BestFirst {
    /// The `count` lowest configurations for energies `(spins, modes)`, and their energies.
    pub fn search(
        energies: ArrayView2<'_, f64>,
        particles: &[usize],
        fermionic: bool,
        count: usize,
    ) -> (Self, Vec<f64>) {
        let mut streams: Vec<Stream> = energies
            .rows()
            .into_iter()
            .zip(particles)
            .map(|(row, &particles)| Stream::new(&row.to_vec(), particles, fermionic))
            .collect();
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
        (BestFirst { streams, nodes }, energies)
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

    /// sum_k weights[k] x occupations `(spins, modes)` of configuration k: O(count + modes).
    pub fn mixed_occupations(&self, weights: &[f64]) -> Array2<f64> {
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
            result.row_mut(spin).assign(&ArrayView1::from(&mixed));
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
