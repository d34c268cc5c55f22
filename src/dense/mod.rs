//! Small dense linear algebra: the only place that calls LAPACK or the product kernel.
//!
//! LAPACK comes from the system's OpenBLAS (linked through `ndarray-linalg`) and serves small
//! Hermitian eigenproblems; large products go through [`multiply`].

mod eigh;
mod product;

pub use eigh::{DenseEigen, eigh, eigh_lowest, single_threaded_blas};
pub use product::{Conjugate, Threads, multiply};
