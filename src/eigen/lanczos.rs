//! Block Lanczos with thick restarts (Wu and Simon, SIAM J. Matrix Anal. Appl. 22, 602 (2000);
//! recalled), in the orthogonal complement of locked vectors.
//!
//! With V the basis, T = <V, H V> and Q the residual block, H V = V T + Q B on the last block.
//! The residual norm of the Ritz vector V y is then |B y_last|, without touching vectors.

use super::filter::Filter;
use super::orthogonal::{Purge, fill_random, orthonormalize, rotate};
use super::ritz::Ritz;
use crate::dense::eigh;
use crate::error::{Error, Result};
use crate::linear_operator::LinearOperator;
use crate::memory;
use crate::progress::{Monitor, Progress};
use crate::scalar::Scalar;
use ndarray::{Array2, ArrayView2, ArrayViewMut2, Axis, s};
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use std::ops::Range;

/// Weight of the random vector that joins given starts: it must reach what they do not contain.
const RANDOM_PART: f64 = 0.01;
/// Ritz pairs lag behind by at most the size of the basis over this.
const RITZ_INTERVAL: usize = 16;

/// The basis and its projected problem. Rows in memory: locked, Krylov, residual block.
pub(super) struct BlockLanczos<'a, T: Scalar> {
    operator: &'a dyn LinearOperator<T>,
    /// What stands in the operator's place, if anything.
    filter: Option<Filter<T>>,
    dimension: usize,
    storage: Vec<T>,
    /// Vectors left alone at the front.
    pub locked: usize,
    /// Krylov rows, the active block (the last `active` of them) included.
    pub size: usize,
    active: usize,
    /// First Krylov row that the next images overlap with.
    first_coupled: usize,
    projected: Array2<T>,
    /// B, one row for each row of the residual block.
    coupling: Array2<T>,
    /// The latest Ritz pairs.
    pub ritz: Ritz<T>,
    /// Whether they are those of the whole basis.
    fresh: bool,
    /// Estimate from below of the norm of the operator.
    pub scale: f64,
    /// The same of the filter.
    norm: f64,
    /// Products with the operator so far.
    pub products: usize,
    /// The latest report.
    pub latest: Progress,
    /// Relative residual norm to be reached: overlaps in the basis must not spoil it.
    accuracy: f64,
    generator: ChaCha8Rng,
}

impl<'a, T: Scalar> BlockLanczos<'a, T> {
    /// Nothing in memory yet; `rows` is the number of rows to reserve, `accuracy` the residual
    /// norm to be reached.
    ///
    /// # Errors
    /// [`Error::Memory`] if the reservation fails.
    pub fn new(
        operator: &'a dyn LinearOperator<T>,
        rows: usize,
        accuracy: f64,
        seed: u64,
    ) -> Result<Self> {
        let dimension = operator.dimension();
        let mut storage = Vec::new();
        let length = rows.saturating_mul(dimension);
        storage
            .try_reserve_exact(length)
            .map_err(|_| Error::Memory {
                what: format!("a basis of {rows} vectors"),
                required: length as u128 * size_of::<T>() as u128,
                available: 0,
            })?;
        memory::prefer_large_pages(&mut storage);
        Ok(BlockLanczos {
            operator,
            filter: None,
            dimension,
            storage,
            locked: 0,
            size: 0,
            active: 0,
            first_coupled: 0,
            projected: Array2::zeros((0, 0)),
            coupling: Array2::zeros((0, 0)),
            ritz: Ritz::empty(),
            fresh: false,
            scale: 0.0,
            norm: 0.0,
            products: 0,
            latest: Progress {
                stage: "levels",
                done: 0,
                total: 0,
                products: 0,
                residual: f64::INFINITY,
            },
            accuracy,
            generator: ChaCha8Rng::seed_from_u64(seed),
        })
    }

    /// Rows of the basis, locked and Krylov ones.
    pub fn rows(&self) -> usize {
        self.locked + self.size
    }

    /// Rows in the residual block.
    pub fn residual_width(&self) -> usize {
        self.coupling.nrows()
    }

    /// Whether locked and Krylov vectors span the whole space.
    pub fn exhausted(&self) -> bool {
        self.rows() == self.dimension
    }

    /// The first `rows` rows, and the `extra` ones after them for writing.
    pub fn split(
        &mut self,
        rows: usize,
        extra: usize,
    ) -> (ArrayView2<'_, T>, ArrayViewMut2<'_, T>) {
        let (n, total) = (self.dimension, rows + extra);
        if self.storage.len() < total * n {
            self.storage.reserve_exact(total * n - self.storage.len());
            memory::prefer_large_pages(&mut self.storage);
            self.storage.resize(total * n, T::zero());
        }
        let (head, tail) = self.storage.split_at_mut(rows * n);
        let head = ArrayView2::from_shape((rows, n), head).expect("whole rows");
        let tail = &mut tail[..extra * n];
        let tail = ArrayViewMut2::from_shape((extra, n), tail).expect("whole rows");
        (head, tail)
    }

