"""Shadows of the exclusion polytope on two or three modes, exact, from the oracle alone."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import numpy.typing as npt

from fockhull.polytope import ExclusionPolytope

RealArray = npt.NDArray[np.float64]
Reach = Callable[[RealArray], RealArray]
"""From outward directions (m, k) to the points (m, k) of the shadow farthest along them."""

TOLERANCE = 1e-9
MOST_ROUNDS = 60
MOST_CORNERS = 2_000


def reach_of(polytope: ExclusionPolytope, places: list[int]) -> Reach:
    """Find the farthest point of the domain, seen in chosen places of the flat occupations."""

    def reach(directions: RealArray) -> RealArray:
        h = np.zeros((len(directions), int(np.prod(polytope.shape))))
        h[:, places] = -directions
        found = polytope.support(h.reshape(-1, *polytope.shape)).occupations
        return np.asarray(found.reshape(h.shape)[:, places])

    return reach


def polygon(reach: Reach) -> RealArray:
    """Corners of a shadow in two dimensions, counterclockwise, shape (m, 2).

    Each edge between known corners is asked whether the domain goes beyond it.
    """
    corners = _distinct(reach(np.array([[1.0, 0.0], [0.0, 1.0], [-1.0, 0.0], [0.0, -1.0]])))
    for _ in range(MOST_ROUNDS):
        if len(corners) == 1 or len(corners) > MOST_CORNERS:
            break
        edges = np.roll(corners, -1, axis=0) - corners
        outward = np.column_stack([edges[:, 1], -edges[:, 0]])
        outward /= np.linalg.norm(outward, axis=1, keepdims=True)
        farthest = reach(outward)
        beyond = ((farthest - corners) * outward).sum(axis=1) > TOLERANCE
        if not beyond.any():
            break
        places = np.flatnonzero(beyond) + 1
        corners = _distinct(np.insert(corners, places, farthest[beyond], axis=0))
    return _without_straight_corners(corners)


def faces(reach: Reach) -> list[RealArray] | None:
    """Faces of a shadow in three dimensions as polygons (m, 3); None if it is flat."""
    from scipy.spatial import ConvexHull  # noqa: PLC0415

    signs = np.array(list(np.ndindex(3, 3, 3)), dtype=float) - 1.0
    points = _distinct(reach(signs[np.any(signs != 0.0, axis=1)]))
    for _ in range(MOST_ROUNDS):
        if np.linalg.matrix_rank(points - points.mean(axis=0), tol=1e-7) < 3:
            return None
        hull = ConvexHull(points)
        planes = np.unique(hull.equations.round(9), axis=0)
        farthest = reach(np.ascontiguousarray(planes[:, :3]))
        beyond = (farthest * planes[:, :3]).sum(axis=1) + planes[:, 3] > 1e-7
        if not beyond.any() or len(points) > MOST_CORNERS:
            break
        points = _distinct(np.concatenate([points, farthest[beyond]]))
    return [_around(points, plane) for plane in _distinct_planes(hull.equations)]


def size(outline: list[RealArray]) -> float:
    """Area of a polygon given alone, or volume inside faces around it."""
    if len(outline[0][0]) == 2:
        x, y = outline[0].T
        return float(abs(x @ np.roll(y, -1) - y @ np.roll(x, -1)) / 2.0)
    centre = np.concatenate(outline).mean(axis=0)
    fans = [
        np.array([face[0], face[i], face[i + 1]])
        for face in outline
        for i in range(1, len(face) - 1)
    ]
    return float(np.abs(np.linalg.det(np.array(fans) - centre)).sum() / 6.0)


def _around(points: RealArray, plane: RealArray) -> RealArray:
    """Corners of the face in a plane, in order around it."""
    corners = points[np.abs(points @ plane[:3] + plane[3]) < 1e-6]
    spread = corners - corners.mean(axis=0)
    u, v = np.linalg.svd(plane[None, :3])[2][1:]
    order = np.argsort(np.arctan2(spread @ v, spread @ u))
    return _without_straight_corners(corners[order])


def _distinct(points: RealArray) -> RealArray:
    """Drop repetitions, keep the order."""
    kept: list[RealArray] = []
    for point in points:
        if all(np.abs(point - other).max() > TOLERANCE for other in kept):
            kept.append(point)
    return np.array(kept)


def _distinct_planes(equations: RealArray) -> RealArray:
    _, first = np.unique(equations.round(6) + 0.0, axis=0, return_index=True)
    return np.asarray(equations[np.sort(first)])


def _without_straight_corners(corners: RealArray) -> RealArray:
    """Drop points inside an edge."""
    if len(corners) < 3:
        return corners
    before = corners - np.roll(corners, 1, axis=0)
    after = np.roll(corners, -1, axis=0) - corners
    lengths = np.linalg.norm(before, axis=1) * np.linalg.norm(after, axis=1)
    straight = (before * after).sum(axis=1) > lengths * (1.0 - 1e-12)
    return corners[~straight] if (~straight).sum() >= 2 else corners
