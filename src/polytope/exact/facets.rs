//! Which normals belong to facets, from which r on, and their bounds.
//!
//! The face of Sigma with normal -h is a sum over k of (w_k - w_{k+1}) times the faces of the
//! k-level sums, so its directions are spanned by the differences of configurations of equal
//! energy, for every degenerate level that some k with w_k > w_{k+1} cuts. Within a *block* of
//! modes of equal h all permutations occur: one representative of each orbit is kept, and a
//! block that is not filled evenly contributes all its zero-sum directions.

use super::cone::gcd;
use super::excitations::{Excitations, Species};
use std::ops::Range;

/// A step of h: (component, step, height).
pub(super) type Edge = (usize, usize, i64);

/// What a facet normal amounts to.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Facet {
    /// Smallest r at which the normal is one for strictly decreasing weights.
    pub(super) first_level: usize,
    /// Energies of the r lowest configurations above the very lowest.
    pub(super) energies: Vec<i64>,
}

/// Modes of equal one-particle energy, between two edges (as indices of edges).
struct Block {
    component: usize,
    modes: Range<usize>,
    edges: [Option<usize>; 2],
}

/// Configurations of one energy: how many, and the block fillings of each orbit by species.
struct Level {
    energy: i64,
    count: u64,
    orbits: Vec<Vec<Vec<usize>>>,
}

/// Judges normals of a polytope.
pub(super) struct Judge<'a> {
    table: &'a Excitations,
    /// `cuts[k - 1]` says whether w_k > w_{k+1}.
    cuts: &'a [bool],
    /// Dimension of the polytope.
    dimension: usize,
}

impl<'a> Judge<'a> {
    pub(super) fn new(table: &'a Excitations, cuts: &'a [bool]) -> Self {
        let dimension =
            (0..table.components).filter(|&c| table.is_free(c)).count() * (table.modes - 1);
        Judge {
            table,
            cuts,
            dimension,
        }
    }

    /// The facet with this normal, if it is one.
    pub(super) fn facet(&self, normal: &[Edge]) -> Option<Facet> {
        let blocks = self.blocks(normal);
        let levels = self.levels(normal, &blocks);
        let r = self.cuts.len();
        let mut below = 0;
        let mut energies = Vec::with_capacity(r);
        let mut strict = Directions::new(&blocks);
        let mut actual = strict.clone();
        // an interval ends in two points, which need no degenerate level
        let mut first_level = (self.dimension == 1).then_some(1);
        for level in &levels {
            let end = level.count.saturating_add(below as u64).min(r as u64 + 1) as usize;
            energies.resize(end.min(r), level.energy);
            if end > below + 1 {
                strict.add(level, &self.table.species, &blocks);
                if strict.rank() + 1 == self.dimension {
                    first_level = first_level.or(Some(below + 1));
                }
            }
            // positions below + 1 .. end - 1 lie strictly inside the level
            if (below + 1..end).any(|k| self.cuts[k - 1]) {
                actual.add(level, &self.table.species, &blocks);
            }
            below = end;
            if below >= r {
                break;
            }
        }
        let is_facet = self.dimension > 0 && actual.rank() + 1 == self.dimension;
        is_facet.then_some(Facet {
            first_level: first_level.unwrap_or(r),
            energies,
        })
    }

    fn blocks(&self, normal: &[Edge]) -> Vec<Block> {
        let mut blocks = Vec::new();
        for component in 0..self.table.components {
            let mut start = (0, None);
            for (k, &(_, step, _)) in normal.iter().enumerate().filter(|(_, e)| e.0 == component) {
                blocks.push(Block {
                    component,
                    modes: start.0..step + 1,
                    edges: [start.1, Some(k)],
                });
                start = (step + 1, Some(k));
            }
            blocks.push(Block {
                component,
                modes: start.0..self.table.modes,
                edges: [start.1, None],
            });
        }
        blocks
    }

