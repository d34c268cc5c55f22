//! A sparse matrix kept row by row, for what is small or sparse enough.

use crate::scalar::Scalar;
use ndarray::{Array1, ArrayView2, ArrayViewMut2, Axis};
use rayon::prelude::*;
use std::ops::Range;

/// Rows that one task builds or multiplies.
const ROWS_PER_TASK: usize = 512;

/// Compressed sparse rows: columns increase within each row.
#[derive(Debug, Clone)]
pub struct SparseMatrix<T> {
    /// Where each row starts in `columns` and `values`; one more than rows.
    pub row_starts: Vec<usize>,
    /// Column of each element.
    pub columns: Vec<u32>,
    /// The elements.
    pub values: Vec<T>,
}

/// Consecutive finished rows.
#[derive(Debug)]
pub struct RowSink<T> {
    lengths: Vec<usize>,
    columns: Vec<u32>,
    values: Vec<T>,
}

impl<T: Scalar> RowSink<T> {
    /// Appends a row given as unordered elements, which are added up per column; empties the list.
    pub fn push_row(&mut self, elements: &mut Vec<(u32, T)>) {
        elements.sort_unstable_by_key(|&(column, _)| column);
        let start = self.columns.len();
        for &(column, value) in elements.iter() {
            if self.columns.len() > start && self.columns.last() == Some(&column) {
                if let Some(last) = self.values.last_mut() {
                    *last += value;
                }
            } else {
                self.columns.push(column);
                self.values.push(value);
            }
        }
        self.lengths.push(self.columns.len() - start);
        elements.clear();
    }
}

impl<T: Scalar> SparseMatrix<T> {
    /// Builds all rows in parallel; `fill` pushes the rows of its range in order.
    pub fn build(dimension: usize, fill: impl Fn(Range<usize>, &mut RowSink<T>) + Sync) -> Self {
        let chunks: Vec<RowSink<T>> = (0..dimension.div_ceil(ROWS_PER_TASK))
            .into_par_iter()
            .map(|task| {
                let start = task * ROWS_PER_TASK;
                let mut sink = RowSink {
                    lengths: Vec::new(),
                    columns: Vec::new(),
                    values: Vec::new(),
                };
                fill(start..(start + ROWS_PER_TASK).min(dimension), &mut sink);
                sink
            })
            .collect();
        let elements = chunks.iter().map(|c| c.columns.len()).sum();
        let mut matrix = SparseMatrix {
            row_starts: Vec::with_capacity(dimension + 1),
            columns: Vec::with_capacity(elements),
            values: Vec::with_capacity(elements),
        };
        let mut end = 0;
        matrix.row_starts.push(end);
        for mut chunk in chunks {
            for length in chunk.lengths {
                end += length;
                matrix.row_starts.push(end);
            }
            matrix.columns.append(&mut chunk.columns);
            matrix.values.append(&mut chunk.values);
        }
        matrix
    }

    /// The same matrix without elements that are zero.
    pub fn without_zeros(self) -> Self {
        Self::build(self.rows(), |rows, sink| {
            let mut elements = Vec::new();
            for row in rows {
                let (columns, values) = self.row(row);
                let pairs = columns.iter().copied().zip(values.iter().copied());
                elements.extend(pairs.filter(|(_, value)| *value != T::zero()));
                sink.push_row(&mut elements);
            }
        })
    }

    /// Number of rows.
    pub fn rows(&self) -> usize {
        self.row_starts.len() - 1
    }

    /// Columns and elements of a row.
    #[inline]
    pub fn row(&self, index: usize) -> (&[u32], &[T]) {
        let range = self.row_starts[index]..self.row_starts[index + 1];
        (&self.columns[range.clone()], &self.values[range])
    }

    /// The fraction of elements that are kept.
    pub fn fill(&self) -> f64 {
        self.values.len() as f64 / (self.rows() as f64).powi(2)
    }

    /// Bytes held.
    pub fn bytes(&self) -> u128 {
        (self.values.len() * (size_of::<T>() + 4) + self.row_starts.len() * 8) as u128
    }

    /// Diagonal elements, real since the matrix is Hermitian.
    pub fn diagonal(&self) -> Array1<f64> {
        (0..self.rows())
            .map(|i| {
                let (columns, values) = self.row(i);
                let place = columns.binary_search(&(i as u32));
                place.map_or(0.0, |k| values[k].re())
            })
            .collect()
    }

    /// Adds a number to each diagonal element (all of which are stored).
    pub fn add_to_diagonal(&mut self, value: T) {
        for i in 0..self.rows() {
            let start = self.row_starts[i];
            let (columns, _) = self.row(i);
            if let Ok(place) = columns.binary_search(&(i as u32)) {
                self.values[start + place] += value;
            }
        }
    }

    /// Overwrites row k of `out` with the product with row k of `block`.
    pub fn apply(&self, block: ArrayView2<'_, T>, mut out: ArrayViewMut2<'_, T>) {
        out.axis_chunks_iter_mut(Axis(1), ROWS_PER_TASK)
            .into_par_iter()
            .enumerate()
            .for_each(|(task, mut part)| {
                let first = task * ROWS_PER_TASK;
                for (vector, mut result) in block.rows().into_iter().zip(part.rows_mut()) {
                    for (offset, target) in result.iter_mut().enumerate() {
                        let (columns, values) = self.row(first + offset);
                        let mut sum = T::zero();
                        for (&column, &value) in columns.iter().zip(values) {
                            sum += value * vector[column as usize];
                        }
                        *target = sum;
                    }
                }
            });
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use ndarray::{Array2, array};

    #[test]
    fn rows_are_sorted_and_duplicates_added_up() {
        let matrix = SparseMatrix::build(3, |rows, sink| {
            for row in rows {
                let mut elements = vec![(2, 1.0), (row as u32, 2.0), (2, 0.5)];
                sink.push_row(&mut elements);
            }
        });
        assert_eq!(matrix.row(0), (&[0u32, 2][..], &[2.0, 1.5][..]));
        assert_eq!(matrix.row(2), (&[2u32][..], &[3.5][..]));
        let block = array![[1.0, 10.0, 100.0], [0.0, 1.0, 0.0]];
        let mut out = Array2::zeros((2, 3));
        matrix.apply(block.view(), out.view_mut());
        assert_eq!(out, array![[152.0, 170.0, 350.0], [0.0, 2.0, 0.0]]);
    }
}
