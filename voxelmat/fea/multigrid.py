"""The multigrid V-cycle in single precision that preconditions conjugate gradients.

Two ways to make the coarse levels: ``avg2`` takes the mean of the Lame constants of 2x2x2
voxels and is cheap; ``gal4b`` uses the exact Galerkin products as 27-point stencils and holds
where nu is near 0.5, voxels alternate in stiffness, are flat, or hang on a few points. Both
smooth with Chebyshev polynomials in the inverse 3x3 nodal blocks.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple, Protocol

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.coarsest import Coarsest
from voxelmat.fea.direct import Direct
from voxelmat.fea.element import Spacing
from voxelmat.fea.galerkin import add_springs, galerkin_stencils, held_springs
from voxelmat.fea.levels import Level, StencilLevel, VoxelLevel
from voxelmat.fea.operator import planes
from voxelmat.kernels.threads import crew
from voxelmat.kernels.transfer import prolong_add, restrict
from voxelmat.kernels.vector import residual, scaled_copy, smooth_first

__all__ = [
    "METHODS",
    "Grid",
    "Jacobi",
    "Multigrid",
    "Preconditioner",
    "coarse_held",
    "level_count",
    "make_preconditioner",
]

Single = NDArray[np.float32]
Double = NDArray[np.float64]

#: Coarse methods, cheapest first; ``direct`` factorises and is for small systems, ``jacobi`` has
#: no coarse levels and is kept as a check.
METHODS = ("avg2", "gal4b", "direct", "jacobi")

# Unknowns below which a grid is solved directly. Averaged moduli smear thin members, so on
# large grids, where a larger direct solve does not show, the cheap method stops earlier.
_COARSEST, _COARSEST_AVERAGED, _LARGE = 750, 2500, 100_000
# Smoothing polynomial: degree, and the range of eigenvalues that it damps, [max / ratio, max].
_SMOOTHING = {"avg2": (2, 10.0), "gal4b": (4, 40.0)}


class Grid(NamedTuple):
    """What a hierarchy is made from.

    Attributes
    ----------
    lam, mu : ndarray of float64, shape (nz, ny, nx)
        Lame constants, MPa.
    spacing : tuple of float
        mm.
    element : str
    held : ndarray of bool, shape (3, nz+1, ny+1, nx+1)
        Unknowns of touched nodes whose displacement is given.
    touched : ndarray of bool, shape (nz+1, ny+1, nx+1)
        Nodes that touch material.
    springs : ndarray of float64 or None, shape of `held`
        Springs to ground, N/mm.
    """

    lam: Double
    mu: Double
    spacing: Spacing
    element: str
    held: NDArray[np.bool_]
    touched: NDArray[np.bool_]
    springs: Double | None


class Preconditioner(Protocol):
    """What conjugate gradients need."""

    method: str

    def apply(self, r: Double, scale: float) -> Single:
        """Approximate solution of K z = scale r; the array belongs to the preconditioner."""

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""


def level_count(shape: tuple[int, ...], method: str) -> int:
    """Number of coarse levels below a grid of `shape` voxels."""
    depth, dims = 0, np.array(shape)
    limit = _COARSEST_AVERAGED if method == "avg2" and dims.prod() > _LARGE else _COARSEST
    while 3 * np.prod(dims + 1) > limit and dims.max() > 1:
        dims = -(-dims // 2)
        depth += 1
    return depth


def _clamped(held: NDArray[np.bool_], axis: int) -> NDArray[np.bool_]:
    """Voxels of the last layer along `axis` whose outer face is held in all directions."""
    end = np.asarray(held.take(-1, axis=axis + 1).all(axis=0))
    return np.asarray(end[1:, 1:] & end[1:, :-1] & end[:-1, 1:] & end[:-1, :-1])


def _halved(a: Double, held: NDArray[np.bool_]) -> Double:
    """Mean over 2x2x2 voxels; beyond an odd end comes nothing, or the same again where it is held.

    A coarse voxel that reaches beyond a clamp would otherwise be too soft a tie to it.
    """
    more = []
    for axis, n in enumerate(a.shape):
        last = a.take(-1, axis=axis) * _clamped(held, axis) if n % 2 else None
        more.append(last)
    padded = np.pad(a, [(0, n % 2) for n in a.shape])
    for axis, last in enumerate(more):
        if last is not None:
            end = np.moveaxis(padded, axis, 0)[-1]
            end[: last.shape[0], : last.shape[1]] = last
    nz, ny, nx = (n // 2 for n in padded.shape)
    return np.asarray(padded.reshape(nz, 2, ny, 2, nx, 2).mean(axis=(1, 3, 5)))


def coarse_held(held: NDArray[np.bool_], depth: int) -> NDArray[np.bool_]:
    """Coarse unknowns that stand for fine ones that are held.

    A coarse node takes what is held at its place. One beyond an odd end takes what is held at the
    end, and the last one inside takes it too where it lies nearer to the end than the one beyond:
    otherwise the coarse grid is free there, which doubles the iterations.
    """
    step = 2**depth
    for axis in (1, 2, 3):
        n = held.shape[axis] - 1
        place = np.arange(-(-n // step) + 1) * step
        out = held.take(np.minimum(place, n), axis=axis)
        if place[-1] > n and 2 * (n - place[-2]) < step:
            ends = np.moveaxis(out, axis, 0)
            ends[-2] |= ends[-1]
        held = out
    return held


def _finest(grid: Grid) -> VoxelLevel:
    free = (~grid.held & grid.touched).astype(np.uint8)
    return VoxelLevel(grid.lam, grid.mu, grid.spacing, grid.element, free, grid.springs)


def _averaged(grid: Grid, depths: int) -> Iterator[Level]:
    """Coarse levels of ``avg2``."""
    lam, mu, h, springs = grid.lam, grid.mu, grid.spacing, grid.springs
    held = grid.held
    for depth in range(1, depths + 1):
        lam, mu = _halved(lam, held), _halved(mu, held)
        h = (2 * h[0], 2 * h[1], 2 * h[2])
        shape = (3, *(n + 1 for n in lam.shape))
        if springs is not None:
            # P^T of the diagonal: the lumped springs.
            coarse = np.zeros(shape, dtype=np.float32)
            restrict(springs.astype(np.float32), coarse)
            springs = coarse.astype(np.float64)
        held = coarse_held(grid.held, depth)
        yield VoxelLevel(lam, mu, h, grid.element, (~held).astype(np.uint8), springs)


def _galerkin(grid: Grid, depths: int) -> Iterator[Level]:
    """Coarse levels of ``gal4b``."""
    where, stiffness = held_springs(grid.lam, grid.mu, grid.spacing, grid.element, grid.held)
    if grid.springs is not None:
        more = np.argwhere(grid.springs > 0)
        where = np.concatenate([where, more])
        stiffness = np.concatenate([stiffness, grid.springs[tuple(more.T)]])
    stencils = galerkin_stencils(grid.lam, grid.mu, grid.spacing, grid.element, depths)
    for depth, S in enumerate(stencils, start=1):
        add_springs(S, where, stiffness, depth)
        yield StencilLevel(S)


class Multigrid:
    """The V-cycle.

    Parameters
    ----------
    grid : Grid
    method : str
        ``"avg2"`` or ``"gal4b"``.
    """

    def __init__(self, grid: Grid, method: str) -> None:
        depths = level_count(grid.lam.shape, method)
        make = _averaged if method == "avg2" else _galerkin
        self._prepare([_finest(grid), *make(grid, depths)], method)

    def _prepare(self, levels: list[Level], method: str) -> None:
        """Make the smoothers and the coarsest solve."""
        self.method = method
        self.levels = levels
        degree, ratio = _SMOOTHING[method]
        for level in self.levels:
            level.allocate()
        for level in self.levels[:-1]:
            with crew(level.nodes):
                level.choose_steps(degree, ratio)
        with crew(self.levels[-1].nodes):
            self.coarsest = Coarsest(self.levels[-1])

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
        self._cycle(n + 1)
        with crew(level.nodes):
            prolong_add(below.x, level.x, level.B)
            level.smooth(from_zero=False)

    def apply(self, r: Double, scale: float) -> Single:
        """One V-cycle for ``scale * r``."""
        top = self.levels[0]
        scaled_copy(planes(r), scale, planes(top.b))
        self._cycle(0)
        return top.x

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        return sum(level.nbytes for level in self.levels) + self.coarsest.nbytes


class Jacobi:
    """The inverse nodal blocks alone: slow and simple, a check on the multigrid."""

    method = "jacobi"

    def __init__(self, grid: Grid) -> None:
        self._level = _finest(grid)
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


def make_preconditioner(grid: Grid, method: str) -> Preconditioner:
    """The preconditioner called `method`, one of `METHODS`."""
    if method == "jacobi":
        return Jacobi(grid)
    if method == "direct":
        free = ~grid.held & grid.touched
        return Direct(grid.lam, grid.mu, grid.spacing, grid.element, free, grid.springs)
    return Multigrid(grid, method)
