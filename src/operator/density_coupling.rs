//! The coupling of opposite spins through their densities.

use super::walker::ModeSpace;
use crate::error::Result;
use crate::scalar::Scalar;
use ndarray::Array2;

/// sum_pq V_pq n(up)_p n(down)_q.
#[derive(Debug, Clone)]
pub struct DensityCoupling {
    matrix: Array2<f64>,
    up: Occupied,
    down: Occupied,
}

/// Occupied modes of every configuration.
#[derive(Debug, Clone)]
struct Occupied {
    particles: usize,
    modes: Vec<u32>,
}

impl Occupied {
    fn new(space: &ModeSpace) -> Result<Self> {
        let mut modes = Vec::with_capacity(space.dimension() * space.particles());
        let mut walker = space.walker(0)?;
        for _ in 0..space.dimension() {
            modes.extend_from_slice(walker.modes());
            walker.advance();
        }
        Ok(Occupied {
            particles: space.particles(),
            modes,
        })
    }

    #[inline]
    fn of(&self, configuration: usize) -> &[u32] {
        &self.modes[configuration * self.particles..(configuration + 1) * self.particles]
    }
}

impl DensityCoupling {
    pub fn new(matrix: &Array2<f64>, up: &ModeSpace, down: &ModeSpace) -> Result<Self> {
        Ok(DensityCoupling {
            matrix: matrix.clone(),
            up: Occupied::new(up)?,
            down: Occupied::new(down)?,
        })
    }

    #[inline]
    pub fn element(&self, up: usize, down: usize) -> f64 {
        let down = self.down.of(down);
        let row = |p: u32| self.matrix.row(p as usize);
        self.up
            .of(up)
            .iter()
            .map(|&p| down.iter().map(|&q| row(p)[q as usize]).sum::<f64>())
            .sum()
    }

    /// What a down particle in each mode feels from the up configurations of a tile.
    pub fn potentials<const W: usize>(&self, first: usize, rows: usize) -> Vec<[f64; W]> {
        let mut potentials = vec![[0.0; W]; self.matrix.nrows()];
        for offset in 0..rows {
            for &p in self.up.of(first + offset) {
                for (potential, &v) in potentials.iter_mut().zip(self.matrix.row(p as usize)) {
                    potential[offset] += v;
                }
            }
        }
        potentials
    }

    /// The coupling of one down configuration with the up configurations of a tile, and a
    /// constant.
    #[inline(always)]
    pub fn act<T: Scalar, const W: usize>(
        &self,
        potentials: &[[f64; W]],
        down: usize,
        constant: f64,
        x: &[T; W],
    ) -> [T; W] {
        let mut total = [constant; W];
        for &q in self.down.of(down) {
            let potential = &potentials[q as usize];
            for k in 0..W {
                total[k] += potential[k];
            }
        }
        let mut result = [T::zero(); W];
        for k in 0..W {
            result[k] = x[k] * total[k];
        }
        result
    }
}
