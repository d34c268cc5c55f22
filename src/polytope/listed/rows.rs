//! The list of inequalities, prepared for many points.
//!
//! Points are written as *depths* v = N/d - n of decreasing occupations n: increasing, of zero
//! sum in each component. Normals are brought to zero sum and unit length, so that an inequality
//! reads `<g, v>` <= room with an increasing g, and its violation is a distance.

use crate::polytope::exact::Inequality;
use std::ops::Range;

/// Points looked at side by side when all inequalities are gone through.
pub(super) const LANES: usize = 8;

/// Lists that are not worth dividing.
const SHORT: usize = 50;
/// Most steps of rows that are tried before the others: they are met most often.
const FEW_STEPS: usize = 2;
/// Room at the centre below which a component has no freedom.
const RIGID: f64 = 1e-12;

/// A complete list of inequalities.
#[derive(Debug)]
pub(super) struct Rows {
    pub components: usize,
    pub modes: usize,
    /// Whether the occupations of a component are fixed; such components are left out.
    pub rigid: Vec<bool>,
    /// Distance of the centre from each facet.
    room: Vec<f64>,
    /// Unit normals, one after the other.
    normals: Vec<f64>,
    /// Partial sums of each normal, beginning with zero: the sum over a block is a difference.
    sums: Vec<f64>,
    /// Where the steps of each normal begin.
    starts: Vec<usize>,
    /// Position and height of each step.
    steps: Vec<(u32, f64)>,
    /// Rows with few steps, which come first.
    simple: usize,
}

/// The largest violation of each lane and the row it belongs to.
pub(super) type Worst = ([f64; LANES], [u64; LANES]);

impl Rows {
    /// Prepares a list for components with these particle numbers.
    pub fn new(list: &[Inequality], particles: &[f64], modes: usize) -> Self {
        let components = particles.len();
        let mut rows = Rows {
            components,
            modes,
            rigid: vec![false; components],
            room: Vec::new(),
            normals: Vec::new(),
            sums: Vec::new(),
            starts: vec![0],
            steps: Vec::new(),
            simple: 0,
        };
        // so that loops of equal length follow each other, too
        let mut sorted: Vec<&Inequality> = list.iter().collect();
        sorted.sort_by_key(|inequality| step_count(inequality));
        for inequality in sorted {
            rows.add(inequality, particles);
            if list.len() <= SHORT || step_count(inequality) <= FEW_STEPS {
                rows.simple = rows.room.len();
            }
        }
        rows
    }

    fn add(&mut self, inequality: &Inequality, particles: &[f64]) {
        let mut normal = Vec::with_capacity(self.size());
        let mut room = inequality.bound;
        for (row, particles) in inequality.coefficients.rows().into_iter().zip(particles) {
            let mean = row.sum() as f64 / self.modes as f64;
            room -= mean * particles;
            normal.extend(row.iter().map(|&c| mean - c as f64));
        }
        let length = normal.iter().map(|g| g * g).sum::<f64>().sqrt();
        if room <= RIGID * length {
            let parts = normal.chunks(self.modes);
            for (rigid, part) in self.rigid.iter_mut().zip(parts) {
                *rigid |= part.iter().any(|&g| g != 0.0);
            }
            return;
        }
        normal.iter_mut().for_each(|g| *g /= length);
        let mut sum = 0.0;
        self.sums.push(sum);
        for (k, &g) in normal.iter().enumerate() {
            sum += g;
            self.sums.push(sum);
            if (k + 1) % self.modes != 0 && normal[k + 1] > g {
                self.steps.push((k as u32, normal[k + 1] - g));
            }
        }
        self.room.push(room / length);
        self.normals.extend(normal);
        self.starts.push(self.steps.len());
    }

    /// Number of occupations of a point.
    pub fn size(&self) -> usize {
        self.components * self.modes
    }

    /// Distance of the centre from a facet.
    pub fn room(&self, row: usize) -> f64 {
        self.room[row]
    }

    /// The unit normal of a facet.
    #[inline(always)]
    pub fn normal(&self, row: usize) -> &[f64] {
        &self.normals[row * self.size()..][..self.size()]
    }

    /// Its partial sums.
    #[inline(always)]
    pub fn sums(&self, row: usize) -> &[f64] {
        &self.sums[row * (self.size() + 1)..][..self.size() + 1]
    }

    /// Position and height of its steps.
    #[inline(always)]
    pub fn steps(&self, row: usize) -> &[(u32, f64)] {
        &self.steps[self.starts[row]..self.starts[row + 1]]
    }

    /// The rows to try first,
    pub fn simple(&self) -> Range<usize> {
        0..self.simple
    }

    /// and the others.
    pub fn others(&self) -> Range<usize> {
        self.simple..self.room.len()
    }

    /// Goes through some rows for a few points, one in each lane of `depths`; `heights` is used
    /// for the partial sums of -v.
    #[inline(always)]
    pub fn most_violated(
        &self,
        some: Range<usize>,
        depths: &[[f64; LANES]],
        heights: &mut [[f64; LANES]],
    ) -> Worst {
        let mut sums = [0.0; LANES];
        for (height, depth) in heights.iter_mut().zip(depths) {
            for ((height, sum), v) in height.iter_mut().zip(&mut sums).zip(depth) {
                *sum -= v;
                *height = *sum;
            }
        }
        let mut worst = ([f64::NEG_INFINITY; LANES], [0; LANES]);
        let bounds = self.starts[some.start..=some.end].windows(2);
        for (row, (room, bounds)) in some.clone().zip(self.room[some].iter().zip(bounds)) {
            let mut violation = [-room; LANES];
            for &(position, step) in &self.steps[bounds[0]..bounds[1]] {
                let height = &heights[position as usize];
                for (violation, height) in violation.iter_mut().zip(height) {
                    *violation = step.mul_add(*height, *violation);
                }
            }
            let lanes = worst.0.iter_mut().zip(&mut worst.1).zip(&violation);
            for ((largest, which), &violation) in lanes {
                let more = violation > *largest;
                *largest = if more { violation } else { *largest };
                *which = if more { row as u64 } else { *which };
            }
        }
        worst
    }
}

fn step_count(inequality: &Inequality) -> usize {
    let rows = inequality.coefficients.rows().into_iter();
    rows.map(|row| {
        row.windows(2)
            .into_iter()
            .filter(|pair| pair[0] != pair[1])
            .count()
    })
    .sum()
}
