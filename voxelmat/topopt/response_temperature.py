"""Steady temperature of a design: its peak, its mean in a region, or heat times temperature.

(K + D) T = q with conduction K, films D and heat q. For J(T) the adjoint solves
(K + D) a = dJ/dT with a = 0 where temperature is given, and dJ = -a . dK T.

Conductivity: blends by the self-consistent average of `voxelmat.model.thermal`, half-empty voxels
k = k_0 + rho^p (k_s - k_0), which for p >= 1.5 stays within the Hashin-Shtrikman bound
2 rho / (3 - rho) of a porous solid. Heat and films do not depend on the design: they act on the
shape as it is given.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.heat_assemble import assemble_heat, conductivities
from voxelmat.fea.heat_pieces import kept
from voxelmat.fea.heat_system import HeatSystem
from voxelmat.fea.operator import touched_nodes
from voxelmat.fea.scalar_element import modal_factors
from voxelmat.fea.scalar_forms import scalar_forms
from voxelmat.model.goal import plain
from voxelmat.model.measure_physics import MeanTemperature, PeakTemperature, ThermalCompliance
from voxelmat.model.part import Part
from voxelmat.model.thermal import conductivity_slopes, mixed_conductivity
from voxelmat.provenance import text_digest
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.smooth import correction, scaled, smooth_maximum
from voxelmat.topopt.unknowns import Unknowns

__all__ = ["Conducting", "PeakResponse", "TemperatureResponse", "temperature_response"]

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]

Measure = PeakTemperature | MeanTemperature | ThermalCompliance

# Share of the poorest resin's conductivity that empty voxels keep where none is stated.
_VOID = 1e-3


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Conducting:
    """A heat case on the nodes, and how a design conducts.

    Attributes
    ----------
    key : str
        Names the solution among those of the design.
    coldest : float
        Coldest temperature that is given, degC.
    held : ndarray of bool, shape (nz+1, ny+1, nx+1)
    given : ndarray of float64
        Temperature at held nodes over the coldest that is given, K.
    heat : ndarray of float64
        Into each node when all is at that coldest temperature, mW.
    film : ndarray of float64 or None
        mW/K.
    kept : ndarray of float64, shape (nz, ny, nx)
        Conductivity of voxels that are not designed, mW/(mm K).
    fill : ndarray of float64
        Filled fraction of designed voxels.
    resins : ndarray, shape (K,)
        mW/(mm K).
    void, penalty : float
        k_0 in mW/(mm K), and p.
    """

    key: str
    coldest: float
    held: Bools
    given: Array
    heat: Array
    film: Array | None
    kept: Array
    fill: Array
    resins: Array
    void: float
    penalty: float

    def solved(self, physics: Physics) -> tuple[HeatSystem, Array]:
        """System and temperature over the coldest given one, K, of the present design."""
        system, T = physics.once(self.key, lambda: self._solve(physics))
        return system, T

    def _solve(self, physics: Physics) -> tuple[HeatSystem, Array]:
        k = self.kept + self.fill * self._solid(physics)[0]
        system = HeatSystem(k, physics.spacing, self.held, film=self.film, monitor=physics.monitor)
        T, run = system.solve(
            self.heat, x0=physics.recall(self.key), prescribed=self.given, tol=physics.tolerance
        )
        physics.cg_iterations += run.iterations
        physics.remember(self.key, T)
        return system, T

    def _solid(self, physics: Physics) -> tuple[Array, Array, Array]:
        """Conductivity of designed voxels at full fill, and slopes by rho and w (K, ...)."""
        f = physics.fields
        inside = self.fill > 0
        w = np.ascontiguousarray(f.w[:, inside].T)
        mixed = mixed_conductivity(w, self.resins)
        rho = f.rho[inside]
        scale = rho**self.penalty
        k, by_rho = np.zeros(inside.shape), np.zeros(inside.shape)
        by_w = np.zeros(f.w.shape)
        k[inside] = self.void + scale * (mixed - self.void)
        by_rho[inside] = self.penalty * rho ** (self.penalty - 1.0) * (mixed - self.void)
        by_w[:, inside] = scale * conductivity_slopes(w, self.resins, mixed).T
        return k, by_rho, by_w

    def slopes(self, physics: Physics, by_T: Array, name: str) -> dict[str, Array]:
        """Derivatives by ``rho`` and ``w`` of a response with this slope by the temperature."""
        system, T = self.solved(physics)
        key = f"{self.key} {name}"
        a, run = system.solve(by_T, x0=physics.recall(key), tol=physics.tolerance)
        physics.cg_iterations += run.iterations
        physics.remember(key, a)
        factors = modal_factors(physics.spacing, "lumped")[0]
        by_k = -self.fill * scalar_forms(T, a, factors)
        _, by_rho, by_w = self._solid(physics)
        return {"rho": by_k * by_rho, "w": by_k * by_w}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TemperatureResponse:
    """A weighted sum of temperatures over the coldest one that is given, and a level on top.

    Attributes
    ----------
    conducting : Conducting
    weight : ndarray of float64, shape (nz+1, ny+1, nx+1)
    key : str
        Tells it from other responses.
    level : float
        What is added.
    """

    conducting: Conducting
    weight: Array
    key: str
    name: str
    unit: str
    level: float = 0.0

    def value(self, physics: Physics) -> tuple[float, dict[str, Array]]:
        """Value, and derivatives by ``rho`` and ``w``."""
        T = self.conducting.solved(physics)[1]
        slopes = self.conducting.slopes(physics, self.weight, self.key)
        return self.level + float((self.weight * T).sum()), slopes

    def report(self, value: float) -> float:
        """As it is."""
        return value


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PeakResponse:
    """Largest temperature of some nodes, degC, by a p-norm that is corrected to it.

    The norm is over what exceeds the coldest temperature that is given.

    Attributes
    ----------
    conducting : Conducting
    nodes : ndarray of bool, shape (nz+1, ny+1, nx+1)
    exponent : float
    key : str
        Tells it from other responses.
    """

    conducting: Conducting
    nodes: Bools
    exponent: float
    key: str
    name: str
    unit: str = "degC"

    def value(self, physics: Physics) -> tuple[float, dict[str, Array]]:
        """Value, and derivatives by ``rho`` and ``w``."""
        T = self.conducting.solved(physics)[1]
        rise = np.where(self.nodes, np.maximum(T, 0.0), 0.0)
        peak, by_T = smooth_maximum(rise, self.exponent)
        slopes = self.conducting.slopes(physics, by_T, self.key)
        ratio = correction(physics, self.key, peak, float(rise.max()))
        value, slopes = scaled(ratio, peak, slopes)
        return self.conducting.coldest + value, slopes

    def report(self, value: float) -> float:
        """As it is."""
        return value

    def truth(self, physics: Physics) -> float:
        """The largest."""
        rise = float(self.conducting.solved(physics)[1][self.nodes].max())
        return self.conducting.coldest + max(rise, 0.0)


def temperature_response(
    measure: Measure, part: Part, unknowns: Unknowns, key: str = ""
) -> TemperatureResponse | PeakResponse:
    """The response that a measure stands for.

    Raises
    ------
    InputError
        A resin without conductivity, a heat case that does not fit the part, an empty region.
    """
    conducting = _conducting(measure, part, unknowns)
    if isinstance(measure, ThermalCompliance):
        return TemperatureResponse(
            conducting=conducting,
            weight=conducting.heat,
            key=key,
            name="thermal compliance",
            unit="mW K",
        )
    nodes = touched_nodes(np.ascontiguousarray(part.solid.T))
    if measure.region is not None:
        nodes = np.ascontiguousarray(measure.region.nodes(part).T)
        if not nodes.any():
            raise InputError(
                f"The region '{measure.region.name}', whose temperature is asked for, holds no "
                "node of the part; move or enlarge it."
            )
    where = "" if measure.region is None else f" of {measure.region.name}"
    if isinstance(measure, MeanTemperature):
        return TemperatureResponse(
            conducting=conducting,
            key=key,
            name=f"mean temperature{where}",
            unit="degC",
            level=conducting.coldest,
            weight=nodes / float(nodes.sum()),
        )
    return PeakResponse(
        conducting=conducting,
        key=key,
        name=f"peak temperature{where}",
        nodes=nodes,
        exponent=measure.exponent,
    )


def _digest(measure: Measure) -> str:
    """Names the temperature, which measures of one heat case share."""
    arrays: list[NDArray[np.generic]] = []
    head = plain([measure.heat_case, measure.void_W_per_m_K], arrays)
    return text_digest([head, [a.tobytes().hex() for a in arrays]])[:16]


def _conducting(measure: Measure, part: Part, unknowns: Unknowns) -> Conducting:
    case, c = measure.heat_case, unknowns.choice
    by_name = {m.name: m for m in part.resins}
    known = {n: by_name[n].conductivity for n in unknowns.palette.names}
    missing = [n for n, k in known.items() if k is None]
    if missing:
        raise InputError(
            f"There is no conductivity for {', '.join(map(repr, missing))}, so the design's "
            "temperature is not known. State conductivity_W_per_m_K in the material's file."
        )
    resins = np.array([k.value for k in known.values() if k is not None])
    acts = assemble_heat(part, case)
    solid = np.ascontiguousarray(part.solid.T)
    keep, _ = kept(part, solid, acts)
    if not keep.all() and np.any(solid & ~keep):
        raise InputError(
            f"Heat case '{case.name}': {int((solid & ~keep).sum())} voxels of the shape are joined "
            "to nothing whose temperature is held. Take them out of the shape or join them."
        )
    acts = acts.within(touched_nodes(solid))
    coldest = min(acts.levels)
    outside = solid & ~c.domain
    # Where all voxels are designed, only the resins to choose from need a conductivity.
    kept_k = (
        np.where(outside, conductivities(part), 0.0) if outside.any() else np.zeros(solid.shape)
    )
    void = measure.void_W_per_m_K
    return Conducting(
        key=f"heat {_digest(measure)}",
        coldest=coldest,
        held=acts.held,
        given=np.where(acts.held, acts.given - coldest, 0.0),
        heat=acts.heat(coldest),
        film=acts.film(),
        kept=kept_k,
        fill=c.fill,
        resins=resins,
        void=_VOID * float(resins.min()) if void is None else void,
        penalty=1.0 if unknowns.void is None else unknowns.void.penalty,
    )
