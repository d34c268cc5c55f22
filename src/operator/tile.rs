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

/// target += matrix source
#[inline(always)]
pub fn add_tile_product<T: Scalar, const W: usize>(
    matrix: &SparseMatrix<T>,
    source: &[[T; W]],
    target: &mut [[T; W]],
) {
    for (i, target) in target.iter_mut().enumerate() {
        let (columns, values) = matrix.row(i);
        for (&j, &value) in columns.iter().zip(values) {
            let x = &source[j as usize];
            for k in 0..W {
                target[k] += value * x[k];
            }
        }
    }
}

/// Columns that are transposed together: a cache line of each row.
const LINE: usize = 8;

/// A vector of a tile: its place, a factor, and its components.
pub type Lane<'a, T> = (usize, f64, &'a [T]);

/// tile\[c\]\[place\] = factor x vector\[c\] for each lane; other places stay as they are.
#[inline(always)]
pub fn transpose_in<T: Scalar, const W: usize>(lanes: &[Lane<'_, T>], tile: &mut [[T; W]]) {
    for (block, part) in tile.chunks_mut(LINE).enumerate() {
        for &(place, factor, vector) in lanes {
            let vector = &vector[block * LINE..block * LINE + part.len()];
            for (components, &x) in part.iter_mut().zip(vector) {
                components[place] = x * factor;
            }
        }
    }
}

/// vectors\[place\]\[c\] = tile\[c\]\[place\]
#[inline(always)]
pub fn transpose_out<T: Scalar, const W: usize>(tile: &[[T; W]], vectors: &mut [&mut [T]]) {
    for (block, part) in tile.chunks(LINE).enumerate() {
        for (place, vector) in vectors.iter_mut().enumerate() {
            let vector = &mut vector[block * LINE..block * LINE + part.len()];
            for (x, components) in vector.iter_mut().zip(part) {
                *x = components[place];
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
            let lanes: Vec<Lane<'_, f64>> = rows
                .chunks(width)
                .enumerate()
                .map(|(place, row)| (place, 2.0, row))
                .collect();
            let mut tile = vec![[0.0; NARROW]; width];
            transpose_in(&lanes, &mut tile);
            assert_eq!(tile[width - 1][height - 1], 2.0 * rows[height * width - 1]);
            let mut back = vec![0.0; rows.len()];
            let mut vectors: Vec<&mut [f64]> = back.chunks_mut(width).collect();
            transpose_out(&tile, &mut vectors);
            assert!(back.iter().zip(&rows).all(|(a, b)| *a == 2.0 * b));
        }
    }
}
