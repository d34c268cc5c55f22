//! The combinatorial number system: the colexicographic rank of strictly increasing sets.

use crate::error::{Error, Result};
use num_bigint::BigUint;

/// Exact binomial coefficient.
pub fn binomial(n: usize, k: usize) -> BigUint {
    if k > n {
        return BigUint::ZERO;
    }
    let k = k.min(n - k);
    let mut value = BigUint::from(1u32);
    for i in 0..k {
        value *= BigUint::from(n - i);
        value /= BigUint::from(i + 1);
    }
    value
}

/// Numbers the subsets of `size` slots out of `slots` by their colexicographic rank.
#[derive(Debug, Clone)]
pub struct SubsetRanking {
    slots: usize,
    size: usize,
    count: u64,
    /// Row i holds C(slot, i + 1) for every slot; saturated, which only unreachable entries are.
    table: Vec<u64>,
}

impl SubsetRanking {
    /// Prepares the table of binomial coefficients.
    ///
    /// # Errors
    /// [`Error::TooManyConfigurations`] if the number of subsets does not fit in 64 bits.
    pub fn new(slots: usize, size: usize) -> Result<Self> {
        let exact = binomial(slots, size);
        let count =
            u64::try_from(&exact).map_err(|_| Error::TooManyConfigurations { dimension: exact })?;
        let mut table = vec![0u64; slots * size];
        for i in 0..size {
            for slot in 1..slots {
                // Pascal's rule: C(slot, i+1) = C(slot-1, i+1) + C(slot-1, i)
                let above = if i == 0 {
                    1
                } else {
                    table[(i - 1) * slots + slot - 1]
                };
                table[i * slots + slot] = table[i * slots + slot - 1].saturating_add(above);
            }
        }
        Ok(SubsetRanking {
            slots,
            size,
            count,
            table,
        })
    }

    /// Number of slots.
    pub fn slots(&self) -> usize {
        self.slots
    }

    /// Number of chosen slots.
    pub fn size(&self) -> usize {
        self.size
    }

    /// Number of subsets.
    pub fn count(&self) -> u64 {
        self.count
    }

    /// What the `index`-th smallest chosen slot adds to the rank.
    #[inline]
    pub fn term(&self, index: usize, slot: usize) -> u64 {
        self.table[index * self.slots + slot]
    }

    /// Rank of a strictly increasing set.
    #[inline]
    pub fn rank(&self, positions: &[u32]) -> u64 {
        debug_assert_eq!(positions.len(), self.size);
        positions
            .iter()
            .enumerate()
            .map(|(i, &slot)| self.term(i, slot as usize))
            .sum()
    }

    /// Writes the set of a rank into `positions`.
    pub fn unrank(&self, rank: u64, positions: &mut [u32]) {
        debug_assert!(rank < self.count);
        let mut rest = rank;
        let mut below = self.slots;
        for i in (0..self.size).rev() {
            let row = &self.table[i * self.slots..i * self.slots + below];
            // the largest slot whose term does not exceed the rest
            let slot = row.partition_point(|&term| term <= rest) - 1;
            positions[i] = slot as u32;
            rest -= row[slot];
            below = slot;
        }
    }

    /// Replaces `positions` by the next set in rank order; the last one has no successor.
    pub fn advance(&self, positions: &mut [u32]) {
        for i in 0..positions.len() {
            let limit = positions.get(i + 1).map_or(self.slots as u32, |&next| next);
            if positions[i] + 1 < limit {
                positions[i] += 1;
                for (j, position) in positions[..i].iter_mut().enumerate() {
                    *position = j as u32;
                }
                return;
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn binomials_are_exact() {
        assert_eq!(binomial(10, 3), BigUint::from(120u32));
        assert_eq!(binomial(3, 5), BigUint::ZERO);
        assert_eq!(
            binomial(100, 50).to_string(),
            "100891344545564193334812497256"
        );
    }

    #[test]
    fn rank_unrank_and_advance_agree() {
        for slots in 0..8 {
            for size in 0..=slots {
                let ranking = SubsetRanking::new(slots, size).unwrap();
                let mut walker: Vec<u32> = (0..size as u32).collect();
                let mut positions = vec![0; size];
                for rank in 0..ranking.count() {
                    ranking.unrank(rank, &mut positions);
                    assert_eq!(positions, walker);
                    assert_eq!(ranking.rank(&positions), rank);
                    ranking.advance(&mut walker);
                }
            }
        }
    }

    #[test]
    fn large_spaces_number_to_the_last_and_larger_ones_are_refused() {
        let ranking = SubsetRanking::new(66, 33).unwrap();
        let mut positions = vec![0; 33];
        ranking.unrank(ranking.count() - 1, &mut positions);
        assert_eq!(positions, (33..66).collect::<Vec<u32>>());
        assert!(matches!(
            SubsetRanking::new(100, 50),
            Err(Error::TooManyConfigurations { .. })
        ));
    }
}
