"""One design problem: unknowns, physics, an objective and limits, ready for the iterations."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.design_result import IterationRecord
from voxelmat.model.design_spec import (
    Compliance,
    DesignSpec,
    MassLimit,
    Projection,
    ResinLimit,
    VolumeLimit,
)
from voxelmat.topopt.loop import Evaluation
from voxelmat.topopt.physics import Case, Physics
from voxelmat.topopt.responses import Amount, ComplianceResponse, Response, TargetResponse
from voxelmat.topopt.unknowns import Unknowns
from voxelmat.units import number

__all__ = [
    "Bound",
    "LayoutProblem",
    "limits_of",
    "objective_of",
    "start_of",
    "suits_criteria",
]

Array = NDArray[np.float64]

_NEVER_NEGATIVE = (ComplianceResponse, TargetResponse)
#: Mean change of a design above which its solves may be less close, and by what factor at most.
_LOOSEN_FROM, _LOOSEST = 5e-3, 10.0
_OF_MISS = 3e-3


@dataclass(frozen=True, slots=True, kw_only=True)
class Bound:
    """A response that must not exceed a limit."""

    response: Response
    limit: float


class LayoutProblem:
    """Implements `voxelmat.topopt.loop.Problem` for voxels of a part."""

    def __init__(
        self,
        unknowns: Unknowns,
        physics: Physics,
        objective: Response,
        bounds: tuple[Bound, ...],
        projection: Projection,
    ) -> None:
        self.unknowns, self.physics = unknowns, physics
        self.objective, self.bounds, self._projection = objective, bounds, projection
        self.low, self.high = np.zeros(unknowns.n), np.ones(unknowns.n)
        self._usual = physics.tolerance

    def begin(self, iteration: int, history: tuple[IterationRecord, ...]) -> bool:
        """Set the penalty, and the solver tolerance that the progress so far calls for."""
        self.physics.tolerance = self._tolerance(history)
        c, void = self._projection, self.unknowns.void
        if void is not None and c.penalties:
            penalty = c.penalties[min(c.stage(iteration), len(c.penalties) - 1)]
            self.unknowns.void = replace(void, penalty=penalty)
        return iteration > 0 and c.stage(iteration) != c.stage(iteration - 1)

    def sharpness(self, iteration: int) -> float:
        """Of the projection in this iteration."""
        c = self._projection
        return c.sharpness[min(c.stage(iteration), len(c.sharpness) - 1)]

    def _tolerance(self, history: tuple[IterationRecord, ...]) -> float:
        """Loose while designs change much; close in the end, where a miss becomes small."""
        change = history[-1].change if history else 1.0
        loosened = self._usual * min(max(change / _LOOSEN_FROM, 1.0), _LOOSEST)
        if isinstance(self.objective, TargetResponse) and history:
            # Solver noise above a part of the miss would pass for a rise of the objective.
            return min(loosened, max(_OF_MISS * history[-1].objective, 1e-8))
        return loosened

    def settled(self, iteration: int) -> bool:
        """Whether the projection is at its last stage, or there is nothing to project."""
        c = self._projection
        return self.unknowns.n_rho == 0 or c.stage(max(iteration, 0)) == c.stages - 1

    def evaluate(self, x: Array, sharpness: float) -> Evaluation:
        """Values and derivatives at x."""
        self.unknowns.sharpness = sharpness
        fields = self.unknowns.forward(x)
        self.physics.update(fields)
        value, slopes = self.objective.value(self.physics)
        F, dF = [value], [self.unknowns.transpose(fields, slopes)]
        for bound in self.bounds:
            amount, slopes = bound.response.value(self.physics)
            F.append(amount / bound.limit - 1.0)
            dF.append(self.unknowns.transpose(fields, slopes) / bound.limit)
        rho = fields.rho[self.unknowns.choice.domain]
        return Evaluation(
            F=np.array(F),
            dF=np.array(dF),
            reported=self.objective.report(value),
            grey=float((4.0 * rho * (1.0 - rho)).mean()),
            weight=self.unknowns.solidity(fields),
            cg_iterations=self.physics.cg_iterations,
            least=0.0 if isinstance(self.objective, _NEVER_NEGATIVE) else -math.inf,
        )

    def warm_state(self) -> dict[str, Array]:
        """Last displacements and adjoints."""
        return self.physics.warm_state()

    def restore(self, warm: dict[str, Array]) -> None:
        """Put `warm_state` back."""
        self.physics.restore(warm)


def objective_of(spec: DesignSpec, cases: tuple[Case, ...]) -> Response:
    """The response that the specification's objective stands for."""
    goal = spec.objective
    if isinstance(goal, Compliance):
        return ComplianceResponse()
    names = [c.name for c in cases]
    if goal.load_case is None and len(cases) > 1:
        raise InputError(
            f"The target deflection must name its load case; there are {', '.join(names)}."
        )
    if goal.load_case is not None and goal.load_case not in names:
        raise InputError(
            f"The target deflection names load case '{goal.load_case}'; there are "
            f"{', '.join(names)}."
        )
    nodes = np.ascontiguousarray(goal.nodes.T)
    return TargetResponse(
        case=0 if goal.load_case is None else names.index(goal.load_case),
        nodes=nodes,
        target=np.where(nodes, goal.target.T, 0.0),
        direction=goal.direction,
    )


