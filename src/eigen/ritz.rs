//! Ritz pairs of a Krylov basis.

use crate::scalar::Scalar;
use ndarray::Array2;

/// Ritz pairs of the basis as it stands: levels, coefficients in columns, residual norms.
#[derive(Clone)]
pub(super) struct Ritz<T> {
    /// Eigenvalues of the projected matrix.
    pub images: Vec<f64>,
    /// The levels that belong to them; through a filter, only those below its interval.
    pub values: Vec<f64>,
    pub coefficients: Array2<T>,
    pub residuals: Vec<f64>,
}

impl<T: Scalar> Ritz<T> {
    pub fn empty() -> Self {
        Ritz {
            images: Vec::new(),
            values: Vec::new(),
            coefficients: Array2::zeros((0, 0)),
            residuals: Vec::new(),
        }
    }

    /// The normalised sum of the `keep` lowest Ritz vectors as the only row: its energy, and a
    /// bound on its residual norm. Nothing if not all of their levels are known.
    pub fn mean(&self, keep: usize) -> Self {
        let (Some(values), Some(residuals)) = (self.values.get(..keep), self.residuals.get(..keep))
        else {
            return Ritz::empty();
        };
        let energy = values.iter().sum::<f64>() / keep as f64;
        let variance = values.iter().map(|v| (v - energy).powi(2)).sum::<f64>() / keep as f64;
        let square: f64 = residuals.iter().map(|r| r * r).sum();
        Ritz {
            images: vec![energy],
            values: vec![energy],
            coefficients: Array2::eye(1),
            residuals: vec![variance.sqrt() + square.sqrt()],
        }
    }
}
