//! Products of a sparse matrix with a few vectors at once, laid out so that the innermost loop
//! runs over the vectors: neighbouring numbers, one matrix element, no gathering.

use super::stored::SparseMatrix;
use crate::scalar::Scalar;

/// Vectors of a tile: four registers of eight real numbers.
pub const WIDE: usize = 32;
/// For few vectors,
pub const NARROW: usize = 8;
/// and for a single one.
pub const SINGLE: usize = 1;

/// Calls a function that is generic in the width of tiles with the width that suits `count`
/// vectors.
macro_rules! with_tile_width {
    ($count:expr, $width:ident => $call:expr) => {
        match $count {
            0..=1 => {
                const $width: usize = crate::operator::tile::SINGLE;
                $call
            }
            2..=8 => {
                const $width: usize = crate::operator::tile::NARROW;
                $call
            }
            _ => {
                const $width: usize = crate::operator::tile::WIDE;
                $call
            }
        }
    };
}
pub(super) use with_tile_width;

/// target\[i\] = start(i, source\[i\]) + sum_j matrix\[i, j\] source\[j\]
#[inline(always)]
pub fn multiply_tile<T: Scalar, const W: usize>(
    matrix: Option<&SparseMatrix<T>>,
    source: &[[T; W]],
    target: &mut [[T; W]],
    start: impl Fn(usize, &[T; W]) -> [T; W],
) {
    for (i, target) in target.iter_mut().enumerate() {
        let mut sum = start(i, &source[i]);
        if let Some(matrix) = matrix {
            let (columns, values) = matrix.row(i);
            for (&j, &value) in columns.iter().zip(values) {
                let x = &source[j as usize];
                for k in 0..W {
                    sum[k] += value * x[k];
                }
            }
        }
        *target = sum;
    }
}

/// Columns of a block of neighbouring rows that are transposed together: a cache line of each.
const LINE: usize = 8;

/// columns\[c\]\[r\] = rows\[r\]\[c\]; `rows` is row-major with as many columns as `columns`.
#[inline(always)]
pub fn transpose_in<T: Scalar, const W: usize>(rows: &[T], columns: &mut [[T; W]]) {
    let width = columns.len();
    for (block, part) in columns.chunks_mut(LINE).enumerate() {
        for (offset, row) in rows.chunks_exact(width).enumerate() {
            let row = &row[block * LINE..block * LINE + part.len()];
            for (column, &x) in part.iter_mut().zip(row) {
                column[offset] = x;
            }
        }
    }
}

/// rows\[r\]\[c\] = columns\[c\]\[r\]
#[inline(always)]
pub fn transpose_out<T: Scalar, const W: usize>(columns: &[[T; W]], rows: &mut [T]) {
    let width = columns.len();
    for (block, part) in columns.chunks(LINE).enumerate() {
        for (offset, row) in rows.chunks_exact_mut(width).enumerate() {
            let row = &mut row[block * LINE..block * LINE + part.len()];
            for (x, column) in row.iter_mut().zip(part) {
                *x = column[offset];
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn transposing_back_and_forth() {
        for (height, width) in [(1, 3), (5, 8), (8, 17), (7, 1)] {
            let rows: Vec<f64> = (0..height * width).map(|x| x as f64).collect();
            let mut columns = vec![[0.0; NARROW]; width];
            transpose_in(&rows, &mut columns);
            assert_eq!(columns[width - 1][height - 1], rows[height * width - 1]);
            let mut back = vec![0.0; rows.len()];
            transpose_out(&columns, &mut back);
            assert_eq!(back, rows);
        }
    }
}
