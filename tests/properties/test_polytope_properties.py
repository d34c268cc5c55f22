"""What holds for every exclusion polytope: convexity, symmetry, order, boundary."""

from __future__ import annotations

from typing import Any

import numpy as np
from hypothesis import assume, given
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

import fockhull as fh
from properties.generated import (
    Array,
    centre,
    fermions,
    generators,
    inside,
    polytopes,
    scattered,
    spin_half,
    vertex,
    weights_for,
)
from reference.random_problems import random_unitary

Polytope = fh.ExclusionPolytope
CLOSE: dict[str, Any] = {"rtol": 0.0, "atol": 1e-8}
EXACT: dict[str, Any] = {"rtol": 0.0, "atol": 1e-12}


def permuted(n: Array, rng: np.random.Generator) -> tuple[Array, Array]:
    """The same occupations in another order (per component), and the order."""
    order = np.argsort(rng.standard_normal(n.shape), axis=-1)
    return np.take_along_axis(n, order, axis=-1), order


def norm(n: Array) -> float:
    return float(np.linalg.norm(np.ravel(n)))


@given(polytopes(), generators(), st.floats(0.0, 10.0))
def test_support_function(polytope: Polytope, rng: Any, factor: float) -> None:
    """Homogeneous, concave, invariant under permutations, exact on constants."""
    h, k = rng.standard_normal((2, *polytope.shape))
    f = polytope.support(h).value
    assert_allclose(polytope.support(factor * h).value, factor * f, rtol=0.0, atol=1e-10)
    assert polytope.support(h + k).value >= f + polytope.support(k).value - 1e-10
    assert_allclose(polytope.support(permuted(h, rng)[0]).value, f, **EXACT)
    total = polytope.sector.total_particles
    assert_allclose(polytope.support(h + 0.5).value, f + 0.5 * total, rtol=0.0, atol=1e-10)
    assert f <= np.sum(h * centre(polytope)) + 1e-10


@given(polytopes(), generators())
def test_vertices(polytope: Polytope, rng: Any) -> None:
    """They attain the value, lie inside, and have the particle numbers of the sector."""
    h = rng.standard_normal(polytope.shape)
    value, n = polytope.support(h)
    assert_allclose(np.sum(h * n), value, **EXACT)
    assert_allclose(n.sum(axis=-1), centre(polytope).sum(axis=-1), **EXACT)
    assert polytope.contains(occupations=n)
    assert polytope.distance(occupations=n) < 1e-10


@given(polytopes(), generators())
def test_mixtures_are_inside(polytope: Polytope, rng: Any) -> None:
    """Convex, and closed under permutations."""
    points = np.array([inside(polytope, rng) for _ in range(3)])
    assert polytope.contains(occupations=points).all()
    mixture = np.tensordot(rng.dirichlet(np.ones(3)), points, axes=1)
    assert polytope.contains(occupations=mixture)
    assert polytope.contains(occupations=permuted(mixture, rng)[0])
    assert polytope.contains(occupations=centre(polytope))


@given(polytopes(), generators())
def test_projection_is_idempotent(polytope: Polytope, rng: Any) -> None:
    nearest = polytope.project(occupations=scattered(polytope, rng)).occupations
    again = polytope.project(occupations=nearest)
    assert again.distance < 1e-8
    assert_allclose(again.occupations, nearest, **CLOSE)
    assert polytope.contains(occupations=nearest, tol=1e-8)


@given(polytopes(), generators())
def test_projection_does_not_expand(polytope: Polytope, rng: Any) -> None:
    n, m = scattered(polytope, rng), scattered(polytope, rng)
    images = polytope.project(occupations=[n, m]).occupations
    assert norm(images[0] - images[1]) <= norm(n - m) + 1e-8


@given(polytopes(), generators())
def test_projection_follows_permutations(polytope: Polytope, rng: Any) -> None:
    n = scattered(polytope, rng)
    m, order = permuted(n, rng)
    first, second = polytope.project(occupations=n), polytope.project(occupations=m)
    expected = np.take_along_axis(first.occupations, order, axis=-1)
    assert_allclose(second.occupations, expected, **CLOSE)
    assert_allclose(second.distance, first.distance, **CLOSE)


@given(polytopes(), generators())
def test_projection_is_the_nearest_point(polytope: Polytope, rng: Any) -> None:
    """<n - x, v - x> <= 0 for all v inside, and the certificates tell the truth."""
    n = scattered(polytope, rng)
    projection = polytope.project(occupations=n)
    x = projection.occupations
    assert_allclose(projection.normal, x - n, rtol=0.0, atol=1e-12)
    assert_allclose(projection.distance, norm(x - n), rtol=0.0, atol=1e-12)
    assert projection.distance_lower <= projection.distance + 1e-15
    assert projection.distance - projection.distance_lower < 1e-8
    assert 0.0 <= projection.gap < 1e-10
    for _ in range(5):
        assert np.sum((n - x) * (vertex(polytope, rng) - x)) <= 1e-8
    value = polytope.support(projection.normal).value
    assert_allclose(np.sum(projection.normal * x) - value, projection.gap, rtol=0.0, atol=1e-10)


