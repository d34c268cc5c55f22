//! Spin-1/2 fermions at fixed (up, down): H = H_up x 1 + 1 x H_down + coupling.
//!
//! A vector is a matrix with a row for each up configuration.

use super::buffers::Buffers;
use super::coupling::HopCoupling;
use super::density_coupling::DensityCoupling;
use super::interaction::Interaction;
use super::modes::ModeOperator;
use super::stored::RowSink;
use super::strings::{Diagonal, StringMatrix};
use super::terms::ModeTerms;
use super::tile::with_tile_width;
use super::walker::ModeSpace;
use crate::dense::{Conjugate, Threads, multiply};
use crate::error::Result;
use crate::linear_operator::Recurrence;
use crate::memory;
use crate::scalar::Scalar;
use ndarray::{Array1, ArrayView2, ArrayView3, ArrayViewMut2, Axis, s};
use rayon::prelude::*;
use std::ops::Range;

/// H on the product of up and down configurations.
#[derive(Debug, Clone)]
pub struct SpinHalfOperator<T> {
    up: StringMatrix<T>,
    down: StringMatrix<T>,
    density: Option<DensityCoupling>,
    hops: Option<HopCoupling<T>>,
    buffers: Buffers<T>,
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
            Some(matrix) => Some(DensityCoupling::new(matrix, &up, &down)?),
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
            buffers: Buffers::default(),
        })
    }

    /// Whether opposite spins are coupled by more than their densities.
    pub fn has_hop_coupling(&self) -> bool {
        self.hops.is_some()
    }

    fn shape(&self) -> (usize, usize) {
        (self.up.sparse.rows(), self.down.sparse.rows())
    }

    /// Overwrites row k of `out` with a step of a recurrence from row k of `block`.
    ///
    /// One vector after the other: what the first pass reads is then still in cache for the
    /// second.
    pub fn apply_recurrence(
        &self,
        block: ArrayView2<'_, T>,
        step: Recurrence<'_, T>,
        mut out: ArrayViewMut2<'_, T>,
    ) {
        let (up, down) = self.shape();
        let (factor, buffers) = (step.factor, &self.buffers);
        let diagonal = Diagonal {
            coupling: self.density.as_ref(),
            constant: -step.shift,
            factor,
        };
        let rows = block.rows().into_iter().zip(out.rows_mut());
        for (k, (vector, mut result)) in rows.enumerate() {
            let (Some(vector), Some(result)) = (vector.to_slice(), result.as_slice_mut()) else {
                continue;
            };
            let subtrahend = step
                .subtrahend
                .map(|block| block.slice_move(s![k, ..]).to_slice().unwrap_or_default());
            with_tile_width!(up, W => {
                let result = (&mut *result, subtrahend);
                self.down.apply_to_rows::<W>(diagonal, vector, result, buffers)
            });
            let (Ok(strings), Ok(mut result)) = (
                ArrayView2::from_shape((up, down), vector),
                ArrayViewMut2::from_shape((up, down), result),
            ) else {
                continue;
            };
            if let Some(dense) = &self.down.dense {
                add_product(factor, (strings, dense.t()), result.view_mut());
            }
            match &self.up.dense {
                Some(dense) => add_product(factor, (dense.view(), strings), result),
                None => with_tile_width!(down, W => {
                    self.up.add_to_columns::<W>(factor, vector, result, buffers)
                }),
            }
        }
        if let Some(hops) = &self.hops {
            hops.add_to(factor, block, out, down);
        }
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

/// result += factor left right
fn add_product<T: Scalar>(
    factor: f64,
    (left, right): (ArrayView2<'_, T>, ArrayView2<'_, T>),
    result: ArrayViewMut2<'_, T>,
) {
    multiply(
        T::from_real(factor),
        (left, Conjugate::No),
        (right, Conjugate::No),
        T::one(),
        result,
        Threads::All,
    );
}
