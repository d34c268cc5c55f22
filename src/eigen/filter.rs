//! A Chebyshev polynomial of the operator in its place: the lowest levels, spread far apart,
//! converge in few steps, so that few vectors are kept orthogonal to few others.
//!
//! The degree m is odd: T_m maps the filtered interval [a, b] to [-1, 1] and increases outside.
//! So whatever the spectrum, the levels below a, and no others, have images below -1, in the
//! same order. An estimate of b that is too low slows convergence down and falsifies nothing.
//! (Filters of this kind: Zhou and Saad, SIAM J. Matrix Anal. Appl. 29, 954 (2007); recalled.)

use crate::error::{Error, Result};
use crate::linear_operator::{LinearOperator, Recurrence, Subtrahend};
use crate::memory;
use crate::scalar::Scalar;
use ndarray::{ArrayView2, ArrayViewMut2, Axis};
use std::ops::ControlFlow;

/// Natural logarithm of twice the image of the highest level wanted: with much more, each step
/// would take more products than the steps saved; with less, more steps.
const STRENGTH: f64 = 3.0;
/// The same for the lowest level: rounding errors grow with the range of the images.
const MOST_STRENGTH: f64 = 12.0;
const DEGREES: std::ops::RangeInclusive<usize> = 3..=49;

/// T_m((A - c) / e) with c and e the centre and half the width of [a, b].
pub(super) struct Filter<T> {
    interval: (f64, f64),
    degree: usize,
    /// The latest member of even degree.
    even: Vec<T>,
    /// For the operator.
    scratch: Vec<T>,
}

impl<T: Scalar> Filter<T> {
    /// The polynomial that damps the interval [a, b] and lifts the levels from `lowest` to
    /// `highest`, both below a. None if they stand out well without.
    pub fn new(interval: (f64, f64), lowest: f64, highest: f64) -> Option<Self> {
        let mut filter = Filter {
            interval,
            degree: 1,
            even: Vec::new(),
            scratch: Vec::new(),
        };
        let rate = |energy| (-filter.position(energy)).acosh();
        let degree = (STRENGTH / rate(highest)).min(MOST_STRENGTH / rate(lowest));
        let sensible = interval.0 < interval.1 && lowest <= highest && highest < interval.0;
        if !(sensible && degree >= *DEGREES.start() as f64) {
            return None;
        }
        // the next odd number below
        filter.degree = ((degree as usize - 1) / 2 * 2 + 1).min(*DEGREES.end());
        Some(filter)
    }

    /// Products with the operator for one with the filter.
    pub fn degree(&self) -> usize {
        self.degree
    }

    /// What it damps.
    pub fn interval(&self) -> (f64, f64) {
        self.interval
    }

    fn position(&self, energy: f64) -> f64 {
        let (lower, upper) = self.interval;
        (2.0 * energy - lower - upper) / (upper - lower)
    }

    /// The image of a level below the interval.
    pub fn image(&self, energy: f64) -> Option<f64> {
        let position = self.position(energy);
        (position < -1.0).then(|| -(self.degree as f64 * (-position).acosh()).cosh())
    }

    /// The level below the interval with this image.
    pub fn energy(&self, image: f64) -> Option<f64> {
        let (lower, upper) = self.interval;
        let position = -((-image).acosh() / self.degree as f64).cosh();
        (image < -1.0).then_some(0.5 * (lower + upper + position * (upper - lower)))
    }

    /// Least distance of images over that of levels, from a level below the interval to any up
    /// to b: residual norms are that much larger.
    pub fn slope(&self, energy: f64, image: f64) -> f64 {
        (-image - 1.0) / (self.interval.1 - energy)
    }

    /// Overwrites the rows of `out` with the images of those of `block`; `poll` is called with
    /// the number of products after each but the last.
    ///
    /// # Errors
    /// What the operator returns; [`Error::Interrupted`] if `poll` says so.
    pub fn apply(
        &mut self,
        operator: &dyn LinearOperator<T>,
        block: ArrayView2<'_, T>,
        mut out: ArrayViewMut2<'_, T>,
        poll: &mut dyn FnMut(usize) -> ControlFlow<()>,
    ) -> Result<()> {
        let mut products = 0;
        let n = block.ncols();
        if self.even.is_empty() {
            self.even.reserve_exact(n);
            memory::prefer_large_pages(&mut self.even);
            self.even.resize(n, T::zero());
        }
        let mut even = ArrayViewMut2::from_shape((1, n), &mut self.even).expect("one row");
        let (lower, upper) = self.interval;
        let factor = 2.0 / (upper - lower);
        let once = Recurrence {
            factor,
            shift: 0.5 * (lower + upper),
            subtrahend: Subtrahend::Nothing,
        };
        let rows = block.axis_chunks_iter(Axis(0), 1);
        for (row, mut odd) in rows.zip(out.axis_chunks_iter_mut(Axis(0), 1)) {
            // T_0 = 1, T_1 = x, T_(k+1) = 2 x T_k - T_(k-1), odd members in the result
            let mut step = |from: ArrayView2<'_, T>, step, to: ArrayViewMut2<'_, T>| {
                if products > 0 && poll(products).is_break() {
                    return Err(Error::Interrupted);
                }
                products += 1;
                operator.apply_recurrence(from, step, to, &mut self.scratch)
            };
            let mut twice = Recurrence {
                factor: 2.0 * factor,
                subtrahend: Subtrahend::Block(row),
                ..once
            };
            step(row, once, odd.view_mut())?;
            for _ in 0..self.degree / 2 {
                step(odd.view(), twice, even.view_mut())?;
                twice.subtrahend = Subtrahend::Overwritten;
                step(even.view(), twice, odd.view_mut())?;
            }
        }
        Ok(())
    }
}
