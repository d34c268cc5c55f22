//! Two-body interactions in the three forms that callers have, validated once.

use super::symmetry::{self, TensorOrder};
use crate::error::{Error, Result};
use crate::scalar::Scalar;
use crate::sector::Sector;
use ndarray::{Array2, Array4, ArrayView2, ArrayView4};
use std::collections::BTreeMap;

/// An element v_pqrs = <pq|v|rs> of a sparse list.
pub type Entry<T> = ([usize; 4], T);

/// W = 1/2 sum_pq V_pq a+_p a+_q a_q a_p + 1/2 sum_pqrs v_pqrs a+_p a+_q a_s a_r on a sector.
#[derive(Debug, Clone)]
pub struct Interaction<T> {
    sector: Sector,
    density_density: Option<Array2<f64>>,
    tensor: Option<Array4<T>>,
    entries: BTreeMap<[usize; 4], T>,
}

impl<T: Scalar> Interaction<T> {
    fn empty(sector: Sector) -> Self {
        Interaction {
            sector,
            density_density: None,
            tensor: None,
            entries: BTreeMap::new(),
        }
    }

    /// From a real symmetric matrix V of density-density couplings.
    ///
    /// # Errors
    /// [`Error::Argument`] for a wrong shape, values that are not finite, a matrix that is not
    /// symmetric, or a diagonal for spinless fermions, where it has no effect.
    pub fn from_density_density(sector: Sector, matrix: ArrayView2<'_, f64>) -> Result<Self> {
        const ARGUMENT: &str = "density_density";
        symmetry::check_square(ARGUMENT, matrix.shape(), sector.modes())?;
        let matrix = symmetry::hermitian(ARGUMENT, matrix)?;
        if matches!(sector, Sector::Fermions { .. }) && matrix.diag().iter().any(|&v| v != 0.0) {
            return Err(Error::argument(
                ARGUMENT,
                "a non-zero diagonal for spinless fermions",
                "a zero diagonal; no two such fermions share a mode, so V_pp has no effect",
            ));
        }
        Ok(Interaction {
            density_density: Some(matrix),
            ..Self::empty(sector)
        })
    }

    /// From the full two-body tensor in the order named.
    ///
    /// # Errors
    /// [`Error::Argument`] for a wrong shape, values that are not finite, or a tensor without
    /// the symmetries of that order (the message says whether another order would fit).
    pub fn from_two_body(
        sector: Sector,
        tensor: ArrayView4<'_, T>,
        order: TensorOrder,
    ) -> Result<Self> {
        symmetry::check_square("two_body", tensor.shape(), sector.modes())?;
        Ok(Interaction {
            tensor: Some(symmetry::two_body(tensor, order)?),
            ..Self::empty(sector)
        })
    }

    /// From the complete list of non-zero v_pqrs in Dirac order.
    ///
    /// # Errors
    /// [`Error::Index`] for a mode out of range; [`Error::Argument`] for duplicates, values
    /// that are not finite, or an entry whose symmetry partners are missing or different.
    pub fn from_entries(sector: Sector, entries: &[Entry<T>]) -> Result<Self> {
        Ok(Interaction {
            entries: symmetry::entries(entries, sector.modes())?,
            ..Self::empty(sector)
        })
    }

    /// The sector acted on.
    pub fn sector(&self) -> &Sector {
        &self.sector
    }

    /// The density-density part, if there is one.
    pub fn density_density(&self) -> Option<&Array2<f64>> {
        self.density_density.as_ref()
    }

    /// The dense part in Dirac order, if there is one.
    pub fn tensor(&self) -> Option<&Array4<T>> {
        self.tensor.as_ref()
    }

    /// The sparse part in Dirac order.
    pub fn entries(&self) -> impl Iterator<Item = Entry<T>> {
        self.entries.iter().map(|(&index, &value)| (index, value))
    }

    /// Whether the sparse part is empty.
    pub fn has_entries(&self) -> bool {
        !self.entries.is_empty()
    }

