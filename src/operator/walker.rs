//! One configuration of spinless modes at a time, and where hops take it.
//!
//! Particles are listed by increasing mode. Moving one or two of them shifts the list index of
//! those in between by at most two, so with prefix sums of the rank for each shift the rank of
//! the result costs O(1), for fermions and bosons alike.

use crate::error::{Error, Result};
use crate::sector::{Sector, SubsetRanking};

/// The numbered configurations of one spin component (or of bosons).
#[derive(Debug, Clone)]
pub struct ModeSpace {
    ranking: SubsetRanking,
    modes: usize,
    fermionic: bool,
}

impl ModeSpace {
    /// The spaces of a sector, one a spin component.
    ///
    /// # Errors
    /// [`Error::TooManyConfigurations`] beyond 64-bit indices.
    pub fn of(sector: &Sector) -> Result<Vec<Self>> {
        let rankings = sector.rankings()?;
        Ok(rankings
            .into_iter()
            .map(|ranking| ModeSpace {
                ranking,
                modes: sector.modes(),
                fermionic: sector.is_fermionic(),
            })
            .collect())
    }

    /// The configurations of `particles` in `modes`.
    ///
    /// # Errors
    /// [`Error::TooManyConfigurations`] beyond 64-bit indices.
    pub fn new(modes: usize, particles: usize, fermionic: bool) -> Result<Self> {
        let slots = if fermionic || particles == 0 {
            modes
        } else {
            modes + particles - 1
        };
        Ok(ModeSpace {
            ranking: SubsetRanking::new(slots, particles)?,
            modes,
            fermionic,
        })
    }

    /// Index of the configuration with the given particles, in the order of their modes.
    pub fn index(&self, particles: &[u32]) -> usize {
        let terms = particles.iter().enumerate();
        let rank = |(i, &mode): (usize, &u32)| self.ranking.term(i, self.slot(mode as usize, i));
        terms.map(rank).sum::<u64>() as usize
    }

    /// Number of configurations.
    pub fn dimension(&self) -> usize {
        self.ranking.count() as usize
    }

    /// Number of modes.
    pub fn modes(&self) -> usize {
        self.modes
    }

    /// Number of particles.
    pub fn particles(&self) -> usize {
        self.ranking.size()
    }

    /// Whether modes hold at most one particle.
    pub fn is_fermionic(&self) -> bool {
        self.fermionic
    }

    /// A walker at a configuration.
    ///
    /// # Errors
    /// [`Error::Index`] if the index is not below the dimension.
    pub fn walker(&self, index: usize) -> Result<Walker<'_>> {
        if index >= self.dimension() {
            return Err(Error::index(
                "index",
                index,
                format!("less than {}", self.dimension()),
            ));
        }
        let particles = self.particles();
        let mut walker = Walker {
            space: self,
            positions: vec![0; particles],
            modes: vec![0; particles],
            occupied: Vec::with_capacity(particles.min(self.modes)),
            occupations: vec![0; self.modes],
            below: vec![0; self.modes + 1],
            prefix: vec![0; SHIFTS * (particles + 1)],
        };
        self.ranking.unrank(index as u64, &mut walker.positions);
        walker.refresh();
        Ok(walker)
    }

    /// Slot of a particle in `mode` that is number `index` of the list.
    #[inline]
    fn slot(&self, mode: usize, index: usize) -> usize {
        if self.fermionic { mode } else { mode + index }
    }
}

/// List indices shift by -2 to 2.
const SHIFTS: usize = 5;
const NO_SHIFT: usize = 2;

/// One configuration with what is needed to move particles in it.
#[derive(Debug, Clone)]
pub struct Walker<'a> {
    space: &'a ModeSpace,
    positions: Vec<u32>,
    modes: Vec<u32>,
    occupied: Vec<u32>,
    occupations: Vec<u32>,
    /// Particles in modes below each.
    below: Vec<u32>,
    /// For each shift: sums over the first particles of their rank terms, list index shifted.
    prefix: Vec<u64>,
}

