//! The tree of line-ups: which configurations can be the r lowest, in which order.
//!
//! A branch holds the configurations chosen so far and the cone of increasing h for which they
//! are the lowest. Equal weights make a *group* whose inner order does not matter: inside a
//! group each member is chosen together with the verdict that the candidates listed before it
//! stay outside, so every group is reached once. A branch whose cone has lost its interior is
//! dropped.

use super::cone::Cone;
use super::excitations::Excitations;
use super::refusal::too_large;
use crate::error::{Error, Result};
use crate::memory;
use crate::progress::{Monitor, Progress};
use rayon::prelude::*;
use std::collections::HashSet;
use std::ops::ControlFlow;
use std::sync::Arc;

/// Branches treated between two calls of the monitor.
const BATCH: usize = 16;

/// Branches of a level before its growth is taken to foresee the last level.
const ENOUGH_TO_FORESEE: usize = 200;

#[derive(Debug, Clone)]
struct Branch {
    chosen: Vec<usize>,
    /// Candidates that stay outside the group now being filled.
    outside: Vec<usize>,
    cone: Cone,
}

/// All line-ups and the extremal rays of their cones.
pub(super) struct Outcome {
    /// Entries of the table from the lowest up, in the order found.
    pub(super) line_ups: Vec<Vec<usize>>,
    /// Extremal rays over the active steps, sorted.
    pub(super) rays: Vec<Arc<[i64]>>,
}

/// Finds all line-ups; `closes[k]` says that a group of equal weights ends with level k.
///
/// # Errors
/// Too many line-ups for the limit or for the memory, or a stop by the monitor.
pub(super) fn line_ups(
    table: &Excitations,
    closes: &[bool],
    limit: usize,
    monitor: &mut Monitor<'_>,
) -> Result<Outcome> {
    let mut branches = vec![Branch {
        chosen: Vec::new(),
        outside: Vec::new(),
        cone: Cone::orthant(table.steps.len())?,
    }];
    let mut outcome = Outcome {
        line_ups: Vec::new(),
        rays: Vec::new(),
    };
    let mut rays: HashSet<Arc<[i64]>> = HashSet::new();
    let mut counts = Vec::new();
    for depth in 0..closes.len() {
        let last = depth + 1 == closes.len();
        let mut next = Vec::new();
        for batch in branches.chunks(BATCH) {
            report(monitor, depth, closes.len())?;
            let children: Result<Vec<Vec<Branch>>> = batch
                .par_iter()
                .map(|branch| expand(table, closes, branch))
                .collect();
            for child in children?.into_iter().flatten() {
                if last {
                    rays.extend(child.cone.rays().cloned());
                    outcome.line_ups.push(child.chosen);
                } else {
                    next.push(child);
                }
            }
            check_count(next.len().max(outcome.line_ups.len()), closes.len(), limit)?;
        }
        counts.push(next.len());
        if !last {
            foresee(&counts, closes.len(), limit)?;
            // the next level is held together with this one
            let held: usize = next.iter().map(|branch| branch.cone.bytes()).sum();
            let growth = 1 + next.len().div_ceil(branches.len().max(1));
            memory::require("the tree of line-ups", held as u128 * growth as u128)?;
        }
        branches = next;
    }
    outcome.rays = rays.into_iter().collect();
    outcome.rays.sort();
    Ok(outcome)
}

/// Every way to choose one more configuration.
fn expand(table: &Excitations, closes: &[bool], branch: &Branch) -> Result<Vec<Branch>> {
    let depth = branch.chosen.len();
    let group = closes[..depth]
        .iter()
        .rposition(|&end| end)
        .map_or(0, |end| end + 1);
    let candidates: Vec<usize> = table
        .minimal_outside(&branch.chosen)
        .into_iter()
        .filter(|k| !branch.outside.contains(k))
        .collect();
    let mut children = Vec::new();
    for (i, &candidate) in candidates.iter().enumerate() {
        let mut child = branch.clone();
        child.chosen.push(candidate);
        child.outside.extend(&candidates[..i]);
        if closes[depth] {
            child.outside = table.minimal_outside(&child.chosen);
        }
        let mut alive = true;
        'cuts: for &inside in child.chosen[group..].iter().rev() {
            for &outside in &child.outside {
                if !table.precedes(inside, outside) {
                    alive = child.cone.cut(&difference(table, inside, outside))?;
                    if !alive {
                        break 'cuts;
                    }
                }
            }
        }
        if closes[depth] {
            child.outside.clear();
        }
        if alive {
            children.push(child);
        }
    }
    Ok(children)
}

fn difference(table: &Excitations, a: usize, b: usize) -> Vec<i64> {
    let (a, b) = (&table.entries[a].excess, &table.entries[b].excess);
    a.iter().zip(b).map(|(x, y)| x - y).collect()
}

fn report(monitor: &mut Monitor<'_>, done: usize, total: usize) -> Result<()> {
    let progress = Progress {
        stage: "line-ups",
        done,
        total,
        products: 0,
        residual: 0.0,
    };
    match monitor(&progress) {
        ControlFlow::Continue(()) => Ok(()),
        ControlFlow::Break(()) => Err(Error::Interrupted),
    }
}

fn check_count(count: usize, levels: usize, limit: usize) -> Result<()> {
    if count > limit {
        let given = format!("{levels} weights with more than {limit} line-ups (the `limit`)");
        return Err(too_large(given));
    }
    Ok(())
}

/// Refuses what will grow beyond twice the limit if the growth from level to level goes on, or
/// goes on falling, as it last did. (Branches of a level are the line-ups of as many weights.)
fn foresee(counts: &[usize], levels: usize, limit: usize) -> Result<()> {
    let &[.., before, previous, count] = counts else {
        return Ok(());
    };
    if count < ENOUGH_TO_FORESEE {
        return Ok(());
    }
    let mut growth = count as f64 / previous as f64;
    let trend = (growth * before as f64 / previous as f64).min(1.0);
    let mut estimate = count as f64;
    for _ in counts.len()..levels {
        growth *= trend;
        estimate *= growth.max(1.0);
    }
    if estimate > 2.0 * limit as f64 {
        let given = format!(
            "{levels} weights with about {estimate:.0e} line-ups (estimated from {before}, \
             {previous} and {count} for {} to {} weights; the `limit` is {limit})",
            counts.len() - 2,
            counts.len()
        );
        return Err(too_large(given));
    }
    Ok(())
}
