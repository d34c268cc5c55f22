//! The trait that the eigensolver knows and the Hamiltonian fulfils.

use crate::error::Result;
use crate::scalar::Scalar;
use ndarray::{Array1, ArrayView2, ArrayViewMut2, Zip};

/// One step of a three-term recurrence, factor (H - shift) x - subtrahend.
#[derive(Debug, Clone, Copy)]
pub struct Recurrence<'a, T> {
    /// What the product is multiplied by.
    pub factor: f64,
    /// What is subtracted from the operator.
    pub shift: f64,
    /// What is subtracted from the product.
    pub subtrahend: Subtrahend<ArrayView2<'a, T>>,
}

/// What a step of a recurrence subtracts, with B for a block, or a part of one.
#[derive(Debug, Clone, Copy)]
pub enum Subtrahend<B> {
    /// Nothing.
    Nothing,
    /// What the result overwrites.
    Overwritten,
    /// Another block.
    Block(B),
}

impl<B> Subtrahend<B> {
    /// The same with the block borrowed.
    pub fn as_ref(&self) -> Subtrahend<&B> {
        match self {
            Subtrahend::Nothing => Subtrahend::Nothing,
            Subtrahend::Overwritten => Subtrahend::Overwritten,
            Subtrahend::Block(block) => Subtrahend::Block(block),
        }
    }

    /// The same with a part of the block.
    pub fn map<C>(self, part: impl FnOnce(B) -> C) -> Subtrahend<C> {
        match self {
            Subtrahend::Nothing => Subtrahend::Nothing,
            Subtrahend::Overwritten => Subtrahend::Overwritten,
            Subtrahend::Block(block) => Subtrahend::Block(part(block)),
        }
    }
}

/// A Hermitian linear map, applied to blocks of vectors.
///
/// A block is a `(vectors, dimension)` array in row-major order: each row is one vector,
/// contiguous in memory.
pub trait LinearOperator<T: Scalar>: Sync {
    /// Length of the vectors.
    fn dimension(&self) -> usize;

    /// Overwrites row k of `out` with the image of row k of `block`.
    ///
    /// # Errors
    /// Only [`crate::error::Error::Interrupted`], from operators that poll while they work.
    fn apply(&self, block: ArrayView2<'_, T>, out: ArrayViewMut2<'_, T>) -> Result<()>;

    /// Overwrites row k of `out` with the next member of a three-term recurrence, with row k of
    /// `block` as x. `scratch` is for use by operators that do not do this in one pass.
    ///
    /// # Errors
    /// Those of [`apply`](Self::apply).
    fn apply_recurrence(
        &self,
        block: ArrayView2<'_, T>,
        step: Recurrence<'_, T>,
        out: ArrayViewMut2<'_, T>,
        scratch: &mut Vec<T>,
    ) -> Result<()> {
        recurrence_by_product(self, block, step, out, scratch)
    }

    /// Whether a product takes much longer than reading a few dozen vectors. Solvers then save
    /// products rather than passes over their basis.
    fn has_costly_products(&self) -> bool {
        false
    }

    /// The diagonal matrix elements, real since the map is Hermitian.
    fn diagonal(&self) -> Array1<f64>;
}

/// A step of a recurrence for operators that know products only.
///
/// # Errors
/// Those of [`LinearOperator::apply`].
pub fn recurrence_by_product<T: Scalar>(
    operator: &(impl LinearOperator<T> + ?Sized),
    block: ArrayView2<'_, T>,
    step: Recurrence<'_, T>,
    mut out: ArrayViewMut2<'_, T>,
    scratch: &mut Vec<T>,
) -> Result<()> {
    let length = block.len();
    scratch.resize(length.max(scratch.len()), T::zero());
    let image = ArrayViewMut2::from_shape(block.raw_dim(), &mut scratch[..length]);
    let mut image = image.expect("as many numbers as the block has");
    operator.apply(block, image.view_mut())?;
    let Recurrence { factor, shift, .. } = step;
    let shifted = |image: T, x: T| (image - x * shift) * factor;
    let zip = Zip::from(&mut out).and(&image).and(&block);
    match step.subtrahend {
        Subtrahend::Nothing => zip.par_for_each(|out, &image, &x| *out = shifted(image, x)),
        Subtrahend::Overwritten => {
            zip.par_for_each(|out, &image, &x| *out = shifted(image, x) - *out);
        }
        Subtrahend::Block(other) => zip
            .and(&other)
            .par_for_each(|out, &image, &x, &other| *out = shifted(image, x) - other),
    }
    Ok(())
}
