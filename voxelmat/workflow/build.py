"""From a design file to a part on a grid: read, check, voxelise, join bodies, lay out material."""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np

from voxelmat.errors import InputError
from voxelmat.io.design import load_design
from voxelmat.io.materials import Library, load_library
from voxelmat.io.mesh import read_mesh
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.design import BodyEntry, Design
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.material import Material
from voxelmat.model.mesh import TriangleMesh
from voxelmat.model.part import Part
from voxelmat.model.profile import PrintProfile
from voxelmat.model.region import Region
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.profile import load_profile
from voxelmat.shape.assemble import Assembly, assemble
from voxelmat.shape.bodies import Body, GapRule
from voxelmat.shape.repair import mend
from voxelmat.shape.voxelise import grid_for
from voxelmat.workflow.layout import apply_layout
from voxelmat.workflow.resolve import Resolved, resolve
from voxelmat.workflow.shapecache import ShapeCache, Shaped

__all__ = ["Built", "bodies_of", "build"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Built:
    """A design made concrete.

    Attributes
    ----------
    design : Design
    library : Library
        The shipped materials with the design's own.
    part : Part
        After the layout rules, before any optimisation.
    resolved : Resolved
        Regions, load cases, targets and requirements on this part.
    profile : PrintProfile or None
        None where the design says nothing of printing.
    notes : tuple of str
        What the program decided by itself: repairs, overlaps, gaps, cavities.
    cautions : tuple of str
    bodies : tuple of Body
        The mended meshes that the outline of `part` follows; empty where a stored part or a
        closed gap gave it another outline.
    """

    design: Design
    library: Library
    part: Part
    resolved: Resolved
    profile: PrintProfile | None
    notes: tuple[str, ...] = ()
    cautions: tuple[str, ...] = field(default_factory=tuple)
    bodies: tuple[Body, ...] = ()

    @property
    def load_cases(self) -> tuple[LoadCase, ...]:
        """The load cases on this part, in the design's order."""
        return self.resolved.load_cases

    @property
    def regions(self) -> Mapping[str, Region]:
        """Regions by name."""
        return self.resolved.regions


def build(
    design: Design | str | Path, *, monitor: Monitor = SILENT, shapes: ShapeCache | None = None
) -> Built:
    """Make a part from a design.

    Parameters
    ----------
    design : Design or path
        A design, or the design file.
    monitor : Monitor
    shapes : ShapeCache, optional
        Where voxelised shapes are kept between calls; a design whose bodies and voxels are those
        of an earlier call is not voxelised again.

    Returns
    -------
    Built

    Raises
    ------
    InputError, FileFormatError
        With file and key where a value of the design is at fault.
    """
    if not isinstance(design, Design):
        design = load_design(design)
    library = load_library([design.file(name) for name in design.material_files])
    profile = None
    if design.printing is not None:
        name = design.printing.profile
        profile = load_profile(design.file(name) if name.endswith(".toml") else name)
    shaped = (shapes or ShapeCache()).get(design, lambda: _shaped(design, monitor))
    assembly, notes, cautions = shaped
    part = _part(design, library, assembly)
    part = apply_layout(design, part)
    resolved = replace(resolve(design, part, monitor=monitor), bonds=library.bonds)
    return Built(
        design=design,
        library=library,
        part=part,
        resolved=resolved,
        profile=profile,
        notes=(*notes, *library.notes, *resolved.notes),
        cautions=(*cautions, *resolved.cautions),
        bodies=() if _reshaped(part, assembly) else assembly.bodies,
    )


def _reshaped(part: Part, assembly: Assembly) -> bool:
    """Whether a layout rule or a closed gap gave the outline another course than the meshes'."""
    closed = any(e.kind == "gap" and e.volume_mm3 > 0 for e in assembly.report)
    same = part.distance is not None and np.array_equal(part.distance, assembly.print_distance)
    lost = (assembly.print_distance < 0) & (assembly.print_owner > 0) & (part.labels == 0)
    return closed or not same or bool(lost.any())


def bodies_of(design: Design, *, monitor: Monitor = SILENT) -> tuple[Body, ...]:
    """The bodies of a design as meshes, read and mended, without making voxels of them.

    Parameters
    ----------
    design : Design
    monitor : Monitor

    Raises
    ------
    InputError, FileFormatError
        If a mesh cannot be read or mended.
    """
    return tuple(_bodies(design, monitor)[0])


def _shaped(design: Design, monitor: Monitor) -> Shaped:
    """The bodies on a grid, with what was found and mended."""
    bodies, notes, cautions = _bodies(design, monitor)
    grid = grid_for([b.mesh for b in bodies], design.spacing_mm, margin_voxels=design.margin_voxels)
    _check_size(design, grid)
    assembly = assemble(bodies, grid, gaps=_gap_rules(design), monitor=monitor)
    for event in assembly.report:
        (cautions if event.kind == "caution" else notes).append(event.message)
    return Shaped(assembly, tuple(notes), tuple(cautions))


#: Bytes a voxel of the grid below which no part can be made; a rough floor of ours.
_BYTES_A_VOXEL = 24
_FALLBACK_BYTES = 16 * 2**30


def _check_size(design: Design, grid: VoxelGrid) -> None:
    """Refuse a grid that cannot be held, most often a mesh read in the wrong unit."""
    try:
        memory = os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE")
    except (AttributeError, ValueError, OSError):  # not every system tells
        memory = _FALLBACK_BYTES
    needed = grid.n_voxels * _BYTES_A_VOXEL
    if needed <= memory:
        return
    size = [n * h for n, h in zip(grid.shape, grid.spacing, strict=True)]
    finer = (needed / memory) ** (1 / 3)
    raise InputError(
        f"The bodies span {size[0]:.4g} x {size[1]:.4g} x {size[2]:.4g} mm, which makes "
        f"{grid.n_voxels:.3g} voxels and would need {needed / 2**30:.3g} GiB; this machine has "
        f"{memory / 2**30:.3g}. Check the unit of each mesh (body.unit), or make the voxels "
        f"{finer:.2g} times larger.",
        file=design.file_name,
        key="grid.spacing_mm",
    )


def _bodies(design: Design, monitor: Monitor) -> tuple[list[Body], list[str], list[str]]:
    """Read and mend the mesh of every body."""
    bodies: list[Body] = []
    notes: list[str] = []
    cautions: list[str] = []
    for n, entry in enumerate(design.bodies):
        monitor.report("reading meshes", done=n, total=len(design.bodies), body=entry.name)
        mesh = _mesh(design, n, entry)
        cautions += mesh.cautions
        try:
            mesh, words = mend(mesh, repair=entry.repair)
        except InputError as error:
            raise InputError(
                error.message, file=design.file_name, key=f"body[{n}].mesh ({entry.mesh})"
            ) from error
        notes += words
        bodies.append(
            Body(
                name=entry.name,
                mesh=mesh,
                material=entry.bought_in.name if entry.bought_in else str(Blend.of(entry.blend)),
                priority=entry.priority,
                bought_in=entry.bought_in is not None,
                clearance_mm=entry.clearance_mm,
            )
        )
    monitor.report("reading meshes", done=len(design.bodies), total=len(design.bodies))
    return bodies, notes, cautions


def _mesh(design: Design, n: int, entry: BodyEntry) -> TriangleMesh:
    """The one mesh of a body; a file of several needs an object's name."""
    found = read_mesh(design.file(entry.mesh), entry.unit, object_name=entry.object_name)
    if len(found) > 1:
        raise InputError(
            f"'{entry.mesh}' holds {len(found)} bodies: {', '.join(m.name for m in found)}. Give "
            "each a [[body]] of its own, with `object` naming it.",
            file=design.file_name,
            key=f"body[{n}].mesh",
        )
    return found[0]


def _gap_rules(design: Design) -> list[GapRule]:
    if design.gaps is None:
        return []
    taker = design.gaps.give_to
    return [
        GapRule(
            first=taker,
            second=entry.name,
            width_mm=design.gaps.close_below_mm,
            give_to=taker,
        )
        for entry in design.bodies
        if entry.name != taker
    ]


def _part(design: Design, library: Library, assembly: Assembly) -> Part:
    """Labels, palette and resins of an assembly; each body starts with its own blend."""
    palette: list[Blend] = [EMPTY]
    table = np.zeros(len(assembly.bodies) + 1, dtype=np.uint16)
    bought: list[Material] = []
    for n, entry in enumerate(design.bodies):
        if entry.bought_in is not None:
            material = entry.bought_in.material(library)
            if material.name not in [m.name for m in bought]:
                bought.append(material)
            blend = Blend.pure(material.name)
        else:
            blend = Blend.of(entry.blend)
        if blend not in palette:
            palette.append(blend)
        table[n + 1] = palette.index(blend)
    return Part(
        grid=assembly.grid,
        resins=(*(library[name] for name in _resin_names(design)), *bought),
        palette=tuple(palette),
        labels=table[assembly.owner],
        distance=assembly.print_distance,
        occupancy=assembly.occupancy,
        bodies={b.name: assembly.owner == n + 1 for n, b in enumerate(assembly.bodies)},
        law=library.law(design.law),
        name=design.name,
    )


def _resin_names(design: Design) -> list[str]:
    """Every resin that a body, a layout rule or the optimiser may use, once, in file order."""
    names: dict[str, None] = {}
    for body in design.bodies:
        names.update(dict.fromkeys(body.blend))
    for rule in design.layout:
        for key in ("blend", "from", "to", "old"):
            names.update(dict.fromkeys(rule.settings.get(key, {})))
        names.update(dict.fromkeys(rule.settings.get("resins", ())))
    if design.optimise is not None:
        names.update(dict.fromkeys(design.optimise.resins))
        names.update(dict.fromkeys(resin for _, resin in design.optimise.fixed))
    return list(names)