    /// Levels up to the r-th state, from the lowest of each orbit.
    fn levels(&self, normal: &[Edge], blocks: &[Block]) -> Vec<Level> {
        let active = |edge: &Edge| self.table.steps.binary_search(&(edge.0, edge.1)).ok();
        let places: Vec<Option<usize>> = normal.iter().map(active).collect();
        let mut flat = vec![true; self.table.steps.len()];
        places.iter().flatten().for_each(|&k| flat[k] = false);
        let mut levels: Vec<Level> = Vec::new();
        for entry in &self.table.entries {
            if entry.removable.iter().any(|&k| flat[k]) {
                continue;
            }
            let heights = normal.iter().zip(&places);
            let energy = heights
                .map(|(edge, place)| edge.2 * place.map_or(0, |k| entry.excess[k]))
                .sum();
            let mut fillings = Vec::new();
            let mut count = 1u64;
            for (kind, excess) in self.table.species.iter().zip(&entry.by_species) {
                let across =
                    |edge: Option<usize>| edge.and_then(|k| places[k]).map_or(0, |k| excess[k]);
                let mut filling = vec![0; blocks.len()];
                for (n, block) in filling.iter_mut().zip(blocks) {
                    if block.component == kind.component {
                        let ground =
                            kind.ground_sum(block.modes.end) - kind.ground_sum(block.modes.start);
                        *n = (ground as i64 + across(block.edges[0]) - across(block.edges[1]))
                            as usize;
                        count = count.saturating_mul(arrangements(kind, block.modes.len(), *n));
                    }
                }
                fillings.push(filling);
            }
            match levels.binary_search_by_key(&energy, |level| level.energy) {
                Ok(k) => {
                    levels[k].count = levels[k].count.saturating_add(count);
                    levels[k].orbits.push(fillings);
                }
                Err(k) => levels.insert(
                    k,
                    Level {
                        energy,
                        count,
                        orbits: vec![fillings],
                    },
                ),
            }
        }
        levels
    }
}

/// Ways to put `particles` into `modes`, cut off at 2^63.
fn arrangements(kind: &Species, modes: usize, particles: usize) -> u64 {
    let (n, k) = if kind.fermionic {
        (modes, particles)
    } else {
        (modes + particles - 1, particles)
    };
    let k = k.min(n - k);
    let mut ways = 1u128;
    for i in 0..k {
        ways = ways * (n - i) as u128 / (i + 1) as u128;
        if ways >> 63 != 0 {
            return 1 << 63;
        }
    }
    ways as u64
}

/// A space of directions: zero-sum ones of uneven blocks, and a basis of block fillings.
#[derive(Clone)]
struct Directions {
    uneven: Vec<Option<usize>>,
    echelon: Vec<Vec<i128>>,
}

impl Directions {
    fn new(blocks: &[Block]) -> Self {
        Directions {
            uneven: vec![None; blocks.len()],
            echelon: Vec::new(),
        }
    }

    fn rank(&self) -> usize {
        self.uneven.iter().flatten().sum::<usize>() + self.echelon.len()
    }

    fn add(&mut self, level: &Level, species: &[Species], blocks: &[Block]) {
        let mut first: Option<Vec<i128>> = None;
        for orbit in &level.orbits {
            let mut sums = vec![0i128; blocks.len()];
            for (kind, filling) in species.iter().zip(orbit) {
                for (b, (&n, block)) in filling.iter().zip(blocks).enumerate() {
                    sums[b] += n as i128;
                    let size = block.modes.len();
                    if n > 0 && size > 1 && !(kind.fermionic && n == size) {
                        self.uneven[b] = Some(size - 1);
                    }
                }
            }
            match &first {
                None => first = Some(sums),
                Some(first) => {
                    let difference = sums.iter().zip(first).map(|(a, b)| a - b).collect();
                    self.add_difference(difference);
                }
            }
        }
    }

    fn add_difference(&mut self, mut row: Vec<i128>) {
        for basis in &self.echelon {
            if let Some(pivot) = basis.iter().position(|&x| x != 0)
                && row[pivot] != 0
            {
                let (a, b) = (basis[pivot], row[pivot]);
                row.iter_mut()
                    .zip(basis)
                    .for_each(|(x, y)| *x = *x * a - y * b);
                let divisor = row.iter().fold(0, |divisor, &x| gcd(divisor, x)).max(1);
                row.iter_mut().for_each(|x| *x /= divisor);
            }
        }
        if row.iter().any(|&x| x != 0) {
            self.echelon.push(row);
        }
    }
}
