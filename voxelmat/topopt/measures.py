"""From measures to responses: one function for each kind, and the table of all of them."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError, ResourceError
from voxelmat.model.interface import find_bond
from voxelmat.model.measure import (
    Compliance,
    Displacement,
    InterfaceTraction,
    OutputOfMechanism,
    Stress,
    Stretch,
    TargetDeflection,
    WorstCompliance,
)
from voxelmat.topopt.measures_physics import PHYSICS
from voxelmat.topopt.physics import Case
from voxelmat.topopt.response_amount import AMOUNTS
from voxelmat.topopt.response_cell import CellTargetResponse
from voxelmat.topopt.response_interface import InterfaceResponse
from voxelmat.topopt.response_motion import (
    LargestMotionResponse,
    MeanMotionResponse,
    TargetErrorResponse,
    WorstComplianceResponse,
)
from voxelmat.topopt.response_strength import StrengthResponse
from voxelmat.topopt.responses import ComplianceResponse, Response, TargetResponse
from voxelmat.topopt.setting import Setting, case_number

__all__ = ["asked_nodes", "needs_loads", "response_of", "root_of", "with_springs"]

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]

#: Pairs of resins times faces times load cases: about 2 GB.
_MOST_FACES = 6e7


def response_of(measure: object, setting: Setting) -> Response:
    """The response that a measure stands for.

    Raises
    ------
    InputError
        What is no measure, or does not fit the part, its load cases or its resins.
    """
    make = _MAKERS.get(type(measure))
    if make is None:
        known = ", ".join(sorted(kind.__name__ for kind in _MAKERS))
        raise InputError(f"{type(measure).__name__} is no measure of a design; use one of {known}.")
    return make(measure, setting)


def root_of(response: Response) -> Response:
    """For limits: the error of a target itself, where the objective is its square."""
    if isinstance(response, CellTargetResponse):
        return dataclasses.replace(response, root=True)
    return TargetErrorResponse(square=response) if type(response) is TargetResponse else response


def asked_nodes(measure: object) -> list[tuple[str, Bools]]:
    """Nodes whose motion a measure asks for, ``[i, j, k]``, each with a word for it."""
    if isinstance(measure, TargetDeflection):
        return [("target deflection", measure.nodes)]
    if isinstance(measure, Displacement):
        return [("displacement", measure.nodes)]
    if isinstance(measure, OutputOfMechanism):
        return [("mechanism's output", measure.output), ("mechanism's input", measure.input)]
    return []


def needs_loads(measure: object) -> bool:
    """Whether a measure is read off the displacements of load cases."""
    return type(measure) not in AMOUNTS and type(measure) not in PHYSICS


def with_springs(cases: tuple[Case, ...], measures: tuple[object, ...]) -> tuple[Case, ...]:
    """Load cases with the springs of the mechanisms among the measures, spread over the nodes.

    Raises
    ------
    InputError
        If the load case of a mechanism does not push its input.
    """
    out = list(cases)
    for m in measures:
        if not isinstance(m, OutputOfMechanism):
            continue
        n = case_number(cases, m.load_case, "mechanism")
        case = out[n]
        springs = np.zeros(case.force.shape) if case.springs is None else case.springs.copy()
        for nodes, direction, stiffness in (
            (m.output.T, m.output_direction, m.output_stiffness),
            (m.input.T, m.input_direction, m.input_stiffness),
        ):
            for axis, d in enumerate(direction):
                springs[axis] += abs(d) * stiffness / float(nodes.sum()) * nodes
        pushed = sum(d * case.force[axis][m.input.T] for axis, d in enumerate(m.input_direction))
        if not np.any(pushed != 0):
            raise InputError(
                f"Load case '{case.name}' puts no force on the input of the mechanism along its "
                "direction; add one there."
            )
        out[n] = dataclasses.replace(case, springs=springs if springs.any() else None)
    return tuple(out)


def _compliance(m: Compliance, s: Setting) -> Response:
    return ComplianceResponse(of=s.numbers(m.load_cases, "compliance") if m.load_cases else None)


def _worst_compliance(m: WorstCompliance, s: Setting) -> Response:
    cases = s.numbers(m.load_cases, "greatest compliance")
    return WorstComplianceResponse(cases=cases, exponent=m.exponent, key=s.key)


def _target(m: TargetDeflection, s: Setting) -> Response:
    case, nodes = s.case(m.load_case, "target deflection"), np.ascontiguousarray(m.nodes.T)
    target = np.where(nodes, m.target.T, 0.0)
    if m.error == "rms":
        return TargetResponse(
            case=case, nodes=nodes, target=target, direction=m.direction, key=s.key
        )
    return LargestMotionResponse(
        case=case, nodes=nodes, aim=target, size=float(np.abs(target).max()),
        direction=m.direction, exponent=m.exponent, key=s.key,
        name="worst error of the deflection", unit="",
    )  # fmt: skip


def _displacement(m: Displacement, s: Setting) -> Response:
    case, nodes = s.case(m.load_case, "displacement"), np.ascontiguousarray(m.nodes.T)
    name = f"{m.of} displacement" + (f" of {m.label}" if m.label else "")
    if m.of == "mean":
        return MeanMotionResponse(
            case=case, nodes=nodes, direction=m.direction, key=s.key, name=name
        )
    return LargestMotionResponse(
        case=case, nodes=nodes, aim=np.zeros(nodes.shape), size=1.0, direction=m.direction,
        exponent=m.exponent, key=s.key, name=name,
    )  # fmt: skip


def _output(m: OutputOfMechanism, s: Setting) -> Response:
    return MeanMotionResponse(
        case=s.case(m.load_case, "mechanism"), nodes=np.ascontiguousarray(m.output.T),
        direction=m.output_direction, key=s.key, name="output of the mechanism",
    )  # fmt: skip


def _strength(m: Stress | Stretch, s: Setting) -> Response:
    stress = isinstance(m, Stress)
    field, what = ("strength", "stress") if stress else ("elongation", "stretch")
    names = s.unknowns.palette.names
    unknown = [r for r in m.resins if r not in names]
    if unknown:
        raise InputError(
            f"The {what} judges '{unknown[0]}', which is not among the resins of the design "
            f"({', '.join(names)})."
        )
    inverse = np.array([
        1.0 / _end(s, resin, field, what, m.side) if not m.resins or resin in m.resins else 0.0
        for resin in names
    ])  # fmt: skip
    return StrengthResponse(
        kind="stress" if stress else "stretch",
        cases=s.numbers(m.load_cases, what),
        inverse=inverse,
        domain=s.unknowns.choice.domain,
        judged=s.judged(m.region, what),
        kept=_kept_sensitivity(s, m, stress=stress),
        exponent=m.exponent,
        key=s.key,
        name=f"largest {what}",
        unit="of the strength" if stress else "of the elongation at break",
    )


def _end(s: Setting, resin: str, field: str, what: str, side: str) -> float:
    found = s.constant(resin, field, what)
    return found.value if side == "value" else found.band[0]


def _kept_sensitivity(s: Setting, m: Stress | Stretch, *, stress: bool) -> Array:
    """Strength used by an equivalent strain of 1 in kept voxels; 0 without a record."""
    part = s.part
    found = (r.strength if stress else r.elongation for r in part.resins)
    ends = (None if c is None else c.value if m.side == "value" else c.band[0] for c in found)
    inverse = [
        0.0 if end is None or (m.resins and r.name not in m.resins) else 1.0 / end
        for r, end in zip(part.resins, ends, strict=True)
    ]
    per = part.palette_fractions() @ np.array(inverse)
    if stress:
        per = 3.0 * part.palette_lame()[1] * per
    kept = s.unknowns.choice.kept_mu > 0
    return np.where(kept, per[part.labels.T], 0.0)


def _interface(m: InterfaceTraction, s: Setting) -> Response:
    names = s.unknowns.palette.names
    if len(names) < 2:
        raise InputError("A design of one resin has no interface between resins; drop the measure.")
    cases = s.numbers(m.load_cases, "traction on interfaces")
    numbers = len(names) * (len(names) - 1) // 2 * 3 * s.part.grid.n_voxels * len(cases)
    if numbers > _MOST_FACES:
        raise ResourceError(
            f"The traction on all interfaces of {len(names)} resins in {len(cases)} load cases "
            f"takes {numbers:.2g} numbers in memory several times over (at most {_MOST_FACES:.0g}"
            "); use fewer resins, fewer load cases or a coarser grid."
        )
    tensile, shear = np.ones((2, len(names), len(names)))
    for a in range(len(names)):
        for b in range(a + 1, len(names)):
            bond = find_bond(m.bonds, names[a], names[b])
            if bond is None:
                raise InputError(
                    f"The traction on interfaces needs a bond of '{names[a]}' and '{names[b]}'; "
                    "there is no record of it, and no strength is assumed."
                )
            value = m.side == "value"
            tensile[a, b] = bond.tensile.value if value else bond.tensile.band[0]
            shear[a, b] = bond.shear.value if value else bond.shear.band[0]
    return InterfaceResponse(
        cases=cases,
        tensile=tensile,
        shear=shear,
        domain=s.unknowns.choice.domain,
        judged=s.judged(m.region, "traction on interfaces"),
        exponent=m.exponent,
        key=s.key,
    )


_MAKERS: dict[type, Callable[[Any, Setting], Response]] = {
    Compliance: _compliance,
    WorstCompliance: _worst_compliance,
    TargetDeflection: _target,
    Displacement: _displacement,
    OutputOfMechanism: _output,
    Stress: _strength,
    Stretch: _strength,
    InterfaceTraction: _interface,
    **AMOUNTS,
    **PHYSICS,
}
