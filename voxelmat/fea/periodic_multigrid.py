"""The multigrid V-cycle on a periodic grid, with exact coarse operators, in single precision."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.coarsest import Coarsest
from voxelmat.fea.element import Spacing, corner_blocks, kernel_constants
from voxelmat.fea.fold import Periodic, PeriodicStiffness, array_axes, fold, is_image, wrap
from voxelmat.fea.galerkin import add_springs, held_springs
from voxelmat.fea.levels import Level
from voxelmat.fea.operator import planes
from voxelmat.fea.periodic_galerkin import coarse_levels
from voxelmat.kernels.blocks import stencil_inverses, voxel_inverses
from voxelmat.kernels.stencil import apply_stencil
from voxelmat.kernels.threads import crew
from voxelmat.kernels.transfer import prolong_add, restrict
from voxelmat.kernels.vector import residual, scaled_copy

__all__ = ["PeriodicMultigrid"]

Single = NDArray[np.float32]
Double = NDArray[np.float64]

# Unknowns below which a grid is solved directly.
_COARSEST = 750
# Smoothing polynomial: degree, and the range of eigenvalues that it damps, [max / ratio, max].
_DEGREE, _RATIO = 4, 40.0
# The centre blocks among the 243 rows of a stencil.
_CENTRE = slice(117, 126)


def _nodes(dims: tuple[int, ...], periodic: Periodic) -> int:
    """Nodes of a grid of `dims` voxels along z, y, x, copies left out."""
    return int(np.prod([n + (not p) for n, p in zip(dims, periodic[::-1], strict=True)]))


def _depths(shape: tuple[int, ...], periodic: Periodic) -> int:
    depth, dims = 0, tuple(shape)
    while 3 * _nodes(dims, periodic) > _COARSEST and max(dims) > 1:
        dims = tuple(-(-n // 2) for n in dims)
        depth += 1
    return depth


class _Finest(Level):
    """The grid of voxels."""

    def __init__(
        self,
        lam: Double,
        mu: Double,
        spacing: Spacing,
        element: str,
        free: NDArray[np.uint8],
        periodic: Periodic,
    ) -> None:
        super().__init__(free.shape)
        axes = array_axes(periodic)
        # One more voxel in front of each periodic axis, so that the first nodes see both sides.
        front = tuple(int(p) for p in periodic[::-1])
        width = [(n, 0) for n in front]
        around = (np.pad(c, width, mode="wrap") for c in (lam, mu))
        wide = np.pad(free, [(0, 0), *width])
        B = np.zeros((6, *wide.shape[1:]), dtype=np.float32)
        constants, blocks = kernel_constants(spacing, element), corner_blocks(spacing, element)
        voxel_inverses(*around, np.zeros((3, 0, 0, 0)), constants, blocks, wide, B)
        self.B[:] = B[:, front[0] :, front[1] :, front[2] :]
        self.operator = PeriodicStiffness(
            lam.astype(np.float32), mu.astype(np.float32), spacing, element, axes=axes
        )

    def product(self, x: Single, y: Single) -> None:
        """K x."""
        self.operator.apply(x, y)

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        return super().nbytes + self.operator.nbytes


class _Coarse(Level):
    """A coarse grid with its stencils."""

    def __init__(self, S: Single, periodic: Periodic) -> None:
        nk, nj, _, ni = S.shape
        super().__init__((3, nk, nj, ni))
        self.S, self.axes = S, array_axes(periodic)
        centre = S[:, :, _CENTRE]
        open_blocks = centre.copy()
        # Axes of the stencil are k, j, row, i.
        fold(centre, tuple({-1: -1, -2: -3, -3: -4}[a] for a in self.axes))
        stencil_inverses(S, self.B)
        centre[:] = open_blocks

    def product(self, x: Single, y: Single) -> None:
        """S x."""
        wrap(x, self.axes)
        apply_stencil(self.S, x, y)
        fold(y, self.axes)

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        return super().nbytes + self.S.nbytes


def _dense(S: Single, axes: tuple[int, ...]) -> Double:
    """Assemble stencils over the nodes of the open grid, copies counted to their originals."""
    nk, nj, _, ni = S.shape
    nodes = np.arange(nk * nj * ni).reshape(nk, nj, ni)
    wrap(nodes, axes)
    A = np.zeros((3 * nodes.size, 3 * nodes.size))
    for o, step in enumerate(np.ndindex(3, 3, 3)):
        here = tuple(
            slice(max(1 - s, 0), n + min(1 - s, 0)) for s, n in zip(step, nodes.shape, strict=True)
        )
        there = tuple(
            slice(max(s - 1, 0), n + min(s - 1, 0)) for s, n in zip(step, nodes.shape, strict=True)
        )
        for c in range(3):
            for d in range(3):
                part = S[here[0], here[1], 9 * o + 3 * c + d, here[2]]
                at = (c * nodes.size + nodes[here], d * nodes.size + nodes[there])
                np.add.at(A, at, part)
    return A


class PeriodicMultigrid:
    """One V-cycle as a preconditioner.

    Parameters
    ----------
    lam, mu : ndarray of float64, shape (nz, ny, nx)
        Lame constants, MPa.
    spacing : tuple of float
        mm.
    element : str
    free : ndarray of uint8, shape (3, nz+1, ny+1, nx+1)
        1 where an unknown exists; 0 on last planes of periodic axes.
    held : ndarray of bool, shape of `free`
        Where the displacement of touched nodes is given.
    periodic : tuple of bool
        Along x, y, z.
    """

    method = "periodic"

    def __init__(
        self,
        lam: Double,
        mu: Double,
        spacing: Spacing,
        element: str,
        free: NDArray[np.uint8],
        held: NDArray[np.bool_],
        periodic: Periodic,
    ) -> None:
        self._axes = array_axes(periodic)
        depths = _depths(lam.shape, periodic)
        stencils = coarse_levels(lam, mu, spacing, element, periodic, depths)
        where, stiffness = held_springs(lam, mu, spacing, element, held)
        for depth, S in enumerate(stencils[:depths], start=1):
            add_springs(S, where, stiffness, depth)
        self.levels: list[Level] = [_Finest(lam, mu, spacing, element, free, periodic)]
        self.levels.extend(_Coarse(S, periodic) for S in stencils[:depths])
        for level in self.levels:
            level.B[:, is_image(level.shape[1:], self._axes)] = 0
            level.allocate()
        for level in self.levels[:-1]:
            with crew(level.nodes):
                level.choose_steps(_DEGREE, _RATIO)
        self.coarsest = Coarsest(self.levels[-1], _dense(stencils[-1], self._axes))

    def _cycle(self, n: int) -> None:
        level = self.levels[n]
        if n == len(self.levels) - 1:
            self.coarsest.solve(level.b, level.x)
            return
        below = self.levels[n + 1]
        with crew(level.nodes):
            level.smooth(from_zero=True)
            level.product(level.x, level.y)
            flat = level.flat
            residual(flat(level.b), flat(level.y), flat(level.B), flat(level.y))
            restrict(level.y, below.b)
            fold(below.b, self._axes)
        self._cycle(n + 1)
        with crew(level.nodes):
            wrap(below.x, self._axes)
            prolong_add(below.x, level.x, level.B)
            level.smooth(from_zero=False)

    def apply(self, r: NDArray[Any], scale: float) -> Single:
        """One V-cycle for ``scale * r``; last planes of the answer count for nothing."""
        top = self.levels[0]
        scaled_copy(planes(r), scale, planes(top.b))
        self._cycle(0)
        return top.x

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        return sum(level.nbytes for level in self.levels) + self.coarsest.nbytes
