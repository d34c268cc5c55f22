//! Large problems: rounds of block Lanczos and of searches for what it missed.

use super::lanczos::BlockLanczos;
use super::multiplet::{
    Above, Assessment, Goal, Level, Required, error_bounds, fix_phases, multiplets,
};
use super::orthogonal::{overlaps, rotate};
use super::probe::{Finding, Probe};
use super::{LevelCount, LevelRequest, Levels, Status};
use crate::dense::eigh;
use crate::error::{Error, Result};
use crate::linear_operator::LinearOperator;
use crate::progress::{Monitor, Progress};
use crate::scalar::Scalar;
use ndarray::{Array1, Array2, s};
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;

/// Krylov rows for a few levels.
const USUAL_ROWS: usize = 24;
/// Rows in a block without a start.
const BLOCK: usize = 2;
/// Rounds after which the level count is given up.
const MOST_ROUNDS: usize = 64;

/// The lowest levels by iteration.
pub(super) fn lowest_levels<T: Scalar>(
    operator: &dyn LinearOperator<T>,
    request: &LevelRequest<'_, T>,
    monitor: &mut Monitor<'_>,
) -> Result<Levels<T>> {
    let mut search = Search::new(operator, request)?;
    let none = Array2::zeros((0, operator.dimension()));
    let start = request.start.unwrap_or(none.view());
    let generator = search.generator(0);
    search.run.begin(0, search.width, start, generator)?;
    for round in 1..=MOST_ROUNDS {
        let finished = match search.iterate(monitor)? {
            Ok(finished) => finished,
            Err(status) => return search.give_up(status),
        };
        let found = search.collect(finished);
        match search.check(&found, round, monitor)? {
            Check::Counted(count, status) => return search.finish(found, count, status),
            Check::Missed(required) => search.resume(&found, required, round)?,
        }
    }
    search.give_up(Status::NotConverged)
}

/// The result of a round of iteration, as rows at the front of the basis.
struct Found {
    /// Levels wanted, then perhaps the next one, then others nearly converged.
    levels: Vec<Level>,
    found: usize,
    complete: bool,
    next: bool,
    exhausted: bool,
}

/// What became of the level count.
enum Check {
    Counted(LevelCount, Status),
    Missed(Required),
}

struct Search<'a, 'b, T: Scalar> {
    operator: &'a dyn LinearOperator<T>,
    request: &'a LevelRequest<'b, T>,
    goal: Goal,
    run: BlockLanczos<'a, T>,
    /// Rows that fit in memory.
    most_rows: usize,
    /// Rows in a block.
    width: usize,
    /// The locked levels.
    locked: Vec<Level>,
    required: Option<Required>,
}

impl<'a, 'b, T: Scalar> Search<'a, 'b, T> {
    fn new(operator: &'a dyn LinearOperator<T>, request: &'a LevelRequest<'b, T>) -> Result<Self> {
        let (n, r) = (operator.dimension(), request.levels);
        let row_bytes = n.saturating_mul(size_of::<T>());
        let most_rows = match request.memory_limit {
            0 => usize::MAX / 4,
            limit => limit / row_bytes,
        };
        let given = request.start.map_or(0, |start| start.nrows());
        let preferred = if given == 0 {
            BLOCK
        } else {
            given.min(r + 1) + 1
        };
        // room for r + 2 Ritz vectors, the residual block and its image
        let affordable = most_rows.saturating_sub(r + 2) / 2;
        let width = preferred.min(affordable).min(n);
        if width == 0 {
            return Err(Error::Memory {
                what: format!("the smallest basis for {r} levels ({} vectors)", r + 4),
                required: (r as u128 + 4) * row_bytes as u128,
                available: request.memory_limit as u128,
            });
        }
        let spare = most_rows - (r + 2) - 2 * width;
        let rows = (krylov_rows(r, width) + width)
            .min(most_rows)
            .min(n + width);
        Ok(Search {
            operator,
            request,
            goal: Goal {
                levels: r,
                most_extra: spare.min(r.max(16)),
                tolerance: request.tolerance,
            },
            run: BlockLanczos::new(operator, rows, request.seed)?,
            most_rows,
            width,
            locked: Vec::new(),
            required: None,
        })
    }

    /// Random numbers of their own for each round's start.
    fn generator(&self, round: usize) -> ChaCha8Rng {
        let mut generator = ChaCha8Rng::seed_from_u64(self.request.seed);
        generator.set_stream(1 + round as u64);
        generator
    }

    /// Locked levels and Ritz pairs in increasing order; locked rows are the first origins.
    fn levels(&self) -> Vec<Level> {
        let (ritz, first) = (&self.run.ritz, self.locked.len());
        let new = ritz.values.iter().zip(&ritz.residuals).enumerate();
        let new = new.map(|(k, (&energy, &residual))| Level {
            energy,
            residual,
            origin: first + k,
        });
        let mut levels: Vec<Level> = self.locked.iter().copied().chain(new).collect();
        levels.sort_by(|a, b| a.energy.total_cmp(&b.energy));
        levels
    }

