//! Lowest levels of Hermitian operators.
