"""One design problem: unknowns, physics, an objective and limits, ready for the iterations."""

from __future__ import annotations

import math
from dataclasses import replace

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
from voxelmat.model.goal import AtMost
from voxelmat.model.measure_amount import Cost, Mass, ResinVolume, Volume
from voxelmat.topopt.limits import Bound, Goal
from voxelmat.topopt.loop import Evaluation
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.response_area import AreaResponse
from voxelmat.topopt.response_motion import (
    LargestMotionResponse,
    MeanMotionResponse,
    WorstComplianceResponse,
)
from voxelmat.topopt.responses import Amount, ComplianceResponse, TargetResponse, told
from voxelmat.topopt.unknowns import Unknowns

__all__ = ["LayoutProblem", "start_of", "suits_criteria"]

Array = NDArray[np.float64]

_NEVER_NEGATIVE = (
    ComplianceResponse, TargetResponse, WorstComplianceResponse, LargestMotionResponse, Amount,
)  # fmt: skip
#: Mean change of a design above which its solves may be less close, and by what factor at most.
_LOOSEN_FROM, _LOOSEST = 5e-3, 10.0
_OF_MISS = 3e-3
#: Responses whose error is that of the solver squared, or that have a rule of their own; others
#: are solved closer by this factor.
_FORGIVING = (ComplianceResponse, WorstComplianceResponse, TargetResponse, Amount)
_CLOSER = 0.1
#: Iterations from one correction of smooth maxima to the true ones to the next.
_RENEW_EVERY = 5


class LayoutProblem:
    """Implements `voxelmat.topopt.loop.Problem` for voxels of a part."""

    def __init__(
        self,
        unknowns: Unknowns,
        physics: Physics,
        goal: Goal,
        bounds: tuple[Bound, ...],
        projection: Projection,
    ) -> None:
        self.unknowns, self.physics = unknowns, physics
        self.goal, self.bounds, self._projection = goal, bounds, projection
        self.objective = goal.response
        self.low, self.high = np.zeros(unknowns.n), np.ones(unknowns.n)
        asked = (goal.response, *(b.response for b in bounds))
        close = not all(isinstance(r, _FORGIVING) for r in asked)
        self._usual = physics.tolerance * (_CLOSER if close else 1.0)
        self._corrected = any(hasattr(r, "truth") for r in asked)
        self._seen = False

    def begin(self, iteration: int, history: tuple[IterationRecord, ...]) -> bool:
        """Set the penalty, the solver tolerance, and whether smooth maxima are corrected anew."""
        self.physics.tolerance = self._tolerance(history)
        c, void = self._projection, self.unknowns.void
        if void is not None and c.penalties:
            penalty = c.penalties[min(c.stage(iteration), len(c.penalties) - 1)]
            self.unknowns.void = replace(void, penalty=penalty)
        self.physics.renewing = self._corrected and iteration % _RENEW_EVERY == 0
        another = iteration > 0 and c.stage(iteration) != c.stage(iteration - 1)
        return another or self.physics.renewing

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
        return not self.unknowns.projected or c.stage(max(iteration, 0)) == c.stages - 1

    def evaluate(self, x: Array, sharpness: float) -> Evaluation:
        """Values and derivatives at x."""
        self.unknowns.sharpness = sharpness
        fields = self.unknowns.forward(x)
        self.physics.update(fields)
        value, slopes = self.objective.value(self.physics)
        sign = self.goal.sign
        F, dF = [sign * value], [sign * self.unknowns.transpose(fields, slopes)]
        if not self._seen:
            self._check_that_it_matters(dF[0])
            self._seen = True
        for bound in self.bounds:
            amount, slopes = bound.response.value(self.physics)
            F.append(bound.excess(amount))
            dF.append(bound.slope * self.unknowns.transpose(fields, slopes))
        rho = fields.rho[self.unknowns.choice.domain]
        bounded = isinstance(self.objective, _NEVER_NEGATIVE) and not self.goal.maximise
        return Evaluation(
            F=np.array(F),
            dF=np.array(dF),
            reported=told(self.objective, self.physics, value),
            grey=float((4.0 * rho * (1.0 - rho)).mean()),
            weight=self.unknowns.solidity(fields),
            cg_iterations=self.physics.cg_iterations,
            least=0.0 if bounded else -math.inf,
            size=self._size(dF[0]),
        )

    def _size(self, slope: Array) -> float | None:
        """What the objective is scaled by, where its first value may be near 0."""
        most: float | None = getattr(self.objective, "most", None)
        if most is not None:
            return most
        if not isinstance(self.objective, MeanMotionResponse):
            return None
        # A third of what all unknowns could move it by: about the value, for a compliance.
        return float(np.abs(slope * (self.high - self.low)).sum()) / 3.0

    def _check_that_it_matters(self, slope: Array) -> None:
        p = self.unknowns.palette
        twins = np.ptp(p.bulk) == 0 and np.ptp(p.shear) == 0
        # A uniform start has no surface, and no unknown by itself makes one to first order.
        area = isinstance(self.objective, AreaResponse)
        if not (slope.any() or twins or area):
            raise InputError(
                f"No unknown of this design changes the {self.objective.name}, so there is "
                "nothing to optimise: free voxels that matter to it, or choose another objective."
            )

    def remarks(self, x: Array) -> tuple[str, ...]:
        """What people are told about x besides its values: nothing here."""
        return ()

    def warm_state(self) -> dict[str, Array]:
        """Last displacements and adjoints."""
        return self.physics.warm_state()

    def restore(self, warm: dict[str, Array]) -> None:
        """Put `warm_state` back."""
        self.physics.restore(warm)


def start_of(spec: DesignSpec, unknowns: Unknowns, bounds: tuple[Bound, ...]) -> Array:
    """A uniform start that meets volume, mass and resin limits as nearly as a uniform one can."""
    fractions = _start_fractions(spec)
    c = unknowns.choice
    free = c.domain & ~c.solid & ~c.empty
    rho = 0.8
    for bound in bounds:
        response = bound.response
        if bound.at_least or not (spec.void and isinstance(response, Amount)):
            continue
        mixed = np.where(
            c.resin < 0, fractions @ response.factor, response.factor[np.maximum(c.resin, 0)]
        )
        each = response.weight * mixed
        room = bound.limit - response.always - float(each[c.solid].sum())
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
    if spec.robust is not None or spec.scatter or spec.support_angle is not None:
        return False  # slopes may have either sign
    if not isinstance(spec.objective, Compliance) or len(spec.limits) != 1 or not only_density:
        return False
    (limit,) = spec.limits
    if isinstance(limit, AtMost):
        return isinstance(limit.measure, Volume | Mass | Cost | ResinVolume)
    return isinstance(limit, VolumeLimit | MassLimit | ResinLimit)
