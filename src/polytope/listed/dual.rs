//! The nearest point for the inequalities met so far: Newton steps on the dual.
//!
//! For multipliers lambda of the active rows the nearest increasing vector to v - sum lambda g is
//! an isotonic regression, and the dual function is concave and piecewise quadratic: on the blocks
//! that were pooled its Hessian is the Gram matrix of the block averages of the active normals.
//! Rows whose multiplier reaches zero leave (as in the dual method of Goldfarb and Idnani).

use super::rows::Rows;
use std::ops::Range;

/// Newton steps for one point before the method gives up.
const STEP_LIMIT: usize = 60;
/// Rows active at once before the method gives up.
const MOST_ACTIVE: usize = 32;
/// Squared remainder of a unit normal below which it depends on those before it.
const DEPENDENT: f64 = 1e-11;

/// One projection under way.
#[derive(Debug, Default)]
pub(super) struct Point {
    /// Depths that are projected.
    target: Vec<f64>,
    /// The nearest depths for the active rows.
    pub nearest: Vec<f64>,
    /// The target less the active normals times their multipliers.
    shifted: Vec<f64>,
    /// Where an active normal has a step that `shifted` does not rise over.
    falls: Vec<usize>,
    /// Blocks of several equal depths, in order.
    blocks: Vec<Block>,
    /// Active rows and their multipliers.
    active: Vec<usize>,
    multipliers: Vec<f64>,
    /// Scalar products of the active normals, row by row,
    products: Vec<[f64; MOST_ACTIVE]>,
    /// and of their averages over blocks; then its Cholesky factor.
    gram: Vec<f64>,
    /// Violations of the active rows.
    violations: Vec<f64>,
    step: Vec<f64>,
    steps_taken: usize,
    /// What counts as rounding.
    pub rounding: f64,
}

/// Coordinates that were pooled.
#[derive(Debug, Clone, Copy)]
struct Block {
    start: usize,
    end: usize,
    sum: f64,
}

impl Block {
    #[inline(always)]
    fn size(&self) -> f64 {
        (self.end - self.start) as f64
    }

    #[inline(always)]
    fn mean(&self) -> f64 {
        self.sum / self.size()
    }
}

/// How a row was taken in.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Settled {
    /// The active rows hold with equality.
    Yes,
    /// Too many steps or no way on: another method must do it.
    No,
}

#[inline(always)]
fn dot(a: &[f64], b: &[f64]) -> f64 {
    let mut sums = [0.0; 8];
    let (left, right) = (a.chunks_exact(8), b.chunks_exact(8));
    let rest = left.remainder().iter().zip(right.remainder());
    let rest: f64 = rest.map(|(x, y)| x * y).sum();
    for (x, y) in left.zip(right) {
        for k in 0..8 {
            sums[k] = x[k].mul_add(y[k], sums[k]);
        }
    }
    let [a, b, c, d, e, f, g, h] = sums;
    ((a + e) + (b + f)) + ((c + g) + (d + h)) + rest
}

impl Point {
    /// Starts with increasing depths and no active row.
    #[inline(always)]
    pub fn start(&mut self, depths: &[f64], rounding: f64) {
        self.target.clear();
        self.target.extend_from_slice(depths);
        self.nearest.clear();
        self.nearest.extend_from_slice(depths);
        self.shifted.resize(depths.len(), 0.0);
        self.active.clear();
        self.multipliers.clear();
        self.steps_taken = 0;
        self.rounding = rounding;
        self.products.clear();
        self.blocks.clear();
    }

    /// Whether a row is active.
    #[inline(always)]
    pub fn holds(&self, row: usize) -> bool {
        self.active.contains(&row)
    }

