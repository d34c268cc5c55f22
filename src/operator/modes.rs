//! Spinless fermions and bosons: H from its terms, row by row.

use super::stored::{RowSink, SparseMatrix};
use super::terms::ModeTerms;
use super::walker::{ModeSpace, Walker};
use crate::error::Result;
use crate::scalar::Scalar;
use ndarray::{Array1, ArrayView2, ArrayViewMut2, Axis};
use rayon::prelude::*;
use std::ops::Range;

/// Rows that one task works on: long enough to forget the cost of finding its start.
const ROWS_PER_TASK: usize = 1024;
/// Rows looked at to estimate how many elements there are.
const SAMPLED_ROWS: usize = 64;

/// H of one kind of particles, never written out.
#[derive(Debug, Clone)]
pub struct ModeOperator<T> {
    space: ModeSpace,
    terms: ModeTerms<T>,
}

impl<T: Scalar> ModeOperator<T> {
    /// From the configurations and the terms.
    pub fn new(space: ModeSpace, terms: ModeTerms<T>) -> Self {
        ModeOperator { space, terms }
    }

    /// Number of configurations.
    pub fn dimension(&self) -> usize {
        self.space.dimension()
    }

    /// Calls `visit` with each configuration of a range of indices.
    fn walk(&self, rows: Range<usize>, mut visit: impl FnMut(usize, &Walker<'_>)) {
        let Ok(mut walker) = self.space.walker(rows.start) else {
            return;
        };
        for row in rows {
            visit(row, &walker);
            walker.advance();
        }
    }

    /// Number of stored elements of the matrix, estimated from a sample of rows.
    pub fn estimated_elements(&self) -> Result<u128> {
        let dimension = self.dimension();
        let step = dimension.div_ceil(SAMPLED_ROWS).max(1);
        let (mut elements, mut sampled) = (0u128, 0u128);
        for row in (0..dimension).step_by(step) {
            let walker = self.space.walker(row)?;
            let mut columns = vec![row];
            self.terms
                .visit_off_diagonal(&walker, |column, _| columns.push(column));
            columns.sort_unstable();
            columns.dedup();
            elements += columns.len() as u128;
            sampled += 1;
        }
        Ok((elements * dimension as u128).div_ceil(sampled.max(1)))
    }

    /// Pushes the rows of a range.
    fn fill_rows(&self, rows: Range<usize>, sink: &mut RowSink<T>) {
        let mut elements = Vec::new();
        self.walk(rows, |row, walker| {
            // the diagonal is there even where it is zero
            elements.push((row as u32, T::from_real(self.terms.diagonal(walker))));
            // a row is the conjugate of the column that the terms give
            self.terms.visit_off_diagonal(walker, |column, value| {
                elements.push((column as u32, value.conj()));
            });
            sink.push_row(&mut elements);
        });
    }

    /// The matrix with all its elements.
    pub fn to_sparse(&self) -> SparseMatrix<T> {
        SparseMatrix::build(self.dimension(), |rows, sink| self.fill_rows(rows, sink))
    }

    /// Diagonal matrix elements.
    pub fn diagonal(&self) -> Array1<f64> {
        let mut diagonal = Array1::zeros(self.dimension());
        diagonal
            .axis_chunks_iter_mut(Axis(0), ROWS_PER_TASK)
            .into_par_iter()
            .enumerate()
            .for_each(|(task, mut part)| {
                let first = task * ROWS_PER_TASK;
                self.walk(first..first + part.len(), |row, walker| {
                    part[row - first] = self.terms.diagonal(walker);
                });
            });
        diagonal
    }

    /// Overwrites row k of `out` with the product with row k of `block`.
    pub fn apply(&self, block: ArrayView2<'_, T>, mut out: ArrayViewMut2<'_, T>) {
        out.axis_chunks_iter_mut(Axis(1), ROWS_PER_TASK)
            .into_par_iter()
            .enumerate()
            .for_each(|(task, mut part)| {
                let first = task * ROWS_PER_TASK;
                let rows = first..first + part.ncols();
                let mut elements = Vec::new();
                self.walk(rows, |row, walker| {
                    elements.clear();
                    elements.push((row, T::from_real(self.terms.diagonal(walker))));
                    self.terms.visit_off_diagonal(walker, |column, value| {
                        elements.push((column, value.conj()));
                    });
                    for (vector, mut result) in block.rows().into_iter().zip(part.rows_mut()) {
                        let mut sum = T::zero();
                        for &(column, value) in &elements {
                            sum += value * vector[column];
                        }
                        result[row - first] = sum;
                    }
                });
            });
    }
}