@given(polytopes(), generators())
def test_contains_agrees_with_distance_and_stretch(polytope: Polytope, rng: Any) -> None:
    n = scattered(polytope, rng)
    distance = polytope.distance(occupations=n)
    assume(not 1e-12 < distance < 1e-6)
    allowed = polytope.contains(occupations=n)
    assert allowed == (distance <= 1e-9)
    stretch = polytope.stretch(occupations=n)
    assert stretch.lower <= stretch.value
    assert (stretch >= 1.0 - 1e-9) == allowed


@given(polytopes(), generators())
def test_stretched_points_lie_on_the_boundary(polytope: Polytope, rng: Any) -> None:
    n, middle = scattered(polytope, rng), centre(polytope)
    stretch = polytope.stretch(occupations=n)
    assume(np.isfinite(stretch.value) and 1e-6 < stretch.value < 1e6)
    edge = middle + stretch.value * (n - middle)
    assert polytope.distance(occupations=edge) < 1e-8
    assert not polytope.contains(occupations=middle + 1.001 * (edge - middle))
    assert polytope.contains(occupations=middle + 0.999 * (edge - middle))
    support = polytope.support(stretch.normal).value
    at_edge = np.sum(stretch.normal * stretch.boundary)
    assert_allclose(support, at_edge, rtol=0.0, atol=1e-8 * max(1.0, norm(stretch.normal)))
    ordered = -np.sort(-edge, axis=-1)
    assert_allclose(-np.sort(-stretch.boundary, axis=-1), ordered, rtol=0.0, atol=1e-8)


@given(polytopes())
def test_the_centre_is_never_left(polytope: Polytope) -> None:
    assert polytope.stretch(occupations=centre(polytope)).value == np.inf


@given(polytopes(), generators())
def test_flatter_weights_allow_less(polytope: Polytope, rng: Any) -> None:
    """w' majorised by w: the domain of w' lies inside that of w."""
    weights, dimension = polytope.weights, polytope.sector.dimension
    r = min(dimension, len(weights) + int(rng.integers(0, 3)))
    padded = np.zeros(r)
    padded[: len(weights)] = weights
    # a mixture of permutations, by Birkhoff; sorted again
    mixed = rng.dirichlet(np.ones(4)) @ [padded, *(rng.permutation(padded) for _ in range(3))]
    flatter = -np.sort(-mixed)
    domain = None if polytope.domain == "spinless" else polytope.domain
    smaller = Polytope(polytope.sector, flatter / flatter.sum(), domain)
    h = rng.standard_normal((5, *polytope.shape))
    assert (smaller.support(h).value >= polytope.support(h).value - 1e-10).all()
    assert polytope.contains(occupations=inside(smaller, rng))
    n = scattered(polytope, rng)
    assert smaller.distance(occupations=n) >= polytope.distance(occupations=n) - 1e-8


@given(polytopes(), generators(), st.booleans())
def test_density_matrices_count_by_their_occupations(
    polytope: Polytope, rng: Any, is_complex: bool
) -> None:
    """The natural orbitals stay, whatever they are."""
    n, d = scattered(polytope, rng), polytope.sector.modes
    rows = n.reshape(-1, d)
    u = np.array([random_unitary(rng, d, is_complex=is_complex) for _ in rows])
    gamma = (u * rows[:, None, :] @ u.conj().swapaxes(1, 2)).reshape(*polytope.shape, d)
    by_matrix, by_numbers = polytope.project(gamma), polytope.project(occupations=n)
    assert_allclose(by_matrix.distance, by_numbers.distance, **CLOSE)
    nearest = by_matrix.density_matrix
    assert nearest.dtype == gamma.dtype
    assert_allclose(norm(nearest - gamma), by_matrix.distance, **CLOSE)
    rotated = u.conj().swapaxes(1, 2) @ nearest.reshape(-1, d, d) @ u
    expected = by_numbers.occupations.reshape(-1, d)
    assert_allclose(rotated, expected[:, None, :] * np.eye(d), **CLOSE)
    if by_numbers.distance > 1e-6 or by_numbers.distance < 1e-10:
        assert polytope.contains(gamma) == polytope.contains(occupations=n)
    if np.linalg.norm(n - centre(polytope)) > 1e-6:
        by_matrix, by_numbers = polytope.stretch(gamma), polytope.stretch(occupations=n)
        assert_allclose(by_matrix.value, by_numbers.value, rtol=1e-6, atol=1e-8)