    /// Makes a further row active and finds the nearest point for the active rows.
    #[inline(always)]
    pub fn take_in(&mut self, rows: &Rows, row: usize) -> Settled {
        if self.active.len() == MOST_ACTIVE {
            return Settled::No;
        }
        self.active.push(row);
        self.multipliers.push(0.0);
        let mut products = [0.0; MOST_ACTIVE];
        for (product, &other) in products.iter_mut().zip(&self.active) {
            *product = dot(rows.normal(other), rows.normal(row));
        }
        self.products.push(products);
        let mut narrowed = f64::INFINITY;
        loop {
            let largest = self.measure(rows);
            if largest <= self.rounding {
                return Settled::Yes;
            }
            // rounding: Newton's steps no longer help
            if largest <= 16.0 * self.rounding && largest >= narrowed {
                return Settled::Yes;
            }
            narrowed = largest;
            self.steps_taken += 1;
            if self.steps_taken > STEP_LIMIT || !self.advance(rows) {
                return Settled::No;
            }
        }
    }

    /// Violations of the active rows; returns the largest magnitude.
    #[inline(always)]
    fn measure(&mut self, rows: &Rows) -> f64 {
        self.violations.clear();
        let mut largest = 0.0f64;
        for &row in &self.active {
            let violation = dot(rows.normal(row), &self.nearest) - rows.room(row);
            self.violations.push(violation);
            largest = largest.max(violation.abs());
        }
        largest
    }

    /// One Newton step, cut where a multiplier reaches zero.
    #[inline(always)]
    fn advance(&mut self, rows: &Rows) -> bool {
        self.assemble(rows);
        let regular = self.solve();
        let mut reach = if regular { 1.0 } else { f64::INFINITY };
        let mut blocker = None;
        for (index, (multiplier, step)) in self.multipliers.iter().zip(&self.step).enumerate() {
            if *step < 0.0 && multiplier / -step < reach {
                reach = multiplier / -step;
                blocker = Some(index);
            }
        }
        if reach == f64::INFINITY {
            return false;
        }
        for (multiplier, step) in self.multipliers.iter_mut().zip(&self.step) {
            *multiplier += reach * step;
        }
        if let Some(index) = blocker {
            self.drop(index);
        }
        self.pool(rows);
        true
    }

    fn drop(&mut self, index: usize) {
        self.active.remove(index);
        self.multipliers.remove(index);
        self.products.remove(index);
        for row in &mut self.products[index..] {
            row.copy_within(index + 1.., index);
        }
    }

    /// The nearest increasing vector for the present multipliers: pool adjacent violators, which
    /// begin where an active normal has a step.
    #[inline(always)]
    fn pool(&mut self, rows: &Rows) {
        let mut pairs = self.active.iter().zip(&self.multipliers);
        let (row, multiplier) = pairs.next().map_or((0, 0.0), |(&r, &m)| (r, m));
        let targets = self.target.iter().zip(rows.normal(row));
        for (v, (t, g)) in self.shifted.iter_mut().zip(targets) {
            *v = g.mul_add(-multiplier, *t);
        }
        for (&row, &multiplier) in pairs {
            for (v, g) in self.shifted.iter_mut().zip(rows.normal(row)) {
                *v = g.mul_add(-multiplier, *v);
            }
        }
        for (x, v) in self.nearest.iter_mut().zip(&self.shifted) {
            *x = *v;
        }
        self.falls.clear();
        for &row in &self.active {
            let positions = rows.steps(row).iter().map(|step| step.0 as usize);
            let falls = positions.filter(|&k| self.shifted[k] > self.shifted[k + 1]);
            self.falls.extend(falls);
        }
        if self.active.len() > 1 {
            self.falls.sort_unstable();
        }
        self.blocks.clear();
        for index in 0..self.falls.len() {
            let start = self.falls[index];
            if self.blocks.last().is_none_or(|last| last.end <= start) {
                let component = start / rows.modes * rows.modes;
                self.grow(start, component..component + rows.modes);
            }
        }
        for block in &self.blocks {
            let mean = block.mean();
            for x in &mut self.nearest[block.start..block.end] {
                *x = mean;
            }
        }
    }

