"""The V-cycle of a scalar field: voxels on top, exact Galerkin stencils below, a direct end.

Held nodes are taken out of the interpolation before the coarse operators are made, so a support
between coarse nodes, an odd number of voxels or an empty voxel costs nothing in accuracy.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from functools import lru_cache
from typing import NamedTuple

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from voxelmat.fea.operator import planes
from voxelmat.fea.scalar_element import Spacing, element_matrices, interpolation
from voxelmat.fea.scalar_levels import (
    Conduction,
    ScalarLevel,
    StencilScalarLevel,
    VoxelScalarLevel,
)
from voxelmat.kernels.scalar import prolong_add_scalar, residual_scalar, restrict_scalar
from voxelmat.kernels.scalar_coarse import (
    add_special,
    elements_from_elements,
    stencils_from_elements,
)
from voxelmat.kernels.threads import crew
from voxelmat.kernels.vector import scaled_copy

__all__ = ["ScalarGrid", "ScalarMultigrid", "matrix_diagonal"]

Single = NDArray[np.float32]
Double = NDArray[np.float64]

# Nodes below which a grid is solved directly.
_COARSEST = 500
# Added to that matrix after scaling to a unit diagonal: a piece with no hold stays solvable.
_SHIFT = 1e-6
# Smoothing polynomial: degree on voxels up to 1.5 times as long as wide, and its range.
_DEGREE, _RANGE = 2, 8.0
# Longest polynomial, for flat voxels, whose weak directions no point smoother sees.
_LONGEST = 8


class ScalarGrid(NamedTuple):
    """What a hierarchy is made from.

    Attributes
    ----------
    conductivity : ndarray of float64, shape (nz, ny, nx)
    capacity : ndarray of float64 or None, shape of `conductivity`
        Divided by the time step.
    spacing : tuple of float
        mm.
    kind : str
        See `voxelmat.fea.scalar_element.CAPACITIES`.
    diagonal : ndarray of float64 or None, shape (nz+1, ny+1, nx+1)
    held : ndarray of bool, shape (nz+1, ny+1, nx+1)
    touched : ndarray of bool, shape of `held`
    """

    conductivity: Double
    capacity: Double | None
    spacing: Spacing
    kind: str
    diagonal: Double | None
    held: NDArray[np.bool_]
    touched: NDArray[np.bool_]


def matrix_diagonal(grid: ScalarGrid) -> Double:
    """Diagonal of the matrix at every node, held ones too."""
    K, C = element_matrices(grid.spacing, grid.kind)
    voxel = K[0, 0] * grid.conductivity
    if grid.capacity is not None:
        voxel = voxel + C[0, 0] * grid.capacity
    out = np.zeros(grid.held.shape) if grid.diagonal is None else grid.diagonal.copy()
    nz, ny, nx = voxel.shape
    for a in range(8):
        x, y, z = a & 1, a >> 1 & 1, a >> 2
        out[z : z + nz, y : y + ny, x : x + nx] += voxel
    return out


def _finest(grid: ScalarGrid) -> VoxelScalarLevel:
    half = np.float32
    operator = Conduction(
        grid.conductivity.astype(half),
        None if grid.capacity is None else grid.capacity.astype(half),
        grid.spacing,
        grid.kind,
        grid.diagonal,
    )
    return VoxelScalarLevel(operator, matrix_diagonal(grid), grid.touched & ~grid.held)


def _lists(maps: list[Double]) -> tuple[NDArray[np.intp], Single]:
    """Sparse form of the matrices from the entries of each child to those of its parent."""
    found = [(*np.nonzero(m), m[np.nonzero(m)]) for m in maps]
    longest = max(len(weight) for _, _, weight in found)
    entries, weights = np.zeros((8, longest, 2), np.intp), np.zeros((8, longest), np.float32)
    for t, (parent, child, weight) in enumerate(found):
        entries[t, : len(parent)] = np.column_stack([parent, child])
        weights[t, : len(parent)] = weight
    return entries, weights


@lru_cache(maxsize=1)
def _from_elements() -> tuple[NDArray[np.intp], Single]:
    """How element matrices of children add to their parent's."""
    return _lists([np.kron(P, P).T for P in interpolation()])


def _special(grid: ScalarGrid) -> tuple[NDArray[np.bool_], Double]:
    """Voxels at held nodes or films, and the films shared out over the voxels round each node."""
    shape = grid.conductivity.shape
    odd, extra = grid.held, np.zeros(grid.held.shape)
    if grid.diagonal is not None:
        odd = odd | (grid.diagonal > 0)
        extra = grid.diagonal.copy()
        for axis, n in enumerate(shape):
            inner = [slice(None)] * 3
            inner[axis] = slice(1, n)
            extra[tuple(inner)] /= 2
    special = np.zeros(shape, dtype=bool)
    for a in range(8):
        x, y, z = a & 1, a >> 1 & 1, a >> 2
        special |= odd[z : z + shape[0], y : y + shape[1], x : x + shape[2]]
    return special, extra


