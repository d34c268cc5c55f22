//! Spinless particles in two groups of modes: H from the product structure of low and high
//! modes, for one-body terms and density couplings.
//!
//! Configurations with the same high part are neighbours in the colexicographic order: a
//! segment of the vector for each high part, as long as there are low parts with the remaining
//! particles. Segments with equally many low particles form a class, a matrix whose rows are
//! high parts. Hops within the low modes act along its rows, hops within the high modes between
//! its rows, hops across lead to the classes with one low particle more or less.

use super::modes::ModeOperator;
use super::spaces::HalfSpaces;
use super::stored::SparseMatrix;
use super::terms::ModeTerms;
use super::tile::{WIDE, add_tile_product, multiply_tile, with_tile_width};
use super::transpose::{Lane, transpose_in, transpose_out};
use super::walker::ModeSpace;
use crate::error::Result;
use crate::scalar::Scalar;
use ndarray::{Array1, Array2, ArrayView2, ArrayViewMut2};
use pulp::NullaryFnOnce;
use rayon::prelude::*;

/// H of one kind of particles, split into low and high modes.
#[derive(Debug, Clone)]
pub struct SplitOperator<T> {
    classes: Vec<Class<T>>,
    /// Couplings of a low mode (column) with a high mode (row).
    density: Array2<f64>,
    dimension: usize,
}

/// The configurations with a given number of low particles.
#[derive(Debug, Clone)]
struct Class<T> {
    /// Where the segment of each high part starts.
    segments: Vec<usize>,
    width: usize,
    low: SparseMatrix<T>,
    high: SparseMatrix<T>,
    /// Particles in the low modes of each low part, and in the high modes of each high part.
    low_occupations: Vec<Vec<(u32, f64)>>,
    high_occupations: Vec<Vec<(u32, f64)>>,
    crossings: Vec<Crossing<T>>,
}

/// Hops that create or annihilate a particle in one high mode, seen from the resulting class.
#[derive(Debug, Clone)]
struct Crossing<T> {
    /// Class hopped from.
    from: usize,
    /// For each high part: the one hopped from and the factor, if there is one.
    high: Vec<Option<(u32, f64)>>,
    /// What happens to the low parts: `(width of this class, width of the other)`.
    low: SparseMatrix<T>,
}

impl<T: Scalar> SplitOperator<T> {
    /// From the terms, which must be without pair hops, on `space`.
    ///
    /// # Errors
    /// [`crate::error::Error::TooManyConfigurations`] beyond 64-bit indices.
    pub fn new(space: &ModeSpace, terms: &ModeTerms<T>) -> Result<Self> {
        let halves = HalfSpaces::new(space)?;
        let classes = (0..halves.classes())
            .map(|class| Class::new(&halves, terms, class))
            .collect::<Result<Vec<_>>>()?;
        let (low, modes) = (halves.low_modes(), space.modes());
        let density =
            Array2::from_shape_fn((modes - low, low), |(p, q)| terms.density()[[q, low + p]]);
        Ok(SplitOperator {
            classes,
            density,
            dimension: space.dimension(),
        })
    }

    /// Diagonal matrix elements.
    pub fn diagonal(&self) -> Array1<f64> {
        let mut diagonal = Array1::zeros(self.dimension);
        for class in &self.classes {
            let (low, high) = (class.low.diagonal(), class.high.diagonal());
            for (row, &start) in class.segments.iter().enumerate() {
                let potential = self.potential(&class.high_occupations[row]);
                for (a, occupied) in class.low_occupations.iter().enumerate() {
                    let coupling: f64 = occupied
                        .iter()
                        .map(|&(q, n)| potential[q as usize] * n)
                        .sum();
                    diagonal[start + a] = low[a] + high[row] + coupling;
                }
            }
        }
        diagonal
    }

    /// What a particle in each low mode feels from a high part.
    fn potential(&self, high: &[(u32, f64)]) -> Vec<f64> {
        let mut potential = vec![0.0; self.density.ncols()];
        for &(p, n) in high {
            for (total, v) in potential.iter_mut().zip(self.density.row(p as usize)) {
                *total += n * v;
            }
        }
        potential
    }

    /// Overwrites row k of `out` with the product with row k of `block`.
    pub fn apply(&self, block: ArrayView2<'_, T>, mut out: ArrayViewMut2<'_, T>) {
        for (vector, mut result) in block.rows().into_iter().zip(out.rows_mut()) {
            if let (Some(vector), Some(result)) = (vector.to_slice(), result.as_slice_mut()) {
                self.apply_one(vector, result);
            }
        }
    }

