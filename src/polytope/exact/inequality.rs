//! Inequalities on decreasing occupations, and how they read.

use crate::error::{Error, Result};
use ndarray::{Array2, ArrayView2};
use std::fmt;

/// `<coefficients, n>` <= bound for occupations n sorted decreasingly in each component.
#[derive(Debug, Clone, PartialEq)]
pub struct Inequality {
    /// Integer coefficients `(components, modes)`, without common divisor.
    pub coefficients: Array2<i64>,
    /// The bound is this constant + sum_j `bound_weights[j]` w_j (using sum_j w_j = 1).
    pub bound_constant: i64,
    /// Nonnegative coefficients of w_1, ..., w_r.
    pub bound_weights: Vec<i64>,
    /// The bound as a number.
    pub bound: f64,
    /// Smallest r at which the normal belongs to a facet for strictly decreasing weights.
    pub first_level: usize,
    /// Whether this is n_d >= 0 of one component (counted for bosons only, by custom).
    pub positivity: bool,
    /// Particle numbers and the multiples by which the constant follows them in the stable
    /// range; of one kind of particles, or of spin up and down. Empty if it does not.
    pub(super) particles: Vec<(i64, usize)>,
}

/// How sums and bounds are spelled.
struct Spelling {
    occupation: fn(usize, Option<usize>) -> String,
    weight: fn(usize) -> String,
    particles: [&'static str; 3],
    dots: &'static str,
    at_most: &'static str,
    at_least: &'static str,
}

const PLAIN: Spelling = Spelling {
    occupation: |mode, spin| {
        format!(
            "n{mode}{}",
            ["", "(up)", "(down)"][spin.map_or(0, |s| s + 1)]
        )
    },
    weight: |level| format!("w{level}"),
    particles: ["N", "N_up", "N_down"],
    dots: "...",
    at_most: "<=",
    at_least: ">=",
};

const LATEX: Spelling = Spelling {
    occupation: |mode, spin| {
        let arrow = ["", r"\uparrow", r"\downarrow"][spin.map_or(0, |s| s + 1)];
        format!("n_{{{mode}{arrow}}}")
    },
    weight: |level| format!("w_{{{level}}}"),
    particles: ["N", r"N_{\uparrow}", r"N_{\downarrow}"],
    dots: r"\cdots",
    at_most: r"\leq",
    at_least: r"\geq",
};

impl Inequality {
    /// bound - `<coefficients, n>` for occupations in any order; negative if violated.
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
        let rows = self.coefficients.rows().into_iter().zip(occupations.rows());
        let value: f64 = rows
            .map(|(coefficients, row)| {
                let mut sorted = row.to_vec();
                sorted.sort_by(|a, b| b.total_cmp(a));
                let terms = coefficients.iter().zip(sorted);
                terms.map(|(&c, n)| c as f64 * n).sum::<f64>()
            })
            .sum();
        Ok(self.bound - value)
    }

    /// Length of the normal within fixed particle numbers: slack / length is a distance.
    pub fn normal_length(&self) -> f64 {
        let rows = self.coefficients.rows().into_iter();
        let squares = rows.map(|row| {
            let mean = row.sum() as f64 / row.len() as f64;
            row.iter().map(|&c| (c as f64 - mean).powi(2)).sum::<f64>()
        });
        squares.sum::<f64>().sqrt()
    }

    /// Readable form with the bound as a formula and a number: `n1 + n2 <= N - 1 + w1 = 1.6`.
    pub fn sentence(&self) -> String {
        self.spelled(&PLAIN)
    }

    /// The same for LaTeX's mathematics mode.
    pub fn latex(&self) -> String {
        self.spelled(&LATEX)
    }

    fn spelled(&self, spelling: &Spelling) -> String {
        let spins = self.coefficients.nrows() > 1;
        let sums: Vec<String> = self
            .coefficients
            .rows()
            .into_iter()
            .enumerate()
            .map(|(spin, row)| {
                let name = |mode| (spelling.occupation)(mode, spins.then_some(spin));
                let sign = if self.positivity { -1 } else { 1 };
                sum_of(row.iter().map(|c| sign * c), name, spelling.dots)
            })
            .filter(|sum| !sum.is_empty())
            .collect();
        let left = sums.join(" + ");
        if self.positivity {
            return format!("{left} {} 0", spelling.at_least);
        }
        let relation = spelling.at_most;
        if self.bound_weights.iter().all(|&c| c == 0) {
            return format!("{left} {relation} {}", self.bound_constant);
        }
        let weights = self.bound_weights.iter().copied();
        let weights = sum_of(weights, spelling.weight, spelling.dots);
        let constant = self.constant(spelling);
        let terms: Vec<String> = constant.into_iter().chain([weights]).collect();
        let (terms, bound) = (terms.join(" + "), number(self.bound));
        format!("{left} {relation} {terms} = {bound}")
    }

    /// The constant by the particle numbers where it follows them; nothing if it is zero.
    fn constant(&self, spelling: &Spelling) -> Option<String> {
        let names = &spelling.particles[usize::from(self.particles.len() > 1)..];
        let multiples = self.particles.iter().map(|&(multiple, _)| multiple);
        let name = |which: usize| names[which - 1].to_string();
        let sum = sum_of(multiples, name, spelling.dots);
        let terms = self
            .particles
            .iter()
            .map(|&(multiple, n)| multiple * n as i64);
        match (sum.is_empty(), self.bound_constant - terms.sum::<i64>()) {
            (true, 0) => None,
            (true, rest) => Some(rest.to_string()),
            (false, 0) => Some(sum),
            (false, rest) if rest < 0 => Some(format!("{sum} - {}", -rest)),
            (false, rest) => Some(format!("{sum} + {rest}")),
        }
    }
}

impl fmt::Display for Inequality {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.sentence())
    }
}

/// Ten decimals at most.
fn number(value: f64) -> String {
    let digits = format!("{value:.10}");
    digits
        .trim_end_matches('0')
        .trim_end_matches('.')
        .to_string()
}

/// `2(x1 + ... + x5) + x6`: runs of equal coefficients, numbered from one.
fn sum_of(
    coefficients: impl Iterator<Item = i64>,
    name: impl Fn(usize) -> String,
    dots: &str,
) -> String {
    let mut runs: Vec<(i64, usize, usize)> = Vec::new();
    for (k, c) in coefficients.enumerate() {
        match runs.last_mut() {
            Some(run) if run.0 == c => run.2 = k + 1,
            _ => runs.push((c, k + 1, k + 1)),
        }
    }
    let spelled = runs
        .into_iter()
        .filter(|run| run.0 != 0)
        .map(|(c, from, to)| {
            let inner = if to - from < 4 {
                (from..=to).map(&name).collect::<Vec<_>>().join(" + ")
            } else {
                format!("{} + {dots} + {}", name(from), name(to))
            };
            match (c, from == to) {
                (1, _) => inner,
                (_, true) => format!("{c} {inner}"),
                (_, false) => format!("{c}({inner})"),
            }
        });
    spelled.collect::<Vec<_>>().join(" + ")
}
