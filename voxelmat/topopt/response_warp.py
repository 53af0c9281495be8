"""How far a design warps when its temperature changes.

Every voxel would strain freely by alpha dT; the forces of that strain load the part,
f = sum V tr(B) (3 lam + 2 mu) alpha dT, and K u = f. For J(u) the adjoint solves K a = dJ/du and
dJ = a . df - a . dK u, where df depends on both the moduli and the expansion.

Expansion: a blend of two resins by the relation of Levin from its bulk modulus, of more by the
mean weighted with bulk moduli (Turner, an estimate), as in `voxelmat.model.expansion`. Voids
change the moduli and not the expansion.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.held import check_held
from voxelmat.fea.modal import anchors
from voxelmat.fea.sensitivity import strain, strain_adjoint
from voxelmat.fea.system import LinearSystem
from voxelmat.model.expansion import palette_expansion
from voxelmat.model.measure_physics import Warpage
from voxelmat.model.part import Part
from voxelmat.topopt.fields import Fields
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.unknowns import Unknowns

__all__ = ["WarpResponse", "mixed_expansion", "warp_response"]

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]

# Bulk moduli closer than this (relative) count as equal: every phase then strains freely.
_EQUAL = 1e-9


def mixed_expansion(
    w: Array, bulk: Array, alpha: Array, mixed: Array
) -> tuple[Array, Array, Array]:
    """Expansion of blends, and its slopes by the mixed bulk modulus and by each fraction.

    Parameters
    ----------
    w : ndarray, shape (n, K)
    bulk, alpha : ndarray, shape (K,)
        MPa and 1/K.
    mixed : ndarray, shape (n,)
        Bulk modulus of each blend, MPa.

    Returns
    -------
    alpha, by_mixed : ndarray, shape (n,)
    by_w : ndarray, shape (n, K)
    """
    if bulk.size == 2 and abs(bulk[0] - bulk[1]) > _EQUAL * bulk.max():
        rate = (alpha[1] - alpha[0]) / (1.0 / bulk[1] - 1.0 / bulk[0])
        value = alpha[0] + rate * (1.0 / mixed - 1.0 / bulk[0])
        return value, -rate / mixed**2, np.zeros(w.shape)
    total = w @ bulk
    value = (w @ (bulk * alpha)) / total
    by_w = bulk * (alpha - value[:, None]) / total[:, None]
    return value, np.zeros(value.shape), by_w


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class WarpResponse:
    """Root of the mean square displacement of some nodes along a direction, mm.

    Attributes
    ----------
    held : ndarray of bool, shape (3, nz+1, ny+1, nx+1)
    springs : ndarray of float64 or None
        To ground, N/mm.
    change : float
        Of the temperature, K.
    bulk, alpha : ndarray, shape (K,)
        Of the resins, MPa and 1/K.
    kept : ndarray of float64, shape (nz, ny, nx)
        Expansion of voxels that are not designed, 1/K.
    designed : ndarray of bool
    nodes : ndarray of bool, shape (nz+1, ny+1, nx+1)
    direction : tuple of float
        Unit vector, x, y, z.
    key : str
        Tells it from other responses.
    """

    held: Bools
    springs: Array | None
    change: float
    bulk: Array
    alpha: Array
    kept: Array
    designed: Bools
    nodes: Bools
    direction: tuple[float, float, float]
    key: str = ""
    name: str = "warping"
    unit: str = "mm"

    def value(self, physics: Physics) -> tuple[float, dict[str, Array]]:
        """Value, and derivatives by ``lam``, ``mu`` and ``w``."""
        f = physics.fields
        system, u = self.solved(physics)
        along = sum(d * u[c] for c, d in enumerate(self.direction))
        moved = np.where(self.nodes, along, 0.0)
        count = float(self.nodes.sum())
        value = float(np.sqrt((moved**2).sum() / count))
        by_u = np.stack([d * moved for d in self.direction]) / (count * max(value, 1e-300))
        name = f"warp adjoint {self.key}"
        found = system.solve(by_u, x0=physics.recall(name), tol=physics.tolerance)
        physics.cg_iterations += found.iterations
        physics.remember(name, found.u)
        volume = float(np.prod(physics.spacing)) * self.change
        by_stress = volume * strain(found.u, physics.spacing)[:3].sum(axis=0)
        alpha, by_mixed, by_w = self._expansion(f)
        slopes = {k: -form for k, form in physics.by_stiffness(u, found.u).items()}
        slopes["lam"] += 3.0 * by_stress * alpha
        slopes["mu"] += 2.0 * by_stress * alpha
        inside = self.designed
        by_alpha = (by_stress * (3.0 * f.lam + 2.0 * f.mu))[inside]
        w = np.zeros(f.w.shape)
        w[:, inside] = (by_alpha[:, None] * (by_mixed[:, None] * f.blend.d_bulk + by_w)).T
        return value, {**slopes, "w": w}

    def report(self, value: float) -> float:
        """As it is."""
        return value

    def solved(self, physics: Physics) -> tuple[LinearSystem, Array]:
        """System and displacement, mm, of the present design."""
        system, u = physics.once(f"warp {self.key}", lambda: self._solve(physics))
        return system, u

    def _solve(self, physics: Physics) -> tuple[LinearSystem, Array]:
        f = physics.fields
        stress = np.zeros((6, *f.lam.shape))
        stress[:3] = (3.0 * f.lam + 2.0 * f.mu) * self._expansion(f)[0] * self.change
        force = strain_adjoint(float(np.prod(physics.spacing)) * stress, physics.spacing)
        system = LinearSystem(
            f.lam,
            f.mu,
            physics.spacing,
            self.held,
            springs=self.springs,
            element=physics.element,
            monitor=physics.monitor,
        )
        found = system.solve(force, x0=physics.recall(f"warp {self.key}"), tol=physics.tolerance)
        physics.cg_iterations += found.iterations
        physics.remember(f"warp {self.key}", found.u)
        return system, found.u

    def _expansion(self, f: Fields) -> tuple[Array, Array, Array]:
        """Expansion of every voxel; slopes in designed ones by bulk modulus and fractions."""
        inside = self.designed
        w = np.ascontiguousarray(f.w[:, inside].T)
        value, by_mixed, by_w = mixed_expansion(w, self.bulk, self.alpha, f.blend.bulk)
        alpha = self.kept.copy()
        alpha[inside] = value
        return alpha, by_mixed, by_w


def warp_response(measure: Warpage, part: Part, unknowns: Unknowns, key: str = "") -> WarpResponse:
    """The response that a measure stands for.

    Raises
    ------
    InputError
        A resin without expansion, supports that leave the part free to move, an empty region.
    """
    acts, anchored = anchors(part, measure.supports, measure.springs, "a design's warping")
    if acts.plates is not None or any(bed.leans for bed in acts.beds):
        raise InputError(
            "The warping of a design takes supports and springs along the axes; leave rigid "
            "plates and foundations on sloping surfaces out."
        )
    c, p = unknowns.choice, unknowns.palette
    missing = [n for n in p.names if part.resin(n).expansion is None]
    if missing:
        raise InputError(
            f"There is no thermal expansion for {', '.join(map(repr, missing))}. State "
            "expansion_um_per_m_K in the material's file."
        )
    nodes = np.ascontiguousarray(measure.region.nodes(part).T)
    if not nodes.any():
        raise InputError(
            f"The region '{measure.region.name}', whose warping is asked for, holds no node of "
            "the part; move or enlarge it."
        )
    solid = np.ascontiguousarray(part.solid.T)
    check_held(solid, anchored, np.ones(nodes.shape, dtype=bool), part.grid)
    kept = np.zeros(solid.shape)
    outside = solid & ~c.domain
    if outside.any():
        found = palette_expansion(part)
        if found is None:
            raise InputError("A resin of the voxels that are kept has no thermal expansion.")
        kept = np.where(outside, found[0][part.labels.T], 0.0)
    alphas = [part.resin(n).expansion for n in p.names]
    return WarpResponse(
        held=acts.held,
        springs=acts.springs,
        change=measure.change_K,
        bulk=p.bulk,
        alpha=np.array([a.value for a in alphas if a is not None]),
        kept=kept,
        designed=c.domain,
        nodes=nodes,
        direction=measure.direction,
        key=key,
    )
