//! How far occupations can be scaled about the centre of the polytope.

use super::active_set::remove_mean;
use super::least_squares::dot;
use super::oracle::Oracle;
use super::projection::ProjectionOptions;
use super::search::{EarlyStop, Search};
use super::sorting::{Sorting, remove_excess};
use crate::error::{Error, Result};
use ndarray::{Array2, ArrayView2};

/// The largest factor t for which c + t (n - c) lies in the polytope, c the uniform occupations.
#[derive(Debug, Clone)]
pub struct Stretch {
    /// The factor: an upper bound, proved by `normal`. The occupations are allowed exactly when
    /// it is at least 1. Infinite at the centre; zero elsewhere if the polytope is one point.
    pub value: f64,
    /// Certified lower bound of the factor.
    pub lower: f64,
    /// The boundary point c + t (n - c); the centre where t is infinite or zero.
    pub boundary: Array2<f64>,
    /// Normal h of the face met there: value = (f_w(h) - `<h, c>`) / `<h, n - c>`. Zero where
    /// no face is met.
    pub normal: Array2<f64>,
    /// Calls of the linear oracle.
    pub oracle_calls: usize,
}

/// Relative accuracy aimed at.
const ACCURACY: f64 = 1e-13;
/// Deviations from the centre below this, relative to the occupations, are rounding.
const AT_CENTRE: f64 = 1e-14;
/// Inner radii below this, relative to the occupations, belong to a single point.
const FIXED: f64 = 1e-12;
/// Deviations from a single point below this, relative to the occupations, are ignored.
const NOISE: f64 = 1e-10;
/// A cut is taken as soon as this share of the distance is certified.
const SHARE: f64 = 0.99;
const LARGEST_STEP_COUNT: usize = 200;

/// Stretch of validated occupations.
pub(super) fn stretch(oracle: &Oracle, occupations: ArrayView2<'_, f64>) -> Result<Stretch> {
    let sorting = Sorting::new(occupations);
    let mut sorted = sorting.sorted(occupations);
    let shifts = remove_excess(oracle, &mut sorted);
    let centre = centre(oracle);
    let scale = sorted.iter().fold(1.0f64, |m, n| m.max(n.abs()));
    check_sum(oracle, &shifts, scale)?;

    let mut difference: Vec<f64> = sorted.iter().zip(&centre).map(|(n, c)| n - c).collect();
    difference
        .chunks_mut(oracle.shape().1)
        .for_each(remove_mean);
    let radii = inner_radii(oracle, &centre)?;
    let movable = hold_fixed(&mut difference, &radii, scale);
    let length = dot(&difference, &difference).sqrt();
    let result = |value: f64, lower: f64, shift: f64, normal: &[f64], calls: usize| {
        let point: Vec<f64> = centre
            .iter()
            .zip(&difference)
            .map(|(c, d)| c + shift * d)
            .collect();
        Stretch {
            value,
            lower,
            boundary: sorting.to_caller(&point),
            normal: sorting.to_caller(normal),
            oracle_calls: calls,
        }
    };
    let flat = vec![0.0; centre.len()];
    let own_calls = oracle.shape().0;
    let Some(radius) = movable else {
        return Ok(result(0.0, 0.0, 0.0, &flat, own_calls));
    };
    if length <= AT_CENTRE * scale * (centre.len() as f64).sqrt() {
        return Ok(result(f64::INFINITY, f64::INFINITY, 0.0, &flat, own_calls));
    }
    let unit: Vec<f64> = difference.iter().map(|d| d / length).collect();
    let exit = leave(oracle, &centre, &unit, radius)?;
    let (value, lower) = (exit.reach / length, exit.reach_lower / length);
    let found = result(value, lower, value, &exit.normal, exit.calls + own_calls);
    Ok(found)
}

fn check_sum(oracle: &Oracle, shifts: &[f64], scale: f64) -> Result<()> {
    let modes = oracle.shape().1 as f64;
    for (shift, particles) in shifts.iter().zip(oracle.particles()) {
        if shift.abs() > 1e-8 * scale {
            return Err(Error::argument(
                "occupations",
                format!("a sum of {}", particles + shift * modes),
                format!(
                    "{particles}, the particle number: other sums lie on no ray inside the domain"
                ),
            ));
        }
    }
    Ok(())
}

/// Uniform occupations.
fn centre(oracle: &Oracle) -> Vec<f64> {
    let modes = oracle.shape().1;
    oracle
        .particles()
        .into_iter()
        .flat_map(|particles| std::iter::repeat_n(particles / modes as f64, modes))
        .collect()
}

