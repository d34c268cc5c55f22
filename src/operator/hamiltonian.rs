//! H = c + h + W on a sector; the representation is chosen and built at the first product.

use super::interaction::Interaction;
use super::modes::ModeOperator;
use super::spin_half::SpinHalfOperator;
use super::split::SplitOperator;
use super::stored::{RowSink, SparseMatrix};
use super::symmetry;
use super::terms::ModeTerms;
use super::walker::ModeSpace;
use crate::error::{Error, Result};
use crate::linear_operator::{LinearOperator, Recurrence, Subtrahend, recurrence_by_product};
use crate::memory;
use crate::scalar::Scalar;
use crate::sector::Sector;
use ndarray::{Array1, Array2, Array3, ArrayView2, ArrayView3, ArrayViewMut2, Axis};
use std::ops::Range;
use std::sync::{Arc, OnceLock};

/// A matrix of spinless particles up to this size is stored: products are then several times
/// faster than working it out anew each time.
const STORED_BYTES: u128 = 1 << 30;
/// Spinless particles from this dimension on go through low and high modes.
const SPLIT_DIMENSION: usize = 2_000;
/// if classes with equally many low particles have so many configurations on average.
const SPLIT_CLASS_SIZE: usize = 50;

const STORED: &str = "stored matrix";
const ROW_BY_ROW: &str = "row by row";
const SPLIT: &str = "low and high modes";
const SPINS: &str = "product of spins";

/// A Hermitian operator c + sum h_pq a+_p a_q + W on a sector.
#[derive(Debug)]
pub struct Hamiltonian<T> {
    sector: Sector,
    one_body: Array3<T>,
    interaction: Option<Arc<Interaction<T>>>,
    constant: f64,
    representation: OnceLock<Representation<T>>,
}

#[derive(Debug)]
enum Representation<T> {
    Stored(SparseMatrix<T>),
    Modes(ModeOperator<T>),
    Split(SplitOperator<T>),
    SpinHalf(Box<SpinHalfOperator<T>>),
}

/// What a Hamiltonian takes, in bytes.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct MemoryEstimate {
    /// How products are done: "stored matrix", "row by row", "low and high modes" or "product of
    /// spins"; only the first keeps the matrix.
    pub representation: &'static str,
    /// For the tables or the matrix.
    pub operator: u128,
    /// For one vector.
    pub vector: u128,
    /// For the matrix with all its elements, stored in rows.
    pub matrix: u128,
}

impl<T: Scalar> Hamiltonian<T> {
    /// From one-body terms `(spins, d, d)` and possibly an interaction on the same sector.
    ///
    /// # Errors
    /// [`Error::Argument`] for wrong shapes, numbers that are not finite, one-body terms that
    /// are not Hermitian, or an interaction on another sector.
    pub fn new(
        sector: Sector,
        one_body: ArrayView3<'_, T>,
        interaction: Option<Arc<Interaction<T>>>,
        constant: f64,
    ) -> Result<Self> {
        if !constant.is_finite() {
            return Err(Error::argument("constant", constant, "a finite number"));
        }
        if one_body.len_of(Axis(0)) != sector.spins() {
            return Err(Error::argument(
                "one_body",
                format!("shape {:?}", one_body.shape()),
                format!("{} matrices, one a spin", sector.spins()),
            ));
        }
        if interaction.as_ref().is_some_and(|w| *w.sector() != sector) {
            return Err(Error::argument(
                "interaction",
                "an interaction on another sector",
                format!("one on {sector:?}"),
            ));
        }
        let modes = sector.modes();
        let mut exact = Array3::zeros((sector.spins(), modes, modes));
        let size = symmetry::largest(&one_body);
        for (matrix, mut target) in one_body.outer_iter().zip(exact.outer_iter_mut()) {
            symmetry::check_square("one_body", matrix.shape(), modes)?;
            target.assign(&symmetry::hermitian_beside("one_body", matrix, size)?);
        }
        Ok(Hamiltonian {
            sector,
            one_body: exact,
            interaction,
            constant,
            representation: OnceLock::new(),
        })
    }

