//! When to search through a filter, which one, and what it then takes to search for missed
//! levels.

use super::filter::Filter;
use super::search::{Found, Search};
use crate::scalar::Scalar;

/// Steps that must be affordable for a filter to be worth while.
const FEWEST_FILTERED_STEPS: usize = 8;
/// Steps after which Ritz values may say which filter to begin with, beside two for each level.
const STEPS_FOR_A_FILTER: usize = 6;
/// Rows that a filter takes in memory, with one for operators that need it.
const FILTER_ROWS: usize = 2;
/// Least ratio of degrees for which another filter is worth beginning anew.
const RISE: usize = 3;
/// Residual norms of Ritz values that may end an interval, over their distance from the levels
/// wanted. (Residual norms through a filter are bounds, and large ones.)
const SEPARATION: f64 = 10.0;

impl<T: Scalar> Search<'_, '_, T> {
    /// Begins to filter when the Ritz values after some steps say how, filters more strongly when
    /// they have become good enough to say how, and stops when the levels wanted are not below
    /// the filtered interval; whether there was anything to change.
    pub fn change_filter(&mut self, wanted: usize, full: bool) -> bool {
        let in_space = wanted - self.locked.len().min(wanted - 1);
        let degree = self.run.filter().map_or(0, Filter::degree);
        if full && degree > 0 && self.levels().len() <= wanted {
            self.run.change_filter(None, in_space);
            return true;
        }
        let ready = match degree {
            0 => full || self.run.fresh() && self.run.size >= STEPS_FOR_A_FILTER + 2 * wanted,
            _ => self.separated(in_space),
        };
        if !ready {
            return false;
        }
        let better = |filter: &Filter<T>| filter.degree() >= RISE * degree;
        let Some(filter) = self.choose_filter(in_space).filter(better) else {
            return false;
        };
        self.filters -= 1;
        if degree == 0 {
            self.most_rows -= FILTER_ROWS;
        }
        self.run.change_filter(Some(filter), in_space + 1);
        true
    }

    /// Whether the lowest `wanted` Ritz values and the two beyond are known well enough to place
    /// the end of an interval between them, and not so well that beginning anew would cost more
    /// than going on.
    fn separated(&self, wanted: usize) -> bool {
        let (values, residuals) = (&self.run.ritz.values, &self.run.ritz.residuals);
        if !self.run.fresh() || values.len() < wanted + 2 {
            return false;
        }
        let tolerance = self.goal.residual_tolerance(&self.levels(), self.run.scale);
        let halfway = (tolerance * self.run.scale).sqrt();
        let asked_for = self.goal.levels.saturating_sub(self.locked.len());
        let distance = values[wanted + 1] - values[wanted - 1];
        residuals[asked_for.clamp(1, wanted) - 1] > halfway
            && residuals[..=wanted + 1]
                .iter()
                .all(|&r| r < SEPARATION * distance)
    }

    /// The filter that the Ritz values suggest for the lowest `wanted` levels, if it is of use.
    fn choose_filter(&self, wanted: usize) -> Option<Filter<T>> {
        let (values, residuals) = (&self.run.ritz.values, &self.run.ritz.residuals);
        // with the most levels that may be found and locked
        let levels = self.goal.levels + self.goal.most_extra;
        let rows = self.run.rows() + levels + 2 * self.run.residual_width() + FILTER_ROWS;
        let small = 8 * rows > self.operator.dimension();
        if self.filters == 0 || small || rows > self.most_rows {
            return None;
        }
        let (lower, highest) = (*values.get(wanted + 1)?, *values.get(wanted - 1)?);
        let upper = match self.run.filter() {
            Some(filter) => filter.interval().1,
            // the residual norm is not quite sure to reach the end of the spectrum
            None => values.last()? + residuals.last()?,
        };
        let filter = Filter::new((lower, upper), values[0], highest)?;
        let left = self.request.max_products - self.run.products;
        (left / filter.degree() >= FEWEST_FILTERED_STEPS).then_some(filter)
    }

    /// Energies at or below which a search of the complement through the filter must find no
    /// level; none if they do not lie below its interval.
    ///
    /// Known vectors then couple to the complement by their residuals with the filter.
    pub fn bounds_through_filter(&self, found: &Found) -> Option<Vec<f64>> {
        let filter = self.run.filter()?;
        let mut square = 0.0;
        for level in &found.levels {
            let slope = filter.slope(level.energy, filter.image(level.energy)?);
            square += (slope * level.residual).powi(2);
        }
        let margin = 2.0 * f64::sqrt(square);
        let shifted = |(k, bound)| {
            let sign = if k == 0 && found.complete { 1.0 } else { -1.0 };
            filter.energy(filter.image(bound)? + sign * margin)
        };
        let mut bounds: Vec<f64> = self
            .bounds(found)
            .into_iter()
            .enumerate()
            .map_while(shifted)
            .collect();
        let top = *bounds.first()?;
        bounds.dedup_by(|next, _| *next <= top);
        Some(bounds)
    }
}
