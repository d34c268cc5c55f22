"""Strategies: sectors of every kind, weights with ties, Hamiltonians, occupations.

Hypothesis chooses the structure and a seed; the numbers come from the seed, so that
matrices are generic and a failure is reproduced by what is printed.
"""

from __future__ import annotations

import warnings
from contextlib import suppress
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt
from hypothesis import strategies as st

import fockhull as fh
from reference import random_problems as problems

Array = npt.NDArray[Any]
Sector = fh.Fermions | fh.SpinHalfFermions | fh.Bosons


class Problem(NamedTuple):
    """Terms of a Hamiltonian; the two-body tensor is in Dirac order."""

    sector: Any
    one_body: Array
    two_body: Array
    constant: float = 0.0

    def hamiltonian(self) -> fh.Hamiltonian:
        interaction = fh.Interaction(self.sector, two_body=self.two_body, order="dirac")
        return fh.Hamiltonian(self.one_body, interaction, self.constant)


@st.composite
def fermions(draw: st.DrawFn, most_modes: int = 6) -> fh.Fermions:
    modes = draw(st.integers(1, most_modes))
    return fh.Fermions(modes, draw(st.integers(0, modes)))


@st.composite
def bosons(draw: st.DrawFn) -> fh.Bosons:
    return fh.Bosons(draw(st.integers(1, 4)), draw(st.integers(0, 4)))


@st.composite
def spin_half(draw: st.DrawFn) -> fh.SpinHalfFermions:
    orbitals = draw(st.integers(1, 4))
    numbers = st.integers(0, orbitals)
    return fh.SpinHalfFermions(orbitals, particles=(draw(numbers), draw(numbers)))


def sectors() -> st.SearchStrategy[Any]:
    return st.one_of(fermions(), bosons(), spin_half())


def generators() -> st.SearchStrategy[np.random.Generator]:
    return st.integers(0, 2**32 - 1).map(Seeded)


class Seeded(np.random.Generator):
    """A random generator that shows its seed."""

    def __init__(self, seed: int) -> None:
        super().__init__(np.random.PCG64(seed))
        self.seed = seed

    def __repr__(self) -> str:
        return f"Seeded({self.seed})"


@st.composite
def weights_for(draw: st.DrawFn, sector: Any, most: int = 6) -> Array:
    """Decreasing weights of sum 1, often with ties; r from 1 to the dimension."""
    r = draw(st.integers(1, min(most, sector.dimension)))
    steps = draw(st.lists(st.sampled_from([0, 0, 1, 2, 5]), min_size=r - 1, max_size=r - 1))
    values = np.cumsum([draw(st.sampled_from([1, 3])), *steps])[::-1]
    return values / values.sum()


@st.composite
def polytopes(draw: st.DrawFn, most: int = 6) -> fh.ExclusionPolytope:
    sector = draw(sectors())
    domain = None
    if isinstance(sector, fh.SpinHalfFermions):
        domain = draw(st.sampled_from(["spin-resolved", "spin-summed"]))
    polytope = fh.ExclusionPolytope(sector, draw(weights_for(sector, most)), domain)
    if draw(st.booleans()):
        # points are then projected by the list, otherwise mostly by the oracle
        with suppress(fh.errors.ArgumentError):
            polytope.inequalities(limit=500)
    return polytope


def problem_of(sector: Any, rng: np.random.Generator, *, is_complex: bool) -> Problem:
    """Generic terms; for spin-1/2 the one-body terms of the spins differ."""
    spins = 2 if sector.spins == 2 else None
    h = problems.random_one_body(rng, sector.modes, is_complex=is_complex, spins=spins)
    kind: problems.TwoBodyKind = "complex" if is_complex else "real"
    v = problems.random_two_body(rng, sector.modes, kind)
    return Problem(sector, h, v, float(rng.standard_normal()))


def solved(hamiltonian: fh.Hamiltonian, weights: Array) -> fh.Ensemble:
    """As `solve`, without a warning where a multiplet is cut."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", fh.CutMultipletWarning)
        return fh.solve(hamiltonian, weights)


def particle_numbers(polytope: fh.ExclusionPolytope) -> Array:
    """Particles of each component of the occupations, as a column."""
    sector = polytope.sector
    resolved = polytope.domain == "spin-resolved"
    return np.reshape(sector.particles if resolved else sector.total_particles, (-1, 1)) * 1.0


def centre(polytope: fh.ExclusionPolytope) -> Array:
    """N / d, per component."""
    share = particle_numbers(polytope) / polytope.sector.modes
    return np.broadcast_to(share, (len(share), polytope.sector.modes)).reshape(polytope.shape)


def vertex(polytope: fh.ExclusionPolytope, rng: np.random.Generator) -> Array:
    """A random vertex."""
    occupations: Array = polytope.support(rng.standard_normal(polytope.shape)).occupations
    return occupations


def scattered(polytope: fh.ExclusionPolytope, rng: np.random.Generator) -> Array:
    """A point of the right sums, inside, on the boundary or outside, at times with ties."""
    middle = centre(polytope)
    vertices = [vertex(polytope, rng).ravel() for _ in range(3)]
    mixed = rng.dirichlet(np.full(3, rng.choice([0.01, 1.0]))) @ vertices
    noise = rng.standard_normal(polytope.shape) * rng.choice([0.0, 1e-12, 1e-6, 0.1, 0.5, 100.0])
    if rng.uniform() < 0.3:
        noise = np.round(2.0 * noise) / 2.0
    noise -= noise.mean(axis=-1, keepdims=True)
    point: Array = middle + rng.choice([0.5, 1.0, 1.4]) * (mixed.reshape(middle.shape) - middle)
    return point + noise


def inside(polytope: fh.ExclusionPolytope, rng: np.random.Generator) -> Array:
    """A mixture of vertices."""
    vertices = np.array([vertex(polytope, rng) for _ in range(4)])
    point: Array = np.tensordot(rng.dirichlet(np.ones(4)), vertices, axes=1)
    return point
