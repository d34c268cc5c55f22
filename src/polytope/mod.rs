//! The exclusion polytope.
