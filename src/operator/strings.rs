//! The parts of a Hamiltonian that act on one spin, applied to a matrix with a row for each up
//! configuration: the down part a tile of rows at a time, the up part a tile of columns.
//!
//! Each part reads the vector once, copies a tile into a buffer that stays in the second-level
//! cache, and there multiplies it with the sparse matrix.

use super::buffers::Buffers;
use super::density_coupling::DensityCoupling;
use super::modes::ModeOperator;
use super::stored::SparseMatrix;
use super::tile::with_row_product;
use super::transpose::{LINE, transpose_in, transpose_line_out};
use crate::error::Result;
use crate::linear_operator::Subtrahend;
use crate::memory;
use crate::scalar::Scalar;
use ndarray::{Array2, ArrayViewMut2, Axis};
use pulp::NullaryFnOnce;
use rayon::prelude::*;

/// Above this fraction of non-zero elements a one-spin matrix is multiplied as a dense one,
const DENSE_FILL: f64 = 0.1;
/// unless it has more rows than this.
const DENSE_ROWS: usize = 4096;
/// Rows whose sums wait in the first-level cache before they are added to the result.
const WAITING: usize = 64;

/// The part of H that acts on one spin.
#[derive(Debug, Clone)]
pub struct StringMatrix<T> {
    pub sparse: SparseMatrix<T>,
    /// The same matrix, where a dense product is faster.
    pub dense: Option<Array2<T>>,
}

impl<T: Scalar> StringMatrix<T> {
    pub fn new(operator: &ModeOperator<T>) -> Result<Self> {
        let element = (size_of::<T>() + size_of::<u32>()) as u128;
        memory::require(
            "the part of the Hamiltonian that acts on one spin",
            operator.estimated_elements()? * element,
        )?;
        let sparse = operator.to_sparse().without_zeros();
        let n = sparse.rows();
        let worthwhile = n > 1 && n <= DENSE_ROWS && sparse.fill() > DENSE_FILL;
        let dense = worthwhile.then(|| {
            let mut dense = Array2::zeros((n, n));
            for i in 0..n {
                let (columns, values) = sparse.row(i);
                for (&j, &value) in columns.iter().zip(values) {
                    dense[[i, j as usize]] = value;
                }
            }
            dense
        });
        Ok(StringMatrix { sparse, dense })
    }

    /// result = factor (vector (1 x matrix) + (coupling + constant) vector) - subtrahend, without
    /// the first term if a dense product is to follow for it.
    pub fn apply_to_rows<const W: usize>(
        &self,
        diagonal: Diagonal<'_>,
        vector: &[T],
        (result, subtrahend): (&mut [T], Subtrahend<&[T]>),
        buffers: &Buffers<T>,
    ) {
        let width = self.sparse.rows();
        let arch = pulp::Arch::new();
        let tiles = result.par_chunks_mut(W * width).enumerate();
        let tiles = tiles.zip(vector.par_chunks(W * width));
        tiles.for_each(|((tile, result), vector)| {
            let vectors: Vec<&[T]> = vector.chunks(width).collect();
            let coupling = diagonal.coupling;
            buffers.with(W * width, |source| {
                arch.dispatch(RowTile::<T, W> {
                    matrix: self.dense.is_none().then_some(&self.sparse),
                    coupling: coupling.map(|c| (c, c.potentials(tile * W, vectors.len()))),
                    constant: diagonal.constant,
                    factor: diagonal.factor,
                    vectors,
                    rows: result.chunks_mut(width).collect(),
                    subtrahend: subtrahend
                        .map(|other| other[tile * W * width..].chunks(width).take(W).collect()),
                    source: source.as_chunks_mut().0,
                });
            });
        });
    }

    /// result += factor (matrix x 1) vector
    pub fn add_to_columns<const W: usize>(
        &self,
        factor: f64,
        vector: &[T],
        mut result: ArrayViewMut2<'_, T>,
        buffers: &Buffers<T>,
    ) {
        let (height, width) = result.dim();
        let arch = pulp::Arch::new();
        let tiles = result.axis_chunks_iter_mut(Axis(1), W).into_par_iter();
        tiles.enumerate().for_each(|(tile, result)| {
            buffers.with(W * height, |source| {
                arch.dispatch(ColumnTile::<T, W> {
                    matrix: &self.sparse,
                    factor,
                    vector: &vector[tile * W..],
                    width,
                    result,
                    source: source.as_chunks_mut().0,
                });
            });
        });
    }
}

