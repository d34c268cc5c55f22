//! Ensemble weights w1 >= w2 >= ... >= wr > 0 with sum 1.

use crate::error::{Error, Result};

/// Tolerance of the sum, and below which an increase counts as equality.
const TOLERANCE: f64 = 1e-12;

/// Validated and normalised ensemble weights.
#[derive(Debug, Clone, PartialEq)]
pub struct Weights(Vec<f64>);

impl Weights {
    /// Checks order, sign and sum; drops trailing zeros; normalises the sum to one.
    ///
    /// # Errors
    /// [`Error::Argument`] naming what is wrong.
    pub fn new(values: &[f64]) -> Result<Self> {
        let refuse = |expected: &str| Err(Error::argument("weights", shortened(values), expected));
        if values.iter().any(|w| !w.is_finite()) {
            return refuse("finite numbers");
        }
        if values.iter().any(|&w| w < 0.0) {
            return refuse("non-negative values; an ensemble cannot subtract a state");
        }
        if values.windows(2).any(|pair| pair[1] > pair[0] + TOLERANCE) {
            return refuse("values in decreasing order (the lowest state first); sort them");
        }
        let sum = compensated_sum(values);
        if (sum - 1.0).abs() > TOLERANCE {
            return refuse(&format!(
                "a sum of one to within {TOLERANCE:e} (it is {sum}); divide by the sum"
            ));
        }
        let mut kept: Vec<f64> = Vec::with_capacity(values.len());
        for &value in values.iter().take_while(|&&w| w > 0.0) {
            // an increase by a rounding error is an equality
            let ceiling = kept.last().copied().unwrap_or(f64::INFINITY);
            kept.push(value.min(ceiling));
        }
        let sum = compensated_sum(&kept);
        kept.iter_mut().for_each(|w| *w /= sum);
        Ok(Weights(kept))
    }

    /// The weights, all positive.
    pub fn as_slice(&self) -> &[f64] {
        &self.0
    }

    /// Number of positive weights, r.
    pub fn count(&self) -> usize {
        self.0.len()
    }

    /// The weight of level `index`, zero beyond the last.
    pub fn get(&self, index: usize) -> f64 {
        self.0.get(index).copied().unwrap_or(0.0)
    }
}

/// Sum that keeps what rounding drops (Neumaier's summation).
#[derive(Debug, Clone, Copy, Default)]
pub(crate) struct CompensatedSum {
    sum: f64,
    lost: f64,
}

impl CompensatedSum {
    #[inline]
    pub(crate) fn add(&mut self, value: f64) {
        let next = self.sum + value;
        self.lost += if self.sum.abs() >= value.abs() {
            (self.sum - next) + value
        } else {
            (value - next) + self.sum
        };
        self.sum = next;
    }

    pub(crate) fn value(&self) -> f64 {
        self.sum + self.lost
    }
}

/// Sum without the rounding errors that many equal terms pile up.
pub(crate) fn compensated_sum(values: &[f64]) -> f64 {
    let mut sum = CompensatedSum::default();
    values.iter().for_each(|&value| sum.add(value));
    sum.value()
}

fn shortened(values: &[f64]) -> String {
    if values.len() <= 8 {
        format!("{values:?}")
    } else {
        format!("{} values beginning {:?}", values.len(), &values[..4])
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn trailing_zeros_are_dropped_and_the_sum_is_one() {
        let weights = Weights::new(&[0.5, 0.5, 0.0]).unwrap();
        assert_eq!(weights.as_slice(), &[0.5, 0.5]);
        assert_eq!(weights.get(2), 0.0);
    }

    #[test]
    fn many_equal_weights_sum_to_one() {
        assert!(Weights::new(&[1e-5; 100_000]).is_ok());
    }

    #[test]
    fn increases_by_rounding_become_equalities() {
        let weights = Weights::new(&[0.5 - 1e-15, 0.5]).unwrap();
        assert_eq!(weights.get(0), weights.get(1));
    }

    #[test]
    fn wrong_weights_are_refused() {
        for values in [
            &[0.3, 0.7][..],
            &[0.5, 0.4],
            &[1.1, -0.1],
            &[f64::NAN],
            &[f64::INFINITY],
            &[],
        ] {
            assert!(Weights::new(values).is_err(), "{values:?}");
        }
    }
}
