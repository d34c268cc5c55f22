//! Spin-1/2 fermions at fixed (up, down): H = H_up x 1 + 1 x H_down + coupling.
//!
//! A vector is a matrix with a row for each up configuration. The down part and the
//! density-density coupling work on a tile of rows at a time, transposed so that neighbouring
//! numbers belong to different rows; the up part works on tiles of columns. Each reads the
//! vector once, and a tile stays in cache.

use super::coupling::HopCoupling;
use super::interaction::Interaction;
use super::modes::ModeOperator;
use super::stored::{RowSink, SparseMatrix};
use super::terms::ModeTerms;
use super::tile::{Lane, multiply_tile, transpose_in, transpose_out, with_tile_width};
use super::walker::ModeSpace;
use crate::dense::{Conjugate, Threads, multiply};
use crate::error::Result;
use crate::memory;
use crate::scalar::Scalar;
use ndarray::{Array1, Array2, ArrayView2, ArrayView3, ArrayViewMut2, Axis, s};
use pulp::NullaryFnOnce;
use rayon::prelude::*;
use std::ops::Range;

/// Above this fraction of non-zero elements a one-spin matrix is multiplied as a dense one,
const DENSE_FILL: f64 = 0.1;
/// unless it has more rows than this.
const DENSE_ROWS: usize = 4096;

/// H on the product of up and down configurations.
#[derive(Debug, Clone)]
pub struct SpinHalfOperator<T> {
    up: StringMatrix<T>,
    down: StringMatrix<T>,
    density: Option<DensityCoupling>,
    hops: Option<HopCoupling<T>>,
}

/// The part of H that acts on one spin.
#[derive(Debug, Clone)]
struct StringMatrix<T> {
    sparse: SparseMatrix<T>,
    /// The same matrix, where a dense product is faster.
    dense: Option<Array2<T>>,
}

/// sum_pq V_pq n(up)_p n(down)_q.
#[derive(Debug, Clone)]
struct DensityCoupling {
    matrix: Array2<f64>,
    up: Occupied,
    down: Occupied,
}

/// Occupied modes of every configuration.
#[derive(Debug, Clone)]
struct Occupied {
    particles: usize,
    modes: Vec<u32>,
}

impl Occupied {
    fn new(space: &ModeSpace) -> Result<Self> {
        let mut modes = Vec::with_capacity(space.dimension() * space.particles());
        let mut walker = space.walker(0)?;
        for _ in 0..space.dimension() {
            modes.extend_from_slice(walker.modes());
            walker.advance();
        }
        Ok(Occupied {
            particles: space.particles(),
            modes,
        })
    }

    #[inline]
    fn of(&self, configuration: usize) -> &[u32] {
        &self.modes[configuration * self.particles..(configuration + 1) * self.particles]
    }
}

impl DensityCoupling {
    #[inline]
    fn element(&self, up: usize, down: usize) -> f64 {
        let down = self.down.of(down);
        let row = |p: u32| self.matrix.row(p as usize);
        self.up
            .of(up)
            .iter()
            .map(|&p| down.iter().map(|&q| row(p)[q as usize]).sum::<f64>())
            .sum()
    }

    /// What a down particle in each mode feels from the up configurations of a tile.
    fn potentials<const W: usize>(&self, first: usize, rows: usize) -> Vec<[f64; W]> {
        let mut potentials = vec![[0.0; W]; self.matrix.nrows()];
        for offset in 0..rows {
            for &p in self.up.of(first + offset) {
                for (potential, &v) in potentials.iter_mut().zip(self.matrix.row(p as usize)) {
                    potential[offset] += v;
                }
            }
        }
        potentials
    }

    /// The coupling of one down configuration with the up configurations of a tile.
    #[inline(always)]
    fn act<T: Scalar, const W: usize>(
        &self,
        potentials: &[[f64; W]],
        down: usize,
        x: &[T; W],
    ) -> [T; W] {
        let mut total = [0.0; W];
        for &q in self.down.of(down) {
            let potential = &potentials[q as usize];
            for k in 0..W {
                total[k] += potential[k];
            }
        }
        let mut result = [T::zero(); W];
        for k in 0..W {
            result[k] = x[k] * total[k];
        }
        result
    }
}

