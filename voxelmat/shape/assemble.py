"""Several bodies on one grid: who owns which voxel, what is solid, and what is printed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.grid import VoxelGrid
from voxelmat.monitor import SILENT, Monitor
from voxelmat.shape.bodies import Body, Event, GapRule, check_bodies, strength
from voxelmat.shape.cavity import cut_cavity
from voxelmat.shape.gaps import find_gap
from voxelmat.shape.overlaps import find_overlaps
from voxelmat.shape.seams import close_seams
from voxelmat.shape.voxelise import BAND_SIXTEENTHS, VoxelShape, voxelise
from voxelmat.shape.words import middle_voxel, place_text, voxel_centre
from voxelmat.units import number

__all__ = ["Assembly", "assemble"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Assembly:
    """Bodies on one grid; arrays ``[i, j, k]``, Fortran order, read-only.

    Attributes
    ----------
    grid : VoxelGrid
    bodies : tuple of Body
    owner : uint8 or uint16
        Number of the body plus 1 that has most of the voxel; 0 where nothing is.
    distance : int8
        Signed distance to the joint surface, negative inside, 1/16 of the smallest spacing.
        Inside, near where bodies meet, it is to the nearer body's own surface.
    occupancy : uint8
        Solid fraction of all bodies.
    print_owner, print_distance, print_occupancy
        The same for what is printed: without bought-in bodies and their clearance.
    report : tuple of Event
        Overlaps, gaps and cavities with volume and place.
    """

    grid: VoxelGrid
    bodies: tuple[Body, ...]
    owner: NDArray[np.uint8 | np.uint16]
    distance: NDArray[np.int8]
    occupancy: NDArray[np.uint8]
    print_owner: NDArray[np.uint8 | np.uint16]
    print_distance: NDArray[np.int8]
    print_occupancy: NDArray[np.uint8]
    report: tuple[Event, ...]


@dataclass(slots=True, kw_only=True)
class _Fields:
    """The state while bodies are laid down, the strongest first."""

    owner: NDArray[np.uint8 | np.uint16]
    share: NDArray[np.uint8]  # of the owner, in each voxel
    occupancy: NDArray[np.uint8]
    distance: NDArray[np.int8]

    def lay(self, number: int, shape: VoxelShape) -> None:
        left = np.minimum(shape.occupancy, 255 - self.occupancy)
        self._claim(number, left)
        self.occupancy += left
        np.minimum(self.distance, shape.distance, out=self.distance)

    def _claim(self, number: int, share: NDArray[np.uint8]) -> None:
        more = share > self.share
        self.owner[more] = number
        self.share[more] = share[more]


def assemble(
    bodies: Sequence[Body],
    grid: VoxelGrid,
    *,
    gaps: Sequence[GapRule] = (),
    monitor: Monitor = SILENT,
) -> Assembly:
    """Put bodies on one grid.

    Where bodies overlap, a bought-in body wins over printed ones, then the higher priority
    wins. Gaps close as the rules say. For the print, bought-in bodies are cut out with
    their clearance.

    Parameters
    ----------
    bodies : sequence of Body
        Closed meshes; see `voxelmat.shape.repair.mend`.
    grid : VoxelGrid
    gaps : sequence of GapRule
    monitor : Monitor

    Raises
    ------
    InputError
        If bodies overlap and no priority decides between them, a body lies outside the
        grid, or names do not match.
    """
    bodies = tuple(bodies)
    check_bodies(bodies, gaps)
    report: list[Event] = []
    shapes = []
    for n, body in enumerate(bodies):
        monitor.report("voxelising bodies", done=n, total=len(bodies), body=body.name)
        shapes.append(voxelise(body.mesh, grid))
        report += _body_events(body, shapes[-1], grid)
    monitor.report("voxelising bodies", done=len(bodies), total=len(bodies))
    report += find_overlaps(bodies, shapes, grid)
    monitor.report("joining bodies", done=len(bodies), total=len(bodies))
    order = sorted(range(len(bodies)), key=lambda n: strength(bodies[n]), reverse=True)
    solve = _laid(bodies, shapes, order, grid)
    printed = [n for n in order if not bodies[n].bought_in]
    stack = _laid(bodies, shapes, printed, grid)
    report += _close_gaps(bodies, shapes, gaps, solve, stack, grid)
    report += _cut_cavities(bodies, shapes, stack, grid)
    stack.owner[stack.occupancy == 0] = 0
    for fields in (solve, stack):
        close_seams(fields.distance, fields.occupancy, fields.occupancy > fields.share)
        for array in (fields.owner, fields.distance, fields.occupancy):
            array.setflags(write=False)
    return Assembly(
        grid=grid,
        bodies=bodies,
        owner=solve.owner,
        distance=solve.distance,
        occupancy=solve.occupancy,
        print_owner=stack.owner,
        print_distance=stack.distance,
        print_occupancy=stack.occupancy,
        report=tuple(report),
    )


def _laid(
    bodies: tuple[Body, ...], shapes: list[VoxelShape], order: list[int], grid: VoxelGrid
) -> _Fields:
    kind = np.uint8 if len(bodies) < 256 else np.uint16
    fields = _Fields(
        owner=np.zeros(grid.shape, dtype=kind, order="F"),
        share=np.zeros(grid.shape, dtype=np.uint8, order="F"),
        occupancy=np.zeros(grid.shape, dtype=np.uint8, order="F"),
        distance=np.full(grid.shape, BAND_SIXTEENTHS, dtype=np.int8, order="F"),
    )
    for n in order:
        fields.lay(n + 1, shapes[n])
    return fields


def _body_events(body: Body, shape: VoxelShape, grid: VoxelGrid) -> list[Event]:
    low, high = body.mesh.bounds
    middle = (low + high) / 2
    place = (float(middle[0]), float(middle[1]), float(middle[2]))
    if not shape.occupancy.any():
        raise InputError(
            f"Body '{body.name}' lies outside the grid, or is too thin for its voxels: its box is "
            f"{place_text(low)} to {place_text(high)}. Check its unit and place."
        )
    told = list(shape.cautions)
    slack = 1e-6 * np.array(grid.spacing)
    if (low < np.array(grid.origin) - slack).any() or (high > np.array(grid.upper) + slack).any():
        told.append(f"Body '{body.name}' reaches beyond the grid; only what is on it counts.")
    return [
        Event(
            kind="caution",
            bodies=(body.name,),
            volume_mm3=shape.volume,
            place=place,
            message=text,
        )
        for text in told
    ]


def _close_gaps(
    bodies: tuple[Body, ...],
    shapes: list[VoxelShape],
    gaps: Sequence[GapRule],
    solve: _Fields,
    stack: _Fields,
    grid: VoxelGrid,
) -> list[Event]:
    index = {body.name: n for n, body in enumerate(bodies)}
    events = []
    for rule in gaps:
        first, second, taker = index[rule.first], index[rule.second], index[rule.give_to]
        gap = find_gap(rule, shapes[first], shapes[second], solve.occupancy < 255)
        added = 255 - solve.occupancy[gap.at]
        volume = float(added.sum(dtype=np.int64)) / 255 * grid.voxel_volume
        both = (rule.first, rule.second)
        if volume == 0:
            text = (
                f"No gap narrower than {number(rule.width_mm)} mm was found between "
                f"'{rule.first}' and '{rule.second}'."
            )
            events.append(
                Event(kind="gap", bodies=both, volume_mm3=0.0, place=grid.origin, message=text)
            )
            continue
        place = voxel_centre(grid, middle_voxel(gap.at))
        for fields in (solve, stack) if not bodies[taker].bought_in else (solve,):
            free = 255 - fields.occupancy[gap.at] if fields is solve else added
            grown = np.minimum(free.astype(np.int16) + shapes[taker].occupancy[gap.at], 255)
            wins = grown >= fields.share[gap.at]
            fields.owner[gap.at] = np.where(wins, taker + 1, fields.owner[gap.at])
            fields.share[gap.at] = np.maximum(fields.share[gap.at], grown)
            fields.occupancy[gap.at] = np.minimum(
                fields.occupancy[gap.at].astype(np.int16) + free, 255
            )
            fields.distance[gap.at] = np.minimum(fields.distance[gap.at], gap.distance)
        text = (
            f"A gap between '{rule.first}' and '{rule.second}' of {number(volume)} mm^3, up to "
            f"{number(gap.widest)} mm wide, for example at {place_text(place)}, was closed and "
            f"given to '{rule.give_to}'."
        )
        events.append(Event(kind="gap", bodies=both, volume_mm3=volume, place=place, message=text))
    return events


def _cut_cavities(
    bodies: tuple[Body, ...], shapes: list[VoxelShape], stack: _Fields, grid: VoxelGrid
) -> list[Event]:
    events = []
    for body, shape in zip(bodies, shapes, strict=True):
        if not body.bought_in:
            continue
        before = int(stack.occupancy.sum(dtype=np.int64))
        cut_cavity(shape, body.clearance_mm, stack.distance, stack.occupancy, name=body.name)
        after = int(stack.occupancy.sum(dtype=np.int64))
        low, high = body.mesh.bounds
        middle = (low + high) / 2
        volume = (before - after) / 255 * grid.voxel_volume
        text = (
            f"Bought-in body '{body.name}' is a cavity in the print, with "
            f"{number(body.clearance_mm)} mm of clearance; {number(volume)} mm^3 were cut from "
            "printed bodies for it."
        )
        events.append(
            Event(
                kind="cavity",
                bodies=(body.name,),
                volume_mm3=volume,
                place=(float(middle[0]), float(middle[1]), float(middle[2])),
                message=text,
            )
        )
    return events
