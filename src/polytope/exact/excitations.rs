//! The configurations that can be among the r lowest for increasing one-particle energies.
//!
//! Written by their excess over the lowest configuration: `excess[k]` particles more above the
//! step from mode k to mode k + 1, so that the energy is a ground value + `<excess, s>` with
//! the steps s_k = h_{k+1} - h_k >= 0. Only the few steps that some of these configurations
//! cross are kept, which makes everything independent of N and d when these are large.

use super::{Domain, refusal::too_large};
use crate::error::Result;
use crate::sector::Sector;
use std::collections::{BTreeMap, BTreeSet};

/// Configurations beyond which no list is attempted.
const LARGEST_TABLE: usize = 4096;

/// Identical particles; a configuration is a partition, row i raising the i-th highest
/// particle by so many modes.
#[derive(Debug, Clone, Copy)]
pub(super) struct Species {
    pub(super) modes: usize,
    pub(super) particles: usize,
    pub(super) fermionic: bool,
    /// The row of the occupations it counts in.
    pub(super) component: usize,
}

impl Species {
    /// Particles in the `count` lowest modes of the lowest configuration.
    pub(super) fn ground_sum(&self, count: usize) -> usize {
        match (self.fermionic, count) {
            (true, _) => self.particles.min(count),
            (false, 0) => 0,
            (false, _) => self.particles,
        }
    }

    /// Whether there is more than one configuration.
    pub(super) fn is_free(&self) -> bool {
        self.particles > 0 && self.longest_row() > 0
    }

    fn longest_row(&self) -> usize {
        if self.fermionic {
            self.modes - self.particles
        } else {
            self.modes - 1
        }
    }

    /// The mode from which row `row` raises its particle.
    pub(super) fn start(&self, row: usize) -> usize {
        if self.fermionic {
            self.particles - 1 - row
        } else {
            0
        }
    }

    /// Partitions that contain at most `most` partitions, with that number.
    fn partitions(&self, most: usize) -> Result<Vec<(Vec<usize>, usize)>> {
        let mut found = vec![(Vec::new(), 1)];
        let mut next = 0;
        while next < found.len() {
            let rows = found[next].0.clone();
            next += 1;
            // each partition comes once, from the one without the last box of its last row
            let mut children = Vec::new();
            if let Some((&last, above)) = rows.split_last() {
                let room = above.last().copied().unwrap_or(self.longest_row());
                if last < room {
                    children.push([above, &[last + 1]].concat());
                }
            }
            if rows.len() < self.particles && self.longest_row() > 0 {
                children.push([&rows[..], &[1]].concat());
            }
            for child in children {
                let contained = contained_partitions(&child, most);
                if contained <= most {
                    found.push((child, contained));
                }
            }
            if found.len() > LARGEST_TABLE {
                let given = format!(
                    "{most} weights, for which more than {LARGEST_TABLE} configurations compete"
                );
                return Err(too_large(given));
            }
        }
        Ok(found)
    }
}

/// Number of partitions inside `rows`, itself included; anything above `most` may be cut short.
fn contained_partitions(rows: &[usize], most: usize) -> usize {
    // ways[v]: choices for the rows from here on whose first has v boxes
    let mut ways = vec![1usize];
    for &row in rows.iter().rev() {
        let mut sum = 0usize;
        let previous = ways;
        ways = (0..=row)
            .map(|v| {
                sum = sum.saturating_add(previous.get(v).copied().unwrap_or(0));
                sum
            })
            .collect();
        if sum > most {
            return sum;
        }
    }
    ways.iter().fold(0, |sum, &w| sum.saturating_add(w))
}

/// One configuration.
#[derive(Debug, Clone)]
pub(super) struct Excitation {
    /// The partition of each species.
    pub(super) rows: Vec<Vec<usize>>,
    /// Particles more above each active step, per species.
    pub(super) by_species: Vec<Vec<i64>>,
    /// The same, species of one component added.
    pub(super) excess: Vec<i64>,
    /// Active steps down which a single particle can go.
    pub(super) removable: Vec<usize>,
}

/// All configurations that matter for the r lowest.
#[derive(Debug)]
pub(super) struct Excitations {
    pub(super) species: Vec<Species>,
    pub(super) components: usize,
    pub(super) modes: usize,
    /// Active steps as (component, step), increasing.
    pub(super) steps: Vec<(usize, usize)>,
    pub(super) entries: Vec<Excitation>,
    below: Vec<Vec<u64>>,
}

