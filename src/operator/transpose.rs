//! Between vectors and tiles: a tile holds the same component of several vectors side by side.

use crate::linear_operator::Subtrahend;
use crate::scalar::Scalar;

/// Columns that are transposed together: a cache line of each row.
pub const LINE: usize = 8;

/// tile\[c\]\[k\] = vectors\[k\]\[c\]; places without a vector stay as they are.
#[inline(always)]
pub fn transpose_in<T: Scalar, const W: usize>(vectors: &[&[T]], tile: &mut [[T; W]]) {
    for (block, line) in tile.chunks_mut(LINE).enumerate() {
        let start = block * LINE;
        for (group, vectors) in vectors.chunks(SIDE).enumerate() {
            let first = group * SIDE;
            if registers::transpose_in(vectors, (first, start), line) {
                continue;
            }
            for (vector, place) in vectors.iter().zip(first..) {
                for (components, &x) in line.iter_mut().zip(&vector[start..]) {
                    components[place] = x;
                }
            }
        }
    }
}

/// vectors\[place\]\[start + c\] = line\[c\]\[place\] - what is subtracted, at most [`LINE`] columns
#[inline(always)]
pub fn transpose_line_out<T: Scalar, const W: usize>(
    line: &[[T; W]],
    vectors: &mut [&mut [T]],
    subtracted: Subtrahend<&[&[T]]>,
    start: usize,
) {
    for (group, vectors) in vectors.chunks_mut(SIDE).enumerate() {
        let first = group * SIDE;
        if registers::transpose_out(line, (first, start), vectors, subtracted) {
            continue;
        }
        for (vector, place) in vectors.iter_mut().zip(first..) {
            for (c, (x, components)) in vector[start..].iter_mut().zip(line).enumerate() {
                let less = match subtracted {
                    Subtrahend::Nothing => T::zero(),
                    Subtrahend::Overwritten => *x,
                    Subtrahend::Block(others) => others[place][start + c],
                };
                *x = components[place] - less;
            }
        }
    }
}

/// Side of the squares that are transposed in registers.
const SIDE: usize = 4;

/// Transposition of real numbers in registers; the compiler does not find it by itself.
#[cfg(target_arch = "x86_64")]
mod registers {
    use super::{LINE, SIDE};
    use crate::linear_operator::Subtrahend;
    use crate::scalar::Scalar;
    use pulp::x86::V3;
    use std::arch::x86_64::__m256d;

    const LOWER_HALVES: i32 = 0x20;
    const UPPER_HALVES: i32 = 0x31;

    #[inline(always)]
    fn transposed(simd: V3, [a, b, c, d]: [__m256d; SIDE]) -> [__m256d; SIDE] {
        let simd = simd.avx;
        let even = [simd._mm256_unpacklo_pd(a, b), simd._mm256_unpacklo_pd(c, d)];
        let odd = [simd._mm256_unpackhi_pd(a, b), simd._mm256_unpackhi_pd(c, d)];
        [
            simd._mm256_permute2f128_pd::<LOWER_HALVES>(even[0], even[1]),
            simd._mm256_permute2f128_pd::<LOWER_HALVES>(odd[0], odd[1]),
            simd._mm256_permute2f128_pd::<UPPER_HALVES>(even[0], even[1]),
            simd._mm256_permute2f128_pd::<UPPER_HALVES>(odd[0], odd[1]),
        ]
    }

    /// Fills the places from `first` on of a whole line from four vectors, or returns false.
    #[inline(always)]
    pub fn transpose_in<T: Scalar, const W: usize>(
        vectors: &[&[T]],
        (first, start): (usize, usize),
        line: &mut [[T; W]],
    ) -> bool {
        let (Some(simd), [a, b, c, d]) = (V3::try_new(), vectors) else {
            return false;
        };
        let (Some(line), Some(a), Some(b), Some(c), Some(d)) = (
            T::as_reals_mut(line.as_flattened_mut()),
            real_part(a, start),
            real_part(b, start),
            real_part(c, start),
            real_part(d, start),
        ) else {
            return false;
        };
        let Ok(line) = <&mut [[f64; W]; LINE]>::try_from(line.as_chunks_mut::<W>().0) else {
            return false;
        };
        if first + SIDE > W {
            return false;
        }
        for half in 0..LINE / SIDE {
            let row = |numbers: &[f64; LINE]| pulp::cast(numbers.as_chunks::<SIDE>().0[half]);
            let columns = transposed(simd, [row(a), row(b), row(c), row(d)]);
            for k in 0..SIDE {
                let components = &mut line[half * SIDE + k];
                if let Some(places) = components[first..].first_chunk_mut::<SIDE>() {
                    *places = pulp::cast(columns[k]);
                }
            }
        }
        true
    }