impl Walker<'_> {
    /// Goes to the next configuration; stays at the last one.
    pub fn advance(&mut self) {
        self.space.ranking.advance(&mut self.positions);
        self.refresh();
    }

    /// Modes of the particles, increasing (bosons: with repetitions).
    pub fn modes(&self) -> &[u32] {
        &self.modes
    }

    /// Modes with particles, increasing, each once.
    pub fn occupied(&self) -> &[u32] {
        &self.occupied
    }

    /// Particles in each mode.
    pub fn occupations(&self) -> &[u32] {
        &self.occupations
    }

    fn refresh(&mut self) {
        self.occupations.fill(0);
        for (i, (&position, mode)) in self.positions.iter().zip(&mut self.modes).enumerate() {
            *mode = if self.space.fermionic {
                position
            } else {
                position - i as u32
            };
            self.occupations[*mode as usize] += 1;
        }
        self.occupied.clone_from(&self.modes);
        self.occupied.dedup();
        let mut sum = 0;
        for (mode, &count) in self.occupations.iter().enumerate() {
            self.below[mode] = sum;
            sum += count;
        }
        self.below[self.space.modes] = sum;
        self.refresh_prefix_sums();
    }

    fn refresh_prefix_sums(&mut self) {
        let particles = self.modes.len();
        for (k, sums) in self.prefix.chunks_exact_mut(particles + 1).enumerate() {
            for (i, &mode) in self.modes.iter().enumerate() {
                // what no legal move reaches does not matter
                let shifted = (i + k).wrapping_sub(NO_SHIFT);
                let term = if shifted < particles {
                    let slot = self.space.slot(mode as usize, shifted);
                    self.space.ranking.term_or_zero(shifted, slot)
                } else {
                    0
                };
                sums[i + 1] = sums[i].wrapping_add(term);
            }
        }
    }

    /// Rank terms of the particles `from..to` of the list, with their index shifted.
    #[inline]
    fn segment(&self, shift: usize, from: usize, to: usize) -> u64 {
        let sums = &self.prefix[shift * (self.modes.len() + 1)..];
        sums[to].wrapping_sub(sums[from])
    }

    /// Rank after removing and inserting particles, both lists increasing and equally long.
    #[inline]
    fn rank_after<const M: usize>(&self, removed: [usize; M], inserted: [usize; M]) -> usize {
        let (mut i, mut j) = (0, 0);
        let (mut cursor, mut shift, mut rank) = (0usize, NO_SHIFT, 0u64);
        while i < M || j < M {
            let removing = j == M || (i < M && removed[i] <= inserted[j]);
            let mode = if removing { removed[i] } else { inserted[j] };
            let index = cursor.max(self.below[mode] as usize);
            rank = rank.wrapping_add(self.segment(shift, cursor, index));
            if removing {
                cursor = index + 1;
                shift -= 1;
                i += 1;
            } else {
                let place = index + shift - NO_SHIFT;
                let slot = self.space.slot(mode, place);
                rank = rank.wrapping_add(self.space.ranking.term(place, slot));
                cursor = index;
                shift += 1;
                j += 1;
            }
        }
        rank.wrapping_add(self.segment(NO_SHIFT, cursor, self.modes.len())) as usize
    }

    /// a+_p a_q on this configuration: index of the result and the factor, if it is not zero.
    #[inline]
    pub fn hop(&self, p: usize, q: usize) -> Option<(usize, f64)> {
        let (n_p, n_q) = (self.occupations[p], self.occupations[q]);
        if n_q == 0 || (self.space.fermionic && n_p > 0 && p != q) {
            return None;
        }
        let factor = if p == q {
            f64::from(n_q)
        } else if self.space.fermionic {
            parity(self.below[p] + self.below[q] + u32::from(q < p))
        } else {
            (f64::from(n_q) * f64::from(n_p + 1)).sqrt()
        };
        Some((self.rank_after([q], [p]), factor))
    }

    /// a+_p a+_q a_s a_r on this configuration, with r <= s occupied and p <= q.
    #[inline]
    pub fn pair_hop(&self, [p, q]: [usize; 2], [r, s]: [usize; 2]) -> Option<(usize, f64)> {
        let removed_from = |mode: usize| u32::from(mode == r) + u32::from(mode == s);
        let left = |mode: usize| self.occupations[mode] - removed_from(mode);
        let factor = if self.space.fermionic {
            if left(p) + left(q) > 0 {
                return None;
            }
            let passed = |mode: usize| self.below[mode] + u32::from(r < mode) + u32::from(s < mode);
            parity(self.below[r] + self.below[s] + 1 + passed(p) + passed(q))
        } else {
            let annihilated = self.occupations[r] * (self.occupations[s] - u32::from(r == s));
            let created = (left(q) + 1) * (left(p) + u32::from(p == q) + 1);
            (f64::from(annihilated) * f64::from(created)).sqrt()
        };
        Some((self.rank_after([r, s], [p, q]), factor))
    }
}

