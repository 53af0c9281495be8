"""What a static solve takes, before it is begun: bytes and seconds, and whether it fits.

The figures were measured on whole solves, results included, in grids of 48^3 to 128^3 voxels that
were full or nearly empty. Results cover the whole grid; the solver works in the bounding box of
the material.
"""

from __future__ import annotations

import math
import os
import sys
import time
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from voxelmat.errors import ResourceError
from voxelmat.fea.assemble import assemble, moduli
from voxelmat.fea.element import DEFAULT
from voxelmat.fea.operator import Stiffness
from voxelmat.fea.system import first_method
from voxelmat.kernels.threads import crew
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part
from voxelmat.model.region import solid_nodes
from voxelmat.monitor import computing

__all__ = ["SolveEstimate", "available_bytes", "check_fits", "estimate_solve", "peak_bytes"]

# Peak bytes a voxel of the grid; those that free strains add (their field, forces and energy);
# those a voxel of the material's box; what the dense coarsest level adds whatever the size.
_GRID_BYTES, _STRAIN_BYTES = 310, 100
_BOX_BYTES = {"avg2": 160, "gal4b": 310}
_FIXED_BYTES = 100_000_000
# Seconds as multiples of one product with the stiffness: an iteration; all else; and iterations,
# few and many. Many is where the automatic choice goes over to another method.
_ITERATION = {"avg2": 10.0, "gal4b": 30.0}
_REST = {"avg2": 150.0, "gal4b": 230.0}
_ITERATIONS = {"avg2": (8, 45), "gal4b": (12, 200)}
_FIXED_S = 1.0
# The product is timed on a block of up to so many voxels an axis: large enough to leave caches.
_TRIAL = 64
# Where Linux keeps the limit and the use of a group of processes, both generations.
_GROUPS = (
    ("memory.max", "memory.current"),
    ("memory/memory.limit_in_bytes", "memory/memory.usage_in_bytes"),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class SolveEstimate:
    """What one load case will take, about.

    Attributes
    ----------
    method : str
        Coarse method that the solver begins with.
    voxels, unknowns : int
        Voxels of the material's bounding box; unknowns of its nodes, held ones too.
    bytes : int
        At the peak, beside what the process holds already.
    bytes_a_voxel : float
        Of the grid.
    seconds : tuple of float
        Few and many iterations, compiling left out, with the machine as busy as it is now.
    available : int or None
        Bytes that can be had now; None where the system does not tell.
    """

    method: str
    voxels: int
    unknowns: int
    bytes: int
    bytes_a_voxel: float
    seconds: tuple[float, float]
    available: int | None

    @property
    def fits(self) -> bool:
        """False where it would not fit; True where that is not known."""
        return self.available is None or self.bytes <= self.available


def _number(path: str) -> int | None:
    """The number in a file of the system, None where there is none."""
    try:
        return int(Path(path).read_text(encoding="ascii").strip())
    except (OSError, ValueError):
        return None


def available_bytes() -> int | None:
    """Memory that can be had now, bytes; None where the system does not tell.

    The least of what the machine has free and what a limit on the process's group leaves. Where
    only the size of the machine is known, all of it.
    """
    found = []
    try:
        lines = Path("/proc/meminfo").read_text(encoding="ascii").splitlines()
        found += [1024 * int(s.split()[1]) for s in lines if s.startswith("MemAvailable:")]
    except (OSError, ValueError, IndexError):
        pass
    for limit, used in _GROUPS:
        most, now = _number(f"/sys/fs/cgroup/{limit}"), _number(f"/sys/fs/cgroup/{used}")
        if most is not None and now is not None:
            found.append(max(most - now, 0))
    if found:
        return min(found)
    try:
        return os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE")
    except (AttributeError, ValueError, OSError):
        return None


def peak_bytes() -> int | None:
    """Most memory that this process has held so far, bytes; None where the system tells not."""
    try:
        # Of this program alone; the figure of getrusage also knows the one that started it.
        for line in Path("/proc/self/status").read_text().splitlines():
            if line.startswith("VmHWM:"):
                return int(line.split()[1]) * 1024
    except OSError:
        pass
    try:
        import resource
    except ImportError:  # Windows
        return None
    most = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return most if sys.platform == "darwin" else 1024 * most


def _box(part: Part) -> int:
    """Voxels of the bounding box of the material."""
    size = 1
    for axis in range(3):
        others = tuple(a for a in range(3) if a != axis)
        layers = np.flatnonzero(part.solid.any(axis=others))
        size *= int(layers[-1] - layers[0]) + 1 if len(layers) else 0
    return size


def _bytes(part: Part, method: str, strains: bool) -> int:
    """At the peak of a whole solve."""
    grid = part.grid.n_voxels * (_GRID_BYTES + strains * _STRAIN_BYTES)
    return grid + _box(part) * _BOX_BYTES[method] + _FIXED_BYTES


def _product_seconds(part: Part, element: str) -> float:
    """Seconds of one product with the stiffness of the part, timed on a piece of its size."""
    shape = tuple(min(n, _TRIAL) for n in part.grid.shape[::-1])
    ones = np.ones(shape)
    K = Stiffness(ones, ones, part.grid.spacing, element)
    u, y = np.ones(K.shape), np.empty(K.shape)
    best = math.inf
    with computing(), crew(u[0].size):
        K.apply(u, y)  # compiled, or read from the cache
        for _ in range(3):
            start = time.perf_counter()
            K.apply(u, y)
            best = min(best, time.perf_counter() - start)
    return best * _box(part) / ones.size


def estimate_solve(
    part: Part, load_case: LoadCase | None = None, *, element: str = DEFAULT
) -> SolveEstimate:
    """What a static solve will take, before it is begun; takes well under a second itself.

    Parameters
    ----------
    part : Part
    load_case : LoadCase, optional
        Supports on few points call for the dearer coarse method.
    element : str

    Returns
    -------
    SolveEstimate
        Memory is meant to be right within a third, seconds within a few times.
    """
    method, strains = _method(part, load_case)
    box = _box(part)
    product = _product_seconds(part, element)
    few, many = (product * (_REST[method] + n * _ITERATION[method]) for n in _ITERATIONS[method])
    needed = _bytes(part, method, strains)
    return SolveEstimate(
        method=method,
        voxels=box,
        unknowns=3 * int(solid_nodes(part.solid).sum()),
        bytes=needed,
        bytes_a_voxel=needed / part.grid.n_voxels,
        seconds=(few, many + _FIXED_S),
        available=available_bytes(),
    )


def _method(part: Part, load_case: LoadCase | None) -> tuple[str, bool]:
    """Coarse method to begin with, and whether there are free strains."""
    lam, mu = moduli(part)
    if load_case is None:
        held, strains = np.zeros((3, *(n + 1 for n in lam.shape)), dtype=bool), False
    else:
        acts = assemble(part, load_case, everything=True)
        held, strains = acts.held, acts.free is not None
    return first_method(lam, mu, part.grid.spacing, held), strains


def _coarser(grid: VoxelGrid, needed: int, available: int) -> str:
    """The spacing that would fit, in words."""
    room = available - _FIXED_BYTES
    if room <= 0:
        return "no voxel size would: even the smallest solve takes more"
    # Two hundredths more: a part never fills whole voxels exactly.
    factor = 1.02 * ((needed - _FIXED_BYTES) / room) ** (1.0 / 3.0)
    size = " x ".join(f"{math.ceil(1000 * h * factor) / 1000:g}" for h in grid.spacing)
    return f"voxels of {size} mm would"


def check_fits(
    part: Part, load_case: LoadCase | None = None, *, available: int | None = None
) -> int:
    """Refuse a static solve that would not fit into memory.

    Parameters
    ----------
    part : Part
    load_case : LoadCase, optional
    available : int, optional
        Bytes that may be used; what `available_bytes` tells if left out.

    Returns
    -------
    int
        Bytes that the solve will take.

    Raises
    ------
    ResourceError
        Names the voxel size that would fit.
    """
    if available is None:
        available = available_bytes()
    needed = part.grid.n_voxels * _GRID_BYTES + _FIXED_BYTES
    # Where the results alone are too large, say so before more memory is touched.
    if available is None or needed <= available:
        needed = _bytes(part, *_method(part, load_case))
    if available is not None and needed > available:
        n, h = part.grid.shape, part.grid.spacing
        raise ResourceError(
            f"A solve of {n[0]} x {n[1]} x {n[2]} voxels of {h[0]:g} x {h[1]:g} x {h[2]:g} mm "
            f"takes about {needed / 2**30:.3g} GiB of memory and {available / 2**30:.3g} GiB can "
            f"be had now: it does not fit; {_coarser(part.grid, needed, available)}. Use larger "
            f"voxels (grid.spacing_mm) or close other programs."
        )
    return needed