    /// The sector acted on.
    pub fn sector(&self) -> &Sector {
        &self.sector
    }

    /// One-body terms `(spins, d, d)`.
    pub fn one_body(&self) -> ArrayView3<'_, T> {
        self.one_body.view()
    }

    /// The interaction, if there is one.
    pub fn interaction(&self) -> Option<&Arc<Interaction<T>>> {
        self.interaction.as_ref()
    }

    /// The constant c.
    pub fn constant(&self) -> f64 {
        self.constant
    }

    /// Terms of spinless particles.
    fn mode_terms(&self) -> ModeTerms<T> {
        ModeTerms::new(
            self.one_body.index_axis(Axis(0), 0),
            self.interaction.as_deref(),
            self.sector.is_fermionic(),
        )
    }

    /// Whether products go through low and high modes: faster than a stored matrix once the
    /// groups have many configurations, but only single hops cross between them.
    fn splits(&self, space: &ModeSpace) -> bool {
        let moves_pairs = |w: &Arc<Interaction<T>>| w.tensor().is_some() || w.has_entries();
        // there are at most as many classes as ways to share the particles
        let classes = space.particles() + 1;
        space.modes() > 1
            && space.dimension() >= SPLIT_DIMENSION.max(SPLIT_CLASS_SIZE * classes)
            && !self.interaction.as_ref().is_some_and(moves_pairs)
    }

    fn representation(&self) -> Result<&Representation<T>> {
        if let Some(built) = self.representation.get() {
            return Ok(built);
        }
        let vector = self.sector.enumerable_dimension()? as u128 * size_of::<T>() as u128;
        memory::require("one vector of this sector", vector)?;
        let built = self.build()?;
        Ok(self.representation.get_or_init(|| built))
    }

    fn build(&self) -> Result<Representation<T>> {
        let mut spaces = ModeSpace::of(&self.sector)?;
        if let Sector::SpinHalf { .. } = self.sector
            && let (Some(down), Some(up)) = (spaces.pop(), spaces.pop())
        {
            let interaction = self.interaction.as_deref();
            let one_body = self.one_body.view();
            let operator = SpinHalfOperator::new(one_body, interaction, [up, down])?;
            return Ok(Representation::SpinHalf(Box::new(operator)));
        }
        let space = spaces.swap_remove(0);
        if self.splits(&space) {
            return Ok(Representation::Split(SplitOperator::new(
                &space,
                &self.mode_terms(),
            )?));
        }
        let operator = ModeOperator::new(space, self.mode_terms());
        let bytes = operator.estimated_elements()? * element_bytes::<T>();
        let indexable = u32::try_from(operator.dimension()).is_ok();
        if indexable && bytes <= STORED_BYTES.min(memory::available_bytes() / 4) {
            Ok(Representation::Stored(operator.to_sparse()))
        } else {
            Ok(Representation::Modes(operator))
        }
    }

    /// The matrix with all its elements.
    ///
    /// # Errors
    /// [`Error::Memory`] if it does not fit; [`Error::TooManyConfigurations`].
    pub fn to_sparse(&self) -> Result<SparseMatrix<T>> {
        let estimate = self.memory_estimate()?;
        memory::require("the stored matrix", estimate.matrix)?;
        let dimension = self.sector.enumerable_dimension()?;
        if u32::try_from(dimension).is_err() {
            return Err(Error::argument(
                "sector",
                format!("dimension {dimension}"),
                "less than 2^32 rows for a stored matrix; use products instead",
            ));
        }
        let mut matrix = match self.representation()? {
            Representation::Stored(matrix) => matrix.clone(),
            Representation::Modes(operator) => operator.to_sparse(),
            Representation::Split(_) => {
                let space = ModeSpace::of(&self.sector)?.swap_remove(0);
                ModeOperator::new(space, self.mode_terms()).to_sparse()
            }
            Representation::SpinHalf(operator) => {
                SparseMatrix::build(dimension, |rows: Range<usize>, sink: &mut RowSink<T>| {
                    operator.fill_rows(rows, sink);
                })
            }
        };
        if self.constant != 0.0 {
            matrix.add_to_diagonal(T::from_real(self.constant));
        }
        Ok(matrix)
    }

    /// What products and the stored matrix take, without building either.
    ///
    /// # Errors
    /// [`Error::TooManyConfigurations`] beyond 64-bit indices.
    pub fn memory_estimate(&self) -> Result<MemoryEstimate> {
        let dimension = self.sector.enumerable_dimension()? as u128;
        let vector = dimension * size_of::<T>() as u128;
        let spaces = ModeSpace::of(&self.sector)?;
        let [up, down] = spaces.as_slice() else {
            return self.spinless_estimate(&spaces[0], vector);
        };
        let one_spin = self.one_spin_elements([up, down])?;
        let [per_up, per_down] =
            [(0, up), (1, down)].map(|(i, s)| one_spin[i].div_ceil(s.dimension() as u128));
        let (coupling, tables) = self.coupling_estimate([up, down]);
        Ok(MemoryEstimate {
            representation: SPINS,
            operator: (one_spin[0] + one_spin[1]) * element_bytes::<T>() + tables,
            vector,
            matrix: dimension * (per_up + per_down + coupling) * element_bytes::<T>(),
        })
    }

    fn spinless_estimate(&self, space: &ModeSpace, vector: u128) -> Result<MemoryEstimate> {
        let operator = ModeOperator::new(space.clone(), self.mode_terms());
        let matrix = operator.estimated_elements()? * element_bytes::<T>();
        let (representation, operator) = if self.splits(space) {
            (SPLIT, 0)
        } else if matrix <= STORED_BYTES {
            (STORED, matrix)
        } else {
            (ROW_BY_ROW, 0)
        };
        Ok(MemoryEstimate {
            representation,
            operator,
            vector,
            matrix,
        })
    }

    fn one_spin_elements(&self, spaces: [&ModeSpace; 2]) -> Result<[u128; 2]> {
        let mut elements = [0; 2];
        for (spin, space) in spaces.into_iter().enumerate() {
            let one_body: ArrayView2<'_, T> = self.one_body.index_axis(Axis(0), spin);
            let terms = ModeTerms::new(one_body, self.interaction.as_deref(), true);
            elements[spin] = ModeOperator::new(space.clone(), terms).estimated_elements()?;
        }
        Ok(elements)
    }

    /// Elements a row that couple the spins off the diagonal (at most), and bytes of hop tables.
    fn coupling_estimate(&self, spaces: [&ModeSpace; 2]) -> (u128, u128) {
        let hopping = self
            .interaction
            .as_ref()
            .filter(|w| w.tensor().is_some() || w.has_entries());
        let Some(interaction) = hopping else {
            return (1, 0);
        };
        let [up, down] = spaces;
        let into = |s: &ModeSpace| (s.particles() * (s.modes() - s.particles() + 1)) as u128;
        let all = into(up) * into(down);
        let per_row = if interaction.tensor().is_some() {
            all
        } else {
            all.min(interaction.entries().count() as u128)
        };
        (per_row, super::coupling::HopCoupling::<T>::bytes(up, down))
    }
}

