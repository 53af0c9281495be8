"""Places for rectangles on a tray: packed by rectangle-packer, round those that are fixed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import rpack

__all__ = ["Rectangle", "Size", "Spot", "free_rectangles", "pack"]

#: Width and height.
Size = tuple[int, int]


@dataclass(frozen=True, slots=True)
class Rectangle:
    """A rectangle on a whole-number grid: low corner and size."""

    x: int
    y: int
    width: int
    height: int

    @property
    def area(self) -> int:
        """Width times height."""
        return self.width * self.height

    def meets(self, other: Rectangle) -> bool:
        """True where the two share area."""
        return (
            self.x < other.x + other.width
            and other.x < self.x + self.width
            and self.y < other.y + other.height
            and other.y < self.y + self.height
        )


@dataclass(frozen=True, slots=True)
class Spot:
    """Where a rectangle went: its low corner, and which of its shapes was taken."""

    x: int
    y: int
    option: int


def free_rectangles(room: Rectangle, taken: Sequence[Rectangle]) -> list[Rectangle]:
    """All largest empty rectangles of a room: none lies within another; largest area first.

    Each taken rectangle splits every free one that it meets into at most four.
    """
    free = [room]
    for block in taken:
        split: list[Rectangle] = []
        for space in free:
            split += _without(space, block) if space.meets(block) else [space]
        kept: list[Rectangle] = []
        for space in sorted(set(split), key=lambda r: (-r.area, r.y, r.x, r.width)):
            if not any(_within(space, other) for other in kept):
                kept.append(space)
        free = kept
    return free


def _without(space: Rectangle, block: Rectangle) -> list[Rectangle]:
    right, top = space.x + space.width, space.y + space.height
    block_right, block_top = block.x + block.width, block.y + block.height
    parts = [
        Rectangle(space.x, space.y, block.x - space.x, space.height),
        Rectangle(block_right, space.y, right - block_right, space.height),
        Rectangle(space.x, space.y, space.width, block.y - space.y),
        Rectangle(space.x, block_top, space.width, top - block_top),
    ]
    return [p for p in parts if p.width > 0 and p.height > 0]


def _within(inner: Rectangle, outer: Rectangle) -> bool:
    return (
        outer.x <= inner.x
        and outer.y <= inner.y
        and inner.x + inner.width <= outer.x + outer.width
        and inner.y + inner.height <= outer.y + outer.height
    )


def pack(
    options: Sequence[Sequence[Size]],
    room: Size,
    *,
    gap: Size = (0, 0),
    taken: Sequence[Rectangle] = (),
) -> list[Spot | None]:
    """Find places for rectangles in a room, at least a gap from each other and from those taken.

    The packer encloses rectangles of fixed turn in a box of small area and limited size. What a
    tray needs beside that is done here: the packer is asked for each largest free rectangle in
    turn, with as many of the rest, large ones first, as it can place there; and turns are
    tried: as given, all wide, all tall. The arrangement that places most area is kept.

    Parameters
    ----------
    options : sequence of sequences of tuple of int
        For each rectangle the widths and heights that it can take, for example as it is and
        turned by 90 degrees.
    room : tuple of int
        Width and height.
    gap : tuple of int
        Least distance along x, and along y.
    taken : sequence of Rectangle
        What is there already; it may lie partly outside the room.

    Returns
    -------
    list of Spot or None
        None for what does not fit. The same places for the same input.
    """
    n = len(options)
    wide = [max(range(len(o)), key=lambda k: o[k][0] - o[k][1]) for o in options]
    tall = [max(range(len(o)), key=lambda k: o[k][1] - o[k][0]) for o in options]
    best: list[Spot | None] = [None] * n
    most = -1
    tried: list[list[int]] = []
    for choice in ([0] * n, wide, tall):
        if choice in tried:
            continue
        tried.append(choice)
        sizes = [o[k] for o, k in zip(options, choice, strict=True)]
        corners = _pack_fixed(sizes, room, gap, taken)
        area = sum(w * h for (w, h), c in zip(sizes, corners, strict=True) if c is not None)
        if area > most or all(c is not None for c in corners):
            most = area
            best = [
                None if c is None else Spot(c[0], c[1], k)
                for c, k in zip(corners, choice, strict=True)
            ]
        if all(c is not None for c in corners):
            break
    return best


def _pack_fixed(
    sizes: Sequence[Size],
    room: Size,
    gap: Size,
    taken: Sequence[Rectangle],
) -> list[tuple[int, int] | None]:
    """`pack` without turns: low corners, or None."""
    # Each takes the gap beside it on its high sides; so does the room, at whose edge none is due.
    padded = [(w + gap[0], h + gap[1]) for w, h in sizes]
    whole = Rectangle(0, 0, room[0] + gap[0], room[1] + gap[1])
    blocks = [Rectangle(t.x, t.y, t.width + gap[0], t.height + gap[1]) for t in taken]
    corners: list[tuple[int, int] | None] = [None] * len(sizes)
    left = sorted(range(len(sizes)), key=lambda n: (-padded[n][0] * padded[n][1], n))
    progress = True
    while left and progress:
        progress = False
        for space in free_rectangles(whole, blocks):
            fitting = [
                n for n in left if padded[n][0] <= space.width and padded[n][1] <= space.height
            ]
            placed = _most(fitting, padded, space)
            if placed:
                for n, corner in placed.items():
                    corners[n] = corner
                    blocks.append(Rectangle(*corner, *padded[n]))
                left = [n for n in left if n not in placed]
                progress = True
                break
    return corners


def _most(
    order: Sequence[int], padded: Sequence[tuple[int, int]], space: Rectangle
) -> dict[int, tuple[int, int]]:
    """As many of `order`, from its start, as the packer gets into a space (by bisection)."""
    low, high = 0, len(order)
    found: dict[int, tuple[int, int]] = {}
    while low < high:
        count = high if high == len(order) else (low + high + 1) // 2  # all of them first
        some = order[:count]
        try:
            corners = rpack.pack(
                [padded[n] for n in some], max_width=space.width, max_height=space.height
            )
        except rpack.PackingImpossibleError:
            high = count - 1
            continue
        low = count
        found = {n: (space.x + x, space.y + y) for n, (x, y) in zip(some, corners, strict=True)}
    return found
