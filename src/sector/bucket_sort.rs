//! Stable sorting by energy, in linear time for energies that are spread out.

/// Something with an energy.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Entry<T> {
    pub energy: f64,
    pub label: T,
}

/// So many entries or fewer are inserted one by one.
const FEW: usize = 24;

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
        let buckets = 2 * entries.len();
        let scale = (buckets - 1) as f64 / (highest - lowest);
        if !scale.is_finite() {
            entries.sort_by(|a, b| a.energy.total_cmp(&b.energy));
            return;
        }
        // increases with the energy, so that the buckets are in order
        let bucket = |entry: &Entry<T>| ((entry.energy - lowest) * scale) as usize;
        self.ends.clear();
        self.ends.resize(buckets, 0);
        for entry in entries.iter() {
            self.ends[bucket(entry)] += 1;
        }
        let mut sum = 0;
        for end in &mut self.ends {
            sum += std::mem::replace(end, sum);
        }
        self.unsorted.clear();
        self.unsorted.extend_from_slice(entries);
        for entry in &self.unsorted {
            let place = &mut self.ends[bucket(entry)];
            entries[*place as usize] = *entry;
            *place += 1;
        }
        let mut start = 0;
        for &end in &self.ends {
            insert_in_order(&mut entries[start..end as usize]);
            start = end as usize;
        }
    }
}

fn insert_in_order<T: Copy>(entries: &mut [Entry<T>]) {
    if entries.len() > FEW {
        entries.sort_by(|a, b| a.energy.total_cmp(&b.energy));
        return;
    }
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
