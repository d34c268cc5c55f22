//! Interactions and Hamiltonians.
//!
//! [`Interaction`] holds what the caller gave, validated; `ModeTerms` brings it to normal
//! order for one kind of particles; products are done by a stored matrix or row by row for
//! spinless particles, and through the product structure for spin-1/2.

mod buffers;
mod coupling;
mod density_coupling;
mod hamiltonian;
mod hops;
mod interaction;
mod lanes;
mod modes;
mod parts;
mod spaces;
mod spin_half;
mod split;
#[cfg(test)]
mod split_tests;
mod stored;
mod strings;
mod symmetry;
mod terms;
mod tile;
mod transpose;
mod walker;

pub use hamiltonian::{Hamiltonian, MemoryEstimate};
pub use hops::{Hop, HopTable};
pub use interaction::{Entry, Interaction};
pub use spaces::HalfSpaces;
pub use stored::SparseMatrix;
pub use symmetry::TensorOrder;
pub use walker::{ModeSpace, Walker};
