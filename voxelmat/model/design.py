"""A design file as plain, checked data: nothing is read, resolved or voxelised yet."""

from __future__ import annotations

import math
import sys
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError
from voxelmat.model.halftone import Halftone
from voxelmat.model.inspection import Dimension
from voxelmat.model.material import Constant, Material
from voxelmat.model.measure_entry import MeasureEntry
from voxelmat.provenance import text_digest
from voxelmat.units import DENSITY_G_CM3

__all__ = [
    "FORMAT",
    "RULE_KEYS",
    "BodyEntry",
    "BoughtIn",
    "CaseEntry",
    "Design",
    "Gaps",
    "LayoutEntry",
    "LimitEntry",
    "LoadEntry",
    "OptimiseEntry",
    "PlateEntry",
    "PrintEntry",
    "RegionEntry",
    "RequirementEntry",
    "SupportEntry",
    "TargetEntry",
]

#: The design format that this version writes, and the newest that it reads.
FORMAT = 1

Triple = tuple[float, float, float]

#: Keys of ``[optimise]`` that are rules a design is made by.
RULE_KEYS = (
    "blends", "extruded", "repeated", "zones", "zone_count", "robust", "material_scatter",
    "load_scatter", "skin", "support_angle_deg", "interface_width_mm", "blend_radius_mm",
    "most_resins", "penalties", "starts", "size_from_profile",
)  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class BoughtIn:
    """Material of a body that is bought and put in, not printed.

    With the name alone it is a record of the material library; with `E_MPa`, `nu` and
    `density_g_cm3` it is what the design file states.
    """

    name: str
    E_MPa: float | None = None
    nu: float | None = None
    density_g_cm3: float | None = None
    strength_MPa: float | None = None

    def material(self, library: Mapping[str, Material] | None = None) -> Material:
        """The library's record, or one that holds for any temperature, duration and cycles."""
        if self.E_MPa is None or self.nu is None or self.density_g_cm3 is None:
            if library is None or self.name not in library:
                raise InputError(
                    f"Bought-in material '{self.name}' states no E_MPa, nu and density_g_cm3, and "
                    "is not in the material library; give these three."
                )
            return library[self.name]

        def stated(value: float, unit: str) -> Constant:
            return Constant(value=value, unit=unit, source="stated in the design file")

        return Material(
            name=self.name,
            kind="bought-in",
            E=stated(self.E_MPa, "MPa"),
            nu=stated(self.nu, ""),
            density=stated(self.density_g_cm3 * DENSITY_G_CM3, "tonne/mm^3"),
            strength=None if self.strength_MPa is None else stated(self.strength_MPa, "MPa"),
            temperature_range_degC=(-273.15, math.inf),
            max_duration_s=math.inf,
            max_cycles=sys.maxsize,
            colour="#7f8c8d",
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class BodyEntry:
    """One body: a mesh, and what it is made of.

    Attributes
    ----------
    name, mesh : str
        `mesh` is the file's name as the design gives it; see `Design.file`.
    unit : str or None
        Unit of length of the mesh; None where the file states its own.
    object_name : str or None
        Which object of a file that holds several.
    blend : mapping
        Parts by volume over resins; empty for a bought-in body.
    bought_in : BoughtIn or None
    clearance_mm : float
        Gap left round a bought-in body in the print.
    priority : int or None
        Where bodies overlap the higher one wins; None allows no overlap.
    repair : bool
        Whether a safe repair of the mesh may be made (and reported).
    """

    name: str
    mesh: str
    unit: str | None = None
    object_name: str | None = None
    blend: Mapping[str, float] = field(default_factory=dict)
    bought_in: BoughtIn | None = None
    clearance_mm: float = 0.0
    priority: int | None = None
    repair: bool = True


@dataclass(frozen=True, slots=True, kw_only=True)
class Gaps:
    """Gaps between bodies narrower than `close_below_mm` are filled by body `give_to`."""

    close_below_mm: float
    give_to: str


@dataclass(frozen=True, slots=True, kw_only=True)
class RegionEntry:
    """A region by kind, with its settings under the keys of the design file."""

    name: str
    kind: str
    settings: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class LayoutEntry:
    """A material rule by kind; `region` None stands for the whole part.

    Kinds: ``"blend"``, ``"axis gradient"``, ``"distance gradient"``, ``"stroke"`` of a brush,
    ``"fill"`` of what hangs together, ``"replace"`` of one blend, ``"stored"`` in a file.
    """

    region: str | None
    kind: str
    settings: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class SupportEntry:
    """Displacement along x, y, z in mm on a region; None leaves that direction free.

    `rotation_deg` about `about_mm` comes on top. With `symmetry`, a side of the part, it is the
    mirror plane on that side (at `at_mm`, where that is given), and `region` is None.
    """

    region: str | None
    displacement_mm: tuple[float | None, float | None, float | None] = (None, None, None)
    rotation_deg: Triple = (0.0, 0.0, 0.0)
    about_mm: Triple = (0.0, 0.0, 0.0)
    symmetry: str | None = None
    at_mm: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class PlateEntry:
    """A region that moves as one body; None leaves a motion free or the point to the region."""

    name: str
    region: str
    point_mm: Triple | None = None
    translation_mm: tuple[float | None, float | None, float | None] = (None, None, None)
    rotation_deg: tuple[float | None, float | None, float | None] = (None, None, None)
    force_N: Triple = (0.0, 0.0, 0.0)
    moment_N_mm: Triple = (0.0, 0.0, 0.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class LoadEntry:
    """A load by kind; `region` None stands for the whole part."""

    kind: str
    region: str | None
    settings: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class CaseEntry:
    """Supports and loads that act together, how long, how warm, how often."""

    name: str
    supports: tuple[SupportEntry, ...]
    loads: tuple[LoadEntry, ...]
    duration_s: float
    temperature_degC: float
    cycles: int
    weight: float = 1.0
    plates: tuple[PlateEntry, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class TargetEntry:
    """How far a surface is to move along `direction` under one load case.

    One value everywhere (`deflection_mm`), or a map laid on like a pressure map (`file` and the
    other `settings`).
    """

    name: str
    region: str
    load_case: str
    direction: Triple
    deflection_mm: float | None = None
    file: str | None = None
    settings: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class RequirementEntry:
    """A requirement in the terms of `voxelmat.model.requirement`; limits in its unit."""

    name: str
    measure: str
    at_least: float | None = None
    at_most: float | None = None
    load_case: str | None = None
    region: str | None = None
    component: str = "size"
    reduce: str = "max"
    resin: str | None = None
    target: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class LimitEntry:
    """``"volume"`` and ``"resin"`` limit a fraction, ``"mass"`` limits grams."""

    kind: str
    at_most: float
    resin: str | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class OptimiseEntry:
    """What the optimiser is asked for; None leaves a setting to the optimiser's own default.

    Exactly one of `objective` (``"compliance"`` or ``"target deflection"``; empty where not used)
    and `goal` says what is made least or greatest; `measured` are limits on any measure. Where
    `levels` is None, the palette is as small as `palette_error` (a share of the objective)
    allows. `rules` are further tables and keys as the file has them (`RULE_KEYS`). With `skip` a
    run takes the layout as it is. `design_in` names the regions that are designed
    (empty: the whole part), `keep`, `solid`, `empty` and `protected` name regions, `fixed` pairs
    a region with the resin it must be.
    """

    resins: tuple[str, ...]
    filter_radius_mm: float
    objective: str = ""
    goal: MeasureEntry | None = None
    measured: tuple[MeasureEntry, ...] = ()
    target: str | None = None
    limits: tuple[LimitEntry, ...] = ()
    void: bool = False
    design_in: tuple[str, ...] = ()
    keep: tuple[str, ...] = ()
    solid: tuple[str, ...] = ()
    empty: tuple[str, ...] = ()
    fixed: tuple[tuple[str, str], ...] = ()
    protected: tuple[str, ...] = ()
    protected_depth_mm: float | None = None
    symmetry: tuple[str, ...] = ()
    iterations: int | None = None
    levels: int | None = None
    palette_error: float | None = None
    penalty: float | None = None
    move: float | None = None
    method: str | None = None
    void_law: str | None = None
    sharpness: tuple[float, ...] | None = None
    sharpness_every: int | None = None
    rules: Mapping[str, Any] = field(default_factory=dict)
    skip: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class PrintEntry:
    """How the part is printed.

    Attributes
    ----------
    profile : str
        Name of a shipped profile, or a file ending in ``.toml``.
    orientation : tuple of str
        Turns such as ``"x 90"``.
    position_mm : tuple of float or None
        Low x and y corner on the tray; None puts the part in the middle.
    support : str or None
        A policy of `voxelmat.model.profile.SUPPORT_POLICIES`; None takes the profile's own.
    halftone : Halftone
        How blends become droplets.
    job_number : str
        Goes on marks, tickets and records.
    """

    profile: str
    orientation: tuple[str, ...] = ()
    position_mm: tuple[float, float] | None = None
    support: str | None = None
    halftone: Halftone = field(default_factory=Halftone)
    job_number: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Design:
    """All that a design file says.

    Attributes
    ----------
    name, note : str
    invented : bool
        True where the data describe no real part; every report then says so.
    seed : int
    spacing_mm : tuple of float
    margin_voxels : int
    material_files : tuple of str
        Files of the user's own, beside the shipped library.
    law : str
        Key of a blend law, see `voxelmat.model.laws.LAWS`.
    bodies, gaps, layout, regions, cases, targets, requirements, optimise, printing, dimensions
        The tables of the file. A body's name may stand wherever a region's may.
    path : Path or None
        Where it was read from.
    inputs : mapping
        File name as the design gives it to SHA-256, the design's own file among them.
    data : mapping
        The file's tables as they were read, for writing them again.
    """

    name: str
    spacing_mm: Triple
    bodies: tuple[BodyEntry, ...]
    invented: bool = False
    note: str = ""
    seed: int = 0
    margin_voxels: int = 1
    material_files: tuple[str, ...] = ()
    law: str = "calibrated"
    gaps: Gaps | None = None
    layout: tuple[LayoutEntry, ...] = ()
    regions: tuple[RegionEntry, ...] = ()
    cases: tuple[CaseEntry, ...] = ()
    targets: tuple[TargetEntry, ...] = ()
    requirements: tuple[RequirementEntry, ...] = ()
    optimise: OptimiseEntry | None = None
    printing: PrintEntry | None = None
    dimensions: tuple[Dimension, ...] = ()
    format: int = FORMAT
    path: Path | None = None
    inputs: Mapping[str, str] = field(default_factory=dict)
    data: Mapping[str, Any] = field(default_factory=dict, compare=False)

    @property
    def folder(self) -> Path:
        """The folder that file names in the design start from."""
        return self.path.parent if self.path is not None else Path()

    @property
    def file_name(self) -> str:
        """Name of the design file, for messages."""
        return self.path.name if self.path is not None else "design"

    def file(self, name: str) -> Path:
        """Where a file that the design names lies."""
        return self.folder / name

    @property
    def digest(self) -> str:
        """SHA-256 over what the design says and the files it names (not over the name or note).

        Comments and layout of the design file itself do not count.
        """
        said = {k: v for k, v in self.data.items() if k not in ("name", "note")}
        own = self.file_name
        files = {k: v for k, v in self.inputs.items() if k != own}
        return text_digest({"design": said, "inputs": files})
