"""From what a design says to regions, load cases, targets and requirements on one part."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.io.tables import read_deflection_map, read_pressure_map
from voxelmat.model.design import (
    CaseEntry,
    Design,
    LoadEntry,
    PlateEntry,
    SupportEntry,
    TargetEntry,
)
from voxelmat.model.interface import Bond
from voxelmat.model.loadcase import (
    BodyForce,
    Force,
    Foundation,
    GroundSpring,
    InitialStrain,
    Load,
    LoadCase,
    Plate,
    Pressure,
    PressureMap,
    Support,
    Temperature,
)
from voxelmat.model.part import Part
from voxelmat.model.region import Region
from voxelmat.model.requirement import Requirement
from voxelmat.model.symmetry import symmetry_support
from voxelmat.monitor import SILENT, Monitor
from voxelmat.workflow.maps import LaidMap, check_laid, sample
from voxelmat.workflow.regions import at_key, box_words, regions_of, whole_part

__all__ = ["Resolved", "Target", "resolve"]

_MM_PER_M = 1000.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Target:
    """How far a surface is to move.

    Attributes
    ----------
    name : str
    region : Region
    load_case : str
    direction : tuple of float
        Unit vector along which deflections count.
    nodes : ndarray of bool, shape ``grid.node_shape``
        Where the target holds.
    deflection : ndarray of float64, shape ``grid.node_shape``
        mm; 0 where there is no target.
    """

    name: str
    region: Region
    load_case: str
    direction: tuple[float, float, float]
    nodes: NDArray[np.bool_]
    deflection: NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Resolved:
    """A design on a part.

    Attributes
    ----------
    regions : mapping of str to Region
        The design's regions and, under their names, its bodies.
    load_cases : tuple of LoadCase
    targets : mapping of str to Target
    requirements : tuple of Requirement
    maps : mapping of (str, int) to LaidMap
        By load case and number of the load in it: what of each pressure map arrives.
    bonds : tuple of Bond
        Strengths of interfaces between resins.
    notes, cautions : tuple of str
    """

    regions: Mapping[str, Region]
    load_cases: tuple[LoadCase, ...]
    targets: Mapping[str, Target]
    requirements: tuple[Requirement, ...]
    maps: Mapping[tuple[str, int], LaidMap] = field(default_factory=dict)
    bonds: tuple[Bond, ...] = ()
    notes: tuple[str, ...] = ()
    cautions: tuple[str, ...] = ()


def resolve(design: Design, part: Part, *, monitor: Monitor = SILENT) -> Resolved:
    """Find every region of a design on a part and lay its loads on.

    Label regions are those of this part's palette: resolve again for another part.

    Parameters
    ----------
    design : Design
    part : Part
        After the layout rules.
    monitor : Monitor

    Returns
    -------
    Resolved

    Raises
    ------
    InputError
        Naming file and key: a region that holds nothing of the part, a load on a region without
        surface, a pressure map that misses the part, adds up to another force than expected, or
        lies mirrored.
    FileFormatError
        If a map or mesh is not what it claims to be.
    """
    monitor.report("finding regions", done=0, total=1)
    regions = regions_of(design, part)
    monitor.report("finding regions", done=1, total=1)
    maps: dict[tuple[str, int], LaidMap] = {}
    notes: list[str] = []
    cautions: list[str] = []
    cases = []
    for c, entry in enumerate(design.cases):
        monitor.report("laying on loads", done=c, total=len(design.cases), case=entry.name)
        case = _case(design, c, entry, regions, part)
        for i, (load, said) in enumerate(zip(case.loads, entry.loads, strict=True)):
            if isinstance(load, PressureMap):
                with at_key(design, f"load_case[{c}].load[{i}]"):
                    centre = said.settings.get("expected_centre_mm")
                    laid, note, found = check_laid(
                        part,
                        load,
                        expected_centre=None if centre is None else (centre[0], centre[1]),
                        within=said.settings.get("accept_force_within", 0.2),
                    )
                maps[entry.name, i] = laid
                notes.append(note)
                cautions += found
        cases.append(case)
    monitor.report("laying on loads", done=len(cases), total=len(cases))
    targets = {}
    for i, target in enumerate(design.targets):
        monitor.report("laying on targets", done=i, total=len(design.targets))
        with at_key(design, f"target[{i}]"):
            targets[target.name] = _target(design, target, regions, part)
    if design.targets:
        monitor.report("laying on targets", done=len(targets), total=len(targets))
    return Resolved(
        regions=regions,
        load_cases=tuple(cases),
        targets=targets,
        requirements=_requirements(design),
        maps=maps,
        notes=tuple(notes),
        cautions=tuple(cautions),
    )


def _requirements(design: Design) -> tuple[Requirement, ...]:
    made = []
    for i, entry in enumerate(design.requirements):
        with at_key(design, f"requirement[{i}]"):
            made.append(
                Requirement(**{name: getattr(entry, name) for name in entry.__dataclass_fields__})
            )
    return tuple(made)


def _case(
    design: Design, number: int, entry: CaseEntry, regions: Mapping[str, Region], part: Part
) -> LoadCase:
    supports, loads = [], []
    for i, support in enumerate(entry.supports):
        last = "region" if support.symmetry is None else "symmetry"
        with at_key(design, f"load_case[{number}].support[{i}].{last}"):
            supports.append(_support(support, regions, part))
    for i, load in enumerate(entry.loads):
        with at_key(design, f"load_case[{number}].load[{i}]"):
            loads.append(_load(design, entry, load, regions, part))
    plates = []
    for i, plate in enumerate(entry.plates):
        with at_key(design, f"load_case[{number}].plate[{i}]"):
            plates.append(_plate(plate, regions, part))
    with at_key(design, f"load_case[{number}]"):
        return LoadCase(
            name=entry.name,
            supports=tuple(supports),
            loads=tuple(loads),
            duration_s=entry.duration_s,
            temperature_degC=entry.temperature_degC,
            cycles=entry.cycles,
            weight=entry.weight,
            plates=tuple(plates),
        )


def _support(entry: SupportEntry, regions: Mapping[str, Region], part: Part) -> Support:
    if entry.symmetry is not None:
        support = symmetry_support(entry.symmetry, entry.at_mm)
        _on_material(support.region, part)  # refuses a plane that misses the part
        return support
    return Support(
        region=_on_material(regions[entry.region or ""], part),
        displacement=entry.displacement_mm,
        rotation=_radians(entry.rotation_deg),
        about=entry.about_mm,
    )


def _radians(degrees: tuple[float, float, float]) -> tuple[float, float, float]:
    x, y, z = degrees
    return math.radians(x), math.radians(y), math.radians(z)


def _plate(entry: PlateEntry, regions: Mapping[str, Region], part: Part) -> Plate:
    x, y, z = (None if v is None else math.radians(v) for v in entry.rotation_deg)
    return Plate(
        name=entry.name,
        region=_on_material(regions[entry.region], part),
        point=entry.point_mm,
        translation=entry.translation_mm,
        rotation=(x, y, z),
        force=entry.force_N,
        moment=entry.moment_N_mm,
    )


def _on_material(region: Region, part: Part) -> Region:
    """The region, once it is sure that it holds something to act on."""
    if not region.nodes(part).any():
        raise InputError(f"'{region.name}' holds nothing of the part: {box_words(part)}.")
    return region


def _on_surface(region: Region, part: Part) -> Region:
    """The region, once it is sure that a surface load there is not lost."""
    if not len(region.faces(part)):
        raise InputError(
            f"Region '{region.name}' holds no exposed surface of the part, so the load would be "
            f"lost: {box_words(part)}. Move or enlarge the region."
        )
    return region


def _load(
    design: Design, case: CaseEntry, entry: LoadEntry, regions: Mapping[str, Region], part: Part
) -> Load:
    region = whole_part() if entry.region is None else regions[entry.region]
    given = entry.settings
    match entry.kind:
        case "force":
            return Force(region=_on_material(region, part), vector=_three(given["force_N"]))
        case "pressure":
            return Pressure(region=_on_surface(region, part), pressure=given["pressure_MPa"])
        case "body force":
            x, y, z = (_MM_PER_M * a for a in given["acceleration_m_s2"])
            return BodyForce(
                region=None if entry.region is None else region, acceleration=(x, y, z)
            )
        case "spring":
            return GroundSpring(
                region=_on_material(region, part), stiffness=_three(given["stiffness_N_mm"])
            )
        case "foundation":
            return Foundation(
                region=_on_surface(region, part),
                stiffness=given["stiffness_N_mm3"],
                acts=given.get("acts", "normal"),
            )
        case "temperature":
            return Temperature(
                region=None if entry.region is None else _on_material(region, part),
                temperature=given.get("temperature_degC", case.temperature_degC),
                stress_free=given["stress_free_degC"],
            )
        case "initial strain":
            return InitialStrain(
                region=None if entry.region is None else _on_material(region, part),
                strain=np.asarray(given["strain"], dtype=np.float64),
            )
        case "pressure map":
            values = read_pressure_map(
                design.file(given["file"]), unit=given.get("unit"), white_MPa=given.get("white_MPa")
            )
            return PressureMap(
                region=_on_surface(region, part),
                values=values,
                cell=(given["cell_mm"][0], given["cell_mm"][1]),
                side=given["side"],
                first_cell=(given["first_cell_mm"][0], given["first_cell_mm"][1]),
                column_direction=given["columns_grow"],
                row_direction=given["rows_grow"],
                acts=given.get("acts", "normal"),
                expected_force=given.get("expected_force_N"),
                source_file=given["file"],
            )
    raise InputError(f"A load has kind {entry.kind!r}, which is not known.")


def _three(values: list[float]) -> tuple[float, float, float]:
    return float(values[0]), float(values[1]), float(values[2])


def _target(
    design: Design, entry: TargetEntry, regions: Mapping[str, Region], part: Part
) -> Target:
    region = regions[entry.region]
    nodes = region.nodes(part)
    deflection = np.zeros(part.grid.node_shape, order="F")
    if entry.file is None:
        deflection[nodes] = entry.deflection_mm
    else:
        at = np.nonzero(nodes)
        points = np.column_stack([x[i] for x, i in zip(part.grid.nodes(), at, strict=True)])
        values = sample(read_deflection_map(design.file(entry.file)), entry.settings, points)
        held = np.isfinite(values)
        if not held.any():
            raise InputError(
                f"No cell of '{entry.file}' lies over region '{region.name}': {box_words(part)}. "
                "Check first_cell_mm, cell_mm and the directions."
            )
        nodes[tuple(a[~held] for a in at)] = False
        deflection[tuple(a[held] for a in at)] = values[held]
    return Target(
        name=entry.name,
        region=region,
        load_case=entry.load_case,
        direction=entry.direction,
        nodes=nodes,
        deflection=deflection,
    )
