//! Pieces of vectors side by side: brought across the vectors, multiplied, and brought back.
//!
//! A tile holds one element of each piece (a lane) in neighbouring numbers, so that a matrix
//! acting along the pieces runs over all lanes at once.
//!
//! Each kernel is a struct, dispatched for itself: a closure would not be compiled for the
//! instruction set found at run time, and one function of them all runs out of registers.

use super::stored::SparseMatrix;
use crate::scalar::Scalar;
use pulp::NullaryFnOnce;

/// Lanes that are transposed together: a register of real numbers.
pub const LANES: usize = 8;
/// Pieces that are added at once.
const FUSED: usize = 4;

/// A piece of a vector and the factor that it enters with.
#[derive(Debug, Clone, Copy)]
pub struct Lane<'a, T> {
    /// The elements.
    pub source: &'a [T],
    /// What they are multiplied with.
    pub factor: f64,
}

/// Where a lane lies: which vector, and where in it.
pub type Place = (usize, usize);

/// tile\[c\]\[k\] = factor x source\[c\] of lane k
pub struct TransposeIn<'a, T, const W: usize> {
    /// One a lane.
    pub lanes: &'a [Lane<'a, T>; W],
    /// As high as the pieces are long.
    pub tile: &'a mut [[T; W]],
}

impl<T: Scalar, const W: usize> NullaryFnOnce for TransposeIn<'_, T, W> {
    type Output = ();

    #[inline(always)]
    fn call(self) {
        let (strips, rest) = self.tile.as_chunks_mut::<LANES>();
        for (s, strip) in strips.iter_mut().enumerate() {
            for (k, lane) in self.lanes.iter().enumerate() {
                let Some(source) = lane.source[s * LANES..].first_chunk::<LANES>() else {
                    return;
                };
                let factor = lane.factor;
                for i in 0..LANES {
                    strip[i][k] = source[i] * factor;
                }
            }
        }
        let done = strips.len() * LANES;
        for (k, lane) in self.lanes.iter().enumerate() {
            for (row, &x) in rest.iter_mut().zip(&lane.source[done..]) {
                row[k] = x * lane.factor;
            }
        }
    }
}

/// vectors\[v\]\[start + c\] = tile\[c\]\[k\] with the place (v, start) of lane k
pub struct TransposeOut<'a, 'b, T, const W: usize> {
    /// As high as the pieces are long.
    pub tile: &'a [[T; W]],
    /// Of the lanes that are in use.
    pub places: &'a [Place],
    /// Overwritten.
    pub vectors: &'a mut [&'b mut [T]],
}

impl<T: Scalar, const W: usize> NullaryFnOnce for TransposeOut<'_, '_, T, W> {
    type Output = ();

    #[inline(always)]
    fn call(self) {
        let (strips, rest) = self.tile.as_chunks::<LANES>();
        let done = strips.len() * LANES;
        for (s, strip) in strips.iter().enumerate() {
            for (k, &(v, start)) in self.places.iter().enumerate().take(W) {
                let mut across = [T::zero(); LANES];
                for i in 0..LANES {
                    across[i] = strip[i][k];
                }
                let target = &mut self.vectors[v][start + s * LANES..];
                let Some(target) = target.first_chunk_mut::<LANES>() else {
                    return;
                };
                *target = across;
            }
        }
        for (k, &(v, start)) in self.places.iter().enumerate() {
            for (row, x) in rest.iter().zip(&mut self.vectors[v][start + done..]) {
                *x = row[k];
            }
        }
    }
}

/// A sparse matrix whose rows are done by increasing number of elements: loops that are equally
/// long many times over are foreseen by the processor.
#[derive(Debug, Clone)]
pub struct LaneMatrix<T> {
    /// Elements a row, and how many rows.
    runs: Vec<(usize, usize)>,
    rows: Vec<u32>,
    columns: Vec<u32>,
    values: Vec<T>,
}

