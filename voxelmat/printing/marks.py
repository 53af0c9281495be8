"""Marks that tell a part and how it lies: what they say, where their cells are, and small tags."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.material import Material
from voxelmat.model.part import Part
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.glyphs import text_cells

__all__ = ["SIDES", "Mark", "mark_cells", "mark_text", "stroke_mm", "tag_mark", "tag_part"]

#: Which of a pair a part is; "" where there is no pair.
SIDES = ("", "left", "right")
#: Share of cells by which a mark must differ from each of its mirror images and turns.
_LEAST_DIFFERENCE = 0.1

Vector = tuple[float, float, float]
_VECTORS = ("origin_mm", "right_mm", "up_mm", "inward_mm")


@dataclass(frozen=True, slots=True, kw_only=True)
class Mark:
    """A mark as cells in space, raised from a surface or cut into it.

    Attributes
    ----------
    part : str
        Name of the part that it tells.
    text : tuple of str
    rows : tuple of str
        Cells from the top row down, ``#`` for a stroke and ``.`` for none.
    origin_mm : tuple of float
        Centre of the lowest leftmost cell, half way along the height of the strokes; tray
        coordinates, or those of the part until it is placed.
    right_mm, up_mm : tuple of float
        From a cell to the next one along the text, and upwards.
    inward_mm : tuple of float
        From a cell into the solid behind it, which tells up from down.
    raised : bool
        True for strokes that are solid, False for engraved ones.
    """

    part: str
    text: tuple[str, ...]
    rows: tuple[str, ...]
    origin_mm: Vector
    right_mm: Vector
    up_mm: Vector
    inward_mm: Vector
    raised: bool

    @property
    def cells(self) -> NDArray[np.bool_]:
        """The strokes, ``[c, r]`` along the text and upwards."""
        rows = np.array([[c == "#" for c in row] for row in reversed(self.rows)])
        return np.ascontiguousarray(rows.T)

    def samples(self) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
        """Places to look at, mm, shape (places, 3), and whether each should be solid.

        The centres of all cells, and the solid behind each.
        """
        cells = self.cells
        c, r = np.meshgrid(*(np.arange(n) for n in cells.shape), indexing="ij")
        at = (
            np.array(self.origin_mm)
            + c[..., None] * np.array(self.right_mm)
            + r[..., None] * np.array(self.up_mm)
        )
        solid = cells if self.raised else ~cells
        at = at.reshape(-1, 3)
        behind = np.ones(len(at), dtype=np.bool_)
        return (
            np.concatenate([at, at + np.array(self.inward_mm)]),
            np.concatenate([solid.ravel(), behind]),
        )

    def moved(self, rotation: Sequence[Sequence[int]], translation: Vector) -> Mark:
        """From the coordinates of the part to those of the tray."""
        turn = np.array(rotation)

        def vector(v: NDArray[np.float64]) -> Vector:
            return (float(v[0]), float(v[1]), float(v[2]))

        return Mark(
            part=self.part,
            text=self.text,
            rows=self.rows,
            origin_mm=vector(turn @ self.origin_mm + np.array(translation)),
            right_mm=vector(turn @ self.right_mm),
            up_mm=vector(turn @ self.up_mm),
            inward_mm=vector(turn @ self.inward_mm),
            raised=self.raised,
        )

    def as_dict(self) -> dict[str, Any]:
        """Plain data, lengths in mm."""
        return {
            "part": self.part,
            "text": list(self.text),
            "rows": list(self.rows),
            "origin_mm": list(self.origin_mm),
            "right_mm": list(self.right_mm),
            "up_mm": list(self.up_mm),
            "inward_mm": list(self.inward_mm),
            "raised": self.raised,
        }

    @classmethod
    def from_dict(cls, data: Mapping[str, Any]) -> Mark:
        """The inverse of `as_dict`.

        Raises
        ------
        InputError
            If the data are not those of a mark.
        """
        try:
            vectors = {k: tuple(float(v) for v in data[k]) for k in _VECTORS}
            rows = tuple(str(r) for r in data["rows"])
            whole = (
                all(len(v) == 3 and all(map(math.isfinite, v)) for v in vectors.values())
                and len({len(r) for r in rows}) == 1
            )
            text = tuple(str(t) for t in data["text"])
            if not whole or not rows[0] or set("".join(rows)) - set("#."):
                raise ValueError("rows and vectors do not fit")
            return cls(
                part=str(data["part"]),
                text=text,
                rows=rows,
                raised=bool(data["raised"]),
                **vectors,  # type: ignore[arg-type]
            )
        except (KeyError, TypeError, ValueError, IndexError) as error:
            raise InputError(f"This is not the record of a mark: {error}.", key="marks") from None


def rows_of(cells: NDArray[np.bool_]) -> tuple[str, ...]:
    """Cells ``[c, r]`` as rows of text from the top down."""
    return tuple("".join("#" if v else "." for v in row) for row in cells.T[::-1])


def mark_text(
    job_number: str, number: int, side: str = "", axes: tuple[str, str] = (">X", "^Y")
) -> tuple[str, str]:
    """What a mark says: job and part number; where two axes of the tray point; left or right.

    Raises
    ------
    InputError
        If the side is not one of `SIDES`.
    """
    if side not in SIDES:
        raise InputError(f"The side is left, right or nothing; got {side!r}.", key="side")
    return (f"{job_number}-{number}" if job_number else f"{number}", "".join(axes) + side[:1])


def mark_cells(text: tuple[str, ...]) -> NDArray[np.bool_]:
    """`text_cells`, refused where the mark would look the same turned round or mirrored."""
    cells = text_cells(text, key="job_number")
    least = min(
        np.count_nonzero(cells != other)
        for other in (cells[::-1], cells[:, ::-1], cells[::-1, ::-1])
    )
    if least < _LEAST_DIFFERENCE * np.count_nonzero(cells):
        raise InputError(
            f"The mark {' / '.join(text)} is too much like its mirror image; choose another job "
            "number.",
            key="job_number",
        )
    return cells


def stroke_mm(profile: PrintProfile, axis: int) -> float:
    """Width of strokes, and of the gaps between, across a tray axis; also a depth along it."""
    m = profile.minimum
    return max(m.text_xyz[axis], m.gap_xyz[axis], min(m.wall_xyz[axis], m.strut))


def tag_part(text: tuple[str, ...], resin: Material, profile: PrintProfile, *, name: str) -> Part:
    """A small plate with raised text that reads from above, one voxel a cell.

    Parameters
    ----------
    text : tuple of str
    resin : Material
    profile : PrintProfile
        Gives the width and height of strokes and the thickness of the plate.
    name : str
    """
    cells = mark_cells(text)
    height = stroke_mm(profile, 2)
    plate = max(1, math.ceil(profile.minimum.wall_xyz[2] / height - 1e-9))
    labels = np.ones((*cells.shape, plate + 1), dtype=np.uint16, order="F")
    labels[:, :, plate] = cells
    return Part(
        grid=VoxelGrid(
            shape=labels.shape,
            spacing=(stroke_mm(profile, 0), stroke_mm(profile, 1), height),
        ),
        resins=(resin,),
        palette=(EMPTY, Blend.pure(resin.name)),
        labels=labels,
        name=name,
    )


def tag_mark(tag: Part, text: tuple[str, ...], part: str) -> Mark:
    """The mark on a tag that `tag_part` made, in the coordinates of the tag."""
    cells = np.asarray(tag.labels[:, :, -1] > 0)
    x, y, z = (float(c) for c in tag.grid.spacing)
    return Mark(
        part=part,
        text=text,
        rows=rows_of(cells),
        origin_mm=(x / 2, y / 2, tag.grid.upper[2] - z / 2),
        right_mm=(x, 0.0, 0.0),
        up_mm=(0.0, y, 0.0),
        inward_mm=(0.0, 0.0, -tag.grid.upper[2] / 2),
        raised=True,
    )
