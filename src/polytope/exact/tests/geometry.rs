//! Vertices and inequalities against every configuration of small sectors; refusals.

use super::{bosons, decreasing, fermions, line_ups, spin_half};
use crate::error::Error;
use crate::polytope::Domain::{self, SpinResolved, SpinSummed, Spinless};
use crate::polytope::exact::{DEFAULT_LIMIT, LineUps};
use crate::progress::silent;
use crate::sector::Sector;
use crate::weights::Weights;
use approx::assert_abs_diff_eq;
use ndarray::{Array2, Axis, aview1};
use num_bigint::BigUint;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use std::ops::ControlFlow;

/// Small sectors, most below the stable range, with weights distinct and equal.
fn small_cases() -> Vec<(Sector, Domain, Weights)> {
    let sectors = [
        (fermions(4, 2), Spinless),
        (fermions(5, 2), Spinless),
        (fermions(3, 1), Spinless),
        (bosons(3, 2), Spinless),
        (bosons(2, 3), Spinless),
        (bosons(4, 3), Spinless),
        (spin_half(3, 2, 1), SpinResolved),
        (spin_half(3, 3, 1), SpinResolved),
        (spin_half(4, 2, 2), SpinSummed),
        (spin_half(4, 3, 1), SpinSummed),
    ];
    let weights: [&[f64]; 6] = [
        &[1.0],
        &[0.6, 0.4],
        &[0.4, 0.4, 0.2],
        &[0.25; 4],
        &[0.1, 0.3, 0.2, 0.4],
        &[0.3, 0.2, 0.2, 0.15, 0.15],
    ];
    let mut cases = Vec::new();
    for (sector, domain) in sectors {
        for values in weights {
            let mut values = values.to_vec();
            values.sort_by(|a, b| b.total_cmp(a));
            if BigUint::from(values.len()) <= sector.dimension() {
                cases.push((sector, domain, Weights::new(&values).unwrap()));
            }
        }
    }
    cases
}

/// f_w(h) by listing every configuration.
fn support(sector: &Sector, domain: Domain, weights: &Weights, h: &Array2<f64>) -> f64 {
    let configurations = sector.configurations().unwrap();
    let mut energies: Vec<f64> = (0..configurations.dimension())
        .map(|k| {
            let n = configurations.occupations(k).unwrap().mapv(f64::from);
            let n = if domain == SpinSummed {
                n.sum_axis(Axis(0)).insert_axis(Axis(0))
            } else {
                n
            };
            (&n * h).sum()
        })
        .collect();
    energies.sort_by(f64::total_cmp);
    energies
        .iter()
        .zip(weights.as_slice())
        .map(|(e, w)| e * w)
        .sum()
}

/// Vertices against the support function over all configurations, inside the chamber.
#[test]
fn vertices_reach_the_support_function() {
    let mut generator = ChaCha8Rng::seed_from_u64(3);
    for (sector, domain, weights) in small_cases() {
        let vertices = line_ups(sector, &weights, domain)
            .generating_vertices()
            .unwrap();
        for _ in 0..20 {
            let mut h =
                Array2::from_shape_fn(vertices[0].occupations.dim(), |_| generator.random::<f64>());
            for mut row in h.rows_mut() {
                let mut sorted = row.to_vec();
                sorted.sort_by(f64::total_cmp);
                row.assign(&aview1(&sorted));
            }
            let values = vertices
                .iter()
                .map(|vertex| (&vertex.occupations * &h).sum());
            let lowest = values.fold(f64::INFINITY, f64::min);
            assert_abs_diff_eq!(
                lowest,
                support(&sector, domain, &weights, &h),
                epsilon = 1e-12
            );
        }
    }
}

#[test]
fn every_vertex_is_needed_and_is_a_line_up() {
    for (sector, domain, weights) in small_cases() {
        let vertices = line_ups(sector, &weights, domain)
            .generating_vertices()
            .unwrap();
        for (k, vertex) in vertices.iter().enumerate() {
            for row in vertex.occupations.rows() {
                assert!(
                    row.windows(2)
                        .into_iter()
                        .all(|pair| pair[0] >= pair[1] - 1e-12)
                );
            }
            let configurations = vertex.configurations.mapv(f64::from);
            let levels = configurations.outer_iter().zip(weights.as_slice());
            let sum = levels.fold(
                Array2::<f64>::zeros(vertex.occupations.dim()),
                |sum, (n, &w)| sum + &n * w,
            );
            assert_abs_diff_eq!(sum, vertex.occupations, epsilon = 1e-14);
            for other in &vertices[..k] {
                let apart = (&vertex.occupations - &other.occupations)
                    .mapv(f64::abs)
                    .sum();
                assert!(apart > 1e-6, "{sector:?} {weights:?}");
            }
        }
    }
}

/// Directions from the first point to the vertices and their transpositions of modes that
/// `exchangeable` allows.
fn directions(
    vertices: &[Array2<f64>],
    exchangeable: impl Fn(usize, usize, usize) -> bool,
) -> Vec<Vec<f64>> {
    let mut points = Vec::new();
    for vertex in vertices {
        points.push(vertex.clone());
        for (row, (i, j)) in
            (0..vertex.nrows()).flat_map(|row| pairs(vertex.ncols()).map(move |p| (row, p)))
        {
            if exchangeable(row, i, j) {
                let mut swapped = vertex.clone();
                swapped.swap([row, i], [row, j]);
                points.push(swapped);
            }
        }
    }
    points
        .iter()
        .map(|point| (point - &points[0]).into_iter().collect())
        .collect()
}

