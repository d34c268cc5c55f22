//! The exclusion inequalities for up to four weights, in numbers and in words.
//!
//! Their normals depend only on the number of weights (Ann. Henri Poincare 24, 2241 (2023) for
//! fermions, arXiv:2204.12715 for bosons); the bound of a normal c is
//! sum_j w_j x (the j-th largest `<c, n_I>` over the configurations I). With equal weights some
//! of them become redundant, none becomes wrong, and the list stays complete.

use super::oracle::{Domain, Oracle};
use crate::error::{Error, Result};
use crate::sector::Sector;
use ndarray::{Array2, ArrayView2};
use std::fmt::{self, Display, Write};

/// `<c, n>` <= bound for decreasing occupations n (per component).
#[derive(Debug, Clone, PartialEq)]
pub struct Inequality {
    /// Integer coefficients c, `(components, modes)`, of the decreasing occupations.
    pub coefficients: Array2<i64>,
    /// The bound is constant + sum_j weight_coefficients\[j\] w_{j+1}.
    pub constant: i64,
    /// Coefficients of the weights in the bound.
    pub weight_coefficients: Vec<i64>,
    /// The bound as a number.
    pub bound: f64,
    /// Smallest number of weights for which the inequality belongs to the list.
    pub first_weight_count: usize,
    /// Whether it only says that occupations of fermions are not negative.
    pub is_positivity: bool,
    /// The constant in terms of the particle numbers.
    constant_in_words: String,
}

impl Inequality {
    /// Bound minus left-hand side; the occupations `(components, modes)` may come in any order.
    ///
    /// # Errors
    /// [`Error::Argument`] for a wrong shape.
    pub fn slack(&self, occupations: ArrayView2<'_, f64>) -> Result<f64> {
        if occupations.dim() != self.coefficients.dim() {
            return Err(Error::argument(
                "occupations",
                format!("shape {:?}", occupations.shape()),
                format!("shape {:?}", self.coefficients.shape()),
            ));
        }
        let mut slack = self.bound;
        for (row, coefficients) in occupations.rows().into_iter().zip(self.coefficients.rows()) {
            let mut sorted = row.to_vec();
            sorted.sort_by(|a, b| b.total_cmp(a));
            slack -= sorted
                .iter()
                .zip(coefficients)
                .map(|(n, &c)| n * c as f64)
                .sum::<f64>();
        }
        Ok(slack)
    }

    /// Length of the normal without its part along the particle numbers.
    pub fn normal_length(&self) -> f64 {
        let modes = self.coefficients.ncols() as f64;
        let squared = self.coefficients.rows().into_iter().map(|row| {
            let sum = row.sum() as f64;
            row.iter().map(|&c| (c * c) as f64).sum::<f64>() - sum * sum / modes
        });
        squared.sum::<f64>().max(0.0).sqrt()
    }
}

impl Display for Inequality {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        if self.coefficients.iter().all(|&c| c <= 0) {
            let left = left_hand_side(&self.coefficients.mapv(|c| -c));
            return write!(f, "{left} >= {}", Short(0.0 - self.bound));
        }
        write!(
            f,
            "{} <= {}",
            left_hand_side(&self.coefficients),
            Short(self.bound)
        )?;
        let weights = weight_terms(&self.weight_coefficients);
        if weights.is_empty() {
            return Ok(());
        }
        match self.constant_in_words.as_str() {
            "0" => write!(f, " (= {})", &weights[3..]),
            words => write!(f, " (= {words}{weights})"),
        }
    }
}

/// A number with at most ten digits after the point, trailing zeros dropped.
struct Short(f64);

impl Display for Short {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let text = format!("{:.10}", self.0);
        f.write_str(text.trim_end_matches('0').trim_end_matches('.'))
    }
}

fn weight_terms(coefficients: &[i64]) -> String {
    let mut text = String::new();
    for (j, &coefficient) in coefficients.iter().enumerate() {
        let _ = match coefficient {
            0 => Ok(()),
            1 => write!(text, " + w{}", j + 1),
            c => write!(text, " + {c} w{}", j + 1),
        };
    }
    text
}