/// An element and its column.
fn element_bytes<T>() -> u128 {
    (size_of::<T>() + size_of::<u32>()) as u128
}

impl<T: Scalar> Hamiltonian<T> {
    /// Builds the representation if that has not happened yet.
    ///
    /// # Errors
    /// [`Error::Memory`] or [`Error::TooManyConfigurations`] if it cannot be built.
    pub fn prepare(&self) -> Result<()> {
        self.representation().map(|_| ())
    }

    /// How products are done.
    ///
    /// # Errors
    /// As [`Hamiltonian::prepare`].
    pub fn representation_name(&self) -> Result<&'static str> {
        Ok(match self.representation()? {
            Representation::Stored(_) => STORED,
            Representation::Modes(_) => ROW_BY_ROW,
            Representation::Split(_) => SPLIT,
            Representation::SpinHalf(_) => SPINS,
        })
    }

    /// Diagonal matrix elements.
    ///
    /// # Errors
    /// As [`Hamiltonian::prepare`].
    pub fn diagonal_elements(&self) -> Result<Array1<f64>> {
        let mut diagonal = match self.representation()? {
            Representation::Stored(matrix) => matrix.diagonal(),
            Representation::Modes(operator) => operator.diagonal(),
            Representation::Split(operator) => operator.diagonal(),
            Representation::SpinHalf(operator) => operator.diagonal(),
        };
        diagonal += self.constant;
        Ok(diagonal)
    }

    /// <x|H|x> for normalised rows x, one number each.
    ///
    /// # Errors
    /// As [`Hamiltonian::prepare`].
    pub fn expectation(&self, vectors: ArrayView2<'_, T>) -> Result<Array1<f64>> {
        let mut image = Array2::zeros((1, vectors.ncols()));
        let mut values = Array1::zeros(vectors.nrows());
        for (vector, value) in vectors.axis_chunks_iter(Axis(0), 1).zip(&mut values) {
            self.apply(vector, image.view_mut())?;
            *value = vector
                .iter()
                .zip(&image)
                .map(|(x, y)| (x.conj() * *y).re())
                .sum();
        }
        Ok(values)
    }
}