impl Excitations {
    /// Configurations with fewer than `count` others below them for every increasing h.
    ///
    /// # Errors
    /// If there are too many for lists of line-ups.
    pub(super) fn new(sector: &Sector, domain: Domain, count: usize) -> Result<Self> {
        let summed = domain == Domain::SpinSummed;
        let species: Vec<Species> = sector
            .particles_by_spin()
            .into_iter()
            .enumerate()
            .map(|(spin, particles)| Species {
                modes: sector.modes(),
                particles,
                fermionic: sector.is_fermionic(),
                component: if summed { 0 } else { spin },
            })
            .collect();
        let mut chosen: Vec<(Vec<Vec<usize>>, usize)> = vec![(Vec::new(), 1)];
        for kind in &species {
            let partitions = kind.partitions(count)?;
            chosen = chosen
                .iter()
                .flat_map(|(rows, contained)| {
                    let fitting = partitions
                        .iter()
                        .filter(move |(_, c)| c * contained <= count);
                    fitting.map(move |(p, c)| {
                        ([&rows[..], std::slice::from_ref(p)].concat(), c * contained)
                    })
                })
                .collect();
        }
        if chosen.len() > LARGEST_TABLE {
            let given = format!(
                "{count} weights, for which {} configurations compete",
                chosen.len()
            );
            return Err(too_large(given));
        }
        let components = if summed { 1 } else { species.len() };
        let mut table = Excitations {
            species,
            components,
            modes: sector.modes(),
            steps: Vec::new(),
            entries: Vec::new(),
            below: Vec::new(),
        };
        table.fill(chosen.into_iter().map(|(rows, _)| rows).collect());
        Ok(table)
    }

    fn fill(&mut self, chosen: Vec<Vec<Vec<usize>>>) {
        let mut crossed = BTreeSet::new();
        for rows in &chosen {
            for (kind, rows) in self.species.iter().zip(rows) {
                for (i, &row) in rows.iter().enumerate() {
                    let start = kind.start(i);
                    crossed.extend((start..start + row).map(|step| (kind.component, step)));
                }
            }
        }
        self.steps = crossed.into_iter().collect();
        let place: BTreeMap<(usize, usize), usize> = self
            .steps
            .iter()
            .enumerate()
            .map(|(k, &step)| (step, k))
            .collect();
        self.entries = chosen
            .into_iter()
            .map(|rows| self.excitation(rows, &place))
            .collect();
        self.below = (0..self.entries.len()).map(|k| self.all_below(k)).collect();
    }

    fn excitation(
        &self,
        rows: Vec<Vec<usize>>,
        place: &BTreeMap<(usize, usize), usize>,
    ) -> Excitation {
        let mut by_species = vec![vec![0; self.steps.len()]; self.species.len()];
        let mut removable = Vec::new();
        for (s, (kind, rows)) in self.species.iter().zip(&rows).enumerate() {
            for (i, &row) in rows.iter().enumerate() {
                let start = kind.start(i);
                for step in start..start + row {
                    by_species[s][place[&(kind.component, step)]] += 1;
                }
                if row > rows.get(i + 1).copied().unwrap_or(0) {
                    removable.push(place[&(kind.component, start + row - 1)]);
                }
            }
        }
        let excess = (0..self.steps.len())
            .map(|k| by_species.iter().map(|species| species[k]).sum())
            .collect();
        Excitation {
            rows,
            by_species,
            excess,
            removable,
        }
    }

    /// Whether entry `a` is at most as high as entry `b` for every increasing h; of several
    /// with equal occupations (spin-summed) the first counts as the lowest.
    pub(super) fn precedes(&self, a: usize, b: usize) -> bool {
        let (x, y) = (&self.entries[a].excess, &self.entries[b].excess);
        a != b && x.iter().zip(y).all(|(x, y)| x <= y) && (a < b || x != y)
    }

    fn all_below(&self, b: usize) -> Vec<u64> {
        let mut bits = vec![0; self.entries.len().div_ceil(64)];
        for a in (0..self.entries.len()).filter(|&a| self.precedes(a, b)) {
            bits[a / 64] |= 1 << (a % 64);
        }
        bits
    }

    /// Entries outside `chosen` with everything below them inside.
    pub(super) fn minimal_outside(&self, chosen: &[usize]) -> Vec<usize> {
        let mut bits = vec![0u64; self.entries.len().div_ceil(64)];
        for &k in chosen {
            bits[k / 64] |= 1 << (k % 64);
        }
        (0..self.entries.len())
            .filter(|&k| bits[k / 64] >> (k % 64) & 1 == 0)
            .filter(|&k| {
                self.below[k]
                    .iter()
                    .zip(&bits)
                    .all(|(below, inside)| below & !inside == 0)
            })
            .collect()
    }

    /// The species that count in a component.
    pub(super) fn kinds(&self, component: usize) -> impl Iterator<Item = &Species> {
        self.species
            .iter()
            .filter(move |kind| kind.component == component)
    }

    /// Whether the occupations of a component can differ.
    pub(super) fn is_free(&self, component: usize) -> bool {
        self.kinds(component).any(Species::is_free)
    }

    /// Particles of a component.
    pub(super) fn particles(&self, component: usize) -> usize {
        self.kinds(component).map(|kind| kind.particles).sum()
    }

    /// Occupations of an entry, `(components, modes)` in row-major order.
    pub(super) fn occupations(&self, entry: usize) -> Vec<u32> {
        let mut occupations = vec![0; self.components * self.modes];
        for (kind, rows) in self.species.iter().zip(&self.entries[entry].rows) {
            let row = &mut occupations[kind.component * self.modes..][..self.modes];
            for i in 0..kind.particles {
                row[kind.start(i) + rows.get(i).copied().unwrap_or(0)] += 1;
            }
        }
        occupations
    }
}
