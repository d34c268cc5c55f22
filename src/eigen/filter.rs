//! A Chebyshev polynomial of the operator in its place: the lowest levels, spread far apart,
//! converge in few steps, so that few vectors are kept orthogonal to few others.
//!
//! The degree m is odd: T_m maps the filtered interval [a, b] to [-1, 1] and increases outside.
//! So whatever the spectrum, the levels below a, and no others, have images below -1, in the
//! same order. An estimate of b that is too low slows convergence down and falsifies nothing.
//! (Filters of this kind: Zhou and Saad, SIAM J. Matrix Anal. Appl. 29, 954 (2007); recalled.)

use crate::error::Result;
use crate::linear_operator::LinearOperator;
use crate::scalar::Scalar;
use ndarray::{ArrayView1, ArrayView2, ArrayViewMut1, ArrayViewMut2, Axis, Zip};

/// Natural logarithm of twice the image of the highest level wanted: with much more, each step
/// would take more products than the steps saved; with less, more steps.
const STRENGTH: f64 = 2.0;
/// The same for the lowest level: rounding errors grow with the range of the images.
const MOST_STRENGTH: f64 = 8.0;
const DEGREES: std::ops::RangeInclusive<usize> = 3..=25;

/// T_m((A - c) / e) with c and e the centre and half the width of [a, b].
pub(super) struct Filter<T> {
    interval: (f64, f64),
    degree: usize,
    /// Two vectors.
    scratch: Vec<T>,
}

impl<T: Scalar> Filter<T> {
    /// The polynomial that damps the interval [a, b] and lifts the levels from `lowest` to
    /// `highest`, both below a. None if they stand out well without.
    pub fn new(interval: (f64, f64), lowest: f64, highest: f64) -> Option<Self> {
        let mut filter = Filter {
            interval,
            degree: 1,
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

    /// Overwrites the rows of `out` with the images of those of `block`.
    ///
    /// # Errors
    /// What the operator returns.
    pub fn apply(
        &mut self,
        operator: &dyn LinearOperator<T>,
        block: ArrayView2<'_, T>,
        mut out: ArrayViewMut2<'_, T>,
    ) -> Result<()> {
        let n = block.ncols();
        self.scratch.resize(2 * n, T::zero());
        let (before, now) = self.scratch.split_at_mut(n);
        let (lower, upper) = self.interval;
        let recurrence = Recurrence {
            operator,
            centre: 0.5 * (lower + upper),
            half_width: 0.5 * (upper - lower),
            degree: self.degree,
        };
        let rows = block.axis_iter(Axis(0)).zip(out.axis_iter_mut(Axis(0)));
        for (row, out) in rows {
            recurrence.run(row, out, before.into(), now.into())?;
        }
        Ok(())
    }
}

struct Recurrence<'a, T: Scalar> {
    operator: &'a dyn LinearOperator<T>,
    centre: f64,
    half_width: f64,
    degree: usize,
}

impl<T: Scalar> Recurrence<'_, T> {
    /// T_0 = 1, T_1 = x, T_(k+1) = 2 x T_k - T_(k-1), applied to `row`.
    fn run<'b>(
        &self,
        row: ArrayView1<'_, T>,
        mut image: ArrayViewMut1<'_, T>,
        mut before: ArrayViewMut1<'b, T>,
        mut now: ArrayViewMut1<'b, T>,
    ) -> Result<()> {
        let factor = 1.0 / self.half_width;
        let (once, twice) = ((factor, -factor * self.centre), 2.0 * factor);
        let twice = (twice, -twice * self.centre);
        self.multiply(row, image.view_mut())?;
        Zip::from(&mut now)
            .and(&image)
            .and(&row)
            .par_for_each(|now, &image, &row| *now = image * once.0 + row * once.1);
        for k in 2..=self.degree {
            self.multiply(now.view(), image.view_mut())?;
            let step = |before: T, image: T, now: T| image * twice.0 + now * twice.1 - before;
            if k == self.degree {
                let before = if k == 2 { row } else { before.view() };
                Zip::from(&mut image)
                    .and(&before)
                    .and(&now)
                    .par_for_each(|image, &before, &now| *image = step(before, *image, now));
            } else if k == 2 {
                Zip::from(&mut before)
                    .and(&row)
                    .and(&image)
                    .and(&now)
                    .par_for_each(|new, &row, &image, &now| *new = step(row, image, now));
            } else {
                Zip::from(&mut before)
                    .and(&image)
                    .and(&now)
                    .par_for_each(|before, &image, &now| *before = step(*before, image, now));
            }
            std::mem::swap(&mut before, &mut now);
        }
        Ok(())
    }

    fn multiply(&self, row: ArrayView1<'_, T>, image: ArrayViewMut1<'_, T>) -> Result<()> {
        let (row, image) = (row.insert_axis(Axis(0)), image.insert_axis(Axis(0)));
        self.operator.apply(row, image)
    }
}
