"""From a specification to its objective and its limits as responses; contradictions are refused."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from typing import Any, cast

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.design_spec import (
    Compliance,
    DesignSpec,
    Limit,
    MassLimit,
    ResinLimit,
    VolumeLimit,
)
from voxelmat.model.goal import AtLeast, AtMost, Maximise, plain
from voxelmat.model.measure import WorstCompliance
from voxelmat.model.measure_amount import CentreOfMass, Cost, Mass, ResinVolume, Volume
from voxelmat.model.part import Part
from voxelmat.provenance import text_digest
from voxelmat.topopt.contradict import check_amounts
from voxelmat.topopt.measures import response_of, root_of
from voxelmat.topopt.physics import Case, Physics
from voxelmat.topopt.responses import Response, told
from voxelmat.topopt.setting import Setting
from voxelmat.topopt.unknowns import Unknowns
from voxelmat.units import number

__all__ = ["Bound", "Goal", "goal_of", "limits_of"]

Array = NDArray[np.float64]

_ONE_WAY = (Compliance, WorstCompliance, Volume, Mass, Cost, ResinVolume)


@dataclass(frozen=True, slots=True, kw_only=True)
class Goal:
    """What is made least or greatest."""

    response: Response
    maximise: bool = False

    @property
    def sign(self) -> float:
        """What the value is multiplied by to be minimised."""
        return -1.0 if self.maximise else 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Bound:
    """A response that must not exceed a limit, or not fall below it.

    Attributes
    ----------
    response : Response
    limit : float
    at_least : bool
    scale : float or None
        What an excess is divided by; the size of the limit where left out.
    """

    response: Response
    limit: float
    at_least: bool = False
    scale: float | None = None

    @property
    def slope(self) -> float:
        """Of the excess by the response."""
        size = abs(self.limit) if self.scale is None else self.scale
        return -1.0 / size if self.at_least else 1.0 / size

    def excess(self, value: float) -> float:
        """By how much a value breaks the limit, over its scale; not above 0 where it is met."""
        size = abs(self.limit) if self.scale is None else self.scale
        over = value / size - self.limit / size
        return -over if self.at_least else over

    def told(self, physics: Physics) -> float:
        """The response's value as people are told it, in the unit of the limit."""
        return told(self.response, physics, self.response.value(physics)[0])


def goal_of(spec: DesignSpec, part: Part, cases: tuple[Case, ...], unknowns: Unknowns) -> Goal:
    """The objective of a specification."""
    setting = Setting(part=part, cases=cases, unknowns=unknowns, key="target")
    _check_one_way(spec)
    return Goal(
        response=response_of(spec.measure, setting), maximise=isinstance(spec.objective, Maximise)
    )


def limits_of(
    spec: DesignSpec, part: Part, cases: tuple[Case, ...], unknowns: Unknowns
) -> tuple[Bound, ...]:
    """The limits of a specification; those that no design can meet are refused.

    An upper limit on the worst compliance becomes one for each load case, which is exact.
    """
    bounds: list[Bound] = []
    for n, limit in enumerate(spec.limits):
        asked = _general(limit, spec)
        setting = Setting(part=part, cases=cases, unknowns=unknowns, key=f"limit {n}")
        if isinstance(asked.measure, WorstCompliance) and isinstance(asked, AtMost):
            named = asked.measure.load_cases or tuple(c.name for c in cases)
            found: list[tuple[object, str]] = [
                (Compliance(load_cases=(name,)), name) for name in named
            ]
        else:
            found = [(asked.measure, "")]
        for measure, name in found:
            bounds.append(_bound(asked, measure, name, setting))
    _check_shares(spec)
    check_amounts(tuple((b.response, b.limit, b.at_least) for b in bounds), unknowns)
    _check_pairs(spec)
    return tuple(bounds)


def _general(limit: Limit, spec: DesignSpec) -> AtMost | AtLeast:
    """The general form of a limit."""
    if isinstance(limit, VolumeLimit):
        asked: AtMost | AtLeast = AtMost(measure=Volume(), value=limit.fraction)
    elif isinstance(limit, MassLimit):
        asked = AtMost(measure=Mass(), value=limit.mass)
    elif isinstance(limit, ResinLimit):
        asked = AtMost(measure=ResinVolume(resin=limit.resin), value=limit.fraction)
    else:
        asked = limit
    if isinstance(asked.measure, Volume) and not spec.void:
        raise InputError(
            f"The solid volume is limited to {asked.value:g} of the shape, but the "
            "design allows no empty voxels; set void to true or drop the limit."
        )
    return asked


def _bound(asked: AtMost | AtLeast, measure: object, case: str, setting: Setting) -> Bound:
    response = root_of(response_of(measure, setting))
    if case and len(setting.cases) > 1:
        response = _named(response, f"compliance of '{case}'")
    scale = asked.scale
    if scale is None and isinstance(measure, CentreOfMass):
        # A coordinate says nothing about what matters; a tenth of the grid's length does.
        grid = setting.part.grid
        axis = "xyz".index(measure.axis)
        scale = 0.1 * grid.shape[axis] * grid.spacing[axis]
    if scale is None and asked.value == 0:
        raise InputError(
            f"The limit on the {response.name} is 0, which says nothing about how much a "
            "violation matters; give it a scale."
        )
    return Bound(
        response=response,
        limit=asked.value,
        at_least=isinstance(asked, AtLeast),
        scale=scale,
    )


def _named(response: Response, name: str) -> Response:
    renamed: Response = dataclasses.replace(cast("Any", response), name=name)
    return renamed


def _check_shares(spec: DesignSpec) -> None:
    """Resin limits must leave something to fill every voxel where none may be empty."""
    shares = {x.resin: x.fraction for x in spec.limits if isinstance(x, ResinLimit)}
    if not spec.void and set(shares) == set(spec.resins) and sum(shares.values()) < 1:
        raise InputError(
            f"Every resin is limited and the limits sum to {number(sum(shares.values()))} of the "
            "shape, but no voxel may be empty; raise a limit or set void to true."
        )


def _check_one_way(spec: DesignSpec) -> None:
    """Objectives that nothing holds back need a limit."""
    if spec.limits:
        return
    if isinstance(spec.objective, Compliance):
        raise InputError(
            "Least compliance without a limit is the stiffest resin everywhere; limit the volume, "
            "the mass or a resin."
        )
    if isinstance(spec.measure, _ONE_WAY):
        end = "greatest" if isinstance(spec.objective, Maximise) else "least"
        raise InputError(
            f"The {end} {type(spec.measure).__name__} without a limit is one and the same choice "
            "everywhere; limit what is to be held back by it."
        )


def _check_pairs(spec: DesignSpec) -> None:
    """A measure must not be held above one value and below a smaller one."""
    low: dict[str, float] = {}
    high: dict[str, float] = {}
    for limit in spec.limits:
        if not isinstance(limit, AtMost | AtLeast):
            continue
        arrays: list[NDArray[np.generic]] = []
        head = text_digest([plain(limit.measure, arrays), [a.tobytes().hex() for a in arrays]])
        if isinstance(limit, AtMost):
            high[head] = min(limit.value, high.get(head, np.inf))
        else:
            low[head] = max(limit.value, low.get(head, -np.inf))
        if low.get(head, -np.inf) > high.get(head, np.inf):
            raise InputError(
                f"{type(limit.measure).__name__} must be at least {number(low[head])} and at most "
                f"{number(high[head])}; no design can be both."
            )
