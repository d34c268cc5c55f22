"""Sectors: what their constructors and methods refuse."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

import fockhull as fh
from refusals import INDEX, NOT_INTEGERS, NOT_REAL_NUMBERS, TYPE, VALUE, named, refused

F = fh.Fermions(4, 2)
S = fh.SpinHalfFermions(3, particles=(2, 1))
B = fh.Bosons(3, 2)


@named(
    [
        (VALUE, "modes", lambda: fh.Fermions(0, 0), "at least 1"),
        (VALUE, "modes", lambda: fh.Fermions(-4, 2)),
        (VALUE, "modes", lambda: fh.Fermions(2**70, 2)),
        (VALUE, "particles", lambda: fh.Fermions(4, 5), "4"),
        (VALUE, "particles", lambda: fh.Fermions(4, -1), "at least 0"),
        (VALUE, "particles", lambda: fh.Fermions(4, 2**70)),
        (TYPE, "particles", lambda: fh.Fermions(4, (1, 1))),
        (TYPE, "modes", lambda: fh.Fermions(np.nan, 1)),
        (TYPE, "modes", lambda: fh.Fermions(np.array([4]), 1)),
        (VALUE, "modes", lambda: fh.Bosons(0, 2)),
        (VALUE, "particles", lambda: fh.Bosons(2, -1)),
        (VALUE, "particles", lambda: fh.Bosons(2, 2**70)),
        (VALUE, "orbitals", lambda: fh.SpinHalfFermions(0, (0, 0))),
        (VALUE, "orbitals", lambda: fh.SpinHalfFermions(2**70, (1, 1))),
        (VALUE, "particles", lambda: fh.SpinHalfFermions(3, (4, 1))),
        (VALUE, "particles", lambda: fh.SpinHalfFermions(3, (1, -1))),
        (VALUE, "particles", lambda: fh.SpinHalfFermions(3, (1, 2**70))),
        (TYPE, "particles", lambda: fh.SpinHalfFermions(3, 2), "(up, down)"),
        (TYPE, "particles", lambda: fh.SpinHalfFermions(3, (1,)), "(up, down)"),
        (TYPE, "particles", lambda: fh.SpinHalfFermions(3, (1, 1, 1)), "(up, down)"),
        (TYPE, "particles", lambda: fh.SpinHalfFermions(3, (1.0, 1))),
        (TYPE, "particles", lambda: fh.SpinHalfFermions(3, "11")),
        (TYPE, "particles", lambda: fh.SpinHalfFermions(3, np.array(2))),
    ]
)
def test_constructors(error: Any, argument: str, call: Any, words: str) -> None:
    refused(error, argument, call, words)


@pytest.mark.parametrize("value", NOT_INTEGERS.values(), ids=NOT_INTEGERS)
def test_numbers_of_modes_and_particles_are_integers(value: Any) -> None:
    refused(TYPE, "modes", lambda: fh.Fermions(value, 1))
    refused(TYPE, "particles", lambda: fh.Fermions(4, value))
    refused(TYPE, "modes", lambda: fh.Bosons(value, 1))
    refused(TYPE, "particles", lambda: fh.Bosons(4, value))
    refused(TYPE, "orbitals", lambda: fh.SpinHalfFermions(value, (1, 1)))
    refused(TYPE, "particles", lambda: fh.SpinHalfFermions(3, (1, value)))
    refused(TYPE, "r", lambda: F.lowest_configurations([0.0, 1.0, 2.0, 3.0], value))


@named(
    [
        (INDEX, "index", lambda: F.occupations(6), "0 to 5"),
        (INDEX, "index", lambda: F.occupations(-1)),
        (INDEX, "index", lambda: F.occupations([0, 6])),
        (INDEX, "index", lambda: F.occupations(np.uint64(2**64 - 1))),
        (INDEX, "index", lambda: F.occupations(2**70)),
        (INDEX, "index", lambda: S.occupations(9)),
        (INDEX, "index", lambda: B.occupations([[0], [6]])),
        (TYPE, "index", lambda: F.occupations(1.0)),
        (TYPE, "index", lambda: F.occupations("0")),
        (TYPE, "index", lambda: F.occupations([True])),
        (TYPE, "index", lambda: F.occupations(None)),
        (TYPE, "index", lambda: F.occupations([[0], [1, 2]])),
        (VALUE, "occupations", lambda: F.index([1, 1, 0]), "4"),
        (VALUE, "occupations", lambda: F.index(1)),
        (VALUE, "occupations", lambda: F.index([1, 1, 1, 0])),
        (VALUE, "occupations", lambda: F.index([2, 0, 0, 0])),
        (VALUE, "occupations", lambda: F.index([1, 2, -1, 0])),
        (VALUE, "occupations", lambda: F.index([1, 1, 0, 2**40])),
        (TYPE, "occupations", lambda: F.index([1.0, 1.0, 0.0, 0.0])),
        (TYPE, "occupations", lambda: F.index("1100")),
        (VALUE, "occupations", lambda: B.index([1, 1, 1])),
        (VALUE, "occupations", lambda: S.index([[1, 1, 0], [1, 1, 0]])),
        (VALUE, "occupations", lambda: S.index([1, 1, 0])),
        (VALUE, "one_particle_energies", lambda: F.lowest_configurations([0.0, 1.0], 2)),
        (VALUE, "one_particle_energies", lambda: F.lowest_configurations(np.eye(4), 2)),
        (VALUE, "one_particle_energies", lambda: F.lowest_configurations([0, 1, 2, np.nan], 2)),
        (VALUE, "one_particle_energies", lambda: F.lowest_configurations([0, 1, 2, np.inf], 2)),
        (VALUE, "one_particle_energies", lambda: S.lowest_configurations(np.zeros((3, 2)), 2)),
        (VALUE, "r", lambda: F.lowest_configurations([0, 1, 2, 3], 0)),
        (VALUE, "r", lambda: F.lowest_configurations([0, 1, 2, 3], 7), "6"),
        (VALUE, "r", lambda: F.lowest_configurations([0, 1, 2, 3], 2**70)),
    ]
)
def test_methods(error: Any, argument: str, call: Any, words: str) -> None:
    refused(error, argument, call, words)


@pytest.mark.parametrize("value", NOT_REAL_NUMBERS.values(), ids=NOT_REAL_NUMBERS)
def test_one_particle_energies_are_real_numbers(value: Any) -> None:
    sector = fh.Fermions(2, 1)
    refused(TYPE, "one_particle_energies", lambda: sector.lowest_configurations(value, 1))
