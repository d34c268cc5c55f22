//! The three kinds of sectors and their configurations.

use super::ranking::{SubsetRanking, binomial};
use crate::error::{Error, Result};
use ndarray::{Array2, ArrayView2};
use num_bigint::BigUint;

/// A fixed number of particles in a fixed number of modes.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Sector {
    /// Spinless fermions (or spin-orbitals of all S_z together).
    Fermions {
        /// Number of modes d.
        modes: usize,
        /// Number of particles N.
        particles: usize,
    },
    /// Spin-1/2 fermions at fixed numbers of up and down particles.
    SpinHalf {
        /// Number of spatial orbitals d.
        orbitals: usize,
        /// Particles with spin up.
        up: usize,
        /// Particles with spin down.
        down: usize,
    },
    /// Bosons.
    Bosons {
        /// Number of modes d.
        modes: usize,
        /// Number of particles N.
        particles: usize,
    },
}

/// Numbers of modes and particles are limited so that dimensions can be worked out.
const LARGEST: usize = 1 << 24;

impl Sector {
    /// Spinless fermions, at most one particle a mode.
    ///
    /// # Errors
    /// [`Error::Argument`] without modes or with more particles than modes.
    pub fn fermions(modes: usize, particles: usize) -> Result<Self> {
        check_modes("modes", modes)?;
        check_filling("particles", particles, modes)?;
        Ok(Sector::Fermions { modes, particles })
    }

    /// Spin-1/2 fermions at fixed (up, down).
    ///
    /// # Errors
    /// [`Error::Argument`] without orbitals or with more particles of a spin than orbitals.
    pub fn spin_half(orbitals: usize, up: usize, down: usize) -> Result<Self> {
        check_modes("orbitals", orbitals)?;
        check_filling("particles", up.max(down), orbitals)?;
        Ok(Sector::SpinHalf { orbitals, up, down })
    }

    /// Bosons.
    ///
    /// # Errors
    /// [`Error::Argument`] without modes.
    pub fn bosons(modes: usize, particles: usize) -> Result<Self> {
        check_modes("modes", modes)?;
        if particles > LARGEST {
            return Err(Error::argument(
                "particles",
                particles,
                format!("at most {LARGEST}"),
            ));
        }
        Ok(Sector::Bosons { modes, particles })
    }

    /// Number of modes (of orbitals for spin-1/2), d.
    pub fn modes(&self) -> usize {
        match *self {
            Sector::Fermions { modes, .. } | Sector::Bosons { modes, .. } => modes,
            Sector::SpinHalf { orbitals, .. } => orbitals,
        }
    }

    /// Total number of particles N.
    pub fn particles(&self) -> usize {
        match *self {
            Sector::Fermions { particles, .. } | Sector::Bosons { particles, .. } => particles,
            Sector::SpinHalf { up, down, .. } => up + down,
        }
    }

    /// Particles per component: one number, or those of spin up and spin down.
    pub fn particles_by_spin(&self) -> Vec<usize> {
        match *self {
            Sector::Fermions { particles, .. } | Sector::Bosons { particles, .. } => {
                vec![particles]
            }
            Sector::SpinHalf { up, down, .. } => vec![up, down],
        }
    }

    /// Number of spin components: 2 for spin-1/2, otherwise 1.
    pub fn spins(&self) -> usize {
        match self {
            Sector::SpinHalf { .. } => 2,
            _ => 1,
        }
    }

    /// Whether modes hold at most one particle (of each spin).
    pub fn is_fermionic(&self) -> bool {
        !matches!(self, Sector::Bosons { .. })
    }

    /// Slots and chosen slots of the sets that number the configurations, per spin.
    fn subsets(&self) -> Vec<(usize, usize)> {
        match *self {
            Sector::Fermions { modes, particles } => vec![(modes, particles)],
            Sector::SpinHalf { orbitals, up, down } => vec![(orbitals, up), (orbitals, down)],
            Sector::Bosons { modes, particles } => vec![((modes + particles) - 1, particles)],
        }
    }

    /// Exact number of configurations.
    pub fn dimension(&self) -> BigUint {
        self.subsets()
            .iter()
            .map(|&(n, k)| binomial(n, k))
            .product()
    }

    /// Number of configurations, where it can be enumerated.
    ///
    /// # Errors
    /// [`Error::TooManyConfigurations`] beyond 64-bit indices.
    pub fn enumerable_dimension(&self) -> Result<usize> {
        let exact = self.dimension();
        usize::try_from(&exact).map_err(|_| Error::TooManyConfigurations { dimension: exact })
    }

    /// One ranking a spin.
    ///
    /// # Errors
    /// [`Error::TooManyConfigurations`] beyond 64-bit indices.
    pub fn rankings(&self) -> Result<Vec<SubsetRanking>> {
        self.enumerable_dimension()?;
        self.subsets()
            .iter()
            .map(|&(n, k)| SubsetRanking::new(n, k))
            .collect()
    }

    /// Ranking and unranking of occupations.
    ///
    /// # Errors
    /// [`Error::TooManyConfigurations`] beyond 64-bit indices.
    pub fn configurations(&self) -> Result<Configurations> {
        Ok(Configurations {
            sector: *self,
            dimension: self.enumerable_dimension()? as u64,
            rankings: self.rankings()?,
        })
    }