impl<T: Scalar> StringMatrix<T> {
    fn new(operator: &ModeOperator<T>) -> Result<Self> {
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
}

impl<T: Scalar> SpinHalfOperator<T> {
    /// Prepares the parts from h `(2, d, d)` and the interaction.
    ///
    /// # Errors
    /// [`crate::error::Error::Memory`] if the tables do not fit.
    pub fn new(
        one_body: ArrayView3<'_, T>,
        interaction: Option<&Interaction<T>>,
        spaces: [ModeSpace; 2],
    ) -> Result<Self> {
        let [up, down] = spaces;
        let part = |spin: usize, space: &ModeSpace| {
            let terms = ModeTerms::new(one_body.index_axis(Axis(0), spin), interaction, true);
            StringMatrix::new(&ModeOperator::new(space.clone(), terms))
        };
        let density = match interaction.and_then(Interaction::density_density) {
            Some(matrix) => Some(DensityCoupling {
                matrix: matrix.clone(),
                up: Occupied::new(&up)?,
                down: Occupied::new(&down)?,
            }),
            None => None,
        };
        let needs_hops = |w: &&Interaction<T>| w.tensor().is_some() || w.has_entries();
        let hops = match interaction.filter(needs_hops) {
            Some(interaction) => {
                memory::require("the hop tables", HopCoupling::<T>::bytes(&up, &down))?;
                Some(HopCoupling::new(interaction, &up, &down)?)
            }
            None => None,
        };
        Ok(SpinHalfOperator {
            up: part(0, &up)?,
            down: part(1, &down)?,
            density,
            hops,
        })
    }

    /// Whether opposite spins are coupled by more than their densities.
    pub fn has_hop_coupling(&self) -> bool {
        self.hops.is_some()
    }

    fn shape(&self) -> (usize, usize) {
        (self.up.sparse.rows(), self.down.sparse.rows())
    }

    /// Overwrites row k of `out` with the product with row k of `block`.
    ///
    /// One vector after the other: what the first pass reads is then still in cache for the
    /// second.
    pub fn apply(&self, block: ArrayView2<'_, T>, mut out: ArrayViewMut2<'_, T>) {
        let (up, down) = self.shape();
        for (vector, mut result) in block.rows().into_iter().zip(out.rows_mut()) {
            let (Some(vector), Some(result)) = (vector.to_slice(), result.as_slice_mut()) else {
                continue;
            };
            with_tile_width!(up, W => self.apply_down::<W>(vector, result));
            if let (Ok(vector), Ok(result)) = (
                ArrayView2::from_shape((up, down), vector),
                ArrayViewMut2::from_shape((up, down), result),
            ) {
                self.add_dense_down(vector, result);
            }
            if let (Ok(vector), Ok(result)) = (
                ArrayView2::from_shape((up, down), vector),
                ArrayViewMut2::from_shape((up, down), result),
            ) {
                match &self.up.dense {
                    Some(dense) => add_product((dense.view(), vector), result),
                    None => with_tile_width!(down, W => self.add_up::<W>(vector, result)),
                }
            }
        }
        if let Some(hops) = &self.hops {
            hops.add_to(block, out, down);
        }
    }

    /// The sparse down part and the density coupling, a tile of rows at a time, transposed.
    fn apply_down<const W: usize>(&self, vector: &[T], result: &mut [T]) {
        let width = self.down.sparse.rows();
        let arch = pulp::Arch::new();
        result
            .par_chunks_mut(W * width)
            .zip(vector.par_chunks(W * width))
            .enumerate()
            .for_each_init(
                || (vec![[T::zero(); W]; width], vec![[T::zero(); W]; width]),
                |(source, target), (tile, (result, vector))| {
                    let lanes = vector.chunks(width).enumerate();
                    let lanes: Vec<Lane<'_, T>> = lanes.map(|(k, row)| (k, 1.0, row)).collect();
                    let coupling = self.density.as_ref();
                    arch.dispatch(DownTile::<T, W> {
                        matrix: self.down.dense.is_none().then_some(&self.down.sparse),
                        coupling: coupling.map(|c| (c, c.potentials(tile * W, lanes.len()))),
                        lanes,
                        rows: result.chunks_mut(width).collect(),
                        source,
                        target,
                    });
                },
            );
    }

    fn add_dense_down(&self, vector: ArrayView2<'_, T>, result: ArrayViewMut2<'_, T>) {
        if let Some(dense) = &self.down.dense {
            add_product((vector, dense.t()), result);
        }
    }

    /// The sparse up part, a tile of columns at a time.
    fn add_up<const W: usize>(&self, vector: ArrayView2<'_, T>, mut result: ArrayViewMut2<'_, T>) {
        let height = self.up.sparse.rows();
        let arch = pulp::Arch::new();
        result
            .axis_chunks_iter_mut(Axis(1), W)
            .into_par_iter()
            .enumerate()
            .for_each_init(
                || (vec![[T::zero(); W]; height], vec![[T::zero(); W]; height]),
                |(source, target), (tile, result)| {
                    let columns = tile * W..tile * W + result.ncols();
                    arch.dispatch(UpTile::<T, W> {
                        matrix: &self.up.sparse,
                        vector: vector.slice(s![.., columns]),
                        result,
                        source,
                        target,
                    });
                },
            );
    }

