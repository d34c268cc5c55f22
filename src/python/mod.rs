//! The binding: the only place that knows Python.
//!
//! Every kernel goes through one door ([`door::enter`]): it releases the interpreter, runs the
//! kernel, lets Ctrl-C through and turns errors into the classes of `fockhull.errors`.
//! Arguments arrive as arrays of float64 or complex128, converted visibly in Python.

mod arrays;
mod door;
mod hamiltonian;
mod interaction;
mod levels;
mod polytope;
mod sector;

use pyo3::prelude::*;

/// The compiled part of `fockhull`; its classes are wrapped by the Python modules.
#[pymodule]
mod _core {
    #[pymodule_export]
    use super::hamiltonian::Hamiltonian;
    #[pymodule_export]
    use super::interaction::Interaction;
    #[pymodule_export]
    use super::levels::{
        Levels, checked_weights, density_matrices, lowest_levels, spin_squared,
        transition_density_matrices,
    };
    #[pymodule_export]
    use super::polytope::{ExclusionPolytope, Inequality, LineUps, Projections};
    #[pymodule_export]
    use super::sector::Sector;
    use super::*;

    #[pymodule_init]
    fn init(module: &Bound<'_, PyModule>) -> PyResult<()> {
        module.add("__version__", env!("CARGO_PKG_VERSION"))
    }
}
