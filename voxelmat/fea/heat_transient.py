"""Heat conduction over time: implicit steps of one size, each a few solves of one system."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import Cancelled, InputError
from voxelmat.fea.heat_answer import balance_of, flows_at, heat_result, rounding_of
from voxelmat.fea.heat_assemble import HeatActs, assemble_heat, capacities, conductivities
from voxelmat.fea.heat_pieces import hinges
from voxelmat.fea.heat_system import HeatSystem
from voxelmat.fea.operator import touched_nodes
from voxelmat.fea.scalar_element import CAPACITIES, element_matrices
from voxelmat.model.heatcase import HeatCase
from voxelmat.model.heatresult import HeatResult, TransientHeatResult, interpolate
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.provenance import utc_now
from voxelmat.units import number

__all__ = ["SCHEMES", "conduct_over_time"]

Double = NDArray[np.float64]
Point = tuple[float, float, float]

#: Each stage of a step is a backward Euler step of this part of it. ``sdirk2`` has two stages of
#: gamma = 1 - sqrt(1/2): second order, and fast modes die out (L-stable), with no start-up.
#: Source: R. Alexander, SIAM J. Numer. Anal. 14 (1977) 1006 (from memory).
SCHEMES = {"sdirk2": 1.0 - math.sqrt(0.5), "backward-euler": 1.0}

# Temperatures past the given ones by more than this part of their span get a caution.
_OVERSHOOT = 1e-3


@dataclass
class _March:
    """The state between steps, and what each step leaves behind."""

    T: Double
    saved_s: list[float] = field(default_factory=list)
    saved: list[NDArray[np.float32]] = field(default_factory=list)
    times: list[float] = field(default_factory=list)
    lowest: list[float] = field(default_factory=list)
    highest: list[float] = field(default_factory=list)
    watched: list[list[float]] = field(default_factory=list)
    flows: list[dict[str, float]] = field(default_factory=list)
    stored: list[float] = field(default_factory=list)
    balance: list[float] = field(default_factory=list)
    iterations: int = 0
    residual: float = 0.0


class _Stepper:
    """One implicit step after another on one part."""

    def __init__(
        self, part: Part, acts: HeatActs, step: float, scheme: str, capacity: str, tol: float,
        maxiter: int, monitor: Monitor,
    ) -> None:  # fmt: skip
        k, c = conductivities(part), capacities(part)
        if not np.all(c[k > 0] > 0):
            raise InputError("A voxel conducts heat but holds none; check the heat capacities.")
        h = part.grid.spacing
        self.step, self.gamma = step, SCHEMES[scheme]
        self.acts, self._tol, self._maxiter = acts, tol, maxiter
        film = acts.film()
        self.implicit = HeatSystem(
            k, h, acts.held, film=film, capacity=c / (self.gamma * step), kind=capacity,
            monitor=monitor,
        )  # fmt: skip
        self.spatial = HeatSystem(k, h, acts.held, film=film)
        self.heat = acts.heat(acts.datum)
        # Row sums of either capacity matrix: the heat of a degree at each node, mJ/K.
        share = element_matrices(h, CAPACITIES[0])[1][0, 0] * c
        self.mass = np.zeros(acts.held.shape)
        nz, ny, nx = c.shape
        for a in range(8):
            x, y, z = a & 1, a >> 1 & 1, a >> 2
            self.mass[z : z + nz, y : y + ny, x : x + nx] += share

    def _stage(self, base: Double, march: _March) -> tuple[Double, dict[str, float]]:
        """A backward Euler step from `base`: its change of temperature, and the flows then."""
        pull = self.heat - self.spatial.apply(base - self.acts.datum)
        change, run = self.implicit.solve(pull, tol=self._tol, maxiter=self._maxiter)
        march.iterations += run.iterations
        march.residual = run.residual
        surplus = self.implicit.apply(change) - pull
        return change, flows_at(self.acts, base + change, surplus)

    def advance(self, march: _March) -> None:
        """Finish one whole step, or leave `march` as it was but for the iterations."""
        old, g = march.T, self.gamma
        change, flows = self._stage(old, march)
        new = old + change
        if g < 1.0:
            base = old + (1.0 - g) / g * change
            change, last = self._stage(base, march)
            new = base + change
            flows = {name: (1.0 - g) * flows[name] + g * last[name] for name in flows}
        march.stored.append(float((self.mass * (new - old)).sum()) / self.step)
        march.flows.append(flows)
        rounding = rounding_of(self.acts, new)
        march.balance.append(balance_of(flows, march.stored[-1], rounding))
        march.T = new


def _steps(duration_s: float, steps: int | None, step_s: float | None) -> tuple[int, float]:
    if not (math.isfinite(duration_s) and duration_s > 0):
        raise InputError(f"The duration must be above 0 s; got {duration_s}.")
    if (steps is None) == (step_s is None):
        raise InputError("Give either steps (how many) or step_s (how long, s), not both or none.")
    if step_s is not None:
        if not (math.isfinite(step_s) and step_s > 0):
            raise InputError(f"step_s must be above 0 s; got {step_s}.")
        steps = max(1, math.ceil(duration_s / step_s * (1 - 1e-12)))
    if steps is None or steps < 1 or steps != int(steps):
        raise InputError(f"steps must be a whole number of at least 1; got {steps}.")
    return int(steps), duration_s / int(steps)


def _start(part: Part, case: HeatCase, acts: HeatActs, start: HeatResult | None) -> Double:
    """Temperatures at the start, held nodes already at theirs; 0 where no material touches."""
    touched = touched_nodes(part.solid.T)
    T = np.where(touched, case.initial_degC, 0.0)
    if start is not None:
        if start.part.grid != part.grid:
            raise InputError("The start has another grid than the part; map it over first.")
        known = np.isfinite(start.temperature.T) & touched
        T[known] = start.temperature.T[known]
    held = acts.held & touched
    T[held] = acts.given[held]
    return np.ascontiguousarray(T)


def _note(part: Part, march: _March, time: float, watch: Sequence[Point], save: bool) -> None:
    """Add the present state to the histories."""
    shown = np.where(touched_nodes(part.solid.T), march.T, np.nan)
    march.times.append(time)
    march.lowest.append(float(np.nanmin(shown)))
    march.highest.append(float(np.nanmax(shown)))
    march.watched.append([interpolate(part, shown.T, p) for p in watch])
    if save:
        march.saved_s.append(time)
        march.saved.append(shown.T.astype(np.float32))


def _overshoot(acts: HeatActs, march: _March) -> list[str]:
    """Without heat from outside no place gets colder or hotter than what it started among."""
    if acts.inflows:
        return []
    low = min([*acts.levels, march.lowest[0]])
    high = max([*acts.levels, march.highest[0]])
    past = max(low - min(march.lowest), max(march.highest) - high)
    if past <= _OVERSHOOT * (high - low):
        return []
    return [
        f"Temperatures pass the given ones by up to {number(past)} degC: the steps or voxels are "
        f"too coarse for a sudden change. Take smaller steps, or scheme 'backward-euler' with "
        f"capacity 'lumped', which keeps within them on voxels that are about cubes."
    ]


def conduct_over_time(
    part: Part,
    heat_case: HeatCase,
    duration_s: float,
    *,
    steps: int | None = None,
    step_s: float | None = None,
    saves: int = 10,
    watch: Sequence[Point] = (),
    scheme: str = "sdirk2",
    capacity: str = "lumped",
    start: HeatResult | None = None,
    tol: float = 1e-8,
    maxiter: int = 1000,
    monitor: Monitor = SILENT,
) -> TransientHeatResult:
    """Follow the temperature over time, from `HeatCase.initial_degC` or an earlier result.

    Held nodes take their temperature at once; the heat of that jump is not counted as a flow.

    Parameters
    ----------
    part : Part
        Each of its resins with a conductivity, a density and a heat capacity.
    heat_case : HeatCase
        Constant in time; a change is a second call with ``start``.
    duration_s : float
    steps : int, optional
    step_s : float, optional
        Give one of the two; `step_s` is made a little shorter where it does not divide the time.
    saves : int
        How many fields to keep after the first, evenly spaced over the steps.
    watch : sequence of points
        mm; their temperature is recorded at every step.
    scheme : str
        ``"sdirk2"`` (default: second order, damps sudden changes; two solves a step) or
        ``"backward-euler"`` (first order, one solve, never overshoots on cubes).
    capacity : str
        ``"lumped"`` (default: no overshoot next to a sudden change, however small the step) or
        ``"consistent"``.
    start : HeatResult, optional
        Where to go on from.
    tol : float
        Relative residual of each solve, over what drives the change in it.
    maxiter : int
        Most iterations a solve.
    monitor : Monitor
        Told of each step and iteration. `Cancelled` ends the run with its finished steps.

    Returns
    -------
    TransientHeatResult

    Raises
    ------
    InputError
        As `voxelmat.fea.heat.conduct`, but a part without any hold is allowed; a resin without
        heat capacity (named); impossible steps.
    ConvergenceError
        With the residual history.
    Cancelled
        Where the user stops it before the first step.
    """
    started = utc_now()
    count, step = _steps(duration_s, steps, step_s)
    if scheme not in SCHEMES:
        raise InputError(f"scheme is one of {', '.join(SCHEMES)}; got {scheme!r}.")
    if saves < 1:
        raise InputError(f"saves must be at least 1; got {saves}.")
    if not part.solid.any():
        raise InputError("The part is empty: no voxel holds material.")
    acts = assemble_heat(part, heat_case).within(touched_nodes(part.solid.T))
    march = _March(_start(part, heat_case, acts, start))
    stepper = _Stepper(part, acts, step, scheme, capacity, tol, maxiter, monitor)
    kept = {round(n * count / saves) for n in range(1, saves + 1)}
    _note(part, march, 0.0, watch, True)
    try:
        for n in range(1, count + 1):
            monitor.report("heating", done=n - 1, total=count, time_s=(n - 1) * step)
            stepper.advance(march)
            _note(part, march, n * step, watch, n in kept)
    except Cancelled:
        if not march.flows:
            raise
    return _result(part, heat_case, acts, march, count, step, scheme, capacity, started)


def _result(
    part: Part, case: HeatCase, acts: HeatActs, march: _March, count: int, step: float,
    scheme: str, capacity: str, started: str,
) -> TransientHeatResult:  # fmt: skip
    done = len(march.flows)
    shown = np.where(touched_nodes(part.solid.T), march.T, np.nan)
    if march.saved_s[-1] != march.times[-1]:
        march.saved_s.append(march.times[-1])
        march.saved.append(shown.T.astype(np.float32))
    cautions = [*acts.cautions, *hinges(part.solid.T), *_overshoot(acts, march)]
    if done < count:
        cautions.append(f"Stopped by the user at {number(done * step)} s, after {done} steps.")
    final = heat_result(
        part, case, shown, march.flows[-1], stored=march.stored[-1],
        balance=march.balance[-1], iterations=march.iterations,
        residual=march.residual, cautions=cautions, started=started,
    )  # fmt: skip
    return TransientHeatResult(
        part=part,
        heat_case=case,
        final=final,
        saved_s=np.array(march.saved_s),
        saved=np.array(march.saved),
        time_s=np.array(march.times),
        lowest_degC=np.array(march.lowest),
        highest_degC=np.array(march.highest),
        watched_degC=np.array(march.watched).reshape(done + 1, -1),
        flows={name: np.array([f[name] for f in march.flows]) for name in march.flows[0]},
        stored=np.array(march.stored),
        balance=max(march.balance),
        scheme=scheme,
        capacity=capacity,
        step_s=step,
        complete=done == count,
        cautions=final.cautions,
    )
