"""Multigrid levels of an orthotropic grid itself: its own product, exact coarse operators."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.element import Spacing
from voxelmat.fea.galerkin import PENALTY, add_springs, children, slabs_from_elements
from voxelmat.fea.levels import Level, StencilLevel
from voxelmat.fea.multigrid import Multigrid, level_count
from voxelmat.fea.operator import planes
from voxelmat.fea.orthotropic_element import corner_blocks, element_matrices
from voxelmat.fea.orthotropic_operator import Fill, Labels, OrthotropicStiffness
from voxelmat.kernels.orthotropic import orthotropic_inverses
from voxelmat.kernels.stencil import scatter_slab
from voxelmat.kernels.vector import scaled_copy, smooth_first

__all__ = ["OrthotropicGrid", "OrthotropicJacobi", "OrthotropicMultigrid"]

Single = NDArray[np.float32]
Double = NDArray[np.float64]


class OrthotropicGrid:
    """What the levels are made from; arguments as `OrthotropicStiffness`, and the supports.

    Parameters
    ----------
    held : ndarray of bool, shape (3, nz+1, ny+1, nx+1)
        Unknowns of touched nodes whose displacement is given.
    free : ndarray of uint8
        Unknowns that exist.
    """

    def __init__(
        self,
        labels: Labels,
        fill: Fill | None,
        constants: Double,
        spacing: Spacing,
        element: str,
        held: NDArray[np.bool_],
        free: NDArray[np.uint8],
        springs: Double | None,
    ) -> None:
        self.labels, self.fill, self.constants = labels, fill, constants
        self.spacing, self.element = spacing, element
        self.held, self.free, self.springs = held, free, springs


class _Finest(Level):
    """The grid of voxels, applied without a matrix."""

    def __init__(self, grid: OrthotropicGrid) -> None:
        super().__init__(grid.free.shape)
        self.operator = OrthotropicStiffness(
            grid.labels,
            grid.constants,
            grid.spacing,
            grid.element,
            fill=grid.fill,
            springs=grid.springs,
            dtype=np.float32,
        )
        none = np.zeros((3, 0, 0, 0))
        orthotropic_inverses(
            self.operator.labels,
            self.operator.fill,
            none if grid.springs is None else grid.springs,
            corner_blocks(grid.constants, grid.spacing, grid.element),
            grid.free,
            self.B,
        )

    def product(self, x: Single, y: Single) -> None:
        """K x by sums and differences."""
        self.operator.apply(x, y)

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        return super().nbytes + self.operator.nbytes


def _first_slabs(grid: OrthotropicGrid) -> Iterator[Single]:
    """Element matrices (24, 24, NY, NX) of the first coarse level, slab by slab."""
    used, index = np.unique(grid.labels, return_inverse=True)
    index = index.reshape(grid.labels.shape)
    K = element_matrices(grid.constants[used], grid.spacing, grid.element)
    share = [(P.T @ K @ P).reshape(len(K), 576).astype(np.float32) for P in children()]
    nz, ny, nx = grid.labels.shape
    NZ, NY, NX = (-(-n // 2) for n in (nz, ny, nx))
    for k in range(NZ):
        E = np.zeros((NY, NX, 576), dtype=np.float32)
        for child in range(8):
            z, y, x = 2 * k + (child >> 2), child >> 1 & 1, child & 1
            if z >= nz:
                continue
            part = share[child][index[z, y::2, x::2]]
            if grid.fill is not None:
                part *= (grid.fill[z, y::2, x::2] / np.float32(255.0))[..., None]
            E[: part.shape[0], : part.shape[1]] += part
        yield np.ascontiguousarray(E.reshape(NY * NX, 576).T).reshape(24, 24, NY, NX)


def _held_springs(grid: OrthotropicGrid) -> tuple[NDArray[np.intp], Double]:
    """Stiff springs that carry supports down to coarse levels; see `galerkin.held_springs`."""
    where = np.argwhere(grid.held)
    blocks = corner_blocks(grid.constants, grid.spacing, grid.element)
    diagonal = np.zeros(len(where))
    for a in range(8):
        cell = where[:, 1:] - (a >> 2, a >> 1 & 1, a & 1)
        inside = np.flatnonzero(np.all((cell >= 0) & (cell < grid.labels.shape), axis=1))
        at = tuple(cell[inside].T)
        fill = 1.0 if grid.fill is None else grid.fill[at] / 255.0
        diagonal[inside] += fill * blocks[grid.labels[at], a, where[inside, 0]]
    stiffness = PENALTY * diagonal
    if grid.springs is not None:
        more = np.argwhere(grid.springs > 0)
        where = np.concatenate([where, more])
        stiffness = np.concatenate([stiffness, grid.springs[tuple(more.T)]])
    return where, stiffness


def _coarse_levels(grid: OrthotropicGrid, depths: int) -> Iterator[StencilLevel]:
    where, stiffness = _held_springs(grid)
    slabs = _first_slabs(grid)
    for depth in range(1, depths + 1):
        nz, ny, nx = (-(-m // 2**depth) for m in grid.labels.shape)
        S = np.zeros((nz + 1, ny + 1, 243, nx + 1), dtype=np.float32)
        kept = []
        for k, E in enumerate(slabs):
            scatter_slab(S, E, k)
            if depth < depths:
                kept.append(E)
        if kept:
            slabs = slabs_from_elements(np.array(kept))
        add_springs(S, where, stiffness, depth)
        yield StencilLevel(S)


class OrthotropicMultigrid(Multigrid):
    """The V-cycle on the orthotropic grid itself.

    While it is set up, the element matrices of the first coarse level take 288 bytes a voxel.
    """

    def __init__(self, grid: OrthotropicGrid) -> None:
        depths = level_count(grid.labels.shape, "gal4b")
        self._prepare([_Finest(grid), *_coarse_levels(grid, depths)], "gal4b")
        self.method = "exact"


class OrthotropicJacobi:
    """The inverse nodal blocks alone: slow and simple, a check on the multigrid."""

    method = "jacobi"

    def __init__(self, grid: OrthotropicGrid) -> None:
        self._level = _Finest(grid)
        self._level.allocate()

    def apply(self, r: Double, scale: float) -> Single:
        """Blocks times ``scale * r``."""
        top = self._level
        scaled_copy(planes(r), scale, planes(top.b))
        smooth_first(*(top.flat(v) for v in (top.b, top.B, top.x, top.d)), np.float32(1))
        return top.x

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        return self._level.nbytes