/// What multiplies a vector in the pass over rows beside the down part, and a factor for all.
#[derive(Clone, Copy)]
pub struct Diagonal<'a> {
    pub coupling: Option<&'a DensityCoupling>,
    pub constant: f64,
    pub factor: f64,
}

/// A tile of rows: the down part and the density coupling. (A struct, not a closure: only then
/// the work is compiled for the instruction set found at run time.)
struct RowTile<'a, T, const W: usize> {
    matrix: Option<&'a SparseMatrix<T>>,
    coupling: Option<(&'a DensityCoupling, Vec<[f64; W]>)>,
    constant: f64,
    factor: f64,
    vectors: Vec<&'a [T]>,
    rows: Vec<&'a mut [T]>,
    subtrahend: Subtrahend<Vec<&'a [T]>>,
    source: &'a mut [[T; W]],
}

impl<T: Scalar, const W: usize> NullaryFnOnce for RowTile<'_, T, W> {
    type Output = ();

    #[inline(always)]
    fn call(mut self) {
        transpose_in(&self.vectors, self.source);
        let source = &*self.source;
        let subtrahend = self.subtrahend.as_ref().map(Vec::as_slice);
        let mut line = [[T::zero(); W]; LINE];
        for start in (0..source.len()).step_by(LINE) {
            let line = &mut line[..LINE.min(source.len() - start)];
            for (target, i) in line.iter_mut().zip(start..) {
                let (x, constant) = (&source[i], self.constant);
                let sum = match &self.coupling {
                    Some((coupling, potentials)) => coupling.act(potentials, i, constant, x),
                    None => scaled(*x, constant),
                };
                let sum = match self.matrix {
                    Some(matrix) => with_row_product(sum, matrix, i, source),
                    None => sum,
                };
                *target = scaled(sum, self.factor);
            }
            transpose_line_out(line, &mut self.rows, subtrahend, start);
        }
    }
}

/// A tile of columns: the up part.
struct ColumnTile<'a, T, const W: usize> {
    matrix: &'a SparseMatrix<T>,
    factor: f64,
    /// From the first number of the tile on.
    vector: &'a [T],
    /// Numbers from one row to the next.
    width: usize,
    result: ArrayViewMut2<'a, T>,
    source: &'a mut [[T; W]],
}

impl<T: Scalar, const W: usize> NullaryFnOnce for ColumnTile<'_, T, W> {
    type Output = ();

    #[inline(always)]
    fn call(mut self) {
        let columns = self.result.ncols();
        for (packed, row) in self.source.iter_mut().zip(self.vector.chunks(self.width)) {
            match row.first_chunk::<W>() {
                Some(row) if columns == W => *packed = *row,
                _ => packed[..columns].copy_from_slice(&row[..columns]),
            }
        }
        let mut waiting = [[T::zero(); W]; WAITING];
        let blocks = self.result.axis_chunks_iter_mut(Axis(0), WAITING);
        for (block, mut rows) in blocks.enumerate() {
            for (sum, i) in waiting[..rows.nrows()].iter_mut().zip(block * WAITING..) {
                *sum = with_row_product([T::zero(); W], self.matrix, i, self.source);
            }
            for (mut row, sums) in rows.rows_mut().into_iter().zip(&waiting) {
                if let Some(row) = row.as_slice_mut() {
                    add_lane(row, self.factor, sums);
                }
            }
        }
    }
}

/// factor x numbers (a loop, since `map` on arrays ends in single numbers)
#[inline(always)]
fn scaled<T: Scalar, const W: usize>(mut numbers: [T; W], factor: f64) -> [T; W] {
    for number in &mut numbers {
        *number = *number * factor;
    }
    numbers
}

/// row += factor x sums, as far as the row reaches
#[inline(always)]
fn add_lane<T: Scalar, const W: usize>(row: &mut [T], factor: f64, sums: &[T; W]) {
    if let Ok(row) = <&mut [T; W]>::try_from(&mut *row) {
        for k in 0..W {
            row[k] += sums[k] * factor;
        }
    } else {
        for (total, &sum) in row.iter_mut().zip(sums) {
            *total += sum * factor;
        }
    }
}
