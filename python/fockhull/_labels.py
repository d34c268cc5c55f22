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
        "excitation_energies": ("level", ensemble.excitation_energies),
        "state_density_matrices": (("level", *matrix), ensemble.state_density_matrices),
        **_certificates(ensemble),
    }
    if spin:
        variables["spin_squared"] = ("level", ensemble.spin_squared)
    if ensemble.weights is not None:
        variables |= {
            "weights": ("level", ensemble.weights),
            "multiplet_cut": ((), bool(ensemble.cut_multiplets)),
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
    if ensemble.weights is not None:
        coordinates["natural_orbital"] = np.arange(1, sector.modes + 1)
    if spin:
        coordinates["spin"] = ["up", "down"]
    return xr.Dataset(variables, coordinates, _attributes(ensemble))


def _attributes(ensemble: Ensemble) -> dict[str, Any]:
    """Collect what is the same at every point of a sweep; the rest are variables."""
    return {
        "sector": repr(ensemble.hamiltonian.sector),
        "convention": CONVENTION,
        "domain": "spin-resolved" if ensemble.hamiltonian.sector.spins == 2 else "spinless",
        "tolerance": ensemble._levels.tolerance,
        "seed": ensemble._levels.seed,
        "fockhull_version": _core.__version__,
    }


def _certificates(ensemble: Ensemble) -> dict[str, Any]:
    """How the levels were found and counted, and their multiplets."""
    count = ensemble.level_count
    multiplet = np.zeros(len(ensemble.energies), dtype=np.int64)
    for number, (start, stop) in enumerate(ensemble.multiplets, start=1):
        multiplet[start:stop] = number
    probability = count.failure_probability
    return {
        "residuals": ("level", ensemble.residuals),
        "error_bounds": ("level", ensemble.error_bounds),
        "multiplet": ("level", multiplet),
        "level_count": ((), count.kind),
        "level_count_failure_probability": ((), np.nan if probability is None else probability),
        "next_energy": ((), np.nan if ensemble.next_energy is None else ensemble.next_energy),
        "method": ((), ensemble.method),
        "products": ((), ensemble.products),
    }
