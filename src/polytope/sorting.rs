//! Between the caller's order of modes and decreasing occupations with the right sum.

use super::oracle::Oracle;
use ndarray::{Array2, ArrayView2};

/// The caller's modes in decreasing order of occupation, per component.
#[derive(Debug, Clone)]
pub(super) struct Sorting {
    shape: (usize, usize),
    /// Caller's position of each sorted one, components one after the other.
    positions: Vec<usize>,
}

impl Sorting {
    pub fn new(occupations: ArrayView2<'_, f64>) -> Self {
        let (components, modes) = occupations.dim();
        let mut positions: Vec<usize> = (0..components * modes).collect();
        for (row, positions) in occupations
            .rows()
            .into_iter()
            .zip(positions.chunks_mut(modes))
        {
            let start = positions[0];
            positions.sort_by(|&a, &b| row[b - start].total_cmp(&row[a - start]).then(a.cmp(&b)));
        }
        Sorting {
            shape: (components, modes),
            positions,
        }
    }

    pub fn sorted(&self, values: ArrayView2<'_, f64>) -> Vec<f64> {
        let modes = self.shape.1;
        self.positions
            .iter()
            .map(|&p| values[[p / modes, p % modes]])
            .collect()
    }

    pub fn to_caller(&self, values: &[f64]) -> Array2<f64> {
        let mut result = Array2::zeros(self.shape);
        for (&p, &value) in self.positions.iter().zip(values) {
            result[[p / self.shape.1, p % self.shape.1]] = value;
        }
        result
    }

    /// For each of the caller's modes, the mode of the line-up that takes its place.
    pub fn permutation_to_caller(&self, order: &[usize]) -> Array2<usize> {
        let mut result = Array2::zeros(self.shape);
        let modes = self.shape.1;
        for (&p, &from) in self.positions.iter().zip(order) {
            result[[p / modes, p % modes]] = from % modes;
        }
        result
    }
}

/// Occupations minus the uniform part of each component that changes the particle number.
pub(super) fn remove_excess(oracle: &Oracle, sorted: &mut [f64]) -> Vec<f64> {
    let modes = oracle.shape().1;
    let particles = oracle.particles();
    sorted
        .chunks_mut(modes)
        .zip(particles)
        .map(|(component, particles)| {
            let shift = (component.iter().sum::<f64>() - particles) / modes as f64;
            component.iter_mut().for_each(|n| *n -= shift);
            // a sum that is right but for rounding costs no distance
            let rounding = 4.0 * f64::EPSILON * component[0].abs().max(1.0);
            if shift.abs() > rounding { shift } else { 0.0 }
        })
        .collect()
}
