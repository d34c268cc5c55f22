//! What is read off state vectors: one-body density matrices gamma_pq = <a+_q a_p> by partial
//! traces, those between two states, and the total spin.

mod one_body;
mod spin;
mod split;
mod transition;

pub use one_body::state_density_matrices;
pub use spin::spin_squared;
pub use transition::transition_density_matrices;