/// Runs of equal coefficients as in "2(n1 + n2) + n3 + n4".
fn left_hand_side(coefficients: &Array2<i64>) -> String {
    let names: &[&str] = if coefficients.nrows() == 2 {
        &["(up)", "(down)"]
    } else {
        &[""]
    };
    let mut parts = Vec::new();
    for (row, name) in coefficients.rows().into_iter().zip(names) {
        let row = row.to_vec();
        let mut first = 1;
        for run in row.chunk_by(|a, b| a == b) {
            let last = first + run.len() - 1;
            let sum = match run.len() {
                1 => format!("n{first}{name}"),
                2..=4 => {
                    let terms: Vec<_> = (first..=last).map(|i| format!("n{i}{name}")).collect();
                    terms.join(" + ")
                }
                _ => format!("n{first}{name} + ... + n{last}{name}"),
            };
            match run[0] {
                0 => {}
                1 => parts.push(sum),
                c if run.len() == 1 => parts.push(format!("{c} {sum}")),
                c => parts.push(format!("{c}({sum})")),
            }
            first = last + 1;
        }
    }
    parts.join(" + ")
}

/// A normal given by the runs of its coefficients, per component, and the constant of its bound:
/// multiples of the particle numbers plus an offset.
struct Family {
    first_weight_count: usize,
    runs: Vec<Vec<(usize, i64)>>,
    multiples: Vec<i64>,
    offset: i64,
}

impl Family {
    fn coefficients(&self, modes: usize) -> Array2<i64> {
        let mut coefficients = Array2::zeros((self.runs.len(), modes));
        for (mut row, runs) in coefficients.rows_mut().into_iter().zip(&self.runs) {
            let values = runs
                .iter()
                .flat_map(|&(count, c)| std::iter::repeat_n(c, count));
            for (entry, value) in row.iter_mut().zip(values) {
                *entry = value;
            }
        }
        coefficients
    }
}

/// All inequalities that hold for the sector's number of weights.
pub(super) fn inequalities(oracle: &Oracle) -> Result<Vec<Inequality>> {
    check_range(oracle)?;
    let modes = oracle.sector.modes();
    let count = oracle.weights.count();
    let families = match oracle.sector {
        Sector::Fermions { particles, .. } => fermion_families(modes, particles, count),
        Sector::Bosons { .. } => boson_families(modes, count),
        Sector::SpinHalf { up, down, .. } => spin_families(modes, [up, down], count),
    };
    let mut list: Vec<Inequality> = Vec::with_capacity(families.len());
    for family in families.iter().filter(|f| f.first_weight_count <= count) {
        let inequality = from_family(oracle, family)?;
        if list
            .iter()
            .all(|known| known.coefficients != inequality.coefficients)
        {
            list.push(inequality);
        }
    }
    Ok(list)
}

fn from_family(oracle: &Oracle, family: &Family) -> Result<Inequality> {
    let coefficients = family.coefficients(oracle.sector.modes());
    let potential = coefficients.mapv(|c| -(c as f64));
    let count = oracle.weights.count();
    let lowest = oracle
        .sector
        .lowest_configurations(potential.view(), count)?;
    // integers: energies of integer potentials
    let values: Vec<i64> = lowest
        .energies()
        .iter()
        .map(|e| -e.round() as i64)
        .collect();
    let constant = values[count - 1];
    let weight_coefficients: Vec<i64> = values.iter().map(|v| v - constant).collect();
    let weights = oracle.weights.as_slice();
    let above: f64 = weight_coefficients
        .iter()
        .zip(weights)
        .map(|(&k, w)| k as f64 * w)
        .sum();
    Ok(Inequality {
        is_positivity: oracle.sector.is_fermionic() && coefficients.iter().all(|&c| c <= 0),
        coefficients,
        constant,
        weight_coefficients,
        bound: constant as f64 + above,
        first_weight_count: family.first_weight_count,
        constant_in_words: constant_in_words(&oracle.sector, family, constant),
    })
}

/// "2N - 2" where the family's rule gives the constant, otherwise the number.
fn constant_in_words(sector: &Sector, family: &Family, constant: i64) -> String {
    let names: &[&str] = match sector {
        Sector::SpinHalf { .. } => &["N_up", "N_down"],
        _ => &["N"],
    };
    let particles = sector.particles_by_spin();
    let multiples = &family.multiples;
    let value: i64 = multiples
        .iter()
        .zip(&particles)
        .map(|(m, &n)| m * n as i64)
        .sum();
    if multiples.iter().all(|&m| m == 0) || value + family.offset != constant {
        return constant.to_string();
    }
    let terms = multiples.iter().zip(names).filter(|(m, _)| **m != 0);
    let terms: Vec<String> = terms
        .map(|(&m, name)| {
            if m == 1 {
                (*name).to_string()
            } else {
                format!("{m}{name}")
            }
        })
        .collect();
    let sum = terms.join(" + ");
    match family.offset {
        0 => sum,
        offset if offset < 0 => format!("{sum} - {}", -offset),
        offset => format!("{sum} + {offset}"),
    }
}