    /// Pushes the rows of a range.
    pub fn fill_rows(&self, rows: Range<usize>, sink: &mut RowSink<T>) {
        let width = self.down.sparse.rows();
        let mut elements = Vec::new();
        for row in rows {
            let (up, down) = (row / width, row % width);
            let mut push = |i: usize, j: usize, value: T| {
                elements.push(((i * width + j) as u32, value));
            };
            let (columns, values) = self.up.sparse.row(up);
            for (&i, &value) in columns.iter().zip(values) {
                push(i as usize, down, value);
            }
            let (columns, values) = self.down.sparse.row(down);
            for (&j, &value) in columns.iter().zip(values) {
                push(up, j as usize, value);
            }
            // the diagonal is there even where it is zero
            let density = self.density.as_ref().map_or(0.0, |c| c.element(up, down));
            push(up, down, T::from_real(density));
            if let Some(hops) = &self.hops {
                hops.visit_row(up, down, push);
            }
            sink.push_row(&mut elements);
        }
    }

    /// Diagonal matrix elements.
    pub fn diagonal(&self) -> Array1<f64> {
        let (up, down) = self.shape();
        let (of_up, of_down) = (self.up.sparse.diagonal(), self.down.sparse.diagonal());
        let element = |index: usize| {
            let (i, j) = (index / down, index % down);
            let density = self.density.as_ref().map_or(0.0, |c| c.element(i, j));
            let mut sum = of_up[i] + of_down[j] + density;
            if let Some(hops) = &self.hops {
                sum += hops.diagonal(i, j);
            }
            sum
        };
        (0..up * down)
            .into_par_iter()
            .map(element)
            .collect::<Vec<_>>()
            .into()
    }
}

/// A tile of rows: down part and density coupling. (A struct, not a closure: only then the work
/// is compiled for the instruction set found at run time.)
struct DownTile<'a, T, const W: usize> {
    matrix: Option<&'a SparseMatrix<T>>,
    coupling: Option<(&'a DensityCoupling, Vec<[f64; W]>)>,
    lanes: Vec<Lane<'a, T>>,
    rows: Vec<&'a mut [T]>,
    source: &'a mut [[T; W]],
    target: &'a mut [[T; W]],
}

impl<T: Scalar, const W: usize> NullaryFnOnce for DownTile<'_, T, W> {
    type Output = ();

    #[inline(always)]
    fn call(mut self) {
        transpose_in(&self.lanes, self.source);
        let coupling = &self.coupling;
        multiply_tile(
            self.matrix,
            self.source,
            self.target,
            #[inline(always)]
            |i, x| match coupling {
                Some((coupling, potentials)) => coupling.act(potentials, i, x),
                None => [T::zero(); W],
            },
        );
        transpose_out(self.target, &mut self.rows);
    }
}

/// A tile of columns: up part.
struct UpTile<'a, T, const W: usize> {
    matrix: &'a SparseMatrix<T>,
    vector: ArrayView2<'a, T>,
    result: ArrayViewMut2<'a, T>,
    source: &'a mut [[T; W]],
    target: &'a mut [[T; W]],
}

impl<T: Scalar, const W: usize> NullaryFnOnce for UpTile<'_, T, W> {
    type Output = ();

    #[inline(always)]
    fn call(mut self) {
        for (row, packed) in self.vector.rows().into_iter().zip(self.source.iter_mut()) {
            if let Some(row) = row.to_slice() {
                pack_lane(row, packed);
            }
        }
        multiply_tile(
            Some(self.matrix),
            self.source,
            self.target,
            #[inline(always)]
            |_, _| [T::zero(); W],
        );
        for (mut row, sums) in self.result.rows_mut().into_iter().zip(&*self.target) {
            if let Some(row) = row.as_slice_mut() {
                add_lane(row, sums);
            }
        }
    }
}

/// packed = row, as far as the row reaches
#[inline(always)]
fn pack_lane<T: Scalar, const W: usize>(row: &[T], packed: &mut [T; W]) {
    if let Ok(row) = <&[T; W]>::try_from(row) {
        *packed = *row;
    } else {
        packed[..row.len()].copy_from_slice(row);
    }
}

/// row += sums, as far as the row reaches
#[inline(always)]
fn add_lane<T: Scalar, const W: usize>(row: &mut [T], sums: &[T; W]) {
    if let Ok(row) = <&mut [T; W]>::try_from(&mut *row) {
        for k in 0..W {
            row[k] += sums[k];
        }
    } else {
        for (total, &sum) in row.iter_mut().zip(sums) {
            *total += sum;
        }
    }
}

/// result += left right
fn add_product<T: Scalar>(
    (left, right): (ArrayView2<'_, T>, ArrayView2<'_, T>),
    result: ArrayViewMut2<'_, T>,
) {
    multiply(
        T::one(),
        (left, Conjugate::No),
        (right, Conjugate::No),
        T::one(),
        result,
        Threads::All,
    );
}