impl<T: Scalar> LaneMatrix<T> {
    /// The same matrix.
    pub fn new(matrix: &SparseMatrix<T>) -> Self {
        let length = |row: &u32| matrix.row(*row as usize).0.len();
        let mut rows: Vec<u32> = (0..matrix.rows() as u32).collect();
        rows.sort_by_key(length);
        let runs = rows.chunk_by(|a, b| length(a) == length(b));
        LaneMatrix {
            runs: runs.map(|run| (length(&run[0]), run.len())).collect(),
            columns: rows
                .iter()
                .flat_map(|&row| matrix.row(row as usize).0.to_vec())
                .collect(),
            values: rows
                .iter()
                .flat_map(|&row| matrix.row(row as usize).1.to_vec())
                .collect(),
            rows,
        }
    }

    /// target\[i\] = start(i, target\[i\]) + sum_j matrix\[i, j\] source\[j\]
    #[inline(always)]
    fn multiply<const W: usize>(
        &self,
        source: &[[T; W]],
        target: &mut [[T; W]],
        start: impl Fn(usize, &[T; W]) -> [T; W],
    ) {
        let (mut rows, mut columns, mut values) = (&*self.rows, &*self.columns, &*self.values);
        for &(length, count) in &self.runs {
            let (run, later) = rows.split_at(count);
            rows = later;
            for &row in run {
                let row = row as usize;
                let mut sum = start(row, &target[row]);
                let (here, later) = columns.split_at(length);
                columns = later;
                let (factors, later) = values.split_at(length);
                values = later;
                for (&column, &value) in here.iter().zip(factors) {
                    let x = &source[column as usize];
                    for k in 0..W {
                        sum[k] += value * x[k];
                    }
                }
                target[row] = sum;
            }
        }
    }
}

/// target = (levels + density coupling + matrix) source
pub struct OwnProduct<'a, T, const W: usize> {
    /// Acts along the pieces.
    pub matrix: &'a LaneMatrix<T>,
    /// Added to the diagonal, for each lane.
    pub levels: &'a [f64; W],
    /// What a particle in each coupled mode feels, for each lane.
    pub felt: &'a [[f64; W]],
    /// Particles in each coupled mode, for each place along the pieces.
    pub occupations: &'a [f64],
    /// Multiplied.
    pub source: &'a [[T; W]],
    /// Overwritten.
    pub target: &'a mut [[T; W]],
}

impl<T: Scalar, const W: usize> NullaryFnOnce for OwnProduct<'_, T, W> {
    type Output = ();

    #[inline(always)]
    fn call(self) {
        let (felt, source, levels) = (self.felt, self.source, self.levels);
        self.matrix.multiply(
            source,
            self.target,
            #[inline(always)]
            |a, _| {
                let mut total = *levels;
                let occupations = &self.occupations[a * felt.len()..(a + 1) * felt.len()];
                for (felt, &n) in felt.iter().zip(occupations) {
                    for k in 0..W {
                        total[k] += n * felt[k];
                    }
                }
                let mut result = [T::zero(); W];
                for k in 0..W {
                    result[k] = source[a][k] * total[k];
                }
                result
            },
        );
    }
}

/// target += matrix source
pub struct AddProduct<'a, T, const W: usize> {
    /// Acts along the pieces.
    pub matrix: &'a LaneMatrix<T>,
    /// Multiplied.
    pub source: &'a [[T; W]],
    /// Added to.
    pub target: &'a mut [[T; W]],
}

impl<T: Scalar, const W: usize> NullaryFnOnce for AddProduct<'_, T, W> {
    type Output = ();

    #[inline(always)]
    fn call(self) {
        self.matrix.multiply(
            self.source,
            self.target,
            #[inline(always)]
            |_, x| *x,
        );
    }
}

/// Pieces of the same vector to be added to each lane.
pub struct AddRows<'a, 'b, T> {
    /// Rows of the matrix, one a lane.
    pub rows: &'a [usize],
    /// Which pieces, and the values.
    pub matrix: &'a SparseMatrix<T>,
    /// Where each piece starts.
    pub starts: &'a [usize],
    /// Length of the pieces.
    pub width: usize,
    /// What the pieces are from.
    pub vectors: &'a [&'a [T]],
    /// Where they are added.
    pub places: &'a [Place],
    /// Added to.
    pub results: &'a mut [&'b mut [T]],
}