fn fermion_families(modes: usize, particles: usize, count: usize) -> Vec<Family> {
    let family = |first_weight_count, runs: Vec<(usize, i64)>, multiple, offset| Family {
        first_weight_count,
        runs: vec![runs],
        multiples: vec![multiple],
        offset,
    };
    let n = particles;
    let mut families = vec![
        family(1, vec![(1, 1)], 0, 1),
        family(1, vec![(modes - 1, 0), (1, -1)], 0, 0),
        family(2, vec![(n, 1)], 1, -1),
    ];
    // the stable range holds the particles that the sums need
    if count >= 3 {
        families.push(family(3, vec![(n - 1, 2), (2, 1)], 2, -2));
    }
    if count >= 4 {
        families.push(family(4, vec![(n - 1, 2), (3, 1)], 2, -2));
        families.push(family(4, vec![(n - 2, 2), (3, 1)], 2, -3));
    }
    families
}

fn boson_families(modes: usize, count: usize) -> Vec<Family> {
    let family = |first_weight_count, runs: Vec<(usize, i64)>, multiple, offset| Family {
        first_weight_count,
        runs: vec![runs],
        multiples: vec![multiple],
        offset,
    };
    let mut families = vec![
        family(1, vec![(modes - 1, 0), (1, -1)], 0, 0),
        family(2, vec![(1, 1)], 1, -1),
        family(3, vec![(1, 2), (1, 1)], 2, -2),
        family(4, vec![(1, 2), (2, 1)], 2, -2),
        family(4, vec![(1, 3), (1, 2)], 3, -3),
    ];
    families.retain(|f| f.first_weight_count <= count);
    families
}

fn spin_families(modes: usize, particles: [usize; 2], count: usize) -> Vec<Family> {
    let mut families = Vec::new();
    for (first_weight_count, runs) in [(1, vec![(1, 1)]), (1, vec![(modes - 1, 0), (1, -1)])] {
        for spin in 0..2 {
            let mut both = vec![Vec::new(), Vec::new()];
            both[spin] = runs.clone();
            families.push(Family {
                first_weight_count,
                offset: runs[0].1,
                runs: both,
                multiples: vec![0, 0],
            });
        }
    }
    families.push(Family {
        first_weight_count: 2,
        runs: particles.iter().map(|&n| vec![(n, 1)]).collect(),
        multiples: vec![1, 1],
        offset: -1,
    });
    if count >= 3 {
        for other in 0..2 {
            let mut runs: Vec<_> = particles.iter().map(|&n| vec![(n, 1)]).collect();
            runs[other] = vec![(particles[other] - 1, 2), (2, 1)];
            let mut multiples = vec![1, 1];
            multiples[other] = 2;
            families.push(Family {
                first_weight_count: 3,
                runs,
                multiples,
                offset: -2,
            });
        }
    }
    families
}

/// Largest number of weights for which the list is written down.
fn largest_count(domain: Domain) -> usize {
    match domain {
        Domain::Spinless => 4,
        Domain::SpinResolved => 3,
        Domain::SpinSummed => 0,
    }
}

fn check_range(oracle: &Oracle) -> Result<()> {
    let count = oracle.weights.count();
    let largest = largest_count(oracle.domain);
    if count > largest {
        let expected = match oracle.domain {
            Domain::SpinSummed => {
                "another domain: spin-summed inequalities are not listed; projection, distance \
                 and stretch need no list"
                    .to_string()
            }
            _ => format!(
                "at most {largest} in this domain; projection, distance and stretch need no list"
            ),
        };
        return Err(Error::argument(
            "weights",
            format!("{count} weights"),
            expected,
        ));
    }
    let (stable, expected) = stable_range(&oracle.sector, count);
    if stable {
        return Ok(());
    }
    Err(Error::argument(
        "sector",
        format!("{:?} with {count} weights", oracle.sector),
        format!(
            "{expected} (the stable range of the listed inequalities); projection, distance and stretch need no list"
        ),
    ))
}

/// Whether the listed inequalities are complete, and the condition in words.
fn stable_range(sector: &Sector, count: usize) -> (bool, String) {
    let least = count - 1;
    match *sector {
        Sector::Fermions { modes, particles } => (
            particles >= least && modes - particles >= least,
            format!("at least {least} particles and {least} empty modes"),
        ),
        Sector::Bosons { modes, particles } => (
            particles >= least && modes >= count,
            format!("at least {least} particles and {count} modes"),
        ),
        Sector::SpinHalf { orbitals, up, down } => {
            // found complete for up to three weights in all sectors of up to six orbitals
            let least = least.min(1);
            (
                [up, down]
                    .iter()
                    .all(|&n| n >= least && orbitals - n >= least),
                format!("at least {least} particle and {least} empty orbital of each spin"),
            )
        }
    }
}