def limits_of(spec: DesignSpec, unknowns: Unknowns, voxel_volume: float) -> tuple[Bound, ...]:
    """The specification's limits as responses; limits that no design can meet are refused."""
    c, p = unknowns.choice, unknowns.palette
    volume = c.fill * voxel_volume
    total = float(volume[c.domain].sum())
    frozen = c.solid if spec.void else c.domain
    bounds = []
    for limit in spec.limits:
        if isinstance(limit, VolumeLimit):
            if not spec.void:
                raise InputError(
                    f"The solid volume is limited to {limit.fraction:g} of the shape, but the "
                    "design allows no empty voxels; set void to true or drop the limit."
                )
            factor, size, weight = np.ones(p.bulk.size), limit.fraction, volume / total
            name, unit = "solid volume", "of the shape's volume"
        elif isinstance(limit, MassLimit):
            factor, size, weight = p.density, limit.mass, volume
            name, unit = "mass", "tonne"
        else:
            factor = np.array([float(n == limit.resin) for n in p.names])
            size, weight = limit.fraction, volume / total
            name, unit = f"volume of {limit.resin}", "of the shape's volume"
        chosen = np.where(c.resin < 0, factor.min(), factor[np.maximum(c.resin, 0)])
        least = float((weight * chosen)[frozen].sum())
        if least > size * (1 + 1e-9):
            raise InputError(
                f"The {name} is limited to {number(size)} {unit}, but the voxels that must be "
                f"solid already hold {number(least)}; raise the limit or free some of them."
            )
        bounds.append(Bound(response=Amount(name=name, unit=unit, weight=weight, factor=factor),
                            limit=size))  # fmt: skip
    _check_shares(spec)
    return tuple(bounds)


def _check_shares(spec: DesignSpec) -> None:
    """Resin limits must leave something to fill every voxel where none may be empty."""
    shares = {x.resin: x.fraction for x in spec.limits if isinstance(x, ResinLimit)}
    if not spec.void and set(shares) == set(spec.resins) and sum(shares.values()) < 1:
        raise InputError(
            f"Every resin is limited and the limits sum to {number(sum(shares.values()))} of the "
            "shape, but no voxel may be empty; raise a limit or set void to true."
        )
    if isinstance(spec.objective, Compliance) and not spec.limits:
        raise InputError(
            "Least compliance without a limit is the stiffest resin everywhere; limit the volume, "
            "the mass or a resin."
        )


def start_of(spec: DesignSpec, unknowns: Unknowns, bounds: tuple[Bound, ...]) -> Array:
    """A uniform start that meets volume, mass and resin limits as nearly as a uniform one can."""
    fractions = _start_fractions(spec)
    c = unknowns.choice
    free = c.domain & ~c.solid & ~c.empty
    rho = 0.8
    for bound in bounds:
        response = bound.response
        if not (spec.void and isinstance(response, Amount)):
            continue
        mixed = np.where(
            c.resin < 0, fractions @ response.factor, response.factor[np.maximum(c.resin, 0)]
        )
        each = response.weight * mixed
        room = bound.limit - float(each[c.solid].sum())
        rho = min(rho, room / max(float(each[free].sum()), 1e-300))
    return unknowns.start(float(np.clip(rho, 0.02, 1.0)), fractions)


def _start_fractions(spec: DesignSpec) -> Array:
    """Equal shares, those over a limit cut down to it and the rest handed to the others."""
    top = np.ones(len(spec.resins))
    for limit in spec.limits:
        if isinstance(limit, ResinLimit) and not spec.void:
            top[spec.resins.index(limit.resin)] = limit.fraction
    share = np.full(len(top), 1.0 / len(top))
    for _ in range(len(top)):
        over = share > top
        if not over.any():
            break
        spare = float((share - top)[over].sum())
        share[over] = top[over]
        room = ~over & (share < top)
        if not room.any():
            break
        share[room] += spare / room.sum()
    return np.asarray(share / share.sum())


def suits_criteria(spec: DesignSpec, unknowns: Unknowns) -> bool:
    """Whether optimality criteria apply: compliance, one limit, only solid or empty."""
    only_density = unknowns.n == unknowns.n_rho
    return isinstance(spec.objective, Compliance) and len(spec.limits) == 1 and only_density
