"""Proofs that occupations are not allowed: real ones verify, tampered ones do not."""

from __future__ import annotations

import pickle
from dataclasses import fields, replace
from typing import Any

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from numpy.testing import assert_allclose

import fockhull as fh
from fockhull import separator as separators
from properties.generated import Array, generators, inside, polytopes, scattered
from reference.random_problems import random_unitary
from refusals import TYPE, VALUE, named, refused

Polytope = fh.ExclusionPolytope


def support_by_listing(polytope: Polytope, h: Array) -> float:
    """f_w(h) from the energies of all configurations."""
    configurations = np.array(list(polytope.sector.configurations()))
    if polytope.domain == "spin-summed":
        configurations = configurations.sum(axis=1)
    energies = np.sort((configurations * h).reshape(len(configurations), -1).sum(axis=1))
    return float(polytope.weights @ energies[: len(polytope.weights)])


@given(polytopes(), generators())
def test_a_point_is_outside_exactly_when_there_is_a_separator(polytope: Polytope, rng: Any) -> None:
    n = scattered(polytope, rng)
    projection = polytope.project(occupations=n)
    proof = projection.separator
    assume(not 1e-12 < projection.distance < 1e-9)
    assert (proof is not None) == (projection.distance >= 1e-9)
    if proof is None:
        return
    assert proof.verify()
    assert proof.verify(n)
    h = proof.potential
    assert_allclose(np.linalg.norm(np.ravel(h)), 1.0)
    assert_allclose(proof.bound, support_by_listing(polytope, h), rtol=1e-12, atol=1e-10)
    assert_allclose(proof.value, np.sum(h * n), rtol=1e-12, atol=1e-10)
    assert 0.0 < proof.excess <= projection.distance + 1e-10
    assert_allclose(proof.excess, projection.distance_lower, rtol=1e-9, atol=1e-9)
    for _ in range(3):
        assert np.sum(h * inside(polytope, rng)) >= proof.bound - 1e-10


@given(polytopes(), generators())
def test_allowed_points_have_none(polytope: Polytope, rng: Any) -> None:
    assert polytope.project(occupations=inside(polytope, rng)).separator is None


@given(polytopes(), generators(), st.booleans())
def test_other_occupations_do_not_verify(polytope: Polytope, rng: Any, by_spoiling: bool) -> None:
    """What is allowed is never refused, whatever the proof was made for."""
    proof = polytope.project(occupations=scattered(polytope, rng)).separator
    assume(proof is not None and proof.excess > 1e-6)
    assert not proof.verify(inside(polytope, rng))
    assert not proof.verify(np.array([proof.occupations, proof.occupations]))
    assert not proof.verify(proof.occupations[..., :-1])
    if by_spoiling:
        # nor is a claim about an allowed point, with the value it really has
        n = inside(polytope, rng)
        claim = replace(proof, occupations=n, value=float(np.sum(proof.potential * n)))
        assert not claim.verify()


@given(polytopes(), generators())
def test_density_matrices_are_refused_by_their_natural_occupations(
    polytope: Polytope, rng: Any
) -> None:
    n, d = scattered(polytope, rng), polytope.sector.modes
    rows = n.reshape(-1, d)
    u = np.array([random_unitary(rng, d) for _ in rows])
    gamma = (u * rows[:, None, :] @ u.conj().swapaxes(1, 2)).reshape(*polytope.shape, d)
    projection = polytope.project(gamma)
    assume(projection.distance > 1e-8)
    proof = projection.separator
    assert proof is not None
    assert proof.verify(np.linalg.eigvalsh(gamma)[..., ::-1])


OUTSIDE = np.array([1.4, 1.1, 0.9, 0.2, -0.2, -0.4])
SPIN = np.array([[0.9, 0.9, 0.2, 0.0], [0.9, 0.1, 0.0, 0.0]])
PROOFS = {
    "fermions": Polytope(fh.Fermions(6, 3), [0.5, 0.3, 0.2]).project(occupations=OUTSIDE),
    "bosons": Polytope(fh.Bosons(6, 3), [0.5, 0.3, 0.2]).project(occupations=OUTSIDE),
    "resolved": Polytope(fh.SpinHalfFermions(4, (2, 1)), [0.6, 0.4], "spin-resolved").project(
        occupations=SPIN
    ),
    "summed": Polytope(fh.SpinHalfFermions(4, (2, 1)), [0.6, 0.4], "spin-summed").project(
        occupations=[1.95, 1.0, 0.05, 0.0]
    ),
    # too many configurations to list all
    "large": Polytope(fh.Fermions(30, 15), [0.5, 0.3, 0.2]).project(
        occupations=np.linspace(1.1, -0.1, 30)
    ),
}