    /// Steps and restarts until the goal is reached or a status ends the work.
    fn iterate(
        &mut self,
        monitor: &mut Monitor<'_>,
    ) -> Result<std::result::Result<Assessment, Status>> {
        let mut stopped_by_products = false;
        loop {
            match self.run.step() {
                Err(Error::Interrupted) => return Ok(Err(Status::Interrupted)),
                other => other?,
            }
            let levels = self.levels();
            let exhausted = self.run.exhausted();
            let scale = self.run.scale;
            let assessment = self.goal.assess(&levels, scale, exhausted, self.required);
            if self.report(&levels, monitor).is_break() {
                return Ok(Err(Status::Interrupted));
            }
            let Assessment::Unfinished { wanted } = assessment else {
                return Ok(Ok(assessment));
            };
            stopped_by_products |=
                self.run.products + self.run.residual_width() > self.request.max_products;
            if stopped_by_products || self.run.residual_width() == 0 {
                return Ok(Err(Status::NotConverged));
            }
            self.advance(wanted);
        }
    }

    fn report(&self, levels: &[Level], monitor: &mut Monitor<'_>) -> std::ops::ControlFlow<()> {
        let tolerance = self.goal.residual_tolerance(levels, self.run.scale);
        let wanted = &levels[..self.goal.levels.min(levels.len())];
        let converged = wanted
            .iter()
            .take_while(|level| level.residual <= tolerance);
        let residual = if wanted.len() < self.goal.levels {
            f64::INFINITY
        } else {
            wanted
                .iter()
                .fold(0.0, |top: f64, level| top.max(level.residual))
        };
        monitor(&Progress {
            stage: "levels",
            done: converged.count(),
            total: self.goal.levels,
            products: self.run.products,
            residual,
        })
    }

    /// Extends the basis, or restarts it when it is full.
    fn advance(&mut self, wanted: usize) {
        let (locked, width) = (self.locked.len(), self.run.residual_width());
        let wanted = wanted.saturating_sub(locked).max(1);
        let limit = self.most_rows - locked - width;
        let full = krylov_rows(wanted, width).min(limit);
        if self.run.size + width <= full {
            self.run.extend();
            return;
        }
        let spare = full.saturating_sub(wanted + 1 + 2 * width);
        let keep = (wanted + 1 + spare / 2)
            .min(full.saturating_sub(width))
            .min(self.run.size);
        self.run.restart(keep);
    }

    /// Moves what was found to the front of the basis.
    fn collect(&mut self, finished: Assessment) -> Found {
        let levels = self.levels();
        let exhausted = self.run.exhausted();
        let Assessment::Finished {
            found,
            complete,
            next,
        } = finished
        else {
            unreachable!("collecting follows a finished assessment");
        };
        let kept = if exhausted || !next {
            found + usize::from(next)
        } else {
            nearly_converged(&levels, found)
        };
        let levels = levels[..kept].to_vec();
        let chosen: Vec<usize> = levels.iter().map(|level| level.origin).collect();
        self.run.collect(&chosen);
        Found {
            levels,
            found,
            complete,
            next,
            exhausted,
        }
    }

    /// Searches the complement of what was found.
    fn check(&mut self, found: &Found, round: usize, monitor: &mut Monitor<'_>) -> Result<Check> {
        if found.exhausted {
            return Ok(Check::Counted(LevelCount::Proved, Status::Converged));
        }
        let budget = self
            .request
            .max_products
            .saturating_sub(self.run.products + found.found);
        let probe = Probe {
            known: found.levels.len(),
            bounds: self.bounds(found),
            budget: budget.min((self.run.products / 2).max(USUAL_ROWS)),
            levels: self.goal.levels,
        };
        let generator = self.generator(round);
        let finding = probe.search(self.operator, &mut self.run, generator, monitor)?;
        Ok(match finding {
            Finding::Interrupted => Check::Counted(LevelCount::Unchecked, Status::Interrupted),
            Finding::Nothing {
                failure_probability,
            } if failure_probability < 1.0 => {
                let count = LevelCount::Probed {
                    failure_probability,
                };
                Check::Counted(count, Status::Converged)
            }
            Finding::Nothing { .. } => Check::Counted(LevelCount::Unchecked, Status::Converged),
            Finding::Missed { bound } => Check::Missed(Required {
                bound,
                count: 1 + found
                    .levels
                    .iter()
                    .filter(|level| level.energy <= bound)
                    .count(),
            }),
        })
    }