#[inline]
fn parity(transpositions: u32) -> f64 {
    if transpositions.is_multiple_of(2) {
        1.0
    } else {
        -1.0
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// The same moves on occupations, sign by counting, rank by the sector.
    fn naive(
        sector: &Sector,
        occupations: &[u32],
        created: &[usize],
        annihilated: &[usize],
    ) -> Option<(usize, f64)> {
        let mut n = occupations.to_vec();
        let mut factor = 1.0;
        let sign = |n: &[u32], mode: usize| {
            if sector.is_fermionic() {
                parity(n[..mode].iter().sum())
            } else {
                1.0
            }
        };
        for &mode in annihilated {
            if n[mode] == 0 {
                return None;
            }
            factor *= sign(&n, mode) * f64::from(n[mode]).sqrt();
            n[mode] -= 1;
        }
        for &mode in created {
            if sector.is_fermionic() && n[mode] == 1 {
                return None;
            }
            factor *= sign(&n, mode) * f64::from(n[mode] + 1).sqrt();
            n[mode] += 1;
        }
        let n = ndarray::Array2::from_shape_vec((1, n.len()), n).ok()?;
        let index = sector.configurations().ok()?.index(n.view()).ok()?;
        Some((index as usize, factor))
    }

    fn assert_same(a: Option<(usize, f64)>, b: Option<(usize, f64)>) {
        match (a, b) {
            (None, None) => {}
            (Some((i, f)), Some((j, g))) => {
                assert_eq!(i, j);
                assert!((f - g).abs() < 1e-13, "{f} {g}");
            }
            _ => panic!("{a:?} {b:?}"),
        }
    }

    #[test]
    fn moves_match_a_naive_construction() {
        for sector in [
            Sector::fermions(6, 3).unwrap(),
            Sector::fermions(5, 2).unwrap(),
            Sector::bosons(4, 4).unwrap(),
            Sector::bosons(3, 2).unwrap(),
        ] {
            let spaces = ModeSpace::of(&sector).unwrap();
            let space = &spaces[0];
            let d = space.modes();
            let mut walker = space.walker(0).unwrap();
            for _ in 0..space.dimension() {
                let n = walker.occupations().to_vec();
                for (p, q) in (0..d).flat_map(|p| (0..d).map(move |q| (p, q))) {
                    assert_same(walker.hop(p, q), naive(&sector, &n, &[p], &[q]));
                    for (r, s) in (0..d).flat_map(|r| (r..d).map(move |s| (r, s))) {
                        let present = n[r] > 0 && n[s] > u32::from(r == s);
                        let distinct = !sector.is_fermionic() || p < q;
                        if present && p <= q && distinct {
                            assert_same(
                                walker.pair_hop([p, q], [r, s]),
                                naive(&sector, &n, &[q, p], &[r, s]),
                            );
                        }
                    }
                }
                walker.advance();
            }
        }
    }
}
