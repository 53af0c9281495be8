"""The parts of a stack, each against its design: layers, volumes, outline, zones."""

from __future__ import annotations

import dataclasses
from collections.abc import Iterator, Mapping, Sequence

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.bigpart import AnyPart
from voxelmat.model.deviation import OutlineDeviation
from voxelmat.model.finding import Finding
from voxelmat.model.part import Part
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.bias import compensated, part_bias
from voxelmat.printing.channelcheck import digest_findings
from voxelmat.printing.checks3d import design_findings
from voxelmat.printing.designed import designed_volumes
from voxelmat.printing.features import zone_findings
from voxelmat.printing.layerdesign import ExpectedLayers
from voxelmat.printing.outlinecheck import outline_findings
from voxelmat.printing.outlines import outline_deviation
from voxelmat.printing.readback import Stack
from voxelmat.printing.stackparts import StackPart
from voxelmat.printing.volumecheck import volume_findings
from voxelmat.shape.bodies import Body

__all__ = ["MOST_COMPARED", "PartCheck", "as_sliced", "part_checks"]

#: Parts of a tray that are compared with their designs, evenly chosen; each takes time and memory.
MOST_COMPARED = 40


def as_sliced(part: Part, stack: Stack, number: int = 0) -> Part:
    """The part with its outline compensated for the bias of the printer, as it was sliced.

    Parameters
    ----------
    part : Part
        The design.
    stack : Stack
    number : int
        Which of the stack's parts it is; tags and coupons are laid without compensation.
    """
    placed = stack.parts[number]
    if placed.kind != "part":
        return part
    bias = part_bias(stack.profile, placed.raster.rotation)
    return compensated(part, stack.profile.replace(bias=bias))  # type: ignore[return-value]


class PartCheck:
    """One part of a stack and its design; `expected` is to be shown the layers.

    Parameters
    ----------
    stack : Stack
    placed : StackPart
    design, sliced : Part
        As drawn, and as `as_sliced` gives it.
    bodies : sequence of Body
        Meshes of the design; its own signed distance is taken where there are none.
    """

    def __init__(
        self, stack: Stack, placed: StackPart, design: Part, sliced: Part, bodies: Sequence[Body]
    ) -> None:
        self.placed = placed
        self.name = placed.name if len(stack.parts) > 1 else ""
        self.expected = ExpectedLayers(stack, sliced, placed)
        self._stack = stack
        self._design = design
        self._sliced = sliced
        self._bodies = bodies

    def findings(self) -> list[Finding]:
        """Of the layers, once all were shown, the volumes and the manifest."""
        found = [
            *self.expected.findings(),
            *digest_findings(self.placed, self._sliced, self._stack),
        ]
        if self._alone():
            designed = {r: v for r, v in designed_volumes(self._sliced).items() if v > 0}
            found += volume_findings(
                self._stack, self.expected.sites.tolist(), designed, raster=self.placed.raster
            )
        return self._named(found)

    def outline(self, monitor: Monitor = SILENT) -> tuple[OutlineDeviation | None, list[Finding]]:
        """How far the outline lies off, None where there is none, and what is to be said of it."""
        printed = None if self._sliced is self._design else self._sliced
        try:
            seen = outline_deviation(
                self._stack,
                self._design,
                bodies=self._bodies,
                printed=printed,
                name=self.placed.name,
                monitor=monitor,
            )
        except (InputError, FileFormatError):
            return None, []  # nothing to compare with or nothing to compare; other checks say so
        return seen, self._named(outline_findings(seen))

    def zones(self, profile: PrintProfile, *, deep: bool) -> list[Finding]:
        """Of intended zones: thin ones and, in three dimensions, skins, tearing and dragging."""
        found = list(zone_findings(self._design, profile))
        if deep:
            raster, policy = self.placed.raster, self._stack.support_policy
            found += design_findings(self._sliced, raster, profile, support=policy)
        return self._named(found)

    def _alone(self) -> bool:
        """Whether no other part reaches into the window."""
        mine = self.placed
        return not any(
            other is not mine
            and all(
                a.start < b.stop and b.start < a.stop
                for a, b in (
                    (mine.layers, other.layers),
                    (mine.rows, other.rows),
                    (mine.columns, other.columns),
                )
            )
            for other in self._stack.parts
        )

    def _named(self, found: Sequence[Finding]) -> list[Finding]:
        return [dataclasses.replace(f, part=self.name) for f in found]


def part_checks(
    stack: Stack, designs: Mapping[str, AnyPart], bodies: Mapping[str, Sequence[Body]]
) -> tuple[list[PartCheck], list[Finding]]:
    """A check for each part whose design is in memory, and a note of those that are left out.

    Parameters
    ----------
    stack : Stack
    designs, bodies : mapping
        By name of the part in the stack.
    """
    known = [n for n, p in enumerate(stack.parts) if isinstance(designs.get(p.name), Part)]
    step = -(-len(known) // MOST_COMPARED)
    chosen = known[:: max(step, 1)]
    sliced: dict[tuple[int, str, str], Part] = {}
    found = []
    for n in chosen:
        placed = stack.parts[n]
        design = designs[placed.name]
        assert isinstance(design, Part)  # noqa: S101 - chosen so
        key = (id(design), str(placed.raster.rotation), placed.kind)
        if key not in sliced:
            sliced[key] = as_sliced(design, stack, n)
        found.append(
            PartCheck(stack, placed, design, sliced[key], tuple(bodies.get(placed.name, ())))
        )
    return found, list(_left_out(designs, stack, len(chosen)))


def _left_out(designs: Mapping[str, AnyPart], stack: Stack, compared: int) -> Iterator[Finding]:
    given = sum(p.name in designs for p in stack.parts)
    if compared < given:
        yield Finding(
            severity="note",
            code="parts not compared",
            message=f"{compared} of {given} parts were compared with their designs; at most "
            f"{MOST_COMPARED} are, and none that lies in a store on disk.",
            remedy="Nothing, or check the others in stacks of their own.",
            value=compared,
            limit=given,
        )
