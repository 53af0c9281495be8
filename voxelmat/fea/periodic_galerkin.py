"""Exact coarse operators of a periodic grid of any size, streamed slab by slab.

A coarse voxel takes in two fine ones along each axis. Where the number along a periodic axis is
odd, the last coarse voxel takes in one alone, so that its far nodes are still copies of the
first ones; along other axes a fine voxel of empty space is thought to follow.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Iterator

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.element import Spacing, basis_matrices, coefficients
from voxelmat.fea.fold import Periodic
from voxelmat.kernels.stencil import scatter_slab

__all__ = ["coarse_levels"]

Single = NDArray[np.float32]
Double = NDArray[np.float64]

_LOW = np.array([[1.0, 0.0], [0.5, 0.5]])
_HIGH = np.array([[0.5, 0.5], [0.0, 1.0]])
_ALONE = np.eye(2)


def _children(n: int, periodic: bool) -> list[tuple[slice, slice, Double]]:
    """Along one axis of n voxels: (fine voxels, their coarse ones, end values from end values)."""
    pairs = n // 2
    out = [
        (slice(0, 2 * pairs, 2), slice(0, pairs), _LOW),
        (slice(1, 2 * pairs, 2), slice(0, pairs), _HIGH),
    ]
    if n % 2:
        out.append((slice(n - 1, n), slice(pairs, pairs + 1), _ALONE if periodic else _LOW))
    return out


def _interpolation(z: Double, y: Double, x: Double) -> Double:
    """From the corners of a coarse voxel to those of a fine one in it, (24, 24)."""
    return np.asarray(np.kron(np.kron(z, np.kron(y, x)), np.eye(3)))


def _from_voxels(
    values: Double, spacing: Spacing, element: str, periodic: Periodic
) -> Iterator[Single]:
    """Element matrices (24, 24, ny, nx) of the first coarse level, slab by slab."""
    _, nz, ny, nx = values.shape
    basis = basis_matrices(spacing, element)
    along_y, along_x = _children(ny, periodic[1]), _children(nx, periodic[0])
    in_z = _children(nz, periodic[2])
    for K in range(-(-nz // 2)):
        out = np.zeros((24, 24, -(-ny // 2), -(-nx // 2)), dtype=np.float32)
        here = [(c.start + 2 * (K - C.start), Z) for c, C, Z in in_z if C.start <= K < C.stop]
        for (k, Z), (j, JJ, Y), (i, II, X) in itertools.product(here, along_y, along_x):
            P = _interpolation(Z, Y, X)
            M = (P.T @ basis @ P).reshape(4, 576).T.astype(np.float32)
            part = values[:, k, j, i].astype(np.float32)
            out[:, :, JJ, II] += (M @ part.reshape(4, -1)).reshape(24, 24, *part.shape[1:])
        yield out


def _from_elements(
    slabs: Iterable[Single], shape: tuple[int, ...], periodic: Periodic
) -> Iterator[Single]:
    """Element matrices of the level above a level of `shape` voxels."""
    nz, ny, nx = shape
    along_y, along_x = _children(ny, periodic[1]), _children(nx, periodic[0])
    out = np.zeros(0, dtype=np.float32)
    for k, E in enumerate(slabs):
        if k % 2 == 0:
            out = np.zeros((24, 24, -(-ny // 2), -(-nx // 2)), dtype=np.float32)
        alone = k == nz - 1 and nz % 2 and periodic[2]
        Z = _ALONE if alone else (_HIGH if k % 2 else _LOW)
        for (j, JJ, Y), (i, II, X) in itertools.product(along_y, along_x):
            P = _interpolation(Z, Y, X).astype(np.float32)
            part = np.ascontiguousarray(E[:, :, j, i])
            half = (P.T @ part.reshape(24, -1)).reshape(24, 24, -1)
            out[:, :, JJ, II] += np.matmul(P.T, half).reshape(part.shape)
        if k % 2 or k == nz - 1:
            yield out


def _scattered(slabs: Iterable[Single], S: Single) -> Iterator[Single]:
    """Pass slabs on after adding them to the stencils S."""
    for k, E in enumerate(slabs):
        scatter_slab(S, E, k)
        yield E


def _stencils(shape: tuple[int, ...], stencils: list[Single]) -> Single:
    """Empty stencils of a grid of `shape` voxels, appended to `stencils`."""
    nz, ny, nx = shape
    stencils.append(np.zeros((nz + 1, ny + 1, 243, nx + 1), dtype=np.float32))
    return stencils[-1]


def coarse_levels(
    lam: Double,
    mu: Double,
    spacing: Spacing,
    element: str,
    periodic: Periodic,
    depths: int,
) -> list[Single]:
    """Stencils of the levels 1 to `depths`, or of the voxels themselves where that is 0.

    The stencils ``[nk, nj, 243, ni]`` are those of the open grid: last planes of nodes are not
    folded.
    """
    values = np.stack(coefficients(lam, mu, element))
    stencils: list[Single] = []
    shape = lam.shape
    slabs: Iterable[Single]
    if depths == 0:
        voxels = np.einsum("qab,qkji->kabji", basis_matrices(spacing, element), values)
        single = np.ascontiguousarray(voxels, dtype=np.float32)
        slabs = _scattered(single, _stencils(shape, stencils))
    else:
        slabs = _from_voxels(values, spacing, element, periodic)
    for depth in range(depths):
        if depth:
            slabs = _from_elements(slabs, shape, periodic)
        shape = tuple(-(-n // 2) for n in shape)
        slabs = _scattered(slabs, _stencils(shape, stencils))
    for _ in slabs:
        pass
    return stencils
