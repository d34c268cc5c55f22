r"""Density matrices on the boundary of the domain.

A gamma on the boundary has a one-body operator A (its spectrum the normal of the face, its
eigenvectors natural orbitals) with Tr(A gamma) = f_w(A): every ensemble that reproduces gamma
minimises Tr(Gamma A). It is therefore block-diagonal in the eigenspaces of A, the largest weights
filling the lowest eigenspace and so on, and F_w(gamma) is the same problem on those few blocks.
The potential runs away along A, :math:`h = \lambda A + h'`: at finite :math:`\lambda` the dual
misses the value by :math:`C/\lambda`.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from fockhull.functionals._smoothed import Block
from fockhull.polytope import ExclusionPolytope

__all__ = ["face_blocks", "face_normal"]

RealArray = npt.NDArray[np.float64]
ScalarArray = npt.NDArray[np.float64 | np.complex128]

_OUTWARD = 1e-3
_PROBES = 24
_SEED = 0
_EQUAL_OCCUPATIONS = 1e-8
_SAME_LEVEL = 1e-7


def face_normal(
    polytope: ExclusionPolytope, occupations: RealArray, tolerance: float
) -> RealArray | None:
    """Find a normal in the relative interior of the normal cone at decreasing occupations.

    Points a little outside in random directions are projected back; their normals lie in the
    cone, and so does the mean. None if no normal supports the occupations to within `tolerance`.
    """
    generator = np.random.default_rng(_SEED)
    rows = occupations.reshape(-1, occupations.shape[-1])
    centred = rows - rows.mean(axis=1, keepdims=True)
    noise = generator.standard_normal((_PROBES, *rows.shape))
    noise -= noise.mean(axis=2, keepdims=True)
    scale = max(float(np.linalg.norm(centred)), 1e-3)
    noise *= scale / np.linalg.norm(noise, axis=(1, 2), keepdims=True)
    outward = centred + noise * np.linspace(0.0, 3.0, _PROBES)[:, np.newaxis, np.newaxis]
    probes = (rows + _OUTWARD * outward).reshape(_PROBES, *occupations.shape)
    normals = polytope.project(occupations=probes).normal
    lengths = np.linalg.norm(normals.reshape(_PROBES, -1), axis=1)
    normals = normals[lengths > 1e-6 * _OUTWARD]
    total = np.zeros_like(occupations)
    for normal in normals:
        unit = _symmetrised(normal / np.linalg.norm(normal), occupations)
        slack = float((unit * occupations).sum()) - polytope.support(unit).value
        if np.linalg.norm(unit) > 0.5 and abs(slack) <= tolerance:
            total += generator.uniform(0.5, 1.5) * unit
    size = float(np.linalg.norm(total))
    return total / size if size > 0.0 else None


def _symmetrised(normal: RealArray, occupations: RealArray) -> RealArray:
    """Average over equal occupations, whose natural orbitals are arbitrary."""
    result = normal.reshape(-1, normal.shape[-1]).copy()
    for row, numbers in zip(result, occupations.reshape(result.shape), strict=True):
        breaks = np.flatnonzero(-np.diff(numbers) > _EQUAL_OCCUPATIONS) + 1
        for block in np.split(np.arange(len(row)), breaks):
            row[block] = row[block].mean()
    return result.reshape(normal.shape)


def face_blocks(whole: Block, normal_operator: ScalarArray) -> tuple[Block, ...]:
    """Restrict to the eigenspaces of A that the weights reach, the lowest first."""
    energies, states = np.linalg.eigh(normal_operator)
    spread = max(float(np.ptp(energies)), 1e-300)
    breaks = np.flatnonzero(np.diff(energies) > _SAME_LEVEL * spread) + 1
    blocks, count = [], int(np.count_nonzero(whole.weights))
    for levels in np.split(np.arange(len(energies)), breaks):
        if levels[0] >= count:
            break
        inside = states[:, levels]
        adjoint = inside.conj().T
        blocks.append(
            Block(
                adjoint @ whole.interaction @ inside,
                adjoint @ whole.operators @ inside,
                whole.weights[levels],
                inside.T,
            )
        )
    return tuple(blocks)
