"""Compile the solver's kernels ahead, by solving one tiny problem of each kind.

Compiled code is kept on disk, so this is done once for each machine and version.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterable
from dataclasses import dataclass

import numpy as np

from voxelmat.fea.assemble import moduli
from voxelmat.fea.geometric import GeometricStiffness, stress_modes
from voxelmat.fea.harmonic import harmonic
from voxelmat.fea.heat import conduct, conduct_over_time
from voxelmat.fea.homogenise import homogenise
from voxelmat.fea.modal import modes
from voxelmat.fea.multigrid import METHODS
from voxelmat.fea.orthotropic_static import solve_orthotropic
from voxelmat.fea.sensitivity import strain_adjoint
from voxelmat.fea.static import solve
from voxelmat.fea.system import LinearSystem
from voxelmat.kernels.compiling import stopwatch
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.heatcase import FixedTemperature, HeatCase, HeatSource
from voxelmat.model.loadcase import Force, GroundSpring, LoadCase, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.orthotropic import Orthotropic
from voxelmat.model.part import Part
from voxelmat.model.region import FaceRegion
from voxelmat.monitor import SILENT, Monitor, computing

__all__ = ["Warmed", "compile_groups", "solver_groups", "warm"]

_FLOOR, _TOP = FaceRegion(name="floor", side="z-"), FaceRegion(name="top", side="z+")
_CASE = LoadCase(
    name="warm-up",
    supports=(Support(region=_FLOOR),),
    loads=(
        Force(region=_TOP, vector=(0.0, 0.0, -1.0)),
        GroundSpring(region=_TOP, stiffness=(1.0, 1.0, 0.0)),
    ),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Warmed:
    """One group of kernels made ready.

    Attributes
    ----------
    group : str
        What they are for.
    seconds : float
        The whole job, compiling and all.
    kernels : dict of str to float
        Seconds of compiling a kernel, those read from the cache left out.
    """

    group: str
    seconds: float
    kernels: dict[str, float]

    @property
    def compiling(self) -> float:
        """Seconds of compiling."""
        return sum(self.kernels.values())


def compile_groups(
    groups: Iterable[tuple[str, Callable[[], object]]], monitor: Monitor = SILENT
) -> list[Warmed]:
    """Run each job once with a stopwatch on the compiler.

    Parameters
    ----------
    groups : iterable of (str, callable)
        A name and a job that takes nothing.
    monitor : Monitor
        Told "compiling, once" with the group, and its seconds when it is done.
    """
    jobs = list(groups)
    done: list[Warmed] = []
    for n, (group, job) in enumerate(jobs):
        monitor.report("compiling, once", done=n, total=len(jobs), group=group)
        start = time.perf_counter()
        with stopwatch() as kernels:
            job()
        done.append(Warmed(group=group, seconds=time.perf_counter() - start, kernels=kernels))
    monitor.report("compiling, once", done=len(jobs), total=len(jobs))
    return done


def _resin(name: str, modulus: float, nu: float) -> Material:
    """An invented resin with all that any kind of solve asks for."""
    return Material(
        name=name,
        kind="rigid",
        E=Constant(value=modulus, unit="MPa"),
        nu=Constant(value=nu),
        density=Constant(value=1e-9),
        strength=Constant(value=1.0, unit="MPa"),
        conductivity=Constant(value=0.2, unit="W/(m K)"),
        heat_capacity=Constant(value=1500.0, unit="J/(kg K)"),
    )


def tiny_part(size: tuple[int, int, int] = (12, 10, 9)) -> Part:
    """Two invented resins in an invented block: enough for two coarse levels."""
    resins = _resin("warm-hard", 1000.0, 0.3), _resin("warm-soft", 10.0, 0.4)
    labels = np.ones(size, dtype=np.uint16)
    labels[:, :, size[2] // 2 :] = 2
    palette = (EMPTY, Blend.pure("warm-hard"), Blend.pure("warm-soft"))
    grid = VoxelGrid(shape=size, spacing=(1.0, 1.0, 1.0))
    return Part(grid=grid, resins=resins, palette=palette, labels=labels, name="warm-up")


def _methods(part: Part) -> None:
    """Each coarse method by itself; the tolerance does not matter."""
    lam, mu = moduli(part)
    fixed = np.zeros((3, *(n + 1 for n in lam.shape)), dtype=bool)
    fixed[:, 0] = True
    load = np.zeros(fixed.shape)
    load[2, -1] = -1.0
    springs = np.where(fixed, 0.0, 1e-3)
    for method in METHODS:
        system = LinearSystem(lam, mu, part.grid.spacing, fixed, springs=springs, coarse=method)
        system.solve(load, tol=1e-3)


def _heat(part: Part) -> None:
    fixed = (FixedTemperature(region=_FLOOR, temperature_degC=20.0),)
    case = HeatCase(name="warm-up", fixed=fixed, sources=(HeatSource(total_mW=1.0),))
    conduct(part, case)
    conduct_over_time(part, case, 10.0, steps=2)


def _vibration(part: Part) -> None:
    found = modes(part, _CASE.supports, count=2, tol=1e-3)
    harmonic(found, [1.0], base=(0.0, 0.0, 1.0), loss_factor=0.1)


def _buckling(part: Part) -> None:
    lam, mu = moduli(part)
    u = np.zeros((3, *(n + 1 for n in lam.shape)))
    u[2] = np.linspace(0.0, -0.01, u.shape[1])[:, None, None]
    initial = GeometricStiffness(
        stress_modes(u, lam, mu, part.grid.spacing), mu > 0, part.grid.spacing
    )
    with computing():
        initial.apply(u, np.empty_like(u))


def _orthotropic(part: Part) -> None:
    layered = Orthotropic(
        E=(900.0, 900.0, 90.0), nu_xy=0.3, nu_xz=0.3, nu_yz=0.3, G=(340.0, 40.0, 40.0)
    )
    partly = part.replace(occupancy=np.full(part.grid.shape, 200, dtype=np.uint8))
    for body in (part, partly):  # far from isotropic, so that its own coarse levels are used
        solve_orthotropic(body, _CASE, {1: layered}, tol=1e-3)


def _stress(part: Part) -> None:
    found = solve(part, _CASE)
    strain_adjoint(np.ascontiguousarray(found.strain.T, dtype=np.float64), part.grid.spacing)


def solver_groups() -> list[tuple[str, Callable[[], object]]]:
    """The solver's kernels in groups, each with a job that needs all of them."""
    part = tiny_part()
    return [
        ("linear solver", lambda: _methods(part)),
        ("stress and strain", lambda: _stress(part)),
        ("orthotropic solver", lambda: _orthotropic(part)),
        ("heat", lambda: _heat(part)),
        ("vibration", lambda: _vibration(part)),
        ("buckling", lambda: _buckling(part)),
        ("periodic cells", lambda: homogenise(part, tol=1e-3)),
    ]


def warm(monitor: Monitor = SILENT) -> list[Warmed]:
    """Compile every kernel of the solver ahead.

    Returns
    -------
    list of Warmed
        One a group, with the seconds of each kernel.
    """
    return compile_groups(solver_groups(), monitor)
