//! When to stop: levels wanted, multiplets complete, one level ahead. And how levels are told.

use crate::scalar::Scalar;
use ndarray::{Array1, Array2, Axis};
use std::ops::Range;

/// An approximate eigenpair: energy, residual norm, and where its vector comes from.
#[derive(Debug, Clone, Copy)]
pub(super) struct Level {
    pub energy: f64,
    pub residual: f64,
    pub origin: usize,
}

/// At least `count` levels are known to lie at or below `bound`.
#[derive(Debug, Clone, Copy)]
pub(super) struct Required {
    pub bound: f64,
    pub count: usize,
}

/// How far an iteration has come.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Assessment {
    /// The lowest `wanted` levels must converge further.
    Unfinished { wanted: usize },
    /// The lowest `found` are converged; whether they end with a complete multiplet, and
    /// whether the level after them is the one looked ahead at.
    Finished {
        found: usize,
        complete: bool,
        next: bool,
    },
}

/// What counts as done.
#[derive(Debug, Clone, Copy)]
pub(super) struct Goal {
    pub levels: usize,
    /// Levels that may be added to complete a multiplet.
    pub most_extra: usize,
    pub tolerance: f64,
    /// Residual norm that levels locked in earlier rounds were allowed. It stays in force: the
    /// highest level may sink when missed ones are found, and locked levels cannot follow.
    pub granted: f64,
}

/// Energies that happen to lie near zero are measured by this share of the operator's norm.
const SHARE_OF_NORM: f64 = 0.01;
/// Residual norms around this many units of rounding of the operator cannot be bettered.
const ROUNDING: f64 = 32.0 * f64::EPSILON;

impl Goal {
    /// Residual norm up to which a level is converged.
    pub fn residual_tolerance(&self, levels: &[Level], scale: f64) -> f64 {
        let wanted = levels.iter().take(self.levels);
        let least = SHARE_OF_NORM * scale;
        let size = wanted.fold(least, |top: f64, level| top.max(level.energy.abs()));
        (self.tolerance * size)
            .max(ROUNDING * scale)
            .max(self.granted)
    }

    /// Judges levels in increasing order; `exhausted` says that there are no others.
    pub fn assess(
        &self,
        levels: &[Level],
        scale: f64,
        exhausted: bool,
        required: Option<Required>,
    ) -> Assessment {
        let tolerance = self.residual_tolerance(levels, scale);
        let converged = |level: &Level| level.residual <= tolerance;
        let r = self.levels;
        if let Some(Required { bound, count }) = required {
            let seen = levels.iter().filter(|level| level.energy <= bound).count();
            // converged levels above the bound would refute the claim
            let refuted = levels.len() >= count && levels[..count].iter().all(converged);
            if seen < count && !refuted {
                return Assessment::Unfinished {
                    wanted: r.max(count),
                };
            }
        }
        if levels.len() < r || !levels[..r].iter().all(converged) {
            return Assessment::Unfinished { wanted: r };
        }
        for found in r.. {
            let Some(next) = levels.get(found) else {
                return if exhausted {
                    Assessment::Finished {
                        found,
                        complete: true,
                        next: false,
                    }
                } else {
                    Assessment::Unfinished { wanted: found + 1 }
                };
            };
            let gap = next.energy - levels[found - 1].energy;
            if gap > 2.0 * tolerance {
                let loose = self.tolerance.sqrt().min(1e-3) * (tolerance / self.tolerance);
                return if next.residual <= loose.min(0.1 * gap).max(tolerance) {
                    Assessment::Finished {
                        found,
                        complete: true,
                        next: true,
                    }
                } else {
                    Assessment::Unfinished { wanted: found + 1 }
                };
            }
            if !converged(next) {
                return Assessment::Unfinished { wanted: found + 1 };
            }
            if found - r >= self.most_extra {
                return Assessment::Finished {
                    found,
                    complete: false,
                    next: false,
                };
            }
        }
        unreachable!("the loop over levels ends with them")
    }
}

/// Ranges of energies (increasing) with gaps of at most `tolerance` inside.
pub(super) fn multiplets(energies: &[f64], tolerance: f64) -> Vec<Range<usize>> {
    let mut ranges: Vec<Range<usize>> = Vec::new();
    for (k, &energy) in energies.iter().enumerate() {
        match ranges.last_mut() {
            Some(range) if energy - energies[k - 1] <= tolerance => range.end = k + 1,
            _ => ranges.push(k..k + 1),
        }
    }
    ranges
}

/// What lies above the last multiplet.
#[derive(Debug, Clone, Copy)]
pub(super) enum Above {
    /// A level with its residual norm.
    Level(f64, f64),
    /// Nothing: the sector ends.
    Nothing,
    /// Not known.
    Unknown,
}