fn pairs(count: usize) -> impl Iterator<Item = (usize, usize)> {
    (0..count).flat_map(move |j| (0..j).map(move |i| (i, j)))
}

/// Rank by elimination with the largest pivot.
fn rank(mut rows: Vec<Vec<f64>>) -> usize {
    let columns = rows.first().map_or(0, Vec::len);
    let mut rank = 0;
    for column in 0..columns {
        let size = |k: &usize| rows[*k][column].abs();
        let Some(best) = (rank..rows.len()).max_by(|a, b| size(a).total_cmp(&size(b))) else {
            break;
        };
        if rows[best][column].abs() < 1e-9 {
            continue;
        }
        rows.swap(rank, best);
        let pivot = rows[rank].clone();
        for row in &mut rows[rank + 1..] {
            let factor = row[column] / pivot[column];
            row.iter_mut()
                .zip(&pivot)
                .for_each(|(x, y)| *x -= factor * y);
        }
        rank += 1;
    }
    rank
}

/// Bounds are values of the support function, and the permuted vertices on which an inequality
/// holds with equality span a facet.
#[test]
fn inequalities_are_facets() {
    for (sector, domain, weights) in small_cases() {
        let found = line_ups(sector, &weights, domain);
        let vertices = found.generating_vertices().unwrap();
        let vertices: Vec<Array2<f64>> = vertices.into_iter().map(|v| v.occupations).collect();
        let dimension = rank(directions(&vertices, |_, _, _| true));
        for inequality in found.inequalities().unwrap() {
            let c = &inequality.coefficients;
            let value = -support(&sector, domain, &weights, &c.mapv(|c| -(c as f64)));
            assert_abs_diff_eq!(inequality.bound, value, epsilon = 1e-12);
            assert!(inequality.first_level <= weights.count());
            let mut tight = vertices.clone();
            let slack = |n: &Array2<f64>| inequality.slack(n.view()).unwrap();
            assert!(tight.iter().all(|n| slack(n) > -1e-12));
            tight.retain(|n| slack(n) < 1e-12);
            let face = rank(directions(&tight, |row, i, j| c[[row, i]] == c[[row, j]]));
            // a component without freedom makes an equality
            let rigid = tight.len() == vertices.len()
                && inequality.bound_weights.iter().all(|&k| k == 0)
                && tight.iter().all(|n| {
                    let rows = n.rows().into_iter().zip(c.rows());
                    rows.filter(|(_, c)| c[0] != 0)
                        .all(|(n, _)| n[0] - n[n.len() - 1] < 1e-12)
                });
            assert!(
                rigid || face + 1 == dimension,
                "{sector:?} {weights:?} {inequality}"
            );
        }
    }
}

/// Inside by the list means inside: f_w(h) <= `<h, n>` for many h, n just inside the list.
#[test]
fn the_list_of_inequalities_is_complete() {
    let mut generator = ChaCha8Rng::seed_from_u64(4);
    for (sector, domain, weights) in small_cases() {
        let found = line_ups(sector, &weights, domain);
        let list = found.inequalities().unwrap();
        let vertex = &found.generating_vertices().unwrap()[0].occupations;
        let centre = Array2::from_shape_fn(vertex.dim(), |(row, _)| {
            vertex.row(row).mean().unwrap_or(0.0)
        });
        for _ in 0..15 {
            let mut way = Array2::from_shape_fn(vertex.dim(), |_| generator.random::<f64>() - 0.5);
            for mut row in way.rows_mut() {
                let mean = row.mean().unwrap_or(0.0);
                row -= mean;
            }
            // the largest step the list allows, by bisection
            let (mut inside, mut outside) = (0.0, 100.0);
            for _ in 0..60 {
                let middle = 0.5 * (inside + outside);
                let point = &centre + &(&way * middle);
                let allowed = list
                    .iter()
                    .all(|inequality| inequality.slack(point.view()).unwrap() >= -1e-13);
                if allowed {
                    inside = middle
                } else {
                    outside = middle
                }
            }
            let point = &centre + &(&way * inside);
            for _ in 0..40 {
                let h = Array2::from_shape_fn(vertex.dim(), |_| {
                    (generator.random::<f64>() * 4.0).floor()
                });
                let slack = (&point * &h).sum() - support(&sector, domain, &weights, &h);
                assert!(slack > -1e-10, "{sector:?} {weights:?} {point} {h}");
            }
        }
    }
}

#[test]
fn endless_lists_are_refused_with_an_estimate() {
    for (sector, r) in [
        (fermions(60, 30), 18),
        (bosons(30, 30), 25),
        (fermions(20, 3), 20),
    ] {
        let request = LineUps::enumerate(&sector, &decreasing(r), Spinless, 20_000, &mut silent);
        let message = request.unwrap_err().to_string();
        assert!(message.contains("estimated from"), "{message}");
    }
    for r in [1_000, 100_000] {
        let weights = decreasing(r);
        let request =
            LineUps::enumerate(&fermions(40, 20), &weights, Spinless, 20_000, &mut silent);
        assert!(
            request
                .unwrap_err()
                .to_string()
                .contains("contains, project")
        );
    }
}

#[test]
fn the_monitor_stops_the_search() {
    let mut calls = 0;
    let mut monitor = |_: &crate::progress::Progress| {
        calls += 1;
        if calls < 20 {
            ControlFlow::Continue(())
        } else {
            ControlFlow::Break(())
        }
    };
    let request = LineUps::enumerate(
        &fermions(22, 11),
        &decreasing(12),
        Spinless,
        DEFAULT_LIMIT,
        &mut monitor,
    );
    assert_eq!(request.unwrap_err(), Error::Interrupted);
}