    /// Checks that occupations belong to this sector.
    ///
    /// # Errors
    /// [`Error::Argument`] for a wrong shape, a wrong particle number or a doubly filled mode.
    pub fn check_occupations(&self, occupations: ArrayView2<'_, u32>) -> Result<()> {
        let (spins, modes) = (self.spins(), self.modes());
        if occupations.dim() != (spins, modes) {
            return Err(Error::argument(
                "occupations",
                format!("shape {:?}", occupations.shape()),
                format!("{modes} modes for each of {spins} component(s)"),
            ));
        }
        for (row, particles) in occupations.rows().into_iter().zip(self.particles_by_spin()) {
            let total: u64 = row.iter().map(|&n| u64::from(n)).sum();
            if total != particles as u64 {
                return Err(Error::argument(
                    "occupations",
                    format!("{total} particles"),
                    format!("{particles}, the particle number of the sector"),
                ));
            }
            if self.is_fermionic() && row.iter().any(|&n| n > 1) {
                return Err(Error::argument(
                    "occupations",
                    "a mode with more than one fermion",
                    "occupations 0 or 1",
                ));
            }
        }
        Ok(())
    }
}

fn check_modes(argument: &'static str, modes: usize) -> Result<()> {
    if (1..=LARGEST).contains(&modes) {
        Ok(())
    } else {
        Err(Error::argument(argument, modes, format!("1 to {LARGEST}")))
    }
}

fn check_filling(argument: &'static str, particles: usize, modes: usize) -> Result<()> {
    if particles <= modes {
        Ok(())
    } else {
        Err(Error::argument(
            argument,
            particles,
            format!("at most {modes}, one fermion a mode (and spin)"),
        ))
    }
}

/// The numbered configurations of a sector.
#[derive(Debug, Clone)]
pub struct Configurations {
    sector: Sector,
    dimension: u64,
    rankings: Vec<SubsetRanking>,
}

impl Configurations {
    /// Number of configurations.
    pub fn dimension(&self) -> u64 {
        self.dimension
    }

    /// Occupations `(spins, modes)` of a configuration.
    ///
    /// # Errors
    /// [`Error::Index`] if the index is not below the dimension.
    pub fn occupations(&self, index: u64) -> Result<Array2<u32>> {
        if index >= self.dimension {
            return Err(Error::index(
                "index",
                index,
                format!("0 to {}", self.dimension - 1),
            ));
        }
        let mut occupations = Array2::zeros((self.sector.spins(), self.sector.modes()));
        // the first (up) index is the slow one
        let mut rest = index;
        for (spin, ranking) in self.rankings.iter().enumerate().rev() {
            let mut positions = vec![0; ranking.size()];
            ranking.unrank(rest % ranking.count(), &mut positions);
            rest /= ranking.count();
            for (i, &position) in positions.iter().enumerate() {
                let mode = if self.sector.is_fermionic() {
                    position as usize
                } else {
                    position as usize - i
                };
                occupations[[spin, mode]] += 1;
            }
        }
        Ok(occupations)
    }

    /// Index of the configuration with the given occupations `(spins, modes)`.
    ///
    /// # Errors
    /// [`Error::Argument`] if they do not belong to the sector.
    pub fn index(&self, occupations: ArrayView2<'_, u32>) -> Result<u64> {
        self.sector.check_occupations(occupations)?;
        let mut index = 0;
        for (row, ranking) in occupations.rows().into_iter().zip(&self.rankings) {
            let mut positions = Vec::with_capacity(ranking.size());
            for (mode, &count) in row.iter().enumerate() {
                for _ in 0..count {
                    let shift = if self.sector.is_fermionic() {
                        0
                    } else {
                        positions.len()
                    };
                    positions.push((mode + shift) as u32);
                }
            }
            index = index * ranking.count() + ranking.rank(&positions);
        }
        Ok(index)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use ndarray::array;

    #[test]
    fn every_configuration_has_its_own_index() {
        for sector in [
            Sector::fermions(6, 3).unwrap(),
            Sector::spin_half(4, 2, 1).unwrap(),
            Sector::bosons(4, 3).unwrap(),
            Sector::bosons(1, 5).unwrap(),
            Sector::fermions(3, 0).unwrap(),
        ] {
            let configurations = sector.configurations().unwrap();
            assert_eq!(
                BigUint::from(configurations.dimension()),
                sector.dimension()
            );
            for index in 0..configurations.dimension() {
                let occupations = configurations.occupations(index).unwrap();
                assert_eq!(configurations.index(occupations.view()).unwrap(), index);
            }
            let end = configurations.dimension();
            assert!(matches!(
                configurations.occupations(end),
                Err(Error::Index { .. })
            ));
        }
    }

    #[test]
    fn the_up_index_is_the_slow_one() {
        let configurations = Sector::spin_half(3, 1, 1)
            .unwrap()
            .configurations()
            .unwrap();
        let occupations = array![[0, 1, 0], [1, 0, 0]];
        assert_eq!(configurations.index(occupations.view()).unwrap(), 3);
    }

    #[test]
    fn bosons_are_ranked_as_multisets() {
        // multisets {0,0}, {0,1}, {1,1}, {0,2}, {1,2}, {2,2}
        let configurations = Sector::bosons(3, 2).unwrap().configurations().unwrap();
        let rows: Vec<_> = (0..6)
            .map(|i| configurations.occupations(i).unwrap())
            .collect();
        assert_eq!(rows[2], array![[0, 2, 0]]);
        assert_eq!(rows[3], array![[1, 0, 1]]);
    }

    #[test]
    fn impossible_sectors_are_refused() {
        assert!(Sector::fermions(0, 0).is_err());
        assert!(Sector::fermions(3, 4).is_err());
        assert!(Sector::spin_half(3, 4, 0).is_err());
        assert!(Sector::bosons(0, 1).is_err());
    }

    #[test]
    fn dimensions_beyond_64_bits_are_exact_but_not_enumerable() {
        let sector = Sector::spin_half(100, 50, 50).unwrap();
        assert_eq!(sector.dimension(), binomial(100, 50).pow(2));
        assert!(sector.configurations().is_err());
    }
}
