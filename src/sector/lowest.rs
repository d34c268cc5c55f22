//! The r configurations of lowest one-particle energy: by best-first search, and many of them by
//! lists of holes and particles.

use super::best_first::BestFirst;
use super::configuration::Sector;
use super::particle_hole::ParticleHole;
use crate::error::{Error, Result};
use crate::memory;
use ndarray::{Array2, Array3, ArrayView2};
use num_bigint::BigUint;

/// The lowest configurations in order of energy (equal energies in a fixed order).
#[derive(Debug, Clone)]
pub struct LowestConfigurations {
    energies: Vec<f64>,
    source: Source,
}

/// How the configurations were found.
#[derive(Debug, Clone)]
enum Source {
    Search(BestFirst),
    ParticleHole {
        lists: Box<ParticleHole>,
        /// Sets of holes and of particles of each configuration.
        pairs: Vec<[u32; 2]>,
    },
}

/// Number of configurations from which lists of holes and particles are faster.
const LISTS_FROM: usize = 1000;

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
        self.check_request(energies, count)?;
        if let Some(lists) = self.particle_hole(energies, count) {
            let (energies, pairs) = lists.write_out();
            let source = Source::ParticleHole {
                lists: Box::new(lists),
                pairs,
            };
            return Ok(LowestConfigurations { energies, source });
        }
        let (search, energies) = BestFirst::search(
            energies,
            &self.particles_by_spin(),
            self.is_fermionic(),
            count,
        );
        Ok(LowestConfigurations {
            energies,
            source: Source::Search(search),
        })
    }

    /// Occupations `(spins, modes)` of the lowest configurations mixed with weights, one for
    /// each, as [`LowestConfigurations::weighted_occupations`].
    ///
    /// # Errors
    /// As for [`Sector::lowest_configurations`].
    pub fn lowest_mixture(
        &self,
        energies: ArrayView2<'_, f64>,
        weights: &[f64],
    ) -> Result<Array2<f64>> {
        self.check_request(energies, weights.len())?;
        Ok(match self.particle_hole(energies, weights.len()) {
            Some(lists) => lists.mixed_occupations(weights),
            None => self
                .lowest_configurations(energies, weights.len())?
                .weighted_occupations(weights),
        })
    }

    /// The quicker way to many configurations, where there is one.
    fn particle_hole(&self, energies: ArrayView2<'_, f64>, count: usize) -> Option<ParticleHole> {
        match self {
            Sector::Fermions { particles, .. } if count >= LISTS_FROM => {
                ParticleHole::lowest(&energies.row(0).to_vec(), *particles, count)
            }
            _ => None,
        }
    }

    fn check_request(&self, energies: ArrayView2<'_, f64>, count: usize) -> Result<()> {
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
        )
    }
}

impl LowestConfigurations {
    /// Energies, increasing.
    pub fn energies(&self) -> &[f64] {
        &self.energies
    }

    /// Occupations `(count, spins, modes)`.
    pub fn occupations(&self) -> Array3<u32> {
        match &self.source {
            Source::Search(search) => search.occupations(),
            Source::ParticleHole { lists, pairs } => lists.occupations(pairs),
        }
    }

    /// Occupations `(spins, modes)` of the configurations mixed with the given weights, without
    /// writing out any configuration: O(count + modes).
    pub fn weighted_occupations(&self, weights: &[f64]) -> Array2<f64> {
        debug_assert_eq!(weights.len(), self.energies.len());
        match &self.source {
            Source::Search(search) => search.mixed_occupations(weights),
            Source::ParticleHole { lists, .. } => lists.mixed_occupations(weights),
        }
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

    /// Energies one by one, distinct configurations with these energies, and their mixture.
    fn assert_lists_agree_with_search(h: &Array2<f64>, particles: usize, count: usize) {
        let row = h.row(0).to_vec();
        let Some(lists) = ParticleHole::lowest(&row, particles, count) else {
            panic!("{particles} particles, {count} configurations, energies {row:?}");
        };
        let (energies, pairs) = lists.write_out();
        let (search, expected) = BestFirst::search(h.view(), &[particles], true, count);
        assert_eq!(energies.len(), count);
        let mut seen = std::collections::HashSet::new();
        let weights: Vec<f64> = (0..count).map(|k| (2 * count - k) as f64).collect();
        let sum: f64 = weights.iter().sum();
        let mut mixed = Array2::zeros(h.dim());
        for (k, n) in lists.occupations(&pairs).outer_iter().enumerate() {
            assert_eq!(n.sum() as usize, particles);
            let energy: f64 = n.iter().zip(h).map(|(&n, e)| f64::from(n) * e).sum();
            assert_abs_diff_eq!(energy, energies[k], epsilon = 1e-11);
            assert_abs_diff_eq!(expected[k], energies[k], epsilon = 1e-11);
            mixed = mixed + n.mapv(f64::from) * (weights[k] / sum);
            assert!(seen.insert(n.iter().copied().collect::<Vec<u32>>()));
        }
        assert!(energies.windows(2).all(|pair| pair[0] <= pair[1]));
        let weights: Vec<f64> = weights.iter().map(|w| w / sum).collect();
        let direct = lists.mixed_occupations(&weights);
        assert_abs_diff_eq!(direct, mixed, epsilon = 1e-12);
        // where degeneracies leave a choice, the energies agree
        let other = (search.mixed_occupations(&weights) * h).sum();
        assert_abs_diff_eq!((&direct * h).sum(), other, epsilon = 1e-11);
    }

    #[test]
    fn lists_of_holes_and_particles_agree_with_the_search() {
        let mut generator = ChaCha8Rng::seed_from_u64(2);
        for (modes, particles, counts) in [
            (12, 5, vec![1, 2, 30, 791, 792]),
            (14, 7, vec![1000, 3432]),
            (9, 0, vec![1]),
            (9, 9, vec![1]),
            (9, 1, vec![1, 4, 9]),
            (9, 8, vec![1, 4, 9]),
            (60, 30, vec![1000, 20_000, 40_000]),
            (60, 3, vec![34_219, 34_220]),
        ] {
            for steps in [f64::INFINITY, 3.0, 20.0] {
                let h = Array2::from_shape_fn((1, modes), |(_, m)| {
                    let e: f64 = generator.random();
                    let e = e - 0.5 + 0.1 * m as f64;
                    if steps.is_finite() {
                        (steps * e).floor() / 7.0
                    } else {
                        e
                    }
                });
                for &count in &counts {
                    assert_lists_agree_with_search(&h, particles, count);
                }
            }
        }
        // one large multiplet, cut at its end
        let h = Array2::from_shape_fn((1, 30), |(_, m)| f64::from(u8::from(m >= 15)));
        assert_lists_agree_with_search(&h, 15, 2000);
        let whole = Array2::from_shape_fn((1, 12), |_| 0.25);
        assert_lists_agree_with_search(&whole, 6, 100);
    }

    #[test]
    fn multiplets_with_long_lists_are_left_to_the_search() {
        let h = vec![0.5; 60];
        assert!(ParticleHole::lowest(&h, 30, 1000).is_none());
        let huge: Vec<f64> = (0..60).map(|m| 1e307 * f64::from(m - 30)).collect();
        assert!(ParticleHole::lowest(&huge, 30, 1000).is_none());
        let sector = Sector::fermions(60, 30).unwrap();
        let h = Array2::from_elem((1, 60), 0.5);
        let lowest = sector.lowest_configurations(h.view(), 1000).unwrap();
        assert!(lowest.energies().iter().all(|&e| e == 15.0));
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
