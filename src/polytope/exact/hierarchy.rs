//! The inequalities of a polytope from its line-ups, ordered as a hierarchy by r.

use super::LineUps;
use super::cone::gcd;
use super::facets::{Edge, Facet, Judge};
use super::inequality::Inequality;
use crate::error::Result;
use crate::memory;
use ndarray::Array2;

impl LineUps {
    /// Inequalities that, with the order and the sum of the occupations, describe the polytope
    /// completely and without redundancy, sorted by first level, then coefficients.
    ///
    /// n_d >= 0 is listed wherever it is a facet, and flagged. A component without freedom (all
    /// modes full or empty, or equal weights on all states) is fixed by a bound on n_1.
    ///
    /// # Errors
    /// [`Error::Memory`](crate::error::Error::Memory) if they do not fit.
    pub fn inequalities(&self) -> Result<Vec<Inequality>> {
        let facets = self.facets();
        let numbers = (facets.len() + 2) * self.table.components * self.table.modes;
        memory::require("the list of inequalities", numbers as u128 * 8)?;
        let mut list: Vec<Inequality> = facets
            .iter()
            .map(|(normal, facet)| self.inequality(normal, facet))
            .collect();
        let rigid = |&component: &usize| self.is_point || !self.table.is_free(component);
        let components = 0..self.table.components;
        list.extend(
            components
                .filter(rigid)
                .map(|component| self.even_filling(component)),
        );
        list.sort_by(|a, b| {
            let coefficients = a.coefficients.iter().cmp(b.coefficients.iter());
            a.first_level.cmp(&b.first_level).then(coefficients)
        });
        Ok(list)
    }

    /// The inequalities that level `level` of the hierarchy adds.
    ///
    /// # Errors
    /// Those of [`LineUps::inequalities`].
    pub fn new_at(&self, level: usize) -> Result<Vec<Inequality>> {
        let mut all = self.inequalities()?;
        all.retain(|inequality| inequality.first_level == level);
        Ok(all)
    }

    /// Normals that belong to facets.
    fn facets(&self) -> Vec<(Vec<Edge>, Facet)> {
        if self.is_point {
            return Vec::new();
        }
        let judge = Judge::new(&self.table, &self.cuts);
        let of_rays = self.rays.iter().map(|ray| {
            let heights = self.table.steps.iter().zip(ray.iter());
            let edges = heights.map(|(&(component, step), &height)| (component, step, height));
            edges.filter(|edge| edge.2 > 0).collect::<Vec<Edge>>()
        });
        let normals = of_rays.chain(self.untouched_steps());
        normals
            .filter_map(|normal| judge.facet(&normal).map(|facet| (normal, facet)))
            .collect()
    }

    /// Unit steps outside the reach of line-ups: n_1 + ... + n_k at its largest possible value.
    /// Others than these are implied by the order of the occupations.
    fn untouched_steps(&self) -> Vec<Vec<Edge>> {
        let Some(last) = self.table.modes.checked_sub(2) else {
            return Vec::new();
        };
        let mut normals = Vec::new();
        for component in 0..self.table.components {
            let fillings: Vec<usize> = self
                .table
                .kinds(component)
                .map(|kind| kind.particles)
                .collect();
            let mut steps = vec![0, last];
            // summed spins: between the two Fermi levels
            if let [up, down] = fillings[..] {
                steps.extend(up.min(down)..up.max(down).min(last));
            }
            steps.sort_unstable();
            steps.dedup();
            steps.retain(|&step| self.table.steps.binary_search(&(component, step)).is_err());
            normals.extend(steps.into_iter().map(|step| vec![(component, step, 1)]));
        }
        normals
    }

    fn inequality(&self, normal: &[Edge], facet: &Facet) -> Inequality {
        let mut coefficients = Array2::zeros((self.table.components, self.table.modes));
        let mut lowest = 0;
        for &(component, step, height) in normal {
            let mut row = coefficients.row_mut(component);
            row.iter_mut().take(step + 1).for_each(|c| *c += height);
            let kinds = self.table.kinds(component);
            lowest += height
                * kinds
                    .map(|kind| kind.ground_sum(step + 1) as i64)
                    .sum::<i64>();
        }
        let last = facet.energies.last().copied().unwrap_or(0);
        let bound_constant = lowest - last;
        let bound_weights: Vec<i64> = facet.energies.iter().map(|energy| last - energy).collect();
        let terms = bound_weights.iter().zip(self.weights.as_slice());
        let mut inequality = Inequality {
            bound: bound_constant as f64 + terms.map(|(&c, w)| c as f64 * w).sum::<f64>(),
            particles: self.followed_particles(&coefficients),
            coefficients,
            bound_constant,
            bound_weights,
            first_level: facet.first_level,
            positivity: false,
        };
        // n_1 + ... + n_{d-1} <= N
        if let [(component, step, 1)] = *normal
            && step + 2 == self.table.modes
            && bound_constant == self.table.particles(component) as i64
        {
            inequality.coefficients.fill(0);
            inequality.coefficients[[component, step + 1]] = -1;
            (inequality.bound_constant, inequality.bound) = (0, 0.0);
            inequality.positivity = true;
        }
        inequality
    }

    /// How the constant of a bound changes with the particle numbers: by the coefficient of the
    /// modes far below the Fermi level.
    fn followed_particles(&self, coefficients: &Array2<i64>) -> Vec<(i64, usize)> {
        let kinds = &self.table.species;
        if kinds.len() == self.table.components {
            let followed = |kind: &super::excitations::Species| {
                (coefficients[[kind.component, 0]], kind.particles)
            };
            return kinds.iter().map(followed).collect();
        }
        // summed spins with two Fermi levels have no such rule
        let same_filling = kinds
            .windows(2)
            .all(|pair| pair[0].particles == pair[1].particles);
        let followed = (coefficients[[0, 0]], self.table.particles(0));
        same_filling.then_some(followed).into_iter().collect()
    }

    /// n_1 <= N/d, which leaves only equal occupations.
    fn even_filling(&self, component: usize) -> Inequality {
        let (particles, modes) = (self.table.particles(component), self.table.modes);
        let divisor = gcd(particles as i128, modes as i128) as i64;
        let bound_constant = particles as i64 / divisor;
        let mut coefficients = Array2::zeros((self.table.components, modes));
        coefficients[[component, 0]] = modes as i64 / divisor;
        Inequality {
            coefficients,
            bound_constant,
            bound_weights: vec![0; self.weights.count()],
            bound: bound_constant as f64,
            first_level: 1,
            positivity: false,
            particles: Vec::new(),
        }
    }
}
