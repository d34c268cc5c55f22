//! Interactions and Hamiltonians.