/// Where a ray from the centre leaves.
struct Exit {
    reach: f64,
    reach_lower: f64,
    normal: Vec<f64>,
    calls: usize,
}

/// Dinkelbach's steps: the separating direction of a point outside cuts the ray closer in.
fn leave(oracle: &Oracle, centre: &[f64], unit: &[f64], radius: f64) -> Result<Exit> {
    let options = ProjectionOptions {
        distance_tolerance: 1e-15,
        ..ProjectionOptions::default()
    };
    let mut normal: Vec<f64> = unit.iter().map(|u| -u).collect();
    let highest = oracle.flat_minimiser(&normal)?;
    let above: Vec<f64> = highest.iter().zip(centre).map(|(a, c)| a - c).collect();
    let mut reach = dot(unit, &above);
    let mut reach_lower = 0.0f64;
    let mut calls = 1;
    let mut atoms = Vec::new();
    for _ in 0..LARGEST_STEP_COUNT {
        let target: Vec<f64> = centre
            .iter()
            .zip(unit)
            .map(|(c, u)| c + reach * u)
            .collect();
        let stop = EarlyStop {
            near: ACCURACY * radius,
            far: f64::INFINITY,
            share: SHARE,
        };
        let found = Search::new(oracle, &target, options, stop, atoms)?.run()?;
        calls += found.calls;
        // the polytope holds a ball about the centre
        reach_lower = reach_lower.max(reach / (1.0 + found.length / radius));
        let slope = dot(&found.separator, unit);
        let cut = -found.lower * dot(&found.separator, &found.separator).sqrt() / slope;
        if found.lower <= 0.0 || slope >= 0.0 || cut <= f64::EPSILON * reach {
            break;
        }
        reach -= cut;
        normal = found.separator;
        atoms = found.atoms;
        if reach <= reach_lower * (1.0 + ACCURACY) {
            break;
        }
    }
    Ok(Exit {
        reach,
        reach_lower: reach_lower.min(reach),
        normal,
        calls,
    })
}

/// Removes noise in components where the polytope is a single point. Returns the radius of a ball
/// about the centre inside the polytope in the other components, or `None` if the direction
/// leaves such a point.
fn hold_fixed(difference: &mut [f64], radii: &[f64], scale: f64) -> Option<f64> {
    let modes = difference.len() / radii.len();
    let mut smallest = f64::INFINITY;
    for (&radius, part) in radii.iter().zip(difference.chunks_mut(modes)) {
        if radius > FIXED * scale {
            smallest = smallest.min(radius);
        } else if dot(part, part).sqrt() <= NOISE * scale {
            part.fill(0.0);
        } else {
            return None;
        }
    }
    Some(smallest)
}

/// A point of the polytope that is as far from uniform in every component as it can be: the mean
/// of the line-ups that each component alone prefers, each sorted decreasingly.
fn spread_point(oracle: &Oracle) -> Result<Vec<f64>> {
    let (components, modes) = oracle.shape();
    let mut mean = vec![0.0; components * modes];
    for own in 0..components {
        let ramp = |i: usize| {
            if i / modes == own {
                (i % modes) as f64
            } else {
                0.0
            }
        };
        let potential: Vec<f64> = (0..mean.len()).map(ramp).collect();
        let mut point = oracle.flat_minimiser(&potential)?;
        for component in point.chunks_mut(modes) {
            component.sort_by(|a, b| b.total_cmp(a));
        }
        for (m, x) in mean.iter_mut().zip(point) {
            *m += x / components as f64;
        }
    }
    Ok(mean)
}

/// For each component the inner radius of the hull of all permutations of one point: the smallest distance of the
/// faces on which the m largest coordinates have their largest sum.
fn inner_radii(oracle: &Oracle, centre: &[f64]) -> Result<Vec<f64>> {
    let modes = oracle.shape().1;
    let point = spread_point(oracle)?;
    let components = point.chunks(modes).zip(centre.chunks(modes));
    let radii = components.map(|(point, centre)| {
        let mut height = 0.0;
        let mut radius = f64::INFINITY;
        for m in 1..modes {
            height += point[m - 1] - centre[m - 1];
            let share = m as f64 * (1.0 - m as f64 / modes as f64);
            radius = radius.min(height / share.sqrt());
        }
        if modes == 1 { 0.0 } else { radius.max(0.0) }
    });
    Ok(radii.collect())
}
