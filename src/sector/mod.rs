//! Many-particle sectors: their configurations, the ranking of these, and the lowest ones for
//! given one-particle energies.
//!
//! A configuration is written in one of two ways. *Occupations* count particles per mode; for
//! spin-1/2 there is a row per spin. *Positions* are a strictly increasing set: the occupied
//! modes of fermions, or mode + index of the sorted particles of bosons, so that one ranking
//! (colexicographic, the combinatorial number system) numbers both.

mod best_first;
mod bucket_sort;
mod configuration;
mod excitation_lists;
mod lowest;
mod particle_hole;
mod ranking;

pub use configuration::{Configurations, Sector};
pub use lowest::LowestConfigurations;
pub use ranking::{SubsetRanking, binomial};