    /// Dense and sparse part together at one index.
    pub fn element(&self, [p, q, r, s]: [usize; 4]) -> T {
        let dense = self.tensor.as_ref().map_or(T::zero(), |v| v[[p, q, r, s]]);
        let sparse = self.entries.get(&[p, q, r, s]).copied();
        dense + sparse.unwrap_or_else(T::zero)
    }

    /// Sum of two interactions on the same sector.
    ///
    /// # Errors
    /// [`Error::Argument`] for different sectors.
    pub fn plus(&self, other: &Self) -> Result<Self> {
        if self.sector != other.sector {
            return Err(Error::argument(
                "interaction",
                format!("{:?} and {:?}", self.sector, other.sector),
                "two interactions on the same sector",
            ));
        }
        let mut entries = self.entries.clone();
        for (index, value) in other.entries() {
            *entries.entry(index).or_insert_with(T::zero) += value;
        }
        Interaction {
            sector: self.sector,
            density_density: sum(&self.density_density, &other.density_density),
            tensor: sum(&self.tensor, &other.tensor),
            entries,
        }
        .checked("interaction")
    }

    /// Refuses a sum or multiple that overflows.
    fn checked(self, argument: &'static str) -> Result<Self> {
        let finite = self.entries.values().all(|x| x.is_finite())
            && self.tensor.iter().flatten().all(|x| x.is_finite())
            && self.density_density.iter().flatten().all(|x| x.is_finite());
        if finite {
            Ok(self)
        } else {
            let given = "numbers whose sum or multiple overflows";
            Err(Error::argument(argument, given, "a finite interaction"))
        }
    }

    /// A real multiple.
    ///
    /// # Errors
    /// [`Error::Argument`] for a factor that is not finite.
    pub fn times(&self, factor: f64) -> Result<Self> {
        if !factor.is_finite() {
            return Err(Error::argument("factor", factor, "a finite number"));
        }
        let mut scaled = self.clone();
        if let Some(v) = &mut scaled.density_density {
            v.mapv_inplace(|x| x * factor);
        }
        if let Some(v) = &mut scaled.tensor {
            v.mapv_inplace(|x| x * factor);
        }
        scaled.entries.values_mut().for_each(|v| *v = *v * factor);
        scaled.checked("factor")
    }

    /// The same interaction with elements of another type, if nothing is lost.
    pub fn convert<S: Scalar>(&self) -> Option<Interaction<S>> {
        let convert = |x: T| S::from_complex(x.to_complex());
        let tensor = match &self.tensor {
            None => None,
            Some(v) => {
                let values: Option<Vec<S>> = v.iter().map(|&x| convert(x)).collect();
                Some(Array4::from_shape_vec(v.dim(), values?).ok()?)
            }
        };
        let entries: Option<BTreeMap<[usize; 4], S>> = self
            .entries()
            .map(|(index, x)| Some((index, convert(x)?)))
            .collect();
        Some(Interaction {
            sector: self.sector,
            density_density: self.density_density.clone(),
            tensor,
            entries: entries?,
        })
    }

    /// The exchange operator with v_pqrs = 1 for p = s and q = r, which measures the total spin.
    pub fn exchange(sector: Sector) -> Self {
        let modes = sector.modes();
        let pairs = (0..modes).flat_map(|p| (0..modes).map(move |q| [p, q, q, p]));
        Interaction {
            entries: pairs.map(|index| (index, T::one())).collect(),
            ..Self::empty(sector)
        }
    }
}

fn sum<A, D>(
    a: &Option<ndarray::Array<A, D>>,
    b: &Option<ndarray::Array<A, D>>,
) -> Option<ndarray::Array<A, D>>
where
    A: Clone + std::ops::Add<Output = A>,
    D: ndarray::Dimension,
{
    match (a, b) {
        (Some(a), Some(b)) => {
            let mut total = a.clone();
            total.zip_mut_with(b, |x, y| *x = x.clone() + y.clone());
            Some(total)
        }
        (Some(a), None) | (None, Some(a)) => Some(a.clone()),
        (None, None) => None,
    }
}
