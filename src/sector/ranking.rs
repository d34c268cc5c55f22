//! The combinatorial number system: the colexicographic rank of strictly increasing sets.

use crate::error::{Error, Result};
use crate::memory;
use num_bigint::BigUint;

/// Below this many factors they are multiplied one by one.
const FEW_FACTORS: usize = 64;

/// Exact binomial coefficient.
pub fn binomial(n: usize, k: usize) -> BigUint {
    if k > n {
        return BigUint::ZERO;
    }
    let k = k.min(n - k);
    if k < FEW_FACTORS {
        return (0..k).fold(BigUint::from(1u32), |value, i| value * (n - i) / (i + 1));
    }
    let factors: Vec<BigUint> = primes(n)
        .into_iter()
        .map(|p| BigUint::from(p).pow(multiplicity(n, k, p)))
        .filter(|factor| *factor > BigUint::from(1u32))
        .collect();
    product(&factors)
}

/// Multiplicity of the prime p in the binomial coefficient (Legendre's formula).
fn multiplicity(n: usize, k: usize, p: usize) -> u32 {
    let mut power = p;
    let mut count = 0;
    while power <= n {
        count += n / power - k / power - (n - k) / power;
        power = power.saturating_mul(p);
    }
    count as u32
}

/// Primes up to n (the sieve of Eratosthenes).
fn primes(n: usize) -> Vec<usize> {
    let mut composite = vec![false; n + 1];
    let mut list = Vec::new();
    for p in 2..=n {
        if !composite[p] {
            list.push(p);
            (p * p..=n).step_by(p).for_each(|m| composite[m] = true);
        }
    }
    list
}

/// A product by halves, so that factors of equal length meet.
fn product(factors: &[BigUint]) -> BigUint {
    match factors {
        [] => BigUint::from(1u32),
        [only] => only.clone(),
        _ => {
            let (left, right) = factors.split_at(factors.len() / 2);
            product(left) * product(right)
        }
    }
}

/// Numbers the subsets of `size` slots out of `slots` by their colexicographic rank.
#[derive(Debug, Clone)]
pub struct SubsetRanking {
    slots: usize,
    size: usize,
    count: u64,
    /// Slots that the i-th smallest element can take: i to i + width - 1.
    width: usize,
    /// Row i holds C(slot, i + 1) for the slots that element i can take.
    table: Vec<u64>,
}

impl SubsetRanking {
    /// Prepares the table of binomial coefficients.
    ///
    /// # Errors
    /// [`Error::TooManyConfigurations`] if the number of subsets does not fit in 64 bits,
    /// [`Error::Memory`] if the table does not fit.
    pub fn new(slots: usize, size: usize) -> Result<Self> {
        let exact = binomial(slots, size);
        let count =
            u64::try_from(&exact).map_err(|_| Error::TooManyConfigurations { dimension: exact })?;
        let width = slots - size + 1;
        memory::require("the ranking table", size as u128 * width as u128 * 8)?;
        let mut table = vec![0u64; width * size];
        for i in 0..size {
            for offset in 1..width {
                // Pascal's rule for slot = i + offset: C(slot, i+1) = C(slot-1, i+1) + C(slot-1, i)
                let above = if i == 0 {
                    1
                } else {
                    table[(i - 1) * width + offset]
                };
                table[i * width + offset] = table[i * width + offset - 1] + above;
            }
        }
        Ok(SubsetRanking {
            slots,
            size,
            count,
            width,
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
        self.table[index * self.width + slot - index]
    }

    /// The same, zero for a slot that this element cannot take.
    #[inline]
    pub fn term_or_zero(&self, index: usize, slot: usize) -> u64 {
        match slot.checked_sub(index) {
            Some(offset) if offset < self.width && index < self.size => {
                self.table[index * self.width + offset]
            }
            _ => 0,
        }
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
        let mut reach = self.width;
        for i in (0..self.size).rev() {
            let row = &self.table[i * self.width..i * self.width + reach];
            // the largest slot whose term does not exceed the rest
            let offset = row.partition_point(|&term| term <= rest) - 1;
            positions[i] = (i + offset) as u32;
            rest -= row[offset];
            // the next smaller element stays below this one
            reach = offset + 1;
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
    fn large_binomials_agree_with_pascal() {
        let (n, k) = (300, 131);
        assert_eq!(binomial(n, k), binomial(n - 1, k - 1) + binomial(n - 1, k));
        assert_eq!(binomial(200, 63) * 137u32, binomial(200, 64) * 64u32);
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
