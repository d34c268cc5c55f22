//! Large problems: rounds of block Lanczos and of searches for what it missed.

use super::lanczos::BlockLanczos;
use super::multiplet::{Assessment, Goal, Level, Required, multiplets};
use super::probe::{Finding, Probe};
use super::{LevelCount, LevelRequest, Levels, Status};
use crate::error::{Error, Result};
use crate::linear_operator::LinearOperator;
use crate::progress::{Monitor, Progress};
use crate::scalar::Scalar;
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;

/// Krylov rows for a few levels.
const USUAL_ROWS: usize = 24;
/// Restarts in a round after which slow convergence doubles them: longer bases need fewer
/// products, but each costs more to keep orthogonal.
const PATIENCE: usize = 12;
/// Krylov rows and bytes beyond which they are not doubled.
const MOST_USUAL_ROWS: usize = 96;
const MOST_USUAL_BYTES: usize = 64 << 20;
/// Rows that the search for missed levels takes beside those found.
const SEARCH_ROWS: usize = 3;
/// Rows in a block. Single vectors need by far the fewest products (on the half-filled ring of
/// 12 sites 136, against 291 in pairs and 809 in fours); partners in multiplets that they do
/// not see are found by the rounds that follow the level count.
const BLOCK: usize = 1;

/// Bytes of a vector from which on the operator is filtered: a basis of such vectors does not
/// stay in cache, and keeping it orthogonal costs more than the products.
pub(super) const LONG_VECTOR: usize = 1 << 20;
/// Filters to be tried in vain: each is chosen from Ritz values that the last one has improved.
const MOST_FILTERS: usize = 3;

/// The lowest levels by iteration.
pub(super) fn lowest_levels<T: Scalar>(
    operator: &dyn LinearOperator<T>,
    request: &LevelRequest<'_, T>,
    long_vector: usize,
    monitor: &mut Monitor<'_>,
) -> Result<Levels<T>> {
    let mut search = Search::new(operator, request)?;
    let products_dominate = search.row_bytes() < long_vector || operator.has_costly_products();
    search.filters = if products_dominate { 0 } else { MOST_FILTERS };
    let generator = search.generator(0);
    search
        .run
        .begin(0, search.width, request.start, generator)?;
    // each round finds at least one level, unless rounding deceives the searches
    let most_rounds = 8 + 2 * (request.levels + search.goal.most_extra);
    for round in 1.. {
        let finished = match search.iterate(monitor)? {
            Ok(finished) => finished,
            Err(status) => return search.give_up(status),
        };
        let found = search.collect(finished);
        match search.check(&found, round, monitor)? {
            Check::Counted(count, status) => return search.finish(found, count, status),
            Check::Missed(_) if round >= most_rounds => {
                return search.finish(found, LevelCount::Unchecked, Status::Converged);
            }
            Check::Missed(required) => search.resume(&found, required, round)?,
        }
    }
    unreachable!("the last round returns")
}

/// The result of a round of iteration, as rows at the front of the basis.
pub(super) struct Found {
    /// Levels wanted, then perhaps the next one, then others nearly converged.
    pub levels: Vec<Level>,
    pub found: usize,
    pub complete: bool,
    pub next: bool,
    pub exhausted: bool,
    /// Whether energies and residuals come from fresh products.
    pub verified: bool,
}

/// What became of the level count.
enum Check {
    Counted(LevelCount, Status),
    Missed(Required),
}

