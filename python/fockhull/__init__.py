"""Ensemble density-matrix functional theory: certified references for ground and excited states.

Give it one-body terms, an interaction and weights; get ensemble energies with error bounds,
one-body density matrices, natural occupations, and the verdict of the exclusion polytope.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

from fockhull import couplings, errors, functionals, lattices
from fockhull._core import __version__
from fockhull.configuration_ensemble import ConfigurationEnsemble
from fockhull.eigenproblem import SolveProgress, solve
from fockhull.ensemble import Ensemble, LevelCount
from fockhull.errors import CutMultipletWarning, FockhullError
from fockhull.functionals import ExplicitEnsemble, FunctionalValue, UniversalFunctional
from fockhull.hamiltonian import Hamiltonian, MemoryEstimate
from fockhull.inequality import Inequality
from fockhull.interaction import Interaction
from fockhull.polytope import ExclusionPolytope
from fockhull.projection import Projection, Stretch, Support
from fockhull.sectors import Bosons, Fermions, LowestConfigurations, Sector, SpinHalfFermions
from fockhull.separator import Separator

__all__ = [
    "Bosons",
    "ConfigurationEnsemble",
    "CutMultipletWarning",
    "Ensemble",
    "ExclusionPolytope",
    "ExplicitEnsemble",
    "Fermions",
    "FockhullError",
    "FunctionalValue",
    "Hamiltonian",
    "Inequality",
    "Interaction",
    "LevelCount",
    "LowestConfigurations",
    "MemoryEstimate",
    "Projection",
    "Sector",
    "Separator",
    "SolveProgress",
    "SpinHalfFermions",
    "Stretch",
    "Support",
    "UniversalFunctional",
    "__version__",
    "couplings",
    "errors",
    "functionals",
    "interchange",
    "lattices",
    "plot",
    "solve",
    "sweep",
    "sweeps",
]

if TYPE_CHECKING:
    from fockhull import interchange, plot, sweeps
    from fockhull.sweeps import sweep

# loaded when first asked for: they import xarray, matplotlib and more
_LAZY = {
    "interchange": ("fockhull.interchange", None),
    "plot": ("fockhull.plot", None),
    "sweep": ("fockhull.sweeps", "sweep"),
    "sweeps": ("fockhull.sweeps", None),
}


def __getattr__(name: str) -> Any:
    if name not in _LAZY:
        raise AttributeError(f"module 'fockhull' has no attribute {name!r}")
    module, member = _LAZY[name]
    loaded = import_module(module)
    value = loaded if member is None else getattr(loaded, member)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted(__all__)