    fn apply_one(&self, vector: &[T], result: &mut [T]) {
        let mut by_class = self.segments_of(result);
        let tasks: Vec<Task<'_, '_, T>> = self
            .classes
            .iter()
            .zip(&mut by_class)
            .flat_map(|(class, segments)| {
                let tile = tile_of(class.segments.len());
                segments
                    .chunks_mut(tile)
                    .enumerate()
                    .map(move |(k, rows)| Task {
                        class,
                        first: k * tile,
                        rows,
                    })
            })
            .collect();
        let widest = self
            .classes
            .iter()
            .map(|class| class.width)
            .max()
            .unwrap_or(0);
        let buffer = || vec![T::zero(); widest * WIDE];
        tasks.into_par_iter().for_each_init(
            || (buffer(), buffer()),
            |(source, target), task| {
                with_tile_width!(task.class.segments.len(), W => {
                    self.run::<W>(task, vector, source.as_chunks_mut().0, target.as_chunks_mut().0);
                });
            },
        );
    }

    /// The segments of a vector by class, in the order of the high parts.
    fn segments_of<'a>(&self, vector: &'a mut [T]) -> Vec<Vec<&'a mut [T]>> {
        let mut order: Vec<(usize, usize, usize)> = Vec::new();
        for (k, class) in self.classes.iter().enumerate() {
            order.extend(class.segments.iter().map(|&start| (start, k, class.width)));
        }
        order.sort_unstable();
        let mut by_class: Vec<Vec<&'a mut [T]>> = self.classes.iter().map(|_| Vec::new()).collect();
        let mut rest = vector;
        for (_, class, width) in order {
            let (segment, tail) = rest.split_at_mut(width);
            by_class[class].push(segment);
            rest = tail;
        }
        by_class
    }

    /// The rows of a tile: low part and couplings transposed, then the high part row by row.
    fn run<const W: usize>(
        &self,
        task: Task<'_, '_, T>,
        vector: &[T],
        source: &mut [[T; W]],
        target: &mut [[T; W]],
    ) {
        let range = task.first..task.first + task.rows.len();
        let potentials = self.potentials::<W>(&task.class.high_occupations[range]);
        pulp::Arch::new().dispatch(SplitTile {
            operator: self,
            task,
            vector,
            potentials,
            source,
            target,
        });
    }

    /// What a particle in each low mode feels from the high parts of a tile.
    fn potentials<const W: usize>(&self, high: &[Vec<(u32, f64)>]) -> Vec<[f64; W]> {
        let mut potentials = vec![[0.0; W]; self.density.ncols()];
        for (place, occupied) in high.iter().enumerate() {
            for (total, v) in potentials.iter_mut().zip(self.potential(occupied)) {
                total[place] = v;
            }
        }
        potentials
    }
}

/// Rows of one class that one task works out.
struct Task<'a, 'b, T> {
    class: &'a Class<T>,
    first: usize,
    rows: &'a mut [&'b mut [T]],
}

/// The work of a task. (A struct, not a closure: only then it is compiled for the instruction set
/// found at run time.)
struct SplitTile<'a, 'b, T, const W: usize> {
    operator: &'a SplitOperator<T>,
    task: Task<'a, 'b, T>,
    vector: &'a [T],
    potentials: Vec<[f64; W]>,
    source: &'a mut [[T; W]],
    target: &'a mut [[T; W]],
}

impl<T: Scalar, const W: usize> NullaryFnOnce for SplitTile<'_, '_, T, W> {
    type Output = ();

    #[inline(always)]
    fn call(self) {
        let (classes, vector) = (&self.operator.classes, self.vector);
        let (class, first, rows) = (self.task.class, self.task.first, self.task.rows);
        let range = first..first + rows.len();
        let target = &mut self.target[..class.width];
        let lanes = class.lanes(range.clone().map(|row| Some((row as u32, 1.0))), vector);
        let own = &mut self.source[..class.width];
        transpose_in(&lanes, own);
        let potentials = &self.potentials;
        multiply_tile(
            Some(&class.low),
            own,
            target,
            #[inline(always)]
            |a, x| coupled(potentials, &class.low_occupations[a], x),
        );
        for crossing in &class.crossings {
            let other = &classes[crossing.from];
            let lanes = other.lanes(crossing.high[range.clone()].iter().copied(), vector);
            if !lanes.is_empty() {
                let source = &mut self.source[..other.width];
                if lanes.len() < W {
                    source.fill([T::zero(); W]);
                }
                transpose_in(&lanes, source);
                add_tile_product(&crossing.low, source, target);
            }
        }
        transpose_out(target, rows);
        for (row, target) in range.zip(rows) {
            class.add_high::<W>(row, vector, target);
        }
    }
}