    /// Begins anew in the complement of the first `locked` rows, with `width` random rows from
    /// `generator`; the first of them is mixed with the sum of the rows of `start`.
    pub fn begin(
        &mut self,
        locked: usize,
        width: usize,
        start: Option<ArrayView2<'_, T>>,
        mut generator: ChaCha8Rng,
    ) -> Result<()> {
        let (basis, mut block) = self.split(locked, width);
        for row in block.rows_mut() {
            fill_random(row, &mut generator);
        }
        let mut first = block.row_mut(0);
        for given in start.iter().flat_map(|start| start.rows()) {
            let norm = given.iter().map(|x| x.abs_sqr()).sum::<f64>().sqrt();
            let weight = T::from_real(if norm > 0.0 {
                1.0 / (RANDOM_PART * norm)
            } else {
                0.0
            });
            first.zip_mut_with(&given, |x, &y| *x += weight * y);
        }
        let purge = Purge {
            first_expected: 0,
            noise: 1e-10,
            overlap: 0.0,
        };
        let split = orthonormalize(basis, block, &purge, &mut generator)?;
        self.locked = locked;
        self.start_over(split.outside.nrows());
        Ok(())
    }

    /// Applies the operator to the active block and, unless they lag little behind, brings the
    /// Ritz pairs up to date.
    ///
    /// # Errors
    /// Those of [`multiply`](Self::multiply); the Ritz pairs are then still those of before.
    pub fn step(&mut self, monitor: &mut Monitor<'_>) -> Result<()> {
        let (rows, active, locked) = (self.rows(), self.active, self.locked);
        self.multiply(rows - active..rows, rows, monitor)?;
        let purge = Purge {
            first_expected: if locked > 0 { 0 } else { self.first_coupled },
            noise: 16.0 * f64::EPSILON * self.norm(),
            // levels may be a hundred times smaller than the norm that multiplies an overlap
            overlap: 5e-4 * self.accuracy,
        };
        let mut generator = self.generator.clone();
        let (basis, image) = self.split(rows, active);
        let split = orthonormalize(basis, image, &purge, &mut generator)?;
        self.generator = generator;
        self.project(&split.inside.slice(s![locked.., ..]).to_owned());
        self.coupling = split.outside;
        self.fresh = false;
        // in a large basis the projected problem costs as much as a product
        let due = self.size >= self.ritz.images.len() + self.size / RITZ_INTERVAL;
        if due || self.coupling.nrows() == 0 || self.exhausted() {
            self.refresh()?;
        }
        Ok(())
    }

    /// Overwrites the rows from `to` on with the images of the rows `from`, all before them.
    ///
    /// # Errors
    /// What the operator returns; [`Error::Interrupted`] if the monitor, called between products
    /// with the latest report, says so.
    pub fn multiply(
        &mut self,
        from: Range<usize>,
        to: usize,
        monitor: &mut Monitor<'_>,
    ) -> Result<()> {
        let (operator, mut filter) = (self.operator, self.filter.take());
        let (before, latest) = (self.products, self.latest);
        let (rows, image) = self.split(to, from.len());
        let block = rows.slice(s![from.clone(), ..]);
        let done = match &mut filter {
            Some(filter) => filter.apply(operator, block, image, &mut |done| {
                monitor(&Progress {
                    products: before + done,
                    ..latest
                })
            }),
            None => operator.apply(block, image),
        };
        self.filter = filter;
        done?;
        self.products += from.len() * self.cost();
        Ok(())
    }

    /// Products with the operator for one row.
    pub fn cost(&self) -> usize {
        self.filter.as_ref().map_or(1, Filter::degree)
    }

    /// The filter in use.
    pub fn filter(&self) -> Option<&Filter<T>> {
        self.filter.as_ref()
    }

    /// Estimate from below of the norm of the operator or its filter.
    pub fn norm(&self) -> f64 {
        match self.filter {
            Some(_) => self.norm,
            None => self.scale,
        }
    }

    /// Whether the Ritz pairs are those of the whole basis.
    pub fn fresh(&self) -> bool {
        self.fresh
    }

    /// Brings the Ritz pairs up to date.
    pub fn refresh(&mut self) -> Result<()> {
        if !self.fresh && self.projected.nrows() == self.size {
            self.update_ritz()?;
            self.fresh = true;
        }
        Ok(())
    }

    /// Enters the coefficients of the active block into the projected matrix.
    fn project(&mut self, inside: &Array2<T>) {
        let (size, done) = (self.size, self.size - self.active);
        let mut projected = Array2::zeros((size, size));
        projected
            .slice_mut(s![..done, ..done])
            .assign(&self.projected);
        for ((i, a), &value) in inside.indexed_iter() {
            let j = done + a;
            if i < done {
                projected[[i, j]] = value;
                projected[[j, i]] = value.conj();
            } else {
                projected[[i, j]] += value * 0.5;
                projected[[j, i]] += value.conj() * 0.5;
            }
        }
        self.projected = projected;
    }

