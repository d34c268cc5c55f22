//! Partial traces to one-body density matrices gamma_pq = <a+_q a_p>, and their natural
//! orbitals.

mod natural;
mod one_body;

pub use natural::{NaturalOrbitals, natural_orbitals};
pub use one_body::{ensemble_density_matrix, state_density_matrices};
