"""Exact functionals of the one-body density matrix."""

from fockhull.functionals._certificate import ExplicitEnsemble
from fockhull.functionals._potentials import commuting_with
from fockhull.functionals._regularized import RegularizedValue
from fockhull.functionals._scan import BoundaryScan, ForceFit
from fockhull.functionals._value import FunctionalValue
from fockhull.functionals.universal import UniversalFunctional

__all__ = [
    "BoundaryScan",
    "ExplicitEnsemble",
    "ForceFit",
    "FunctionalValue",
    "RegularizedValue",
    "UniversalFunctional",
    "commuting_with",
]