fn tile_of(rows: usize) -> usize {
    with_tile_width!(rows, W => W)
}

/// The density coupling of one low part with the high parts of a tile.
#[inline(always)]
fn coupled<T: Scalar, const W: usize>(
    potentials: &[[f64; W]],
    occupied: &[(u32, f64)],
    x: &[T; W],
) -> [T; W] {
    let mut total = [0.0; W];
    for &(q, n) in occupied {
        let potential = &potentials[q as usize];
        for k in 0..W {
            total[k] += n * potential[k];
        }
    }
    let mut result = [T::zero(); W];
    for k in 0..W {
        result[k] = x[k] * total[k];
    }
    result
}

impl<T: Scalar> Class<T> {
    fn new(halves: &HalfSpaces, terms: &ModeTerms<T>, class: usize) -> Result<Self> {
        let (low, high) = halves.spaces(class);
        let (range_low, range_high) = halves.ranges();
        Ok(Class {
            segments: halves.segments(class)?,
            width: low.dimension(),
            low: on_space(low, terms.within(range_low)),
            high: on_space(high, terms.within(range_high)),
            low_occupations: low.occupied()?,
            high_occupations: high.occupied()?,
            crossings: crossings(halves, terms, class)?,
        })
    }

    /// The segments of high parts, with factors, as vectors of a tile; the others are left out.
    fn lanes<'a>(
        &self,
        rows: impl Iterator<Item = Option<(u32, f64)>>,
        vector: &'a [T],
    ) -> Vec<Lane<'a, T>> {
        rows.enumerate()
            .filter_map(|(place, row)| {
                let (row, factor) = row?;
                let start = self.segments[row as usize];
                Some((place, factor, &vector[start..start + self.width]))
            })
            .collect()
    }

    /// Adds the hops and levels of the high modes to one row.
    #[inline(always)]
    fn add_high<const W: usize>(&self, row: usize, vector: &[T], target: &mut [T]) {
        let (columns, values) = self.high.row(row);
        for (chunk, target) in target.chunks_mut(W).enumerate() {
            let mut sum = [T::zero(); W];
            for (&from, &value) in columns.iter().zip(values) {
                let start = self.segments[from as usize] + chunk * W;
                let source = &vector[start..start + target.len()];
                if let Ok(source) = <&[T; W]>::try_from(source) {
                    for k in 0..W {
                        sum[k] += value * source[k];
                    }
                } else {
                    for (total, &x) in sum.iter_mut().zip(source) {
                        *total += value * x;
                    }
                }
            }
            for (x, total) in target.iter_mut().zip(sum) {
                *x += total;
            }
        }
    }
}

fn on_space<T: Scalar>(space: &ModeSpace, terms: ModeTerms<T>) -> SparseMatrix<T> {
    ModeOperator::new(space.clone(), terms)
        .to_sparse()
        .without_zeros()
}

/// Hops across that lead into a class.
fn crossings<T: Scalar>(
    halves: &HalfSpaces,
    terms: &ModeTerms<T>,
    class: usize,
) -> Result<Vec<Crossing<T>>> {
    let low_modes = halves.low_modes();
    let (low, high) = halves.spaces(class);
    let mut list = Vec::new();
    for p in 0..high.modes() {
        for creates_high in [true, false] {
            let Some(from) = halves.neighbour(class, creates_high) else {
                continue;
            };
            let (other_low, other_high) = halves.spaces(from);
            // <b', a'| h a+_p a_q |b, a> with p high and q low, or its adjoint
            let amplitude = |q: usize| {
                let value = terms.hop_amplitude(low_modes + p, q);
                if creates_high { value } else { value.conj() }
            };
            let passing = halves.passing_sign(class, creates_high);
            let matrix = low.ladder_matrix(other_low, creates_high, |q| amplitude(q) * passing)?;
            if matrix.values.is_empty() {
                continue;
            }
            list.push(Crossing {
                from,
                high: high.ladder_row(other_high, p, creates_high)?,
                low: matrix,
            });
        }
    }
    Ok(list)
}