    /// Writes a whole line of four vectors, or returns false.
    #[inline(always)]
    pub fn transpose_out<T: Scalar, const W: usize>(
        line: &[[T; W]],
        (first, start): (usize, usize),
        vectors: &mut [&mut [T]],
        subtracted: Subtrahend<&[&[T]]>,
    ) -> bool {
        let (Some(simd), [a, b, c, d]) = (V3::try_new(), vectors) else {
            return false;
        };
        let Some(line) = T::as_reals(line.as_flattened()) else {
            return false;
        };
        let Ok(line) = <&[[f64; W]; LINE]>::try_from(line.as_chunks::<W>().0) else {
            return false;
        };
        if first + SIDE > W {
            return false;
        }
        let (Some(a), Some(b), Some(c), Some(d)) = (
            real_part_mut(a, start),
            real_part_mut(b, start),
            real_part_mut(c, start),
            real_part_mut(d, start),
        ) else {
            return false;
        };
        let parts = [a, b, c, d];
        for half in 0..LINE / SIDE {
            let row = |k: usize| {
                let places = line[half * SIDE + k][first..].first_chunk::<SIDE>();
                pulp::cast(places.copied().unwrap_or_default())
            };
            let columns = transposed(simd, [row(0), row(1), row(2), row(3)]);
            for k in 0..SIDE {
                let place = &mut parts[k].as_chunks_mut::<SIDE>().0[half];
                let less = match subtracted {
                    Subtrahend::Nothing => None,
                    Subtrahend::Overwritten => Some(*place),
                    Subtrahend::Block(others) => real_part(others[first + k], start)
                        .map(|part| part.as_chunks::<SIDE>().0[half]),
                };
                *place = pulp::cast(match less {
                    Some(less) => simd.avx._mm256_sub_pd(columns[k], pulp::cast(less)),
                    None => columns[k],
                });
            }
        }
        true
    }

    #[inline(always)]
    fn real_part<T: Scalar>(vector: &[T], start: usize) -> Option<&[f64; LINE]> {
        T::as_reals(vector)?[start..].first_chunk()
    }

    #[inline(always)]
    fn real_part_mut<T: Scalar>(vector: &mut [T], start: usize) -> Option<&mut [f64; LINE]> {
        T::as_reals_mut(vector)?[start..].first_chunk_mut()
    }
}

/// No registers of four numbers are known here.
#[cfg(not(target_arch = "x86_64"))]
mod registers {
    use crate::linear_operator::Subtrahend;

    pub fn transpose_in<T, const W: usize>(
        _: &[&[T]],
        _: (usize, usize),
        _: &mut [[T; W]],
    ) -> bool {
        false
    }

    pub fn transpose_out<T, const W: usize>(
        _: &[[T; W]],
        _: (usize, usize),
        _: &mut [&mut [T]],
        _: Subtrahend<&[&[T]]>,
    ) -> bool {
        false
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use num_complex::Complex64;

    const WIDTH: usize = 32;

    fn back_and_forth<T: Scalar>(height: usize, length: usize, number: impl Fn(usize) -> T) {
        let numbers: Vec<T> = (0..height * length).map(number).collect();
        let vectors: Vec<&[T]> = numbers.chunks(length).collect();
        let mut tile = vec![[T::zero(); WIDTH]; length];
        transpose_in(&vectors, &mut tile);
        for (k, vector) in vectors.iter().enumerate() {
            for (c, &x) in vector.iter().enumerate() {
                assert_eq!(tile[c][k], x);
            }
        }
        let out = |subtracted: Subtrahend<&[&[T]]>| {
            let mut back = vec![T::one(); numbers.len()];
            let mut rows: Vec<&mut [T]> = back.chunks_mut(length).collect();
            for (block, line) in tile.chunks(LINE).enumerate() {
                transpose_line_out(line, &mut rows, subtracted, block * LINE);
            }
            back
        };
        assert_eq!(out(Subtrahend::Nothing), numbers);
        let less_one: Vec<T> = numbers.iter().map(|&x| x - T::one()).collect();
        assert_eq!(out(Subtrahend::Overwritten), less_one);
        let zeros = vec![T::zero(); numbers.len()];
        assert_eq!(out(Subtrahend::Block(&vectors)), zeros);
    }

    #[test]
    fn transposing_back_and_forth() {
        for height in [1, 3, 4, 7, 8, 31, 32] {
            for length in [1, 3, 4, 8, 9, 17, 31] {
                back_and_forth(height, length, |i| i as f64);
                back_and_forth(height, length, |i| Complex64::new(i as f64, -1.0));
            }
        }
    }
}
