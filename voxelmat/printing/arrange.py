"""Finds a place for each part of a tray, its tag beside it, and for the witness coupons."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from voxelmat.errors import InputError
from voxelmat.io.bigpart import AnyPart
from voxelmat.model.material import Material
from voxelmat.model.part import Part
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.coupons import coupons_of
from voxelmat.printing.designed import used_resins
from voxelmat.printing.engrave import engraved
from voxelmat.printing.job import PlacedPart, placed
from voxelmat.printing.marks import Mark, mark_text, tag_mark, tag_part
from voxelmat.printing.pack import Rectangle, Size, Spot, free_rectangles, pack
from voxelmat.printing.place import Box, place
from voxelmat.printing.skin_room import box_with_skin
from voxelmat.printing.support import outline_box

if TYPE_CHECKING:
    from voxelmat.printing.tray import TrayEntry

__all__ = ["Arranger"]

_TURN = "z 90"
_NOWHERE = Rectangle(0, 0, 0, 0)


@dataclass(slots=True, eq=False)
class _Item:
    """One thing to place: sliced part per way of lying it, and what to do with it."""

    name: str
    kind: str
    lies: list[tuple[str, ...]]  # orientations to choose from
    ready: list[PlacedPart]  # in the middle of the tray, one an orientation
    boxes: list[Box]
    position_mm: tuple[float, float] | None = None
    tag: _Item | None = None
    mark: Mark | None = None  # an engraving (part coordinates), or what a tag tells (its own)
    rectangle: Rectangle = _NOWHERE  # in sites of the usable tray, once placed
    option: int = 0

    def size(self, option: int) -> Size:
        """Sites along x and y."""
        return self.ready[option].raster.shape[:2]


class Arranger:
    """Collects what is to stand on a tray, then places all of it.

    Parameters
    ----------
    profile : PrintProfile
    spacing_mm : float
    job_number : str

    Attributes
    ----------
    designs : dict
        Name to the part as it will be sliced, engraving included.
    notes : list of str
    """

    def __init__(self, profile: PrintProfile, spacing_mm: float, job_number: str) -> None:
        self.profile = profile
        self.designs: dict[str, AnyPart] = {}
        self.notes: list[str] = []
        self._as_drawn = profile.replace(bias=(0.0, 0.0, 0.0))
        self._job_number = job_number
        self._items: list[_Item] = []
        self._extra: list[_Item] = []
        self._known: dict[tuple[int, tuple[str, ...]], tuple[PlacedPart, Box]] = {}
        pitch = [float(p) for p in profile.pitch[:2]]
        self._spacing_mm = spacing_mm
        self._gap = (math.ceil(spacing_mm / pitch[0]), math.ceil(spacing_mm / pitch[1]))
        room = profile.room[:2]
        self._first = [math.ceil(a / p - 1e-9) for (a, _), p in zip(room, pitch, strict=True)]
        last = [math.floor(b / p + 1e-9) for (_, b), p in zip(room, pitch, strict=True)]
        self._room = (last[0] - self._first[0], last[1] - self._first[1])

    # ------------------------------------------------------------------ what to place
    def _item(self, part: AnyPart, name: str, kind: str, lies: list[tuple[str, ...]]) -> _Item:
        # Tags and coupons are laid as drawn: a coupon shows what the printer adds.
        profile = self.profile if kind == "part" else self._as_drawn
        support = profile.support_policy
        ready, boxes = [], []
        for orientation in lies:
            key = (id(part), orientation)
            if key not in self._known:
                try:
                    made = placed(part, profile, orientation, name=name, kind=kind, support=support)
                except InputError as error:
                    raise InputError(f"'{name}': {error.message}", key=error.key) from None
                box = outline_box(made.part)
                if support == "skin":
                    box = box_with_skin(box, profile.support_sizes.skin, orientation)
                self._known[key] = (made, box)
            made, box = self._known[key]
            ready.append(made)
            boxes.append(box)
        self.designs[name] = part
        return _Item(name=name, kind=kind, lies=lies, ready=ready, boxes=boxes)

    def add(self, entry: TrayEntry, name: str, number: int, *, marked: bool) -> None:
        """Take in one copy of an entry, with its mark."""
        part = entry.part
        cut: tuple[Part, Mark, str] | None = None
        if marked and entry.mark == "engraved":
            cut = self._engraved(entry, name, number)
        lies = [entry.orientation]
        if cut is not None:
            part = cut[0]
        elif entry.may_turn:  # an engraving says how the part lies, so that one is not turned
            lies.append((*entry.orientation, _TURN))
        item = self._item(part, name, "part", lies)
        item.position_mm = entry.position_mm
        if cut is not None:
            item.mark = cut[1]
        elif marked:
            item.tag = self._tag(part, name, number, entry.side)
        self._items.append(item)

    def _engraved(self, entry: TrayEntry, name: str, number: int) -> tuple[Part, Mark, str] | None:
        cut = None
        if isinstance(entry.part, Part):
            cut = engraved(
                entry.part,
                self.profile,
                job_number=self._job_number,
                number=number,
                side=entry.side,
                name=name,
                orientation=entry.orientation,
                face=entry.face,
                depth_mm=entry.mark_depth_mm,
                protected=entry.protected,
            )
        if cut is None:
            face = f"its {entry.face} face" if entry.face else "none of its faces"
            said = "has no flat place" if entry.face else "has a flat place"
            self.notes.append(
                f"'{name}' has a tag beside it, because {face} {said} that is free and large "
                "enough for its mark."
            )
        return cut

    def _tag(self, part: AnyPart, name: str, number: int, side: str) -> _Item:
        text = mark_text(self._job_number, number, side)
        tag = tag_part(text, _stiffest(part), self.profile, name=f"mark {number}")
        item = self._item(tag, tag.name, "mark", [()])
        item.mark = tag_mark(tag, text, name)
        return item

    def add_coupons(self, resins: Sequence[str] | None) -> None:
        """Take in coupons of the named resins, or of all that the parts use."""
        known: dict[str, Material] = {}
        for item in self._items:
            for name in used_resins(item.ready[0].part):
                material = next(m for m in item.ready[0].part.resins if m.name == name)
                known.setdefault(name, material)
        unknown = [r for r in resins or () if r not in known]
        if unknown:
            raise InputError(
                f"No part of the tray uses '{unknown[0]}'; coupons are made of {', '.join(known)}.",
                key="coupons",
            )
        layers = max(i.ready[0].raster.shape[2] for i in self._items)
        highest = float(layers * self.profile.layer)
        for name in known if resins is None else resins:
            for coupon in coupons_of(known[name], self.profile, highest_mm=highest):
                self._extra.append(self._item(coupon, coupon.name, "coupon", [()]))

    # ------------------------------------------------------------------ places
    def arranged(self) -> tuple[tuple[PlacedPart, ...], tuple[Mark, ...]]:
        """Everything in its place.

        Raises
        ------
        InputError
            For what does not fit.
        """
        for item in self._items:
            if item.position_mm is not None:
                self._fix(item)
        fixed = [i for i in self._items if i.position_mm is not None]
        taken = [i.rectangle for i in fixed]
        loose: list[_Item] = []
        for item in fixed:
            if item.tag is not None:
                spot = self._beside(item.rectangle, item.tag.size(0), taken)
                if spot is None:
                    loose.append(item.tag)
                else:
                    item.tag.rectangle = spot
                    taken.append(spot)
        self._pack([i for i in self._items if i.position_mm is None], loose, taken)
        items = [*self._items, *(i.tag for i in self._items if i.tag), *self._extra]
        done = [self._placed(i) for i in items]
        marks = [
            i.mark.moved(p.raster.rotation, p.raster.translation)
            for i, p in zip(items, done, strict=True)
            if i.mark is not None
        ]
        return tuple(done), tuple(marks)

    def _fix(self, item: _Item) -> None:
        try:
            raster = place(item.boxes[0], self.profile, item.lies[0], item.position_mm)
        except InputError as error:
            raise InputError(f"'{item.name}': {error.message}", key=error.key) from None
        item.rectangle = Rectangle(
            raster.offset[0] - self._first[0],
            raster.offset[1] - self._first[1],
            raster.shape[0],
            raster.shape[1],
        )

    def _beside(self, box: Rectangle, size: Size, taken: Sequence[Rectangle]) -> Rectangle | None:
        """Room for the tag in front of a fixed part, behind it, right or left of it."""
        (w, h), (gx, gy) = size, self._gap
        for x, y in (
            (box.x, box.y - gy - h),
            (box.x, box.y + box.height + gy),
            (box.x + box.width + gx, box.y),
            (box.x - gx - w, box.y),
        ):
            spot = Rectangle(x, y, w, h)
            wide = Rectangle(x - gx, y - gy, w + 2 * gx, h + 2 * gy)
            on_tray = x >= 0 and y >= 0 and x + w <= self._room[0] and y + h <= self._room[1]
            if on_tray and not any(wide.meets(t) for t in taken):
                return spot
        return None

    def _pack(self, free: Sequence[_Item], loose: Sequence[_Item], taken: list[Rectangle]) -> None:
        """Place all without a position: parts with the tag in front of them, tags, coupons."""
        items = [*free, *loose, *self._extra]
        options = [[self._with_tag(i, option) for option in range(len(i.lies))] for i in items]
        spots = pack(options, self._room, gap=self._gap, taken=taken)
        for item, spot in zip(items, spots, strict=True):
            if spot is not None:
                self._settle(item, spot)
        lacking = [i for i, s in zip(items, spots, strict=True) if s is None]
        if lacking:
            taken += [
                Rectangle(s.x, s.y, *o[s.option]) for s, o in zip(spots, options, strict=True) if s
            ]
            self._refuse(lacking, taken)

    def _with_tag(self, item: _Item, option: int) -> Size:
        w, h = item.size(option)
        if item.tag is None:
            return (w, h)
        tag_w, tag_h = item.tag.size(0)
        return (max(w, tag_w), h + self._gap[1] + tag_h)

    def _settle(self, item: _Item, spot: Spot) -> None:
        item.option = spot.option
        y = spot.y
        if item.tag is not None:
            item.tag.rectangle = Rectangle(spot.x, y, *item.tag.size(0))
            y += item.tag.rectangle.height + self._gap[1]
        item.rectangle = Rectangle(spot.x, y, *item.size(spot.option))

    def _placed(self, item: _Item) -> PlacedPart:
        at = (item.rectangle.x, item.rectangle.y)
        x, y = (
            float((a + f) * p)
            for a, f, p in zip(at, self._first, self.profile.pitch[:2], strict=True)
        )
        raster = place(item.boxes[item.option], self.profile, item.lies[item.option], (x, y))
        return PlacedPart(
            part=item.ready[item.option].part, raster=raster, name=item.name, kind=item.kind
        )

    def _refuse(self, lacking: Sequence[_Item], taken: Sequence[Rectangle]) -> None:
        grown = [
            Rectangle(
                t.x - self._gap[0],
                t.y - self._gap[1],
                t.width + 2 * self._gap[0],
                t.height + 2 * self._gap[1],
            )
            for t in taken
        ]
        left = free_rectangles(Rectangle(0, 0, *self._room), grown)
        room = f"{self._mm((left[0].width, left[0].height))} mm" if left else "nothing"
        named = ", ".join(
            f"'{i.name}' ({self._mm(self._with_tag(i, 0))} mm{' with its mark' if i.tag else ''})"
            for i in lacking[:10]
        )
        more = f" and {len(lacking) - 10} more" if len(lacking) > 10 else ""
        raise InputError(
            f"There is no room on the tray for {named}{more}: the usable tray of "
            f"'{self.profile.name}' is {self._mm(self._room)} mm, the spacing {self._spacing_mm:g} "
            f"mm, and the largest place left is {room}. Take fewer copies, less spacing, another "
            "orientation or a second tray.",
            key="copies",
        )

    def _mm(self, size: Size) -> str:
        return " x ".join(
            f"{float(n * p):.4g}" for n, p in zip(size, self.profile.pitch[:2], strict=True)
        )


def _stiffest(part: AnyPart) -> Material:
    """The stiffest resin that is printed: a mark of it can be read and handled."""
    used = used_resins(part)
    return max((m for m in part.resins if m.name in used), key=lambda m: m.E.value)