def spoiled(proof: fh.Separator) -> dict[str, fh.Separator]:
    """The same certificate with one number after the other changed."""
    h, n, w = proof.potential, proof.occupations, proof.weights
    nudge = np.zeros(h.shape)
    nudge.flat[0] = 1e-6
    return {
        "potential": replace(proof, potential=h + nudge),
        "scaled": replace(proof, potential=1.001 * h),
        "reversed": replace(proof, potential=-h),
        "nan": replace(proof, potential=h * np.nan),
        "zero": replace(proof, potential=0.0 * h, bound=0.0, value=0.0),
        "bound": replace(proof, bound=proof.bound + 1e-6),
        "value": replace(proof, value=proof.value - 1e-6),
        "both": replace(proof, bound=proof.value, value=proof.bound),
        "larger weights": replace(proof, weights=1.001 * w),
        "other weights": replace(
            proof, weights=np.full(len(w), 1.0 / len(w)), bound=proof.bound + 1e-6
        ),
        "increasing weights": replace(proof, weights=w[::-1]),
        "no weights": replace(proof, weights=w[:0]),
        "occupations": replace(proof, occupations=n + np.roll(nudge, 1)),
    }


@pytest.mark.parametrize("name", PROOFS)
def test_tampered_proofs_do_not_verify(name: str) -> None:
    proof = PROOFS[name].separator
    assert proof is not None
    assert proof.verify()
    for changed, copy in spoiled(proof).items():
        assert not copy.verify(), changed


def test_large_sectors_are_checked_by_their_lowest_configurations(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    proof = PROOFS["fermions"].separator
    assert proof is not None
    monkeypatch.setattr(separators, "ENUMERATION_LIMIT", 1)
    assert proof.verify()
    lowest = fh.Fermions.lowest_configurations

    def twice_the_first(self: Any, h: Any, r: int) -> Any:
        found = lowest(self, h, r)
        return found._replace(occupations=np.array([found.occupations[0]] * r))

    def one_particle_more(self: Any, h: Any, r: int) -> Any:
        found = lowest(self, h, r)
        return found._replace(occupations=found.occupations + np.eye(6, dtype=int)[0])

    for wrong in (twice_the_first, one_particle_more):
        monkeypatch.setattr(fh.Fermions, "lowest_configurations", wrong)
        assert not proof.verify()


@pytest.mark.parametrize("name", PROOFS)
def test_immutable_and_picklable(name: str) -> None:
    projection = PROOFS[name]
    proof = projection.separator
    assert proof is not None
    for copy in (
        pickle.loads(pickle.dumps(proof)),
        pickle.loads(pickle.dumps(projection)).separator,
    ):
        assert copy.verify()
        assert copy.bound == proof.bound
        for array in (copy.potential, copy.occupations, copy.weights):
            assert not array.flags.writeable
    for one in fields(proof):
        with pytest.raises(AttributeError):
            setattr(proof, one.name, getattr(proof, one.name))
    assert proof.domain in repr(proof)
    assert proof.domain in proof._repr_html_()


BATCH = Polytope(fh.Fermions(4, 2), [0.6, 0.4]).project(occupations=[[1.0, 1, 0, 0]] * 2)


@named(
    [
        (VALUE, "separator", lambda: BATCH.separator, "[index]"),
        (TYPE, "occupations", lambda: BATCH[0].separator.verify("abcd")),
        (TYPE, "occupations", lambda: BATCH[0].separator.verify([1.0 + 0j, 1, 0, 0])),
        (VALUE, "occupations", lambda: BATCH[0].separator.verify([np.nan, 1, 0, 0])),
    ]
)
def test_bad_input(error: Any, argument: str, call: Any, words: str) -> None:
    refused(error, argument, call, words)
