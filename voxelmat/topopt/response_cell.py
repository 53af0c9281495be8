"""Effective stiffness of a design as one cell of a periodic material.

With the displacement w_a = e_a x + v_a under the mean strain e_a (v_a periodic), the effective
stiffness is C_ab = w_a . K w_b / V, and since v_a makes the energy stationary its derivative by
any modulus is w_a . dK w_b / V: no adjoint is to be solved. A response J(C) with the symmetric
slope G = dJ/dC = sum_n g_n q_n q_n^T needs one bilinear form a voxel for each g_n that is not 0.

The design repeats itself along x, y and z; filters of the unknowns should do so too.
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.cell import affine, solve_cell
from voxelmat.model.measure_physics import CellProperty, CellTarget
from voxelmat.topopt.physics import Physics

__all__ = ["CellPropertyResponse", "CellTargetResponse", "cell_response", "effective_stiffness"]

Array = NDArray[np.float64]

# Shares of the largest slope below this are rounding and get no form.
_ROUNDING = 1e-14
# Below this share of the largest, the least stiffness of a cell is none.
_SINGULAR = 1e-13
# Weights of C in the averages over all directions (W. Voigt, from memory).
_BULK = np.zeros((6, 6))
_BULK[:3, :3] = 1.0 / 9.0
_SHEAR = np.diag([1.0, 1.0, 1.0, 3.0, 3.0, 3.0]) / 15.0
_SHEAR[:3, :3] -= (1.0 - np.eye(3)) / 30.0
_PLANE = {frozenset("xy"): 3, frozenset("xz"): 4, frozenset("yz"): 5}


def effective_stiffness(physics: Physics) -> tuple[Array, Array]:
    """C (6, 6), MPa, and the periodic displacements (6, 3, nz+1, ny+1, nx+1), mm."""
    C, fields = physics.once("cell", lambda: _solved(physics))
    return C, fields


def _solved(physics: Physics) -> tuple[Array, Array]:
    f = physics.fields
    warm = physics.recall("cell")
    found = solve_cell(
        f.lam,
        f.mu,
        physics.spacing,
        element=physics.element,
        tol=physics.tolerance,
        warm=warm if warm is not None and warm.shape[3:] == _nodes(f.lam) else None,
        monitor=physics.monitor,
    )
    physics.remember("cell", found.fields)
    physics.cg_iterations += sum(found.iterations)
    return found.stiffness, found.fields


def _nodes(voxels: Array) -> tuple[int, ...]:
    return tuple(n + 1 for n in voxels.shape)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _CellResponse(ABC):
    """Any differentiable function of the effective stiffness."""

    name: str
    unit: str

    @abstractmethod
    def of(self, C: Array) -> tuple[float, Array]:
        """Value, and its slope by the entries of C (6, 6), symmetric."""

    def value(self, physics: Physics) -> tuple[float, dict[str, Array]]:
        """Value, and derivatives by ``lam`` and ``mu``."""
        C, fields = effective_stiffness(physics)
        value, slope = self.of(C)
        f = physics.fields
        volume = float(np.prod(physics.spacing)) * f.lam.size
        lam, mu = np.zeros(f.lam.shape), np.zeros(f.lam.shape)
        size, mix = np.linalg.eigh(0.5 * (slope + slope.T))
        for g, q in zip(size, mix.T, strict=True):
            if abs(g) <= _ROUNDING * np.abs(size).max():
                continue
            w = affine(q, physics.spacing, fields.shape[1:]) + np.tensordot(q, fields, 1)
            forms = physics.by_stiffness(w, w)
            lam += g / volume * forms["lam"]
            mu += g / volume * forms["mu"]
        return value, {"lam": lam, "mu": mu}

    def report(self, value: float) -> float:
        """As it is."""
        return value


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CellPropertyResponse(_CellResponse):
    """One effective constant.

    Attributes
    ----------
    kind : str
        See `voxelmat.model.measure_physics.CellProperty`.
    axes : tuple of int
        0 = x.
    """

    kind: str
    axes: tuple[int, int] = (0, 1)

    @property
    def most(self) -> float | None:
        """Size of a ratio, which may begin near 0; None for moduli."""
        return 1.0 if self.kind == "poisson" else None

    def of(self, C: Array) -> tuple[float, Array]:
        """Linear in C for averages and entries, by the inverse S of C for the rest."""
        a, b = self.axes
        if self.kind in ("bulk", "shear", "axial"):
            weight = {"bulk": _BULK, "shear": _SHEAR}.get(self.kind)
            if weight is None:
                weight = np.zeros((6, 6))
                weight[a, b] += 0.5
                weight[b, a] += 0.5
            return float((weight * C).sum()), weight
        ends = np.linalg.eigvalsh(C)
        if not ends[0] > _SINGULAR * ends[-1]:
            raise InputError(
                f"The cell carries no load in some direction, so its {self.name} is not defined. "
                "Let the shape reach through the grid along x, y and z, or raise the stiffness "
                "that empty voxels keep."
            )
        S = np.linalg.inv(C)
        by_S = np.zeros((6, 6))
        if self.kind == "poisson":
            value = -S[a, b] / S[a, a]
            by_S[a, b] = by_S[b, a] = -0.5 / S[a, a]
            by_S[a, a] = S[a, b] / S[a, a] ** 2
        else:
            n = a if self.kind == "young" else _PLANE[frozenset("xyz"[d] for d in (a, b))]
            value = 1.0 / S[n, n]
            by_S[n, n] = -1.0 / S[n, n] ** 2
        return float(value), -S @ by_S @ S  # dS = -S dC S


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CellTargetResponse(_CellResponse):
    """sum (C - C*)^2 / sum C*^2 over the entries that matter.

    Attributes
    ----------
    target : ndarray, shape (6, 6)
        MPa; nan where it does not matter.
    root : bool
        Take the root of it, as limits do.
    """

    target: Array
    root: bool = False

    def of(self, C: Array) -> tuple[float, Array]:
        """The square, smooth at 0; or its root."""
        known = ~np.isnan(self.target)
        wanted = np.where(known, self.target, 0.0)
        size = float((wanted**2).sum())
        miss = np.where(known, C - wanted, 0.0)
        square = float((miss**2).sum()) / size
        if not self.root:
            return square, 2.0 * miss / size
        error = float(np.sqrt(square))
        return error, miss / (size * max(error, 1e-300))

    def report(self, value: float) -> float:
        """A relative error."""
        return value if self.root else float(np.sqrt(max(value, 0.0)))


_WORDS = {
    "bulk": ("effective bulk modulus", "MPa"),
    "shear": ("effective shear modulus", "MPa"),
    "young": ("effective modulus along {0}", "MPa"),
    "poisson": ("effective Poisson's ratio {0}{1}", ""),
    "shear_plane": ("effective shear modulus in {0}{1}", "MPa"),
    "axial": ("effective stiffness {0}{0}-{1}{1}", "MPa"),
}


def cell_response(measure: CellProperty | CellTarget) -> _CellResponse:
    """The response that a measure stands for."""
    if isinstance(measure, CellTarget):
        return CellTargetResponse(
            name="relative error of the cell's stiffness", unit="", target=measure.stiffness
        )
    name, unit = _WORDS[measure.kind]
    a, b = ("xyz".index(axis) for axis in measure.axes)
    return CellPropertyResponse(
        name=name.format(*measure.axes), unit=unit, kind=measure.kind, axes=(a, b)
    )
