"""From the measures that a design file names to what the optimiser takes, on one part."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.goal import AtLeast, AtMost, Maximise, Minimise
from voxelmat.model.heatcase import Convection, FixedTemperature, HeatCase, HeatFlux, HeatSource
from voxelmat.model.indenter import CylinderIndenter, FlatPunch, Indenter, SphereIndenter
from voxelmat.model.loadcase import Foundation, GroundSpring, LoadCase
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
from voxelmat.model.measure_amount import (
    CentreOfMass,
    Cost,
    InterfaceArea,
    Mass,
    Perimeter,
    ResinVolume,
    Volume,
)
from voxelmat.model.measure_entry import MeasureEntry
from voxelmat.model.measure_physics import (
    CellProperty,
    CellTarget,
    ConnectedSolid,
    ContactPeak,
    Frequency,
    MeanTemperature,
    PeakTemperature,
    ThermalCompliance,
    TrappedSupport,
    Warpage,
)
from voxelmat.model.region import parse_side
from voxelmat.workflow.build import Built
from voxelmat.workflow.regions import at_key

__all__ = ["goal_of", "limit_of", "measure_of"]

Bools = NDArray[np.bool_]
Given = Mapping[str, Any]

_TONNE_PER_G = 1e-6


def goal_of(built: Built, entry: MeasureEntry) -> Minimise | Maximise:
    """The objective that an entry stands for."""
    measure = measure_of(built, entry)
    return Maximise(measure=measure) if entry.sense == "maximise" else Minimise(measure=measure)


def limit_of(built: Built, entry: MeasureEntry) -> AtMost | AtLeast:
    """The limit that an entry stands for."""
    measure = measure_of(built, entry)
    kind = AtLeast if entry.sense == "at_least" else AtMost
    with at_key(built.design, entry.key):
        return kind(measure=measure, value=entry.value or 0.0, scale=entry.scale)


def measure_of(built: Built, entry: MeasureEntry) -> object:
    """The measure of an entry, its regions found on the part.

    Raises
    ------
    InputError
        With file and key.
    """
    with at_key(built.design, entry.key):
        return _MADE[entry.measure](built, entry.settings)


def _some(given: Given, *names: str) -> dict[str, Any]:
    """Settings that go through as they are, lists as tuples."""
    found = {n: given[n] for n in names if n in given}
    return {n: tuple(v) if isinstance(v, list) else v for n, v in found.items()}


def _voxels(built: Built, given: Given, name: str = "region") -> Bools | None:
    return built.regions[given[name]].voxels(built.part) if name in given else None


def _nodes(built: Built, given: Given, name: str) -> Bools:
    return built.regions[given[name]].nodes(built.part)


def _along(side: str) -> tuple[float, float, float]:
    axis, sense = parse_side(side, "direction")
    x, y, z = (float(sense) if a == axis else 0.0 for a in range(3))
    return x, y, z


def _case(built: Built, name: str) -> LoadCase:
    return next(c for c in built.load_cases if c.name == name)


def _displacement(built: Built, given: Given) -> Displacement:
    return Displacement(
        nodes=_nodes(built, given, "region"),
        direction=_along(given["direction"]),
        label=given["region"],
        **_some(given, "load_case", "of", "exponent"),
    )


def _deflection(built: Built, given: Given) -> TargetDeflection:
    target = built.resolved.targets[given["target"]]
    return TargetDeflection(
        nodes=target.nodes,
        target=target.deflection,
        direction=target.direction,
        load_case=target.load_case,
        **_some(given, "error", "exponent"),
    )


def _mechanism(built: Built, given: Given) -> OutputOfMechanism:
    return OutputOfMechanism(
        output=_nodes(built, given, "output"),
        input=_nodes(built, given, "input"),
        output_direction=_along(given["output_direction"]),
        input_direction=_along(given["input_direction"]),
        output_stiffness=given["output_stiffness_N_mm"],
        input_stiffness=given["input_stiffness_N_mm"],
        **_some(given, "load_case"),
    )


def _strength(kind: type[Stress] | type[Stretch]) -> Callable[[Built, Given], object]:
    def make(built: Built, given: Given) -> object:
        rest = _some(given, "load_cases", "resins", "side", "exponent")
        return kind(region=_voxels(built, given), **rest)

    return make


def _interface(built: Built, given: Given) -> InterfaceTraction:
    rest = _some(given, "load_cases", "side", "exponent")
    return InterfaceTraction(bonds=built.resolved.bonds, region=_voxels(built, given), **rest)


def _holding(built: Built, given: Given) -> dict[str, Any]:
    """Supports and springs of the load case that the part is held in."""
    if "held_in" not in given:
        return {}
    case = _case(built, given["held_in"])
    springs = tuple(x for x in case.loads if isinstance(x, GroundSpring | Foundation))
    return {"supports": case.supports, "springs": springs}


def _frequency(built: Built, given: Given) -> Frequency:
    carried = built.regions[given["carried"]] if "carried" in given else None
    return Frequency(
        carried=carried,
        carried_tonne=given.get("carried_g", 0.0) * _TONNE_PER_G,
        **_holding(built, given),
        **_some(given, "count", "exponent"),
    )


def _cell(built: Built, given: Given) -> CellProperty:
    del built
    kind = given.get("property", "poisson").replace(" ", "_")
    return CellProperty(kind=kind, **_some(given, "axes"))


def _cell_target(built: Built, given: Given) -> CellTarget:
    del built
    rows = [[np.nan if v == "any" else float(v) for v in row] for row in given["stiffness_MPa"]]
    return CellTarget(stiffness=np.array(rows))


def _heat(built: Built, given: Given) -> dict[str, Any]:
    said = given["heat_case"]

    def rows(name: str) -> list[dict[str, Any]]:
        found = []
        for row in said.get(name, ()):
            rest = {k: v for k, v in row.items() if k != "region"}
            rest["region"] = built.regions[row["region"]] if "region" in row else None
            found.append(rest)
        return found

    case = HeatCase(
        name="heat case",
        fixed=tuple(FixedTemperature(**r) for r in rows("fixed")),
        convection=tuple(
            Convection(
                film_W_per_m2_K=r["film_W_m2K"], ambient_degC=r["ambient_degC"], region=r["region"]
            )
            for r in rows("film")
        ),
        flux=tuple(
            HeatFlux(flux_mW_per_mm2=r["flux_mW_mm2"], region=r["region"]) for r in rows("flux")
        ),
        sources=tuple(
            HeatSource(
                density_mW_per_mm3=r.get("density_mW_mm3"),
                total_mW=r.get("total_mW"),
                region=r["region"],
            )
            for r in rows("source")
        ),
    )
    return {"heat_case": case, "void_W_per_m_K": given.get("void_W_mK")}


def _region(built: Built, given: Given, name: str = "region") -> Any:
    return built.regions[given[name]] if name in given else None


def _indenter(given: Given) -> Indenter:
    common: dict[str, Any] = {"position": tuple(given["position_mm"]), "push": given["push"]}
    match given["shape"]:
        case "ball":
            return SphereIndenter(radius=given["radius_mm"], **common)
        case "roller":
            return CylinderIndenter(radius=given["radius_mm"], along=given["along"], **common)
    return FlatPunch(radius=given.get("radius_mm"), **common)


def _contact(built: Built, given: Given) -> ContactPeak:
    return ContactPeak(
        indenter=_indenter(given["indenter"]),
        load_case=_case(built, given["load_case"]),
        **_some(given, "depth_mm", "force_N", "exponent"),
    )


def _support(built: Built, given: Given) -> TrappedSupport:
    return TrappedSupport(closed=_region(built, given, "closed"), **_some(given, "exponent"))


def _warping(built: Built, given: Given) -> Warpage:
    return Warpage(
        change_K=given["change_K"],
        region=_region(built, given),
        direction=_along(given.get("direction", "z+")),
        **_holding(built, given),
    )


_MADE: dict[str, Callable[[Built, Given], object]] = {
    "compliance": lambda b, g: Compliance(**_some(g, "load_cases")),
    "worst compliance": lambda b, g: WorstCompliance(**_some(g, "load_cases", "exponent")),
    "displacement": _displacement,
    "deflection error": _deflection,
    "mechanism output": _mechanism,
    "volume": lambda b, g: Volume(region=_voxels(b, g)),
    "mass": lambda b, g: Mass(region=_voxels(b, g), **_some(g, "with_kept")),
    "cost": lambda b, g: Cost(region=_voxels(b, g)),
    "resin volume": lambda b, g: ResinVolume(region=_voxels(b, g), resin=g["resin"]),
    "centre of mass": lambda b, g: CentreOfMass(region=_voxels(b, g), axis=g["axis"]),
    "stress use": _strength(Stress),
    "stretch use": _strength(Stretch),
    "interface use": _interface,
    "interface area": lambda b, g: InterfaceArea(region=_voxels(b, g)),
    "perimeter": lambda b, g: Perimeter(region=_voxels(b, g)),
    "frequency": _frequency,
    "cell modulus": _cell,
    "cell poisson": _cell,
    "cell target": _cell_target,
    "peak temperature": lambda b, g: PeakTemperature(
        region=_region(b, g), **_heat(b, g), **_some(g, "exponent")
    ),
    "mean temperature": lambda b, g: MeanTemperature(region=_region(b, g), **_heat(b, g)),
    "thermal compliance": lambda b, g: ThermalCompliance(**_heat(b, g)),
    "contact peak": _contact,
    "trapped support": _support,
    "connected solid": lambda b, g: ConnectedSolid(**_holding(b, g), **_some(g, "exponent")),
    "warping": _warping,
}
