"""The six load cases of a periodic cell: effective stiffness and thermal stress from arrays."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.element import DEFAULT, Spacing
from voxelmat.fea.fold import array_axes, fold
from voxelmat.fea.operator import dot
from voxelmat.fea.periodic import PeriodicSystem
from voxelmat.fea.sensitivity import strain
from voxelmat.monitor import SILENT, Monitor

__all__ = ["CellSolution", "affine", "solve_cell"]

Double = NDArray[np.float64]

# Axes of the six unit strains xx, yy, zz, xy, xz, yz.
_PAIRS = ((0, 0), (1, 1), (2, 2), (0, 1), (0, 2), (1, 2))
# A load below this share of what the stiffest material would take is solved to less relative
# accuracy: the load of a uniform cell is rounding.
_SMALL = 1e-6


@dataclass(frozen=True, slots=True, kw_only=True)
class CellSolution:
    """Answer of one cell to six unit strains.

    Attributes
    ----------
    stiffness : ndarray, shape (6, 6)
        MPa, order xx, yy, zz, xy, xz, yz, engineering shear.
    thermal_stress : ndarray, shape (6,), or None
        MPa/K: mean stress that a cell held in size takes from one kelvin, with its sign changed.
    symmetry_error : float
        Of mean stresses, over the largest stiffness.
    fields : ndarray, shape (6, 3, nz+1, ny+1, nx+1)
        Periodic part of the displacement, mm.
    iterations : tuple of int
    residual : float
        Worst of the six.
    loose, loose_voxels : int
        Islands, which carry nothing.
    """

    stiffness: Double
    thermal_stress: Double | None
    symmetry_error: float
    fields: Double
    iterations: tuple[int, ...]
    residual: float
    loose: int
    loose_voxels: int


def _coordinates(shape: tuple[int, ...], spacing: Spacing) -> list[Double]:
    """Node coordinates x, y, z from the middle of the cell, ready to broadcast over [k, j, i]."""
    out = []
    for d in range(3):
        n = shape[-1 - d]
        x = np.asarray(spacing[d] * (np.arange(n) - 0.5 * (n - 1)), dtype=np.float64)
        out.append(x.reshape([-1 if a == 2 - d else 1 for a in range(3)]))
    return out


def affine(mean: Double, spacing: Spacing, shape: tuple[int, ...]) -> Double:
    """Displacement of a uniform strain (6,), engineering shear, about the middle of the cell.

    Parameters
    ----------
    mean : ndarray, shape (6,)
        Strain, order xx, yy, zz, xy, xz, yz.
    spacing : tuple of float
        mm.
    shape : tuple of int
        (3, nz+1, ny+1, nx+1).
    """
    u, at = np.zeros(shape), _coordinates(shape, spacing)
    for (a, b), e in zip(_PAIRS, mean, strict=True):
        if a == b:
            u[a] += e * at[a]
        else:
            u[a] += 0.5 * e * at[b]
            u[b] += 0.5 * e * at[a]
    return u


def _mean_stress(q: Double, at: list[Double], volume: float) -> Double:
    """Mean stress of a cell cut free under nodal forces q, by virtual work."""
    moment = np.array([[float((q[d] * at[e]).sum()) for e in range(3)] for d in range(3)])
    return np.array([0.5 * (moment[a, b] + moment[b, a]) for a, b in _PAIRS]) / volume


def _guess(system: PeriodicSystem, load: Double, warm: Double | None) -> Double | None:
    """An earlier field, scaled to the least energy under the present load."""
    if warm is None or not np.any(warm):
        return None
    pull = system.apply_open(warm)
    energy = dot(warm, pull)
    return warm * (dot(warm, load) / energy) if energy > 0 else None


def _checked(warm: Double | None, shape: tuple[int, ...]) -> None:
    if warm is not None and warm.shape != (6, *shape):
        raise InputError(
            f"An earlier solution has fields of shape {warm.shape}; this cell needs {(6, *shape)}."
        )


def solve_cell(
    lam: Double,
    mu: Double,
    spacing: Spacing,
    *,
    expansion: Double | None = None,
    element: str = DEFAULT,
    tol: float = 1e-8,
    maxiter: int = 600,
    warm: Double | None = None,
    monitor: Monitor = SILENT,
) -> CellSolution:
    """Effective stiffness and thermal stress of a cell that repeats along x, y and z.

    Parameters
    ----------
    lam, mu : ndarray of float64, shape (nz, ny, nx)
        Lame constants, MPa; both 0 where empty.
    spacing : tuple of float
        mm.
    expansion : ndarray, shape (nz, ny, nx), optional
        Coefficient of thermal expansion, 1/K.
    element : str
    tol : float
        Relative residual of each case. The error of the stiffness goes with its square.
    maxiter : int
    warm : ndarray, shape (6, 3, nz+1, ny+1, nx+1), optional
        ``fields`` of a similar cell to start from.
    monitor : Monitor

    Raises
    ------
    InputError, ConvergenceError
    """
    system = PeriodicSystem(lam, mu, spacing, element=element, monitor=monitor)
    _checked(warm, system.shape)
    at = _coordinates(system.shape, spacing)
    voxel = float(np.prod(spacing))
    volume = voxel * lam.size
    stiffest = float((system.lam + 2.0 * system.mu).max())
    scale = _SMALL * stiffest * voxel / min(spacing) * float(np.sqrt(lam.size))
    bulk3 = 3.0 * system.lam + 2.0 * system.mu
    stress = np.zeros(lam.shape) if expansion is None else bulk3 * expansion
    thermal = np.zeros(6)
    C, means = np.zeros((6, 6)), np.zeros((6, 6))
    fields = np.zeros((6, *system.shape))
    steps: list[int] = []
    worst = 0.0
    for case in range(6 if not system.empty else 0):
        monitor.report("homogenising", done=case, total=6)
        w = affine(np.eye(6)[case], spacing, system.shape)
        load = -system.apply_open(w)
        fold(load, array_axes(system.periodic))
        guess = _guess(system, load, None if warm is None else warm[case])
        found = system.solve(load, x0=guess, tol=tol, maxiter=maxiter, scale=scale)
        fields[case] = found.u
        steps.append(found.iterations)
        worst = max(worst, found.residual)
        w += found.u
        q = system.apply_open(w)
        means[:, case] = _mean_stress(q, at, volume)
        for other in range(case + 1):
            v = fields[other] + affine(np.eye(6)[other], spacing, system.shape)
            C[case, other] = C[other, case] = dot(v, q) / volume
        if expansion is not None:
            thermal[case] = float((stress * strain(w, spacing)[:3].sum(axis=0)).sum()) / lam.size
    largest = float(np.abs(C).max())
    return CellSolution(
        stiffness=C,
        thermal_stress=None if expansion is None else thermal,
        symmetry_error=float(np.abs(means - means.T).max()) / largest if largest > 0 else 0.0,
        fields=fields,
        iterations=tuple(steps),
        residual=worst,
        loose=system.loose,
        loose_voxels=system.loose_voxels,
    )
