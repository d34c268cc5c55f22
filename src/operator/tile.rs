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

/// sum + sum_j matrix\[i, j\] source\[j\]
///
/// By value: numbers behind a reference would be kept in memory, not in registers.
#[inline(always)]
pub fn with_row_product<T: Scalar, const W: usize>(
    mut sum: [T; W],
    matrix: &SparseMatrix<T>,
    i: usize,
    source: &[[T; W]],
) -> [T; W] {
    let (columns, values) = matrix.row(i);
    for (&j, &value) in columns.iter().zip(values) {
        let x = &source[j as usize];
        for k in 0..W {
            sum[k] = sum[k].plus_product(value, x[k]);
        }
    }
    sum
}