    /// Pools what has to be equal to the coordinates at `start` and after it.
    #[inline(always)]
    fn grow(&mut self, start: usize, component: Range<usize>) {
        let v = &self.shifted;
        let mut block = Block {
            start,
            end: start + 2,
            sum: v[start] + v[start + 1],
        };
        loop {
            let before = block.end - block.start;
            if block.end < component.end && v[block.end] * block.size() < block.sum {
                block.sum += v[block.end];
                block.end += 1;
            }
            let touching = |last: &&Block| last.end == block.start && block.start > component.start;
            if let Some(last) = self.blocks.last().filter(touching) {
                if last.sum * block.size() > block.sum * last.size() {
                    block.sum += last.sum;
                    block.start = last.start;
                    self.blocks.pop();
                }
            } else if block.start > component.start && v[block.start - 1] * block.size() > block.sum
            {
                block.start -= 1;
                block.sum += v[block.start];
            }
            if block.end - block.start == before {
                break;
            }
        }
        self.blocks.push(block);
    }

    /// Gram matrix of the active normals on the present blocks.
    #[inline(always)]
    fn assemble(&mut self, rows: &Rows) {
        let count = self.active.len();
        self.gram.clear();
        self.gram.resize(count * count, 0.0);
        for (i, products) in self.products.iter().enumerate() {
            self.gram[i * count..i * count + i + 1].copy_from_slice(&products[..=i]);
        }
        for block in &self.blocks {
            let span = block.start..block.end;
            for (i, &a) in self.active.iter().enumerate() {
                let (g, sums) = (&rows.normal(a)[span.clone()], rows.sums(a));
                let mean = (sums[block.end] - sums[block.start]) / block.size();
                for (j, &b) in self.active[..=i].iter().enumerate() {
                    // the part within the block does not count
                    let other = &rows.normal(b)[span.clone()];
                    let inner = g.iter().zip(other).map(|(x, y)| (x - mean) * y);
                    self.gram[i * count + j] -= inner.sum::<f64>();
                }
            }
        }
    }

    /// The step to where all violations vanish, by Cholesky's factorisation. If a row depends on
    /// those before it, a direction that does not move the point, and `false`.
    #[inline(always)]
    fn solve(&mut self) -> bool {
        let count = self.active.len();
        let gram = &mut self.gram;
        self.step.clear();
        self.step.extend_from_slice(&self.violations);
        for i in 0..count {
            let scale = gram[i * count + i];
            for j in 0..=i {
                let mut sum = gram[i * count + j];
                for k in 0..j {
                    sum -= gram[i * count + k] * gram[j * count + k];
                }
                if j < i {
                    gram[i * count + j] = sum * gram[j * count + j];
                } else if sum <= DEPENDENT * scale.max(1e-4) {
                    self.slide(i);
                    return false;
                } else {
                    // the reciprocal is what is needed
                    gram[i * count + i] = sum.sqrt().recip();
                }
            }
        }
        for i in 0..count {
            let mut sum = self.step[i];
            for k in 0..i {
                sum -= gram[i * count + k] * self.step[k];
            }
            self.step[i] = sum * gram[i * count + i];
        }
        for i in (0..count).rev() {
            let mut sum = self.step[i];
            for k in i + 1..count {
                sum -= gram[k * count + i] * self.step[k];
            }
            self.step[i] = sum * gram[i * count + i];
        }
        true
    }

    /// The direction in which row `last` replaces the rows before it that it depends on.
    fn slide(&mut self, last: usize) {
        let count = self.active.len();
        self.step.fill(0.0);
        self.step[last] = 1.0;
        for i in (0..last).rev() {
            let mut sum = -self.gram[last * count + i];
            for k in i + 1..last {
                sum -= self.gram[k * count + i] * self.step[k];
            }
            self.step[i] = sum * self.gram[i * count + i];
        }
        let ascent: f64 = self
            .step
            .iter()
            .zip(&self.violations)
            .map(|(s, v)| s * v)
            .sum();
        if ascent < 0.0 {
            self.step.iter_mut().for_each(|s| *s = -*s);
        }
    }

    /// `<h, x>` - f_w(h) with h the way from the target to the nearest depths, at most; `excess`
    /// is by how much rows may be violated.
    pub fn gap(&self, excess: f64) -> f64 {
        let pairs = self.multipliers.iter().zip(&self.violations);
        pairs.map(|(l, v)| l * (v.abs() + excess)).sum()
    }
}