def _first_elements(grid: ScalarGrid) -> Single:
    """Element matrices of the first coarse level."""
    K, C = element_matrices(grid.spacing, grid.kind)
    P = interpolation()
    special, extra = _special(grid)
    fields, matrices = [grid.conductivity], [K]
    if grid.capacity is not None:
        fields.append(grid.capacity)
        matrices.append(C)
    coefficients = np.stack([np.where(special, 0, f) for f in fields], axis=2).astype(np.float32)
    maps = [np.column_stack([(Q.T @ M @ Q).ravel() for M in matrices]) for Q in P]
    size = [-(-n // 2) for n in grid.conductivity.shape]
    E = np.empty((size[0], size[1], 64, size[2]), dtype=np.float32)
    elements_from_elements(coefficients, *_lists(maps), E)
    capacity = np.zeros_like(grid.conductivity) if grid.capacity is None else grid.capacity
    at = np.argwhere(special)
    add_special(at, grid.conductivity, capacity, grid.held, extra, K, C, P, E)
    return E


def _coarse(grid: ScalarGrid) -> Iterator[ScalarLevel]:
    """All levels below the voxels."""
    shape = np.array(grid.conductivity.shape)
    E: Single | None = None
    while np.prod(shape + 1) > _COARSEST and shape.max() > 1:
        shape = -(-shape // 2)
        with crew(int(np.prod(shape + 1))):
            if E is None:
                E = _first_elements(grid)
            else:
                fine, E = E, np.empty((shape[0], shape[1], 64, shape[2]), dtype=np.float32)
                elements_from_elements(fine, *_from_elements(), E)
            S = np.empty((shape[0] + 1, shape[1] + 1, 27, shape[2] + 1), dtype=np.float32)
            stencils_from_elements(E, S)
        yield StencilScalarLevel(S)


def _inverse(level: ScalarLevel) -> tuple[Double, Double]:
    """Scale and inverse Cholesky factor of the coarsest matrix."""
    size = level.nodes
    A = np.zeros((size, size))
    x, y = np.zeros(level.shape, np.float32), np.empty(level.shape, np.float32)
    for n in range(size):
        x.flat[n] = 1
        level.product(x, y)
        x.flat[n] = 0
        A[n] = y.ravel()
    exists = level.B.ravel() > 0
    scale = np.sqrt(level.B.ravel().astype(np.float64))
    A = (A + A.T) / 2 * scale[:, None] * scale
    A[~exists, ~exists] = 1.0
    A[np.diag_indices_from(A)] += _SHIFT
    return scale, scipy.linalg.inv(scipy.linalg.cholesky(A, lower=True))


class ScalarMultigrid:
    """One V-cycle as a preconditioner of conjugate gradients.

    Parameters
    ----------
    grid : ScalarGrid
    """

    method = "galerkin"

    def __init__(self, grid: ScalarGrid) -> None:
        flatness = max(grid.spacing) / min(grid.spacing)
        degree = min(_LONGEST, max(_DEGREE, math.ceil(4 / 3 * flatness)))
        ratio = _RANGE * (degree / _DEGREE) ** 2
        self.levels: list[ScalarLevel] = [_finest(grid)]
        self.levels.extend(_coarse(grid))
        for level in self.levels[:-1]:
            with crew(level.nodes):
                level.choose_steps(degree, ratio)
        self._scale, self._factor = _inverse(self.levels[-1])

    def _direct(self, level: ScalarLevel) -> None:
        v = self._factor @ (level.b.ravel().astype(np.float64) * self._scale)
        level.x[:] = ((self._factor.T @ v) * self._scale).reshape(level.shape)

    def _cycle(self, n: int) -> None:
        level = self.levels[n]
        if n == len(self.levels) - 1:
            self._direct(level)
            return
        below = self.levels[n + 1]
        with crew(level.nodes):
            level.smooth(from_zero=True)
            level.product(level.x, level.y)
            b, y, B = (planes(v) for v in (level.b, level.y, level.B))
            residual_scalar(b, y, B, y)
            restrict_scalar(level.y[0], below.b[0])
        self._cycle(n + 1)
        with crew(level.nodes):
            prolong_add_scalar(below.x[0], level.x[0], level.B[0])
            level.smooth(from_zero=False)

    def apply(self, r: Double, scale: float) -> Single:
        """One V-cycle for ``scale * r``; the array belongs to the preconditioner."""
        top = self.levels[0]
        scaled_copy(planes(r), scale, planes(top.b))
        self._cycle(0)
        return top.x

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        return sum(level.nbytes for level in self.levels) + int(self._factor.nbytes)
