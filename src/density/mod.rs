//! Partial traces to one-body density matrices.