    /// Energies at or below which the complement must have no level.
    ///
    /// Known vectors that are not quite eigenvectors couple to the complement by no more than
    /// the norm c of their residuals: by Weyl's inequality levels move by c at most.
    fn bounds(&self, found: &Found) -> Vec<f64> {
        let levels = &found.levels;
        let margin = 2.0 * self.goal.residual_tolerance(levels, self.run.scale);
        let square: f64 = levels.iter().map(|level| level.residual.powi(2)).sum();
        let margin = margin + 2.0 * square.sqrt();
        let top = levels[found.found - 1].energy;
        if !found.complete {
            // members of the last multiplet are left: none may lie below it
            let energies: Vec<f64> = levels.iter().map(|level| level.energy).collect();
            let last = multiplets(&energies, margin)
                .pop()
                .map_or(0, |range| range.start);
            return vec![energies[last] - margin];
        }
        let mut bounds = vec![top + margin];
        if found.next {
            let below_next = levels[found.found].energy - margin;
            bounds.extend(Some(below_next).filter(|&bound| bound > top + margin));
        }
        bounds
    }

    /// Locks what has converged and begins in its complement, where a level was missed.
    fn resume(&mut self, found: &Found, required: Required, round: usize) -> Result<()> {
        self.locked = found.levels[..found.found].to_vec();
        for (row, level) in self.locked.iter_mut().enumerate() {
            level.origin = row;
        }
        self.required = Some(required);
        let width = BLOCK.min(self.operator.dimension() - found.found);
        let generator = self.generator(round);
        let none = Array2::zeros((0, self.operator.dimension()));
        self.run.begin(found.found, width, none.view(), generator)
    }

    /// Residual norms from fresh products, in the rows after the `known` ones.
    fn verify(&mut self, energies: &[f64], known: usize) -> Result<(Vec<f64>, Array2<T>)> {
        let count = energies.len();
        let mut residuals = Vec::with_capacity(count);
        let mut projected = Array2::zeros((count, count));
        for first in (0..count).step_by(self.width) {
            let block = first..(first + self.width).min(count);
            let (rows, mut images) = self.run.split(known, block.len());
            let vectors = rows.slice(s![block.clone(), ..]);
            self.operator.apply(vectors, images.view_mut())?;
            let columns = overlaps(rows.slice(s![..count, ..]), images.view());
            projected.slice_mut(s![.., block.clone()]).assign(&columns);
            for (k, image) in block.clone().zip(images.rows()) {
                let pairs = image.iter().zip(rows.row(k));
                let square: f64 = pairs
                    .map(|(&hx, &x)| (hx - x * energies[k]).abs_sqr())
                    .sum();
                residuals.push(square.sqrt());
            }
            self.run.products += block.len();
        }
        Ok((residuals, projected))
    }

    /// Checks the residuals of what was found; mends couplings between rounds by one more
    /// diagonalisation inside the found space.
    fn certify(&mut self, found: &mut Found) -> Result<()> {
        let known = found.levels.len();
        let mut energies: Vec<f64> = found.levels.iter().map(|level| level.energy).collect();
        energies.truncate(found.found);
        let (mut residuals, projected) = self.verify(&energies, known)?;
        let tolerance = self.goal.residual_tolerance(&found.levels, self.run.scale);
        if residuals.iter().any(|&residual| residual > tolerance) {
            let eigen = eigh(projected.view())?;
            let (_, rows) = self.run.split(0, found.found);
            rotate(rows, eigen.vectors.view());
            energies = eigen.values.to_vec();
            residuals = self.verify(&energies, known)?.0;
        }
        for (k, level) in found.levels[..found.found].iter_mut().enumerate() {
            (level.energy, level.residual) = (energies[k], residuals[k]);
        }
        Ok(())
    }

    fn finish(mut self, mut found: Found, count: LevelCount, status: Status) -> Result<Levels<T>> {
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
    fn give_up(mut self, status: Status) -> Result<Levels<T>> {
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
        let rounding = 8.0 * f64::EPSILON * scale;
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
            next_error: next.map(|level| level.residual + rounding),
            multiplets: ranges,
            last_multiplet_complete: found.complete,
            level_count: count,
            status,
            products,
            method: "block Lanczos",
        })
    }
}

/// Rows of a full basis that looks for `wanted` levels and one more.
fn krylov_rows(wanted: usize, width: usize) -> usize {
    USUAL_ROWS.max(2 * (wanted + 1) + 3 * width)
}

/// How many levels to take out of the search for missed ones: beyond `found` and the next,
/// those whose joint residual is small against their distance from the last multiplet.
fn nearly_converged(levels: &[Level], found: usize) -> usize {
    let top = levels[found - 1].energy;
    let mut square: f64 = levels[..=found].iter().map(|l| l.residual.powi(2)).sum();
    let mut kept = found + 1;
    for level in &levels[kept..] {
        square += level.residual.powi(2);
        if square.sqrt() > 0.05 * (level.energy - top) {
            break;
        }
        kept += 1;
    }
    kept
}