impl<T: Scalar> LinearOperator<T> for Hamiltonian<T> {
    fn dimension(&self) -> usize {
        self.sector.enumerable_dimension().unwrap_or(usize::MAX)
    }

    fn apply(&self, block: ArrayView2<'_, T>, mut out: ArrayViewMut2<'_, T>) -> Result<()> {
        debug_assert_eq!(block.dim(), out.dim());
        let representation = self.representation()?;
        // a thread is woken once for the product, not once for each pass
        rayon::scope(|_| {
            match representation {
                Representation::Stored(matrix) => matrix.apply(block, out.view_mut()),
                Representation::Modes(operator) => operator.apply(block, out.view_mut()),
                Representation::Split(operator) => operator.apply(block, out.view_mut()),
                Representation::SpinHalf(operator) => {
                    let product = Recurrence {
                        factor: 1.0,
                        shift: -self.constant,
                        subtrahend: Subtrahend::Nothing,
                    };
                    return operator.apply_recurrence(block, product, out);
                }
            }
            if self.constant != 0.0 {
                out.scaled_add(T::from_real(self.constant), &block);
            }
        });
        Ok(())
    }

    fn apply_recurrence(
        &self,
        block: ArrayView2<'_, T>,
        step: Recurrence<'_, T>,
        out: ArrayViewMut2<'_, T>,
        scratch: &mut Vec<T>,
    ) -> Result<()> {
        let Representation::SpinHalf(operator) = self.representation()? else {
            return recurrence_by_product(self, block, step, out, scratch);
        };
        let step = Recurrence {
            shift: step.shift - self.constant,
            ..step
        };
        rayon::scope(|_| operator.apply_recurrence(block, step, out));
        Ok(())
    }

    fn has_costly_products(&self) -> bool {
        match self.representation() {
            Ok(Representation::SpinHalf(operator)) => operator.has_hop_coupling(),
            Ok(Representation::Modes(_)) => true,
            _ => false,
        }
    }

    fn diagonal(&self) -> Array1<f64> {
        self.diagonal_elements()
            .unwrap_or_else(|_| Array1::zeros(0))
    }
}
