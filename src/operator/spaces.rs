//! Low and high modes: the configurations of each group, and ladder operators between them.

use super::stored::SparseMatrix;
use super::walker::ModeSpace;
use crate::error::Result;
use crate::scalar::Scalar;
use std::ops::Range;

/// The spaces of low and high modes for every way to share the particles.
#[derive(Debug)]
pub struct HalfSpaces<'a> {
    whole: &'a ModeSpace,
    low_modes: usize,
    /// Fewest particles in the low modes; class k has k more.
    fewest: usize,
    /// Low and high space of each class.
    spaces: Vec<(ModeSpace, ModeSpace)>,
}

impl<'a> HalfSpaces<'a> {
    /// Splits the modes in the middle.
    ///
    /// # Errors
    /// [`crate::error::Error::TooManyConfigurations`] beyond 64-bit indices.
    pub fn new(whole: &'a ModeSpace) -> Result<Self> {
        Self::split_at(whole, whole.modes() / 2)
    }

    /// Splits the modes after the first `low_modes`.
    ///
    /// # Errors
    /// [`crate::error::Error::TooManyConfigurations`] beyond 64-bit indices.
    pub fn split_at(whole: &'a ModeSpace, low_modes: usize) -> Result<Self> {
        let (modes, particles) = (whole.modes(), whole.particles());
        let fermionic = whole.is_fermionic();
        let high_modes = modes - low_modes;
        let (fewest, most) = if fermionic {
            (
                particles.saturating_sub(high_modes),
                particles.min(low_modes),
            )
        } else {
            (0, particles)
        };
        let spaces = (fewest..=most)
            .map(|n| {
                Ok((
                    ModeSpace::new(low_modes, n, fermionic)?,
                    ModeSpace::new(high_modes, particles - n, fermionic)?,
                ))
            })
            .collect::<Result<Vec<_>>>()?;
        Ok(HalfSpaces {
            whole,
            low_modes,
            fewest,
            spaces,
        })
    }

    /// Number of ways to share the particles.
    pub fn classes(&self) -> usize {
        self.spaces.len()
    }

    /// Number of low modes.
    pub fn low_modes(&self) -> usize {
        self.low_modes
    }

    /// The low and the high space of a class.
    pub fn spaces(&self, class: usize) -> (&ModeSpace, &ModeSpace) {
        let (low, high) = &self.spaces[class];
        (low, high)
    }

    /// The low and the high modes.
    pub fn ranges(&self) -> (Range<usize>, Range<usize>) {
        (0..self.low_modes, self.low_modes..self.whole.modes())
    }

    /// The class hopped from when a high particle is created (or annihilated).
    pub fn neighbour(&self, class: usize, creates_high: bool) -> Option<usize> {
        if creates_high {
            (class + 1 < self.classes()).then_some(class + 1)
        } else {
            class.checked_sub(1)
        }
    }

    /// Sign of the low operators that the high one passes in a hop across into a class.
    pub fn passing_sign(&self, class: usize, creates_high: bool) -> f64 {
        let low = self.fewest + class - usize::from(!creates_high);
        if self.whole.is_fermionic() && low % 2 == 1 {
            -1.0
        } else {
            1.0
        }
    }

    /// Where the segment of each high part starts in a vector of the whole space.
    ///
    /// # Errors
    /// Those of [`ModeSpace::walker`].
    pub fn segments(&self, class: usize) -> Result<Vec<usize>> {
        let (low, high) = self.spaces(class);
        // the first low configuration: fermions fill the lowest modes, bosons the first one
        let first = |i: usize| if low.is_fermionic() { i as u32 } else { 0 };
        let mut modes: Vec<u32> = (0..low.particles()).map(first).collect();
        let mut walker = high.walker(0)?;
        let mut starts = Vec::with_capacity(high.dimension());
        for _ in 0..high.dimension() {
            modes.truncate(low.particles());
            modes.extend(walker.modes().iter().map(|&p| p + self.low_modes as u32));
            starts.push(self.whole.index(&modes));
            walker.advance();
        }
        Ok(starts)
    }
}

/// Ladder operators between spaces of one group of modes.
impl ModeSpace {
    /// Occupied modes and their occupations for every configuration.
    ///
    /// # Errors
    /// Those of [`ModeSpace::walker`].
    pub fn occupied(&self) -> Result<Vec<Vec<(u32, f64)>>> {
        let mut walker = self.walker(0)?;
        let mut all = Vec::with_capacity(self.dimension());
        for _ in 0..self.dimension() {
            let occupations = walker.occupations().iter().enumerate();
            all.push(
                occupations
                    .filter(|(_, n)| **n > 0)
                    .map(|(mode, &n)| (mode as u32, f64::from(n)))
                    .collect(),
            );
            walker.advance();
        }
        Ok(all)
    }

    /// For each configuration I: J of `other` and <I|a+_p|J> (or <I|a_p|J>), if it is not zero.
    ///
    /// # Errors
    /// Those of [`ModeSpace::walker`].
    pub fn ladder_row(
        &self,
        other: &ModeSpace,
        p: usize,
        creates: bool,
    ) -> Result<Vec<Option<(u32, f64)>>> {
        let mut walker = self.walker(0)?;
        let mut row = Vec::with_capacity(self.dimension());
        for _ in 0..self.dimension() {
            row.push(other.ladder_source(walker.modes(), p, creates));
            walker.advance();
        }
        Ok(row)
    }

    /// The matrix <I|sum_q c_q a_q|J> (or with a+_q) from `other` to this space; the low
    /// operator annihilates where the high one creates.
    ///
    /// # Errors
    /// Those of [`ModeSpace::walker`].
    pub fn ladder_matrix<T: Scalar>(
        &self,
        other: &ModeSpace,
        annihilates: bool,
        amplitude: impl Fn(usize) -> T + Sync,
    ) -> Result<SparseMatrix<T>> {
        self.walker(0)?;
        Ok(SparseMatrix::build(self.dimension(), |rows, sink| {
            let Ok(mut walker) = self.walker(rows.start) else {
                return;
            };
            let mut elements = Vec::new();
            for _ in rows {
                for q in 0..self.modes() {
                    let value = amplitude(q);
                    if value != T::zero()
                        && let Some((from, factor)) =
                            other.ladder_source(walker.modes(), q, !annihilates)
                    {
                        elements.push((from, value * factor));
                    }
                }
                sink.push_row(&mut elements);
                walker.advance();
            }
        }))
    }

    /// J of this space with <I|a+_p|J> (or <I|a_p|J>) not zero, for I given by its particles.
    fn ladder_source(&self, particles: &[u32], p: usize, creates: bool) -> Option<(u32, f64)> {
        let mode = p as u32;
        let below = particles.partition_point(|&m| m < mode);
        let count = particles[below..]
            .iter()
            .take_while(|&&m| m == mode)
            .count();
        let mut source = particles.to_vec();
        let factor = if creates {
            if count == 0 {
                return None;
            }
            source.remove(below);
            (count as f64).sqrt()
        } else {
            if self.is_fermionic() && count > 0 {
                return None;
            }
            source.insert(below, mode);
            ((count + 1) as f64).sqrt()
        };
        let sign = if self.is_fermionic() && below % 2 == 1 {
            -1.0
        } else {
            1.0
        };
        Some((self.index(&source) as u32, sign * factor))
    }
}