    fn update_ritz(&mut self) -> Result<()> {
        let eigen = eigh(self.projected.view())?;
        let last = eigen.vectors.slice(s![self.size - self.active.., ..]);
        let residuals = self.coupling.dot(&last);
        let norm = |column: ndarray::ArrayView1<'_, T>| {
            column.iter().map(|x| x.abs_sqr()).sum::<f64>().sqrt()
        };
        let extreme = eigen
            .values
            .iter()
            .fold(0.0, |top: f64, v| top.max(v.abs()));
        let images = eigen.values.to_vec();
        let mut values = images.clone();
        let mut residuals: Vec<f64> = residuals.columns().into_iter().map(norm).collect();
        match &self.filter {
            Some(filter) => {
                self.norm = self.norm.max(extreme);
                values = images.iter().map_while(|&x| filter.energy(x)).collect();
                for (k, residual) in residuals[..values.len()].iter_mut().enumerate() {
                    *residual /= filter.slope(values[k], images[k]);
                }
            }
            None => self.scale = self.scale.max(extreme),
        }
        residuals.truncate(values.len());
        self.ritz = Ritz {
            images,
            values,
            residuals,
            coefficients: eigen.vectors,
        };
        Ok(())
    }

    /// Goes on with another filter, or none, from the sum of the `keep` lowest Ritz vectors.
    pub fn change_filter(&mut self, filter: Option<Filter<T>>, keep: usize) {
        let chosen = self.ritz.coefficients.slice(s![.., ..keep]);
        let sum = chosen.sum_axis(Axis(1)) * T::from_real(1.0 / (keep as f64).sqrt());
        let ritz = self.ritz.mean(keep);
        let (_, krylov) = self.split(self.locked, self.size);
        rotate(krylov, sum.insert_axis(Axis(1)).view());
        self.filter = filter;
        self.norm = 0.0;
        self.start_over(1);
        self.ritz = ritz;
    }

    /// Goes on without the filter, with nothing but locked rows.
    pub fn drop_filter(&mut self) {
        self.filter = None;
    }

    /// The first `size` Krylov rows, orthonormal, are all there is.
    fn start_over(&mut self, size: usize) {
        self.size = size;
        self.active = size;
        self.first_coupled = 0;
        self.projected = Array2::zeros((0, 0));
        self.coupling = Array2::zeros((0, size));
        self.ritz = Ritz::empty();
        self.fresh = false;
    }

    /// Makes the residual block the active one.
    pub fn extend(&mut self) {
        self.first_coupled = self.size - self.active;
        self.active = self.residual_width();
        self.size += self.active;
    }

    /// Keeps the `keep` lowest Ritz vectors and makes the residual block the active one.
    pub fn restart(&mut self, keep: usize) {
        let (locked, size, n) = (self.locked, self.size, self.dimension);
        let chosen = self.ritz.coefficients.slice(s![.., ..keep]).to_owned();
        let (_, krylov) = self.split(locked, size);
        rotate(krylov, chosen.view());
        let (from, width) = ((locked + size) * n, self.residual_width());
        self.storage
            .copy_within(from..from + width * n, (locked + keep) * n);
        self.ritz.images.truncate(keep);
        self.ritz.values.truncate(keep);
        self.ritz.residuals.truncate(keep);
        let levels = self.ritz.images.iter().map(|&value| T::from_real(value));
        self.projected = Array2::from_diag(&levels.collect::<ndarray::Array1<T>>());
        self.ritz.coefficients = Array2::eye(keep);
        self.first_coupled = 0;
        self.active = width;
        self.size = keep + width;
    }

    /// Replaces all rows by combinations of locked rows and Ritz vectors, given by their number
    /// (locked first); they become the first rows and nothing is active.
    pub fn collect(&mut self, chosen: &[usize]) {
        let (locked, found) = (self.locked, self.ritz.coefficients.nrows());
        let mut coefficients = Array2::zeros((locked + found, chosen.len()));
        for (column, &origin) in chosen.iter().enumerate() {
            if origin < locked {
                coefficients[[origin, column]] = T::one();
            } else {
                let vector = self.ritz.coefficients.column(origin - locked);
                coefficients.slice_mut(s![locked.., column]).assign(&vector);
            }
        }
        let (_, rows) = self.split(0, locked + found);
        rotate(rows, coefficients.view());
        self.locked = chosen.len();
        self.size = 0;
        self.active = 0;
        self.ritz = Ritz::empty();
    }

    /// The first `rows` rows as an array, without copying.
    pub fn into_rows(mut self, rows: usize) -> Array2<T> {
        self.storage.resize(rows * self.dimension, T::zero());
        self.storage.shrink_to_fit();
        Array2::from_shape_vec((rows, self.dimension), self.storage).expect("whole rows")
    }
}
