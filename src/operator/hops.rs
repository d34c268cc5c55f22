//! All one-particle hops between the configurations of one spin component, written out.

use super::walker::ModeSpace;
use crate::error::Result;

/// <I|a+_p a_r|J> for one row I.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Hop {
    /// p * modes + r.
    pub pair: u32,
    /// J.
    pub from: u32,
    /// The matrix element, +1 or -1.
    pub factor: f64,
}

/// The hops into each fermion configuration, those with p = r included.
#[derive(Debug, Clone)]
pub struct HopTable {
    per_configuration: usize,
    hops: Vec<Hop>,
}

impl HopTable {
    /// Bytes that the table of a space takes.
    pub fn bytes(space: &ModeSpace) -> u128 {
        (space.dimension() as u128)
            * (Self::per_configuration(space) as u128)
            * (size_of::<Hop>() as u128)
    }

    fn per_configuration(space: &ModeSpace) -> usize {
        space.particles() * (space.modes() - space.particles() + 1)
    }

    /// Writes out the hops of a fermion space.
    ///
    /// # Errors
    /// None for a non-empty space; those of [`ModeSpace::walker`] otherwise.
    pub fn new(space: &ModeSpace) -> Result<Self> {
        debug_assert!(space.is_fermionic());
        let modes = space.modes();
        let per_configuration = Self::per_configuration(space);
        let mut hops = Vec::with_capacity(per_configuration * space.dimension());
        let mut walker = space.walker(0)?;
        for _ in 0..space.dimension() {
            for &p in walker.modes() {
                let p = p as usize;
                for r in 0..modes {
                    // <I|a+_p a_r|J> is the conjugate of <J|a+_r a_p|I>, and real
                    if let Some((from, factor)) = walker.hop(r, p) {
                        hops.push(Hop {
                            pair: (p * modes + r) as u32,
                            from: from as u32,
                            factor,
                        });
                    }
                }
            }
            walker.advance();
        }
        Ok(HopTable {
            per_configuration,
            hops,
        })
    }

    /// The hops into configuration `index`.
    #[inline]
    pub fn into_configuration(&self, index: usize) -> &[Hop] {
        let start = index * self.per_configuration;
        &self.hops[start..start + self.per_configuration]
    }
}
