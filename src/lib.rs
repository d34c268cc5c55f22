//! Ensemble density-matrix functional theory on finite mode spaces.
//!
//! A Hamiltonian H = c + sum h_pq a+_p a_q + 1/2 sum v_pqrs a+_p a+_q a_s a_r acts on a sector
//! of fixed particle number. For weights w1 >= w2 >= ... >= wr > 0 with sum 1, the ensemble
//! energy is E_w(h) = sum_j w_j E_j (Gross, Oliveira, Kohn), the ensemble density matrix is
//! gamma_pq = sum_j w_j <a+_q a_p>_j, and its eigenvalues, the natural occupation numbers, lie
//! in the exclusion polytope
//! Sigma(w) = { n : `<h, n>` >= f_w(h) for all h }, f_w(h) = sum_j w_j eps_(j)(h),
//! where eps_(j)(h) is the j-th smallest configuration energy for one-particle energies h.
//!
//! The rooms, from the ground up; imports run downward only:
//!
//! | floor | rooms |
//! |---|---|
//! | ground | [`error`], [`scalar`], [`dense`], [`linear_operator`], [`memory`], [`progress`], [`weights`] |
//! | 1 | [`sector`]: configurations, their ranking, the lowest ones |
//! | 2 | [`operator`]: Hamiltonians; [`polytope`]: the exclusion polytope; [`eigen`]: block eigensolver, which knows only the operator trait |
//! | 3 | [`density`]: partial traces to one-body density matrices |
//! | 4 | `python`: the only place that knows Python (feature `python`) |

pub mod dense;
pub mod density;
pub mod eigen;
pub mod error;
pub mod linear_operator;
pub mod memory;
pub mod operator;
pub mod polytope;
pub mod progress;
pub mod scalar;
pub mod sector;
pub mod weights;

#[cfg(feature = "python")]
mod python;