pub(super) struct Search<'a, 'b, T: Scalar> {
    pub operator: &'a dyn LinearOperator<T>,
    pub request: &'a LevelRequest<'b, T>,
    pub goal: Goal,
    pub run: BlockLanczos<'a, T>,
    /// Rows that fit in memory.
    pub most_rows: usize,
    /// Krylov rows for a few levels.
    usual_rows: usize,
    /// Restarts since they were last changed, in this round.
    restarts: usize,
    /// Filters that may still be tried.
    pub filters: usize,
    /// Rows in a block.
    width: usize,
    /// The locked levels.
    pub locked: Vec<Level>,
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
        // room for r + 2 Ritz vectors, the residual block and its image
        let affordable = most_rows.saturating_sub(r + 2) / 2;
        let width = BLOCK.min(affordable);
        if width == 0 {
            return Err(Error::Memory {
                what: format!("the smallest basis for {r} levels ({} vectors)", r + 4),
                required: (r as u128 + 4) * row_bytes as u128,
                available: request.memory_limit as u128,
            });
        }
        let spare = most_rows - (r + 2) - 2 * width;
        // locked levels and the search for missed ones included: growing later would move it all
        let rows = (krylov_rows(USUAL_ROWS, r, width) + width + r + SEARCH_ROWS)
            .min(most_rows)
            .min(n + width);
        Ok(Search {
            operator,
            request,
            goal: Goal {
                levels: r,
                most_extra: spare.min(r.max(16)),
                tolerance: request.tolerance,
                granted: 0.0,
            },
            run: BlockLanczos::new(operator, rows, request.tolerance, request.seed)?,
            most_rows,
            usual_rows: USUAL_ROWS,
            restarts: 0,
            filters: 0,
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
    pub fn levels(&self) -> Vec<Level> {
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
        let mut wanted = self.goal.levels;
        loop {
            match self.run.step(monitor) {
                Err(Error::Interrupted) => return Ok(Err(Status::Interrupted)),
                other => other?,
            }
            if self.full(wanted) {
                self.run.refresh()?;
            }
            let levels = self.levels();
            if self.report(&levels, monitor).is_break() {
                return Ok(Err(Status::Interrupted));
            }
            if self.run.fresh() {
                let (scale, exhausted) = (self.run.scale, self.run.exhausted());
                match self.goal.assess(&levels, scale, exhausted, self.required) {
                    Assessment::Unfinished { wanted: more } => wanted = more,
                    finished => return Ok(Ok(finished)),
                }
            }
            let width = self.run.residual_width();
            if width == 0 || self.run.products + width * self.run.cost() > self.request.max_products
            {
                return Ok(Err(Status::NotConverged));
            }
            self.advance(wanted);
        }
    }

    fn report(&mut self, levels: &[Level], monitor: &mut Monitor<'_>) -> std::ops::ControlFlow<()> {
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
        self.run.latest = Progress {
            stage: "levels",
            done: converged.count(),
            total: self.goal.levels,
            products: self.run.products,
            residual,
        };
        monitor(&self.run.latest)
    }

    /// Levels still wanted from the basis, and the rows it may have for them.
    fn room(&self, wanted: usize) -> (usize, usize) {
        let (locked, width) = (self.locked.len(), self.run.residual_width());
        let wanted = wanted.saturating_sub(locked).max(1);
        let limit = self.most_rows - locked - width;
        let rows = krylov_rows(self.usual_rows, wanted, width).min(limit);
        (wanted, rows)
    }

    /// Whether the basis has no room for the residual block.
    fn full(&self, wanted: usize) -> bool {
        self.run.size + self.run.residual_width() > self.room(wanted).1
    }

    /// Extends the basis, or restarts it when it is full.
    fn advance(&mut self, wanted: usize) {
        let full = self.full(wanted);
        if self.change_filter(wanted, full) {
            return;
        }
        if !full {
            self.run.extend();
            return;
        }
        self.restarts += 1;
        let bytes = 2 * self.usual_rows * self.operator.dimension() * size_of::<T>();
        let may_double = 2 * self.usual_rows <= MOST_USUAL_ROWS && bytes <= MOST_USUAL_BYTES;
        if self.restarts >= PATIENCE && may_double {
            self.usual_rows *= 2;
            self.restarts = 0;
        }
        let width = self.run.residual_width();
        let (wanted, rows) = self.room(wanted);
        let spare = rows.saturating_sub(wanted + 1 + 2 * width);
        let keep = (wanted + 1 + spare / 3)
            .min(rows.saturating_sub(width))
            .min(self.run.size);
        self.run.restart(keep);
    }

    /// Bytes of a vector.
    fn row_bytes(&self) -> usize {
        self.operator.dimension().saturating_mul(size_of::<T>())
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
        let kept = if next {
            let limit = (self.most_rows - SEARCH_ROWS).max(found + 1);
            nearly_converged(&levels, found).min(limit)
        } else {
            found
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
            verified: false,
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
        let bounds = match self.bounds_through_filter(found) {
            Some(bounds) => bounds,
            None => {
                self.run.drop_filter();
                self.bounds(found)
            }
        };
        let probe = Probe {
            known: found.levels.len(),
            bounds,
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
    pub fn bounds(&self, found: &Found) -> Vec<f64> {
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
        let scale = self.run.scale;
        self.goal.granted = self.goal.residual_tolerance(&found.levels, scale);
        self.locked = found.levels[..found.found].to_vec();
        for (row, level) in self.locked.iter_mut().enumerate() {
            level.origin = row;
        }
        self.required = Some(required);
        self.restarts = 0;
        let width = BLOCK.min(self.operator.dimension() - found.found);
        let generator = self.generator(round);
        self.run.begin(found.found, width, None, generator)
    }
}

/// Rows of a full basis that looks for `wanted` levels and one more.
fn krylov_rows(usual: usize, wanted: usize, width: usize) -> usize {
    usual.max(2 * (wanted + 1) + 3 * width)
}

/// How many levels to take out of the search for missed ones: beyond `found` and the next,
/// those whose joint residual is small against their distance from the last multiplet, and
/// against that of the next level: partners of the next level must not count as missed.
fn nearly_converged(levels: &[Level], found: usize) -> usize {
    let top = levels[found - 1].energy;
    let most = 0.2 * (levels[found].energy - top);
    let mut square: f64 = levels[..=found].iter().map(|l| l.residual.powi(2)).sum();
    let mut kept = found + 1;
    for level in &levels[kept..] {
        square += level.residual.powi(2);
        if square.sqrt() > most.min(0.05 * (level.energy - top)) {
            break;
        }
        kept += 1;
    }
    kept
}
