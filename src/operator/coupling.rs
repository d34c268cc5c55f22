//! The coupling of opposite spins, sum_pqrs v_pqrs E(up)_pr E(down)_qs with E_pr = a+_p a_r,
//! as a direct method over strings: for one up configuration the rows it hops from are mixed
//! by the tensor (a matrix product), then the hops of the down configurations collect them.
//! Nothing of the size of the state space is stored. (Method: Knowles and Handy, Chem. Phys.
//! Lett. 111, 315 (1984), recalled; here arranged so that each result row is written once.)

use super::hops::{Hop, HopTable};
use super::interaction::Interaction;
use super::walker::ModeSpace;
use crate::dense::{Conjugate, Threads, multiply};
use crate::error::Result;
use crate::scalar::Scalar;
use ndarray::{Array2, ArrayView2, ArrayViewMut2, Axis, s};
use rayon::prelude::*;

/// Above this fraction of non-zero elements the tensor is used as a dense matrix.
const DENSE_FILL: f64 = 0.2;

/// sum_pqrs v_pqrs E(up)_pr E(down)_qs for the dense and sparse parts of an interaction.
#[derive(Debug, Clone)]
pub struct HopCoupling<T> {
    up: HopTable,
    down: HopTable,
    /// Intermediate row of each down pair q * modes + s; (q, s) and (s, q) share one where
    /// v_pqrs = v_psrq.
    row_of_pair: Vec<usize>,
    rows: usize,
    tensor: PairTensor<T>,
}

/// v_pqrs as a matrix from up pairs (p, r) to intermediate rows.
#[derive(Debug, Clone)]
enum PairTensor<T> {
    /// `(rows, up pairs)`.
    Dense(Array2<T>),
    /// For each up pair: intermediate rows and elements.
    Sparse(Vec<Vec<(usize, T)>>),
}

impl<T: Scalar> HopCoupling<T> {
    /// Bytes that the hop tables take.
    pub fn bytes(up: &ModeSpace, down: &ModeSpace) -> u128 {
        HopTable::bytes(up) + HopTable::bytes(down)
    }

    /// Prepares the hop tables and the tensor.
    ///
    /// # Errors
    /// Those of [`HopTable::new`].
    pub fn new(interaction: &Interaction<T>, up: &ModeSpace, down: &ModeSpace) -> Result<Self> {
        let modes = up.modes();
        let elements = listed_elements(interaction, modes);
        let largest = elements.iter().map(|(_, v)| v.abs()).fold(0.0, f64::max);
        let foldable = elements.iter().all(|&([p, q, r, s], v)| {
            (v - interaction.element([p, s, r, q])).abs() <= 1e-14 * largest
        });
        let (row_of_pair, rows) = intermediate_rows(modes, foldable);
        let mut by_up_pair = vec![Vec::new(); modes * modes];
        for &([p, q, r, s], value) in &elements {
            // of two pairs that share a row, the first stands for both
            if !foldable || q <= s {
                by_up_pair[p * modes + r].push((row_of_pair[q * modes + s], value));
            }
        }
        let fill = elements.len() as f64 / (modes as f64).powi(4);
        let tensor = if fill > DENSE_FILL {
            let mut matrix = Array2::zeros((rows, modes * modes));
            for (pair, list) in by_up_pair.iter().enumerate() {
                for &(row, value) in list {
                    matrix[[row, pair]] = value;
                }
            }
            PairTensor::Dense(matrix)
        } else {
            PairTensor::Sparse(by_up_pair)
        };
        Ok(HopCoupling {
            up: HopTable::new(up)?,
            down: HopTable::new(down)?,
            row_of_pair,
            rows,
            tensor,
        })
    }

    /// Calls `visit(up index, down index, element)` for the elements of one row.
    pub fn visit_row(&self, up: usize, down: usize, mut visit: impl FnMut(usize, usize, T)) {
        for a in self.up.into_configuration(up) {
            for b in self.down.into_configuration(down) {
                let value = self.element(a, b);
                if value != T::zero() {
                    visit(
                        a.from as usize,
                        b.from as usize,
                        value * (a.factor * b.factor),
                    );
                }
            }
        }
    }

    /// The diagonal element of a pair of configurations.
    pub fn diagonal(&self, up: usize, down: usize) -> f64 {
        let stays = |hop: &&Hop, index: usize| hop.from as usize == index;
        let mut sum = 0.0;
        for a in self
            .up
            .into_configuration(up)
            .iter()
            .filter(|h| stays(h, up))
        {
            for b in self
                .down
                .into_configuration(down)
                .iter()
                .filter(|h| stays(h, down))
            {
                sum += self.element(a, b).re();
            }
        }
        sum
    }

