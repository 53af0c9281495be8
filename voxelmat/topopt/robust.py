"""A design problem that judges a design by several ways in which it may come out.

Eroded, nominal and dilated: objective and limits count by the worst of them, which gives solid,
gaps and, where resins are pure, phases a least size. Compliance of solid and empty is always worst
eroded, so that alone is solved. Amounts (volume, mass, cost) are held on the dilated design, as
Wang et al. do it, times nominal over dilated amount of a few iterations ago, so that it is the
nominal design that meets the limit.

Scatter: each scatter adds to the nominal value what `voxelmat.topopt.judge` says, or what the
worst case lies above it; several kinds add up, which is right to first order.

References
----------
Wang, F., Lazarov, B. S. and Sigmund, O., On projection methods, convergence and robust
formulations in topology optimization, Struct. Multidisc. Optim. 43 (2011) 767-784.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.design_result import IterationRecord
from voxelmat.model.design_spec import Projection
from voxelmat.topopt.ensemble import Ensemble, Scenario, SharedSystems
from voxelmat.topopt.fields import NOMINAL, Fields, Realisation
from voxelmat.topopt.judge import added_by_scatter, worst
from voxelmat.topopt.limits import Bound, Goal
from voxelmat.topopt.loop import Evaluation
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.problem import LayoutProblem
from voxelmat.topopt.responses import Amount, ComplianceResponse, Response
from voxelmat.topopt.unknowns import Unknowns
from voxelmat.units import quantity

__all__ = ["RobustProblem"]

Array = NDArray[np.float64]

_WIDTH = 0.005  # of the smooth maximum, of the size of what is judged
_FLAT = 1e-4  # of that size; smaller deviations are smoothed
_REFRESH = 5  # iterations between looks at nominal over dilated amounts


class RobustProblem(LayoutProblem):
    """A `LayoutProblem` over an ensemble; its `physics` is the nominal one."""

    def __init__(
        self,
        unknowns: Unknowns,
        physics: Physics,
        goal: Goal,
        bounds: tuple[Bound, ...],
        projection: Projection,
        ensemble: Ensemble,
        systems: SharedSystems,
    ) -> None:
        super().__init__(unknowns, physics, goal, bounds, projection)
        self.ensemble, self._systems = ensemble, systems
        self._nominal = Scenario(realisation=NOMINAL, physics=physics)
        self._anew = self._refresh = True
        self._fields: dict[Realisation, Fields] = {}

    # ------------------------------------------------------------------ iterations
    def begin(self, iteration: int, history: tuple[IterationRecord, ...]) -> bool:
        """Also: whether the amounts of the dilated design are looked at anew."""
        other = super().begin(iteration, history)
        self._anew = iteration == 0 or other
        self._refresh = iteration % _REFRESH == 0 or other
        return other or (self._refresh and self._holds_amounts())

    def _holds_amounts(self) -> bool:
        return self.ensemble.dilated is not None and any(
            isinstance(b.response, Amount) for b in self.bounds
        )

    def evaluate(self, x: Array, sharpness: float) -> Evaluation:
        """Values and derivatives at x over the ensemble; reported is what is judged."""
        self.unknowns.sharpness = sharpness
        self._fields = {NOMINAL: self.unknowns.forward(x)}
        self._systems.share(self._fields[NOMINAL].lam)
        for s in (self._nominal, *self.ensemble.all):
            s.physics.tolerance, s.physics.monitor = self.physics.tolerance, self.physics.monitor
            if s.realisation not in self._fields:
                self._fields[s.realisation] = self.unknowns.forward(x, s.realisation)
            s.physics.update(self._fields[s.realisation])
        sign = self.goal.sign
        value, slope = self._judge(self.objective, lambda v: sign * v, sign, None)
        F, dF = [value], [slope]
        if not self._seen:
            self._check_that_it_matters(slope)
            self._seen = True
        for n, bound in enumerate(self.bounds):
            if isinstance(bound.response, Amount) and self.ensemble.dilated is not None:
                value, slope = self._amount(n, bound)
            else:
                value, slope = self._judge(bound.response, bound.excess, bound.slope, 1.0)
            F.append(value)
            dF.append(slope)
        fields = self._fields[NOMINAL]
        rho = fields.rho[self.unknowns.choice.domain]
        return Evaluation(
            F=np.array(F),
            dF=np.array(dF),
            reported=self.objective.report(sign * F[0]),
            grey=float((4.0 * rho * (1.0 - rho)).mean()),
            weight=self.unknowns.solidity(fields),
            cg_iterations=sum(s.physics.cg_iterations for s in (self._nominal, *self.ensemble.all)),
            size=self._size(dF[0]),
        )

    # ------------------------------------------------------------------ judging
    def _judge(
        self, response: Response, excess: Callable[[float], float], by: float, size: float | None
    ) -> tuple[float, Array]:
        """How bad a response is over the ensemble, and its slope by the unknowns.

        `excess` turns values into what must be small, with slope `by`; `size` is what a change
        of it is measured by, that of the objective where left out.
        """
        e = self.ensemble
        known: dict[int, tuple[float, Scenario, Any]] = {}

        def at(s: Scenario) -> float:
            if id(s) not in known:
                value, slopes = response.value(s.physics)
                known[id(s)] = (excess(value), s, slopes)
            return known[id(s)][0]

        share: dict[int, float] = {}

        def count(s: Scenario, weight: float) -> None:
            share[id(s)] = share.get(id(s), 0.0) + weight

        ways = self._ways(response)
        scatters = bool(e.materials or e.loads) and not isinstance(response, Amount)
        nominal = at(self._nominal) if scatters or self._nominal in ways else 0.0
        scale = self._scale(max(abs(nominal), abs(at(ways[0])))) if size is None else size
        total, parts = worst(np.array([at(s) for s in ways]), _WIDTH * scale)
        for s, p in zip(ways, parts, strict=True):
            count(s, float(p))
        if len(ways) == 1:
            total = at(ways[0])
        if scatters:
            for pairs, deviations in ((e.materials, e.of_materials), (e.loads, e.of_loads)):
                if pairs:
                    total += self._scatter(pairs, deviations, at, count, nominal, scale)
        slope = np.zeros(self.unknowns.n)
        for key, weight in share.items():
            _, s, slopes = known[key]
            if weight != 0.0:
                fields = self._fields[s.realisation]
                slope += (weight * by) * self.unknowns.transpose(fields, slopes)
        return float(total), slope

    def _scale(self, size: float) -> float:
        """Size of the objective at the beginning of a stage: a constant, so slopes are exact."""
        known = self.physics.recall("size of the objective")
        if self._anew or known is None:
            known = np.array([max(size, 1e-300)])
            self.physics.remember("size of the objective", known)
            self._anew = False
        return float(known[0])

    def _scatter(
        self,
        pairs: tuple[tuple[Scenario, Scenario], ...],
        deviations: float | None,
        at: Callable[[Scenario], float],
        count: Callable[[Scenario, float], None],
        nominal: float,
        scale: float,
    ) -> float:
        """What one kind of scatter adds to the nominal value."""
        if deviations is None:
            ways = (self._nominal, *(s for pair in pairs for s in pair))
            top, parts = worst(np.array([at(s) for s in ways]), _WIDTH * scale)
            for s, p in zip(ways, parts, strict=True):
                count(s, float(p))
            count(self._nominal, -1.0)
            return top - nominal
        up, down = (np.array([at(pair[n]) for pair in pairs]) for n in (0, 1))
        added, by_nominal, by_up, by_down = added_by_scatter(
            nominal, up, down, deviations, _FLAT * scale
        )
        count(self._nominal, by_nominal)
        for (one, other), a, b in zip(pairs, by_up, by_down, strict=True):
            count(one, float(a))
            count(other, float(b))
        return added

    def _ways(self, response: Response) -> tuple[Scenario, ...]:
        """Scenarios of the borders that a response is judged by."""
        e = self.ensemble
        if isinstance(response, Amount):
            return (e.dilated or self._nominal,)
        stiff = isinstance(response, ComplianceResponse) and not self.goal.maximise
        if e.eroded is not None and not e.phases and stiff:
            return (e.eroded,)
        found = (e.eroded, self._nominal, e.dilated, *e.phases)
        return tuple(s for s in found if s is not None)

    def _amount(self, n: int, bound: Bound) -> tuple[float, Array]:
        """An amount of the dilated design, times nominal over dilated as last looked at."""
        dilated = self.ensemble.dilated or self._nominal
        value, slopes = bound.response.value(dilated.physics)
        name = f"nominal over dilated {n}"
        if self._refresh or self.physics.recall(name) is None:
            nominal = bound.response.value(self.physics)[0]
            ratio = nominal / value if value > 0 else 1.0
            self.physics.remember(name, np.array([ratio]))
        known = self.physics.recall(name)
        ratio = 1.0 if known is None else float(known[0])
        slope = self.unknowns.transpose(self._fields[dilated.realisation], slopes)
        return bound.excess(ratio * value), bound.slope * ratio * slope

    def remarks(self, x: Array) -> tuple[str, ...]:
        """How the objective that was judged compares with that of the nominal design."""
        judged = self.evaluate(x, self.unknowns.sharpness).reported
        nominal = self.objective.report(self.objective.value(self.physics)[0])
        name, unit = self.objective.name, self.objective.unit
        return (
            f"Judged over {1 + len(self.ensemble.all)} ways to come out: {name} "
            f"{quantity(judged, unit)}; as designed {quantity(nominal, unit)}.",
        )

    # ------------------------------------------------------------------ keeping
    def warm_state(self) -> dict[str, Array]:
        """That of every scenario."""
        out = super().warm_state()
        for n, s in enumerate(self.ensemble.all):
            out |= {f"way {n} {name}": array for name, array in s.physics.warm_state().items()}
        return out

    def restore(self, warm: dict[str, Array]) -> None:
        """Put `warm_state` back."""
        mine = {name: array for name, array in warm.items() if not name.startswith("way ")}
        super().restore(mine)
        for n, s in enumerate(self.ensemble.all):
            head = f"way {n} "
            s.physics.restore({k.removeprefix(head): v for k, v in warm.items()
                               if k.startswith(head)})  # fmt: skip
