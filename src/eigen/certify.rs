//! What comes out of a search: residuals checked with fresh products, energies, error bounds.

use super::multiplet::{Above, error_bounds, fix_phases, multiplets};
use super::orthogonal::{ORTHOGONALITY, overlaps, rotate};
use super::search::{Found, Search};
use super::{LevelCount, Levels, Status};
use crate::dense::eigh;
use crate::error::{Error, Result};
use crate::scalar::Scalar;
use ndarray::{Array1, Array2, s};

impl<T: Scalar> Search<'_, '_, T> {
    /// Residual norms from fresh products, and the projected operator in the space of the first
    /// rows (which are orthonormal only to about 1e-12, so their Gram matrix enters).
    fn verify(&mut self, energies: &[f64], known: usize) -> Result<(Vec<f64>, Array2<T>)> {
        let count = energies.len();
        let mut residuals = Vec::with_capacity(count);
        let mut projected = Array2::zeros((count, count));
        for (k, &energy) in energies.iter().enumerate() {
            let (rows, mut image) = self.run.split(known, 1);
            self.operator
                .apply(rows.slice(s![k..=k, ..]), image.view_mut())?;
            let column = overlaps(rows.slice(s![..count, ..]), image.view());
            projected.slice_mut(s![.., k..=k]).assign(&column);
            let pairs = image.iter().zip(rows.row(k));
            let square: f64 = pairs.map(|(&hx, &x)| (hx - x * energy).abs_sqr()).sum();
            residuals.push(square.sqrt());
        }
        self.run.products += count;
        let (rows, _) = self.run.split(known, 0);
        let rows = rows.slice(s![..count, ..]);
        let half_excess = (overlaps(rows, rows) - Array2::<T>::eye(count)) * T::from_real(0.5);
        let correction = half_excess.dot(&projected) + projected.dot(&half_excess);
        Ok((residuals, projected - correction))
    }

    /// Checks the residuals of what was found and takes the energies from the projected
    /// operator; mends couplings between rounds by a rotation inside the found space.
    fn certify(&mut self, found: &mut Found) -> Result<()> {
        let known = found.levels.len();
        let wanted = &found.levels[..found.found];
        let before: Vec<f64> = wanted.iter().map(|level| level.energy).collect();
        let tolerance = self.goal.residual_tolerance(wanted, self.run.scale);
        let (mut residuals, mut projected) = self.verify(&before, known)?;
        let mut eigen = eigh(projected.view())?;
        if residuals.iter().any(|&residual| residual > tolerance) {
            let (_, rows) = self.run.split(0, found.found);
            rotate(rows, eigen.vectors.view());
            (residuals, projected) = self.verify(&eigen.values.to_vec(), known)?;
            eigen = eigh(projected.view())?;
        }
        for (k, level) in found.levels[..found.found].iter_mut().enumerate() {
            (level.energy, level.residual) = (eigen.values[k], residuals[k]);
        }
        found.verified = true;
        Ok(())
    }

    /// The result of a search that reached its goal.
    pub fn finish(
        mut self,
        mut found: Found,
        count: LevelCount,
        status: Status,
    ) -> Result<Levels<T>> {
        let affordable = self.run.products + found.found <= self.request.max_products;
        let mut status = status;
        if status == Status::Converged && affordable {
            match self.certify(&mut found) {
                Err(Error::Interrupted) => status = Status::Interrupted,
                other => other?,
            }
            let tolerance = self.goal.residual_tolerance(&found.levels, self.run.scale);
            if found.levels[..found.found]
                .iter()
                .any(|level| level.residual > 2.0 * tolerance)
            {
                status = Status::NotConverged;
            }
        }
        self.assemble(found, count, status)
    }

    /// The best there is so far.
    pub fn give_up(mut self, status: Status) -> Result<Levels<T>> {
        self.run.refresh()?;
        let levels = self.levels();
        let found = levels.len().min(self.goal.levels);
        let kept = levels.len().min(found + 1);
        let levels = levels[..kept].to_vec();
        let chosen: Vec<usize> = levels.iter().map(|level| level.origin).collect();
        self.run.collect(&chosen);
        let found = Found {
            next: kept > found,
            levels,
            found,
            complete: false,
            exhausted: false,
            verified: false,
        };
        self.assemble(found, LevelCount::Unchecked, status)
    }

    fn assemble(self, found: Found, count: LevelCount, status: Status) -> Result<Levels<T>> {
        let (levels, scale) = (&found.levels[..found.found], self.run.scale);
        let tolerance = 2.0 * self.goal.residual_tolerance(levels, scale);
        let energies: Vec<f64> = levels.iter().map(|level| level.energy).collect();
        let residuals: Vec<f64> = levels.iter().map(|level| level.residual).collect();
        let next = found.levels.get(found.found).filter(|_| found.next);
        let above = match next {
            Some(level) if found.complete => Above::Level(level.energy, level.residual),
            None if found.exhausted => Above::Nothing,
            _ => Above::Unknown,
        };
        let ranges = multiplets(&energies, tolerance);
        let checked = count != LevelCount::Unchecked;
        let loose = 2.0 * ORTHOGONALITY * scale;
        let rounding = if found.verified {
            8.0 * f64::EPSILON * scale
        } else {
            loose
        };
        let bounds = error_bounds(&energies, &residuals, &ranges, above, checked, rounding);
        let products = self.run.products;
        let mut vectors = self.run.into_rows(found.found);
        fix_phases(&mut vectors);
        Ok(Levels {
            energies: Array1::from(energies),
            vectors,
            residuals: Array1::from(residuals),
            error_bounds: bounds,
            next_energy: next.map(|level| level.energy),
            next_error: next.map(|level| level.residual + loose),
            multiplets: ranges,
            last_multiplet_complete: found.complete,
            level_count: count,
            status,
            products,
            method: "block Lanczos",
        })
    }
}