    fn element(&self, up: &Hop, down: &Hop) -> T {
        let row = self.row_of_pair[down.pair as usize];
        match &self.tensor {
            PairTensor::Dense(matrix) => matrix[[row, up.pair as usize]],
            PairTensor::Sparse(lists) => lists[up.pair as usize]
                .iter()
                .find(|(listed, _)| *listed == row)
                .map_or(T::zero(), |&(_, value)| value),
        }
    }

    /// Adds `factor` times the coupling of row k of `block` to row k of `out`; `down` is the
    /// number of down configurations.
    pub fn add_to(
        &self,
        factor: f64,
        block: ArrayView2<'_, T>,
        mut out: ArrayViewMut2<'_, T>,
        down: usize,
    ) {
        out.axis_chunks_iter_mut(Axis(1), down)
            .into_par_iter()
            .enumerate()
            .for_each_init(
                || Workspace::new(self.rows, self.up.into_configuration(0).len(), down),
                |workspace, (up, mut part)| {
                    for (vector, mut result) in block.rows().into_iter().zip(part.rows_mut()) {
                        let strings =
                            match vector.into_shape_with_order((vector.len() / down, down)) {
                                Ok(strings) => strings,
                                Err(_) => continue,
                            };
                        self.mix(self.up.into_configuration(up), strings, workspace);
                        for (target, configuration) in result.iter_mut().zip(0..) {
                            *target += self.collect(configuration, workspace) * factor;
                        }
                    }
                },
            );
    }

    /// Fills the intermediate rows for the hops into one up configuration.
    fn mix(&self, hops: &[Hop], strings: ArrayView2<'_, T>, workspace: &mut Workspace<T>) {
        match &self.tensor {
            PairTensor::Dense(matrix) => {
                for (k, hop) in hops.iter().enumerate() {
                    let column = matrix.column(hop.pair as usize);
                    workspace.factors.column_mut(k).assign(&column);
                    let source = strings.row(hop.from as usize);
                    let factor = hop.factor;
                    workspace
                        .gathered
                        .row_mut(k)
                        .zip_mut_with(&source, |g, &x| *g = x * factor);
                }
                multiply(
                    T::one(),
                    (workspace.factors.view(), Conjugate::No),
                    (workspace.gathered.view(), Conjugate::No),
                    T::zero(),
                    workspace.mixed.view_mut(),
                    Threads::One,
                );
                workspace.active.fill(true);
            }
            PairTensor::Sparse(lists) => {
                workspace.active.fill(false);
                for hop in hops {
                    let source = strings.row(hop.from as usize);
                    for &(row, value) in &lists[hop.pair as usize] {
                        let mut mixed = workspace.mixed.slice_mut(s![row, ..]);
                        if !std::mem::replace(&mut workspace.active[row], true) {
                            mixed.fill(T::zero());
                        }
                        mixed.scaled_add(value * hop.factor, &source);
                    }
                }
            }
        }
    }

    #[inline]
    fn collect(&self, configuration: usize, workspace: &Workspace<T>) -> T {
        let mut sum = T::zero();
        for hop in self.down.into_configuration(configuration) {
            let row = self.row_of_pair[hop.pair as usize];
            if workspace.active[row] {
                sum += workspace.mixed[[row, hop.from as usize]] * hop.factor;
            }
        }
        sum
    }
}

/// The non-zero elements of the dense and sparse parts together.
fn listed_elements<T: Scalar>(interaction: &Interaction<T>, modes: usize) -> Vec<([usize; 4], T)> {
    if interaction.tensor().is_none() {
        return interaction
            .entries()
            .filter(|(_, v)| *v != T::zero())
            .collect();
    }
    ndarray::indices((modes, modes, modes, modes))
        .into_iter()
        .map(|(p, q, r, s)| ([p, q, r, s], interaction.element([p, q, r, s])))
        .filter(|(_, v)| *v != T::zero())
        .collect()
}

/// Intermediate row of each pair q * modes + s, and the number of rows.
fn intermediate_rows(modes: usize, foldable: bool) -> (Vec<usize>, usize) {
    let mut rows = vec![0; modes * modes];
    let mut count = 0;
    for q in 0..modes {
        for s in if foldable { q } else { 0 }..modes {
            rows[q * modes + s] = count;
            if foldable {
                rows[s * modes + q] = count;
            }
            count += 1;
        }
    }
    (rows, count)
}

/// Buffers of one thread.
struct Workspace<T> {
    /// Tensor columns of the hops.
    factors: Array2<T>,
    /// Rows that are hopped from.
    gathered: Array2<T>,
    /// Their mixtures, one row for each pair of down modes.
    mixed: Array2<T>,
    /// Which of these are in use.
    active: Vec<bool>,
}

impl<T: Scalar> Workspace<T> {
    fn new(rows: usize, hops: usize, down: usize) -> Self {
        Workspace {
            factors: Array2::zeros((rows, hops)),
            gathered: Array2::zeros((hops, down)),
            mixed: Array2::zeros((rows, down)),
            active: vec![false; rows],
        }
    }
}
