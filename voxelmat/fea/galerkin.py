"""Exact coarse operators P^T K P of a voxel grid, as 27-point block stencils.

Every coarse element matrix is linear in the four coefficients of the fine voxels in it, so the
first three levels come straight from the voxels by one matrix product a slab; deeper ones come
from the element matrices of the level above.
"""

from __future__ import annotations

from collections.abc import Iterator
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.element import Spacing, basis_matrices, coefficients, corner_blocks
from voxelmat.kernels.stencil import scatter_slab

__all__ = [
    "PENALTY",
    "add_springs",
    "children",
    "galerkin_stencils",
    "held_springs",
    "slabs_from_elements",
]

Single = NDArray[np.float32]

# Levels that are taken straight from the voxels; beyond, the products have too many columns.
_DIRECT = 3
#: Supports on coarse levels are springs of this many times the diagonal.
PENALTY = 100.0


@lru_cache(maxsize=1)
def children() -> NDArray[np.float64]:
    """Interpolation from the corners of a coarse voxel to those of its 8 children, (8, 24, 24)."""
    out = np.zeros((8, 24, 24))
    for child in range(8):
        weights = np.ones((8, 8))
        for a in range(8):
            for b in range(8):
                for d in range(3):
                    t = ((child >> d & 1) + (a >> d & 1)) / 2
                    weights[a, b] *= t if b >> d & 1 else 1 - t
        out[child] = np.kron(weights, np.eye(3))
    return out


@lru_cache(maxsize=12)
def _from_voxels(spacing: Spacing, element: str, depth: int) -> Single:
    """Matrix (576, 8^depth * 4) from the coefficients of the voxels to a coarse element matrix."""
    basis = basis_matrices(spacing, element)
    n = 2**depth
    out = np.zeros((n, n, n, 4, 24, 24), dtype=np.float32)
    for z, y, x in np.ndindex(n, n, n):
        P = np.eye(24)
        for level in range(depth - 1, -1, -1):
            P = children()[(x >> level & 1) + 2 * (y >> level & 1) + 4 * (z >> level & 1)] @ P
        out[z, y, x] = P.T @ basis @ P
    return np.ascontiguousarray(out.reshape(-1, 576).T)


@lru_cache(maxsize=1)
def _from_elements() -> Single:
    """Matrix (576, 8 * 576) from the element matrices of the children to the coarse one."""
    return np.ascontiguousarray(
        np.concatenate([np.kron(P, P) for P in children()]).T, dtype=np.float32
    )


def _slabs_from_voxels(
    values: list[Single], spacing: Spacing, element: str, depth: int
) -> Iterator[Single]:
    G = _from_voxels(spacing, element, depth)
    n = 2**depth
    nz, ny, nx = values[0].shape
    NZ, NY, NX = (-(-m // n) for m in (nz, ny, nx))
    for K in range(NZ):
        C = np.zeros((n, n, n, 4, NY, NX), dtype=np.float32)
        for z in range(min(n, nz - K * n)):
            for q in range(4):
                plane = np.zeros((NY * n, NX * n), dtype=np.float32)
                plane[:ny, :nx] = values[q][K * n + z]
                C[z, :, :, q] = plane.reshape(NY, n, NX, n).transpose(1, 3, 0, 2)
        yield (G @ C.reshape(n**3 * 4, NY * NX)).reshape(24, 24, NY, NX)


def slabs_from_elements(E: Single) -> Iterator[Single]:
    """Element matrices of the next level, slab by slab, from those [nz, 24, 24, ny, nx] of one."""
    nz, _, _, ny, nx = E.shape
    NZ, NY, NX = (-(-m // 2) for m in (nz, ny, nx))
    for K in range(NZ):
        C = np.zeros((2, 2, 2, 576, NY, NX), dtype=np.float32)
        for z in range(min(2, nz - 2 * K)):
            plane = np.zeros((576, NY * 2, NX * 2), dtype=np.float32)
            plane[:, :ny, :nx] = E[2 * K + z].reshape(576, ny, nx)
            C[z] = plane.reshape(576, NY, 2, NX, 2).transpose(2, 4, 0, 1, 3)
        yield (_from_elements() @ C.reshape(8 * 576, NY * NX)).reshape(24, 24, NY, NX)


def galerkin_stencils(
    lam: NDArray[np.float64],
    mu: NDArray[np.float64],
    spacing: Spacing,
    element: str,
    depths: int,
) -> Iterator[Single]:
    """Stencils ``[nk, nj, 243, ni]`` of the levels 1 to `depths`, without supports."""
    values = [c.astype(np.float32) for c in coefficients(lam, mu, element)]
    elements: Single | None = None
    for depth in range(1, depths + 1):
        nz, ny, nx = (-(-m // 2**depth) for m in lam.shape)
        S = np.zeros((nz + 1, ny + 1, 243, nx + 1), dtype=np.float32)
        if depth <= _DIRECT:
            slabs = _slabs_from_voxels(values, spacing, element, depth)
        elif elements is not None:
            slabs = slabs_from_elements(elements)
        kept = []
        for k, E in enumerate(slabs):
            scatter_slab(S, E, k)
            if depth >= _DIRECT:
                kept.append(E)
        elements = np.array(kept) if kept else None
        yield S


def held_springs(
    lam: NDArray[np.float64],
    mu: NDArray[np.float64],
    spacing: Spacing,
    element: str,
    held: NDArray[np.bool_],
) -> tuple[NDArray[np.intp], NDArray[np.float64]]:
    """Springs that stand for held unknowns: places (n, 4) as (component, k, j, i), and N/mm.

    A support that does not lie on a coarse node would be lost there; as a stiff spring it is
    carried down exactly.
    """
    where = np.argwhere(held)
    values = coefficients(lam, mu, element)
    blocks = corner_blocks(spacing, element)
    diagonal = np.zeros(len(where))
    for a in range(8):
        cell = where[:, 1:] - (a >> 2, a >> 1 & 1, a & 1)
        inside = np.flatnonzero(np.all((cell >= 0) & (cell < lam.shape), axis=1))
        at = tuple(cell[inside].T)
        for q in range(4):
            diagonal[inside] += blocks[a, where[inside, 0], q] * values[q][at]
    return where, PENALTY * diagonal


def add_springs(
    S: Single, where: NDArray[np.intp], stiffness: NDArray[np.float64], depth: int
) -> None:
    """Add P^T diag(stiffness) P to the stencils of level `depth`, for springs on the voxel grid."""
    shape = np.array([S.shape[0], S.shape[1], S.shape[3]])
    place = where[:, 1:] / 2**depth
    base = np.minimum(place.astype(np.intp), shape - 2)
    t = place - base
    corners = [np.array([a >> 2, a >> 1 & 1, a & 1]) for a in range(8)]
    weights = [np.prod(np.where(c, t, 1 - t), axis=1) for c in corners]
    for a in range(8):
        for b in range(8):
            w = weights[a] * weights[b] * stiffness
            some = np.flatnonzero(w)
            o = int((corners[b] - corners[a] + 1) @ (9, 3, 1))
            k, j, i = (base[some] + corners[a]).T
            np.add.at(S, (k, j, 9 * o + 4 * where[some, 0], i), w[some].astype(np.float32))
