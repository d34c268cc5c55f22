"""Results as labelled data (imported only when asked for)."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr

from fockhull import _core

if TYPE_CHECKING:
    from fockhull.ensemble import Ensemble

CONVENTION = "gamma_pq = <a+_q a_p>; one-body energy Tr(h gamma); occupations decreasing"


def ensemble_dataset(ensemble: Ensemble, *, vectors: bool) -> xr.Dataset:
    """Label what an ensemble knows; see `Ensemble.to_xarray`."""
    sector = ensemble.hamiltonian.sector
    spin = ("spin",) if sector.spins == 2 else ()
    matrix = (*spin, "mode", "mode_2")
    variables: dict[str, Any] = {
        "energies": ("level", ensemble.energies),
        "residuals": ("level", ensemble.residuals),
        "error_bounds": ("level", ensemble.error_bounds),
        "excitation_energies": ("level", ensemble.excitation_energies),
        "state_density_matrices": (("level", *matrix), ensemble.state_density_matrices),
    }
    if spin:
        variables["spin_squared"] = ("level", ensemble.spin_squared)
    if ensemble.weights is not None:
        variables |= {
            "weights": ("level", ensemble.weights),
            "energy": ((), ensemble.energy),
            "energy_error_bound": ((), ensemble.energy_error_bound),
            "interaction_energy": ((), ensemble.interaction_energy),
            "density_matrix": (matrix, ensemble.density_matrix),
            "occupations": ((*spin, "natural_orbital"), ensemble.occupations),
            "natural_orbitals": ((*spin, "mode", "natural_orbital"), ensemble.natural_orbitals),
        }
    if vectors:
        variables["vectors"] = (("configuration", "level"), ensemble.vectors)
    coordinates: dict[str, Any] = {
        "level": np.arange(1, len(ensemble.energies) + 1),
        "mode": np.arange(sector.modes),
        "mode_2": np.arange(sector.modes),
    }
    if spin:
        coordinates["spin"] = ["up", "down"]
    return xr.Dataset(variables, coordinates, _attributes(ensemble))


def _attributes(ensemble: Ensemble) -> dict[str, Any]:
    count = ensemble.level_count
    levels = ensemble._levels
    attributes: dict[str, Any] = {
        "sector": repr(ensemble.hamiltonian.sector),
        "convention": CONVENTION,
        "level_count": count.kind,
        "multiplets": str(list(ensemble.multiplets)),
        "method": ensemble.method,
        "tolerance": levels.tolerance,
        "seed": levels.seed,
        "fockhull_version": _core.__version__,
    }
    if count.failure_probability is not None:
        attributes["level_count_failure_probability"] = count.failure_probability
    if ensemble.next_energy is not None:
        attributes["next_energy"] = ensemble.next_energy
    if ensemble.weights is not None:
        attributes["cut_multiplets"] = str(list(ensemble.cut_multiplets))
    return attributes
