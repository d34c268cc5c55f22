//! The trait that the eigensolver knows and the Hamiltonian fulfils.

use crate::error::Result;
use crate::scalar::Scalar;
use ndarray::{Array1, ArrayView2, ArrayViewMut2};

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

    /// Whether a product takes much longer than reading a few dozen vectors. Solvers then save
    /// products rather than passes over their basis.
    fn has_costly_products(&self) -> bool {
        false
    }

    /// The diagonal matrix elements, real since the map is Hermitian.
    fn diagonal(&self) -> Array1<f64>;
}