impl<T: Scalar> NullaryFnOnce for AddRows<'_, '_, T> {
    type Output = ();

    #[inline(always)]
    fn call(self) {
        let width = self.width;
        for (&row, &(v, start)) in self.rows.iter().zip(self.places) {
            let (columns, values) = self.matrix.row(row);
            let target = &mut self.results[v][start..start + width];
            let vector = self.vectors[v];
            let (columns, last_columns) = columns.as_chunks::<FUSED>();
            let (values, last_values) = values.as_chunks::<FUSED>();
            for (columns, values) in columns.iter().zip(values) {
                add_pieces(self.starts, columns, values, vector, target);
            }
            match (last_columns, last_values) {
                (&[a, b, c], &[x, y, z]) => {
                    add_pieces(self.starts, &[a, b, c], &[x, y, z], vector, target);
                }
                (&[a, b], &[x, y]) => add_pieces(self.starts, &[a, b], &[x, y], vector, target),
                (&[a], &[x]) => add_pieces(self.starts, &[a], &[x], vector, target),
                _ => {}
            }
        }
    }
}

/// target += sum of value x piece
#[inline(always)]
fn add_pieces<T: Scalar, const N: usize>(
    starts: &[usize],
    columns: &[u32; N],
    values: &[T; N],
    vector: &[T],
    target: &mut [T],
) {
    let width = target.len();
    let nothing: &[T] = &[];
    let mut pieces = [nothing; N];
    for (piece, &column) in pieces.iter_mut().zip(columns) {
        let start = starts[column as usize];
        *piece = &vector[start..start + width];
    }
    if width < LANES {
        for (piece, &value) in pieces.iter().zip(values) {
            for (x, &y) in target.iter_mut().zip(*piece) {
                *x += value * y;
            }
        }
        return;
    }
    // the last columns as a whole register, worked out before the others change a part of it
    let last = sum_at(&pieces, values, width - LANES, target);
    for c in 0..width / LANES {
        let sum = sum_at(&pieces, values, c * LANES, target);
        target[c * LANES..(c + 1) * LANES].copy_from_slice(&sum);
    }
    target[width - LANES..].copy_from_slice(&last);
}

#[inline(always)]
fn sum_at<T: Scalar, const N: usize>(
    pieces: &[&[T]; N],
    values: &[T; N],
    start: usize,
    target: &[T],
) -> [T; LANES] {
    let mut sum = [T::zero(); LANES];
    sum.copy_from_slice(&target[start..start + LANES]);
    for (piece, &value) in pieces.iter().zip(values) {
        if let Some(source) = piece[start..].first_chunk::<LANES>() {
            for k in 0..LANES {
                sum[k] += value * source[k];
            }
        }
    }
    sum
}

/// Neighbouring elements that are multiplied with a number and added elsewhere.
#[derive(Debug, Clone, Copy)]
pub struct Run<T> {
    /// The first of them,
    pub source: usize,
    /// and where it goes.
    pub target: usize,
    /// How many there are.
    pub length: usize,
    /// The factor.
    pub value: T,
}

/// target += factor x shifted pieces of the source
pub struct AddRuns<'a, T> {
    /// The pieces.
    pub runs: &'a [Run<T>],
    /// Multiplied.
    pub lane: Lane<'a, T>,
    /// Added to.
    pub target: &'a mut [T],
}

impl<T: Scalar> NullaryFnOnce for AddRuns<'_, T> {
    type Output = ();

    #[inline(always)]
    fn call(self) {
        for run in self.runs {
            let value = run.value * self.lane.factor;
            let source = &self.lane.source[run.source..run.source + run.length];
            let target = &mut self.target[run.target..run.target + run.length];
            for (x, &y) in target.iter_mut().zip(source) {
                *x += value * y;
            }
        }
    }
}
