//! Sets of holes and sets of particles by energy, and how many pairs of them lie below a limit.

use super::bucket_sort::{Entry, Sorter};
use crate::weights::CompensatedSum;

/// The sets of holes, or of particles, of at most some energy.
#[derive(Debug, Clone)]
pub(super) struct Sets {
    levels: usize,
    /// Each set as a smaller one with a further level, counted away from the Fermi level.
    parents: Vec<u32>,
    last: Vec<u32>,
    /// Sets of k members by energy: `sorted[starts[k]..starts[k + 1]]`, labels as in `parents`.
    sorted: Vec<Entry<u32>>,
    starts: Vec<usize>,
}

impl Sets {
    /// All sets of levels with energies that, with the least energy of the other side for equally
    /// many members, are at most `limit`; none if there are more than `most`.
    fn up_to(levels: &[f64], other: &[f64], limit: f64, most: usize) -> Option<Self> {
        let mut sets = Sets {
            levels: levels.len(),
            parents: vec![0],
            last: vec![0],
            sorted: vec![Entry {
                energy: 0.0,
                label: 0,
            }],
            starts: vec![0, 1],
        };
        let mut sorter = Sorter::default();
        let mut least = 0.0;
        for (k, opposite) in other.iter().enumerate().take(levels.len()) {
            least += opposite;
            let start = sets.sorted.len();
            for place in sets.starts[k]..sets.starts[k + 1] {
                sets.enlarge(place, levels, limit, least);
                if sets.sorted.len() > most {
                    return None;
                }
            }
            if sets.sorted.len() == start {
                break;
            }
            sorter.sort(&mut sets.sorted[start..]);
            sets.starts.push(sets.sorted.len());
        }
        Some(sets)
    }

    /// Appends the sets with one level more, beyond those they have.
    fn enlarge(&mut self, place: usize, levels: &[f64], limit: f64, least: f64) {
        let Entry {
            energy,
            label: parent,
        } = self.sorted[place];
        let next = if parent == 0 {
            0
        } else {
            self.last[parent as usize] as usize + 1
        };
        for (level, step) in levels.iter().enumerate().skip(next) {
            let energy = energy + step;
            if energy + least > limit {
                break;
            }
            let label = self.parents.len() as u32;
            self.sorted.push(Entry { energy, label });
            self.parents.push(parent);
            self.last.push(level as u32);
        }
    }

    /// Number of sets.
    pub fn len(&self) -> usize {
        self.parents.len()
    }

    fn of_size(&self, k: usize) -> &[Entry<u32>] {
        match self.starts.get(k..k + 2) {
            Some(range) => &self.sorted[range[0]..range[1]],
            None => &[],
        }
    }

    /// For each level the weight of the sets that have it.
    pub fn weights_of_levels(&self, mut weights: Vec<f64>) -> Vec<f64> {
        let mut sums = vec![CompensatedSum::default(); self.levels];
        // larger sets come after those they were made from
        for set in (1..self.len()).rev() {
            let weight = weights[set];
            weights[self.parents[set] as usize] += weight;
            sums[self.last[set] as usize].add(weight);
        }
        sums.iter().map(CompensatedSum::value).collect()
    }

    /// The levels of a set.
    pub fn members(&self, set: u32) -> impl Iterator<Item = usize> + '_ {
        let mut set = set as usize;
        std::iter::from_fn(move || {
            (set != 0).then(|| {
                let level = self.last[set] as usize;
                set = self.parents[set] as usize;
                level
            })
        })
    }
}

/// Sets of holes and sets of particles; those of equal size make a configuration.
#[derive(Debug, Clone)]
pub(super) struct Lists {
    pub holes: Sets,
    pub raised: Sets,
}

impl Lists {
    /// Everything that configurations up to `limit` are made of; none if a list has more than
    /// `most` sets.
    pub fn up_to(holes: &[f64], raised: &[f64], limit: f64, most: usize) -> Option<Self> {
        let (below, above) = rayon::join(
            || Sets::up_to(holes, raised, limit, most),
            || Sets::up_to(raised, holes, limit, most),
        );
        Some(Lists {
            holes: below?,
            raised: above?,
        })
    }

    /// Number of configurations with at most this energy.
    pub fn count(&self, limit: f64) -> usize {
        let mut sum = 0;
        for k in 0..self.holes.starts.len() {
            let partners = self.raised.of_size(k);
            let mut reach = self.farthest(k, limit);
            for set in self.holes.of_size(k) {
                reach = shrink(partners, reach, set.energy, limit);
                if reach == 0 {
                    break;
                }
                sum += reach;
            }
        }
        sum
    }

    /// How many sets of k particles stay within the limit with the lowest k holes.
    fn farthest(&self, k: usize, limit: f64) -> usize {
        let Some(lowest) = self.holes.of_size(k).first() else {
            return 0;
        };
        let partners = self.raised.of_size(k);
        partners.partition_point(|partner| lowest.energy + partner.energy <= limit)
    }

    /// The configurations with energies above `low` and up to `high`, at most `most` of them:
    /// by size, then by the place of the holes in their list, then by that of the particles.
    pub fn between(&self, low: f64, high: f64, most: usize, found: &mut Vec<Entry<[u32; 2]>>) {
        found.clear();
        for k in 0..self.holes.starts.len() {
            let partners = self.raised.of_size(k);
            let (mut from, mut reach) = (self.farthest(k, low), self.farthest(k, high));
            for set in self.holes.of_size(k) {
                reach = shrink(partners, reach, set.energy, high);
                from = shrink(partners, from, set.energy, low);
                let wanted = (reach - from).min(most - found.len());
                found.extend(partners[from..from + wanted].iter().map(|partner| Entry {
                    energy: set.energy + partner.energy,
                    label: [set.label, partner.label],
                }));
                if reach == 0 {
                    break;
                }
            }
        }
    }
}

/// How many of the first `reach` partners stay within the limit.
#[inline]
fn shrink(partners: &[Entry<u32>], mut reach: usize, energy: f64, limit: f64) -> usize {
    while reach > 0 && energy + partners[reach - 1].energy > limit {
        reach -= 1;
    }
    reach
}