@given(polytopes(), generators())
def test_batches(polytope: Polytope, rng: Any) -> None:
    """Leading axes come back; each member as it would alone."""
    points = np.array([[scattered(polytope, rng) for _ in range(3)] for _ in range(2)])
    projection = polytope.project(occupations=points)
    assert projection.occupations.shape == points.shape
    assert projection.distance.shape == (2, 3)
    stretch = polytope.stretch(occupations=points)
    allowed = polytope.contains(occupations=points)
    support = polytope.support(points)
    for index in np.ndindex(2, 3):
        alone = polytope.project(occupations=points[index])
        assert_array_equal(projection.occupations[index], alone.occupations)
        assert projection.distance[index] == alone.distance
        assert stretch.value[index] == polytope.stretch(occupations=points[index]).value
        assert allowed[index] == polytope.contains(occupations=points[index])
        assert support.value[index] == polytope.support(points[index]).value
        assert projection[index].ensemble.verify(alone.occupations)


@given(polytopes(), generators(), st.floats(-2.0, 2.0))
def test_wrong_particle_numbers_are_mended(polytope: Polytope, rng: Any, excess: float) -> None:
    """The excess goes uniformly and counts in quadrature."""
    n = scattered(polytope, rng)
    modes = n.shape[-1]
    right, wrong = (polytope.project(occupations=m) for m in (n, n + excess / modes))
    assert_allclose(wrong.occupations, right.occupations, **CLOSE)
    components = n.size // modes
    expected = np.hypot(right.distance, excess * np.sqrt(components / modes))
    assert_allclose(wrong.distance, expected, rtol=0.0, atol=1e-7)


@given(st.data(), fermions(), generators())
def test_particles_and_holes(data: st.DataObject, sector: fh.Fermions, rng: Any) -> None:
    """n is allowed for N exactly when 1 - n is for d - N."""
    weights = data.draw(weights_for(sector))
    particles = Polytope(sector, weights)
    holes = Polytope(fh.Fermions(sector.modes, sector.modes - sector.particles), weights)
    n = scattered(particles, rng)
    first, second = particles.project(occupations=n), holes.project(occupations=1.0 - n)
    assert_allclose(second.occupations, 1.0 - first.occupations, **CLOSE)
    assert_allclose(second.distance, first.distance, **CLOSE)


@given(st.data(), spin_half(), generators())
def test_spin_summed_is_the_sum_of_the_spins(
    data: st.DataObject, sector: fh.SpinHalfFermions, rng: Any
) -> None:
    """The spin-summed domain is the image of the spin-resolved one."""
    weights = data.draw(weights_for(sector))
    resolved = Polytope(sector, weights, "spin-resolved")
    summed = Polytope(sector, weights, "spin-summed")
    h = rng.standard_normal(sector.orbitals)
    value = resolved.support(np.array([h, h])).value
    assert_allclose(summed.support(h).value, value, **EXACT)
    assert summed.contains(occupations=inside(resolved, rng).sum(axis=0))


@given(polytopes(), generators())
def test_one_point_domains(polytope: Polytope, rng: Any) -> None:
    """All states with equal weights: only the centre is left."""
    dimension = polytope.sector.dimension
    domain = None if polytope.domain == "spinless" else polytope.domain
    point = Polytope(polytope.sector, np.full(dimension, 1.0 / dimension), domain)
    n, middle = scattered(polytope, rng), centre(polytope)
    projection = point.project(occupations=n)
    assert_allclose(projection.occupations, middle, **CLOSE)
    assert_allclose(projection.distance, norm(n - middle), **CLOSE)
    assert projection.ensemble.verify(middle)
    if norm(n - middle) > 1e-6:
        assert point.stretch(occupations=n).value == 0.0


@given(st.integers(1, 5), st.integers(1, 5), generators())
def test_sectors_of_one_state(modes: int, particles: int, rng: Any) -> None:
    """No particles, every mode filled, bosons in one mode."""
    for sector in (
        fh.Fermions(modes, 0),
        fh.Fermions(modes, modes),
        fh.Bosons(modes, 0),
        fh.Bosons(1, particles),
    ):
        polytope = Polytope(sector, [1.0])
        only = centre(polytope)
        assert polytope.contains(occupations=only)
        assert polytope.stretch(occupations=only).value == np.inf
        n = only + rng.standard_normal(only.shape)
        assert_allclose(polytope.project(occupations=n).occupations, only, **CLOSE)
        assert_allclose(polytope.distance(occupations=n), norm(n - only), **CLOSE)
