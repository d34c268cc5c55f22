//! Stable sorting by energy, in linear time for energies that are spread out.

/// Something with an energy.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Entry<T> {
    pub energy: f64,
    pub label: T,
}

/// So many entries or fewer are inserted one by one.
const FEW: usize = 24;

/// 2^52: added to a smaller number, it leaves the nearest integer in the lowest bits.
const INTEGER: f64 = 4_503_599_627_370_496.0;

/// Sorts finite energies; keeps its memory from one time to the next.
#[derive(Debug)]
pub(super) struct Sorter<T> {
    unsorted: Vec<Entry<T>>,
    ends: Vec<u32>,
}

impl<T> Default for Sorter<T> {
    fn default() -> Self {
        Sorter {
            unsorted: Vec::new(),
            ends: Vec::new(),
        }
    }
}

impl<T: Copy> Sorter<T> {
    /// By energy; equal ones keep their order.
    pub fn sort(&mut self, entries: &mut [Entry<T>]) {
        if entries.len() <= FEW {
            insert_in_order(entries);
            return;
        }
        let (lowest, highest) = entries
            .iter()
            .fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), entry| {
                (low.min(entry.energy), high.max(entry.energy))
            });
        let buckets = entries.len();
        let scale = (buckets - 1) as f64 / (highest - lowest);
        if !scale.is_finite() {
            entries.sort_by(|a, b| a.energy.total_cmp(&b.energy));
            return;
        }
        // increases with the energy, so that the buckets are in order
        let bucket = |entry: &Entry<T>| {
            ((entry.energy - lowest) * scale + INTEGER).to_bits() as u32 as usize
        };
        self.ends.clear();
        self.ends.resize(buckets, 0);
        for entry in entries.iter() {
            self.ends[bucket(entry)] += 1;
        }
        let (mut sum, mut fullest) = (0, 0);
        for end in &mut self.ends {
            fullest = fullest.max(*end);
            sum += std::mem::replace(end, sum);
        }
        self.unsorted.clear();
        self.unsorted.extend_from_slice(entries);
        for entry in &self.unsorted {
            let place = &mut self.ends[bucket(entry)];
            entries[*place as usize] = *entry;
            *place += 1;
        }
        if fullest as usize > FEW {
            let mut start = 0;
            for &end in &self.ends {
                let within = &mut entries[start..end as usize];
                if within.len() > FEW {
                    within.sort_by(|a, b| a.energy.total_cmp(&b.energy));
                }
                start = end as usize;
            }
        }
        insert_in_order(entries);
    }
}

/// Quick where little is out of order.
fn insert_in_order<T: Copy>(entries: &mut [Entry<T>]) {
    for i in 1..entries.len() {
        let entry = entries[i];
        let mut place = i;
        while place > 0 && entries[place - 1].energy > entry.energy {
            entries[place] = entries[place - 1];
            place -= 1;
        }
        entries[place] = entry;
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::{Rng, SeedableRng};
    use rand_chacha::ChaCha8Rng;

    #[test]
    fn sorting_is_stable_for_even_uneven_and_equal_energies() {
        let mut generator = ChaCha8Rng::seed_from_u64(3);
        let mut sorter = Sorter::default();
        for size in [0, 1, 2, 25, 1000] {
            for kind in 0..4 {
                let mut entries: Vec<Entry<usize>> = (0..size)
                    .map(|label| {
                        let x: f64 = generator.random();
                        let energy = match kind {
                            0 => x,
                            1 => (5.0 * x).floor(),
                            2 => x.powi(60),
                            _ => 7.0,
                        };
                        Entry { energy, label }
                    })
                    .collect();
                let mut expected = entries.clone();
                expected.sort_by(|a, b| a.energy.total_cmp(&b.energy));
                sorter.sort(&mut entries);
                assert_eq!(entries, expected);
            }
        }
    }
}