/// Bounds on the errors of energies from residual norms.
///
/// For each multiplet the smaller of the residual norm and the Kato-Temple bound, the sum of
/// squared residuals over the gap to the other levels (quadratic residual bounds for clusters:
/// Mathias, SIAM J. Matrix Anal. Appl. 19, 541 (1998); recalled); plus `rounding`. The second
/// needs to know the neighbours, so it is used only if `checked`.
pub(super) fn error_bounds(
    energies: &[f64],
    residuals: &[f64],
    multiplets: &[Range<usize>],
    above: Above,
    checked: bool,
    rounding: f64,
) -> Array1<f64> {
    let mut bounds = Array1::from(residuals.to_vec());
    for range in multiplets.iter().filter(|_| checked) {
        let square: f64 = residuals[range.clone()].iter().map(|r| r * r).sum();
        let below = match range.start.checked_sub(1) {
            Some(k) => energies[range.start] - energies[k] - residuals[k],
            None => f64::INFINITY,
        };
        let above = match (energies.get(range.end), above) {
            (Some(energy), _) => energy - energies[range.end - 1] - residuals[range.end],
            (None, Above::Level(energy, error)) => energy - energies[range.end - 1] - error,
            (None, Above::Nothing) => f64::INFINITY,
            (None, Above::Unknown) => 0.0,
        };
        let gap = below.min(above);
        if gap > 2.0 * square.sqrt() {
            for k in range.clone() {
                bounds[k] = bounds[k].min(square / gap);
            }
        }
    }
    bounds + rounding
}

/// Multiplies each row by a phase such that its first component within 1e-8 of the largest is
/// real and positive.
pub(super) fn fix_phases<T: Scalar>(rows: &mut Array2<T>) {
    for mut row in rows.axis_iter_mut(Axis(0)) {
        let top = row
            .iter()
            .fold(0.0, |top: f64, x| top.max(x.abs_sqr()))
            .sqrt();
        let Some((leader, size)) = row
            .iter()
            .map(|x| (*x, x.abs()))
            .find(|&(_, size)| size > 0.0 && size >= top * (1.0 - 1e-8))
        else {
            continue;
        };
        let phase = leader.conj() * (1.0 / size);
        if phase != T::one() {
            row.mapv_inplace(|x| x * phase);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use num_complex::Complex64;

    fn level(energy: f64, residual: f64) -> Level {
        Level {
            energy,
            residual,
            origin: 0,
        }
    }

    const GOAL: Goal = Goal {
        levels: 2,
        most_extra: 2,
        tolerance: 1e-10,
        granted: 0.0,
    };

    #[test]
    fn a_cut_multiplet_is_completed_and_one_level_looked_ahead() {
        let levels = [0.0, 1.0, 1.0, 2.0].map(|energy| level(energy, 1e-12));
        let finished = Assessment::Finished {
            found: 3,
            complete: true,
            next: true,
        };
        assert_eq!(GOAL.assess(&levels, 1.0, false, None), finished);
        let unfinished = Assessment::Unfinished { wanted: 4 };
        assert_eq!(GOAL.assess(&levels[..3], 1.0, false, None), unfinished);
        let ended = Assessment::Finished {
            found: 3,
            complete: true,
            next: false,
        };
        assert_eq!(GOAL.assess(&levels[..3], 1.0, true, None), ended);
    }

    #[test]
    fn a_large_multiplet_is_left_incomplete() {
        let levels = [1.0; 6].map(|energy| level(energy, 0.0));
        let cut = Assessment::Finished {
            found: 4,
            complete: false,
            next: false,
        };
        assert_eq!(GOAL.assess(&levels, 1.0, false, None), cut);
    }

    #[test]
    fn a_missed_level_keeps_the_search_going() {
        let mut levels = [0.0, 1.0, 2.0].map(|energy| level(energy, 0.0));
        levels[2].residual = 0.1;
        let required = Some(Required {
            bound: 1.5,
            count: 3,
        });
        let unfinished = Assessment::Unfinished { wanted: 3 };
        assert_eq!(GOAL.assess(&levels, 1.0, false, required), unfinished);
    }

    #[test]
    fn bounds_are_quadratic_only_where_the_gap_is_known() {
        let (energies, residuals) = ([0.0, 1.0], [1e-3, 1e-3]);
        let groups = multiplets(&energies, 1e-9);
        let bounds = |above, checked| {
            error_bounds(&energies, &residuals, &groups, above, checked, 0.0).to_vec()
        };
        assert_eq!(bounds(Above::Nothing, false), [1e-3, 1e-3]);
        let with_unknown = bounds(Above::Unknown, true);
        assert!(with_unknown[0] < 1.1e-6 && with_unknown[1] == 1e-3);
        assert!(bounds(Above::Level(3.0, 1e-3), true)[1] < 1.1e-6);
    }

    #[test]
    fn phases_make_the_first_large_component_real_and_positive() {
        let values = [(0.1, 0.0), (0.0, -0.7 + 1e-10), (0.7, 0.0)];
        let row = values.map(|(re, im)| Complex64::new(re, im));
        let mut rows = Array2::from_shape_vec((1, 3), row.to_vec()).unwrap();
        fix_phases(&mut rows);
        assert!((rows[[0, 1]] - Complex64::new(0.7, 0.0)).norm() < 1e-9);
        assert!((rows[[0, 2]] - Complex64::new(0.0, 0.7)).norm() < 1e-9);
    }
}
