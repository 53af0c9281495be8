"""Build orientations of a part compared: height, support, contact, time, walls along layers."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from voxelmat.errors import InputError
from voxelmat.model.html import table
from voxelmat.model.part import DISTANCE_STEPS, Part
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.estimate import forecast
from voxelmat.printing.place import rotation_matrix
from voxelmat.printing.support import outline_field
from voxelmat.units import number

__all__ = ["ALONG_DEG", "ORDERS", "OrientationChoice", "OrientationTable", "compare_orientations"]

#: A wall lies along the layers where its normal is within this angle of the build direction.
ALONG_DEG = 20.0
#: By what choices can be ranked; the others break ties in this order.
ORDERS = ("time", "support", "contact", "height", "stairs")
_DOWN = ((), ("x 90",), ("x 180",), ("x -90",), ("y 90",), ("y -90",))
_TURN = "z 90"


@dataclass(frozen=True, slots=True, kw_only=True)
class OrientationChoice:
    """What one orientation takes and gives.

    Attributes
    ----------
    orientation : tuple of str
        See `voxelmat.printing.place.rotation_matrix`.
    size_mm : tuple of float
        Along tray x, y, z.
    layers : int
    support_mm3 : float or None
        None where the machine adds its own.
    contact_mm2 : float
        Undersides that do not lie on the tray, seen from below, counted by voxel faces: what
        support touches, or what hangs free.
    time_s : tuple of float
        Lowest and highest.
    along : float
        Share of the surface that lies along the layers, 0 to 1; see `ALONG_DEG`.
    upright : float
        Share within the same angle of upright. The rest is slopes, on which layers show as stairs.
    """

    orientation: tuple[str, ...]
    size_mm: tuple[float, float, float]
    layers: int
    support_mm3: float | None
    contact_mm2: float
    time_s: tuple[float, float]
    along: float
    upright: float

    @property
    def stairs(self) -> float:
        """Share of the surface on which layers show as stairs, 0 to 1."""
        return max(0.0, 1.0 - self.along - self.upright)

    def figure(self, order: str) -> float:
        """The figure that an entry of `ORDERS` stands for; less is better."""
        return {
            "time": sum(self.time_s) / 2,
            "support": self.support_mm3 or 0.0,
            "contact": self.contact_mm2,
            "height": self.size_mm[2],
            "stairs": self.stairs,
        }[order]


@dataclass(frozen=True, slots=True, kw_only=True)
class OrientationTable:
    """Orientations from best to worst.

    Attributes
    ----------
    part : str
    order : str
        One of `ORDERS`.
    choices : tuple of OrientationChoice
    refused : tuple of (tuple of str, str)
        Orientations that do not fit the tray, and why.
    """

    part: str
    order: str
    choices: tuple[OrientationChoice, ...]
    refused: tuple[tuple[tuple[str, ...], str], ...] = ()

    def _cells(self) -> tuple[list[str], list[list[str]]]:
        head = ["turns", "size, mm", "layers", "support, mm3", "contact, mm2", "time, h"]
        head += ["along layers, %", "upright, %", "stairs, %"]
        rows = []
        for c in self.choices:
            low, high = (number(t / 3600) for t in c.time_s)
            rows.append(
                [
                    ", ".join(c.orientation) or "as it is",
                    " x ".join(number(s) for s in c.size_mm),
                    str(c.layers),
                    "machine" if c.support_mm3 is None else number(c.support_mm3),
                    number(c.contact_mm2),
                    f"{low} to {high}",
                    *(number(100 * v) for v in (c.along, c.upright, c.stairs)),
                ]
            )
        return head, rows

    def __str__(self) -> str:
        head, rows = self._cells()
        width = [max(len(r[c]) for r in [head, *rows]) for c in range(len(head))]
        lines = [f"{self.part}: orientations by {self.order}, the best first"]
        for row in [head, *rows]:
            cells = [row[0].ljust(width[0])]
            cells += [v.rjust(w) for v, w in zip(row[1:], width[1:], strict=True)]
            lines.append("  ".join(cells))
        lines += [f"{', '.join(t) or 'as it is'}: {why}" for t, why in self.refused]
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        head, rows = self._cells()
        caption = f"{self.part}: orientations by {self.order}, the best first"
        if self.refused:
            caption += f"; {len(self.refused)} more do not fit the tray"
        return table(head, rows, caption)


def compare_orientations(
    part: Part,
    profile: PrintProfile,
    *,
    order: str = "time",
    turns: bool = False,
    support: str | None = None,
    layers: int = 24,
    monitor: Monitor = SILENT,
) -> OrientationTable:
    """Compare the ways in which a part can lie.

    Parameters
    ----------
    part : Part
    profile : PrintProfile
    order : str
        One of `ORDERS`.
    turns : bool
        Twelve orientations instead of six: each face down, and that turned by 90 degrees, which
        matters where pitches or swaths differ along x and y.
    support : str, optional
        The policy; the profile's if left out.
    layers : int
        Layers that are sliced for support and time, see `voxelmat.printing.estimate.forecast`.
    monitor : Monitor

    Raises
    ------
    InputError
        If no orientation fits the tray, or the order is not known.
    """
    if order not in ORDERS:
        raise InputError(f"Orientations are ranked by {', '.join(ORDERS)}; got {order!r}.")
    ways = [(*down, *turn) for down in _DOWN for turn in (((), (_TURN,)) if turns else ((),))]
    inside = outline_field(part) < 0
    area, normal = _surface(part)
    choices, refused = [], []
    for done, way in enumerate(ways):
        turn = rotation_matrix(way)
        try:
            expected = forecast(part, profile, orientation=way, support=support, layers=layers)
        except InputError as error:
            refused.append((way, error.message))
            continue
        steep = np.abs(np.tensordot(turn[2], normal, axes=1))
        total = max(float(area.sum()), 1e-30)
        choices.append(
            OrientationChoice(
                orientation=way,
                size_mm=_size(part, inside, turn),
                layers=expected.layers,
                support_mm3=expected.support_mm3,
                contact_mm2=_undersides(part, inside, turn),
                time_s=expected.time_s,
                along=float(area[steep > np.cos(np.radians(ALONG_DEG))].sum()) / total,
                upright=float(area[steep < np.sin(np.radians(ALONG_DEG))].sum()) / total,
            )
        )
        monitor.report("comparing orientations", done=done + 1, total=len(ways))
    if not choices:
        raise InputError(f"'{part.name}' fits the tray in no orientation: {refused[0][1]}")
    first: Sequence[str] = (order, *(o for o in ORDERS if o != order))
    choices.sort(key=lambda c: [float(f"{c.figure(o):.6g}") for o in first])
    return OrientationTable(
        part=part.name, order=order, choices=tuple(choices), refused=tuple(refused)
    )


def _surface(part: Part) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """Area of the outline near each of some voxels, and its unit normal there, (3, voxels).

    The area of a level set is the integral of a narrow bump of the field times its gradient
    (Osher and Fedkiw 2003, Level Set Methods and Dynamic Implicit Surfaces, chapter 1; from
    memory). Shares of it are exact for flat faces and good to a few percent on curved ones.
    """
    h = part.grid.spacing
    unit = min(h) / DISTANCE_STEPS
    field = np.pad(outline_field(part).astype(np.float32), 2, mode="edge")
    for axis in range(3):  # the grid's own faces may be walls of the part
        rim = [slice(None)] * 3
        for end in (slice(0, 2), slice(-2, None)):
            rim[axis] = end
            field[tuple(rim)] = np.maximum(field[tuple(rim)], DISTANCE_STEPS / 2)
    field = np.asarray(ndimage.gaussian_filter(field * np.float32(unit), 0.7))
    slope = np.stack(list(np.gradient(field, *(np.float32(s) for s in h))))
    length = np.sqrt((slope**2).sum(axis=0))
    width = 1.5 * min(h)
    near = (np.abs(field) < width) & (length > 0)
    bump = (1 + np.cos(np.pi * field[near] / width)) / (2 * width)
    return (
        np.asarray(bump * length[near] * part.grid.voxel_volume, dtype=np.float32),
        np.asarray(slope[:, near] / length[near], dtype=np.float32),
    )


def _upwards(array: NDArray[np.bool_], turn: NDArray[np.int64]) -> tuple[NDArray[np.bool_], int]:
    """The array with its last axis along the build direction, and which axis that was."""
    axis = int(np.flatnonzero(turn[2])[0])
    view = np.moveaxis(array, axis, 2)
    return (view if turn[2, axis] > 0 else view[:, :, ::-1]), axis


def _undersides(part: Part, inside: NDArray[np.bool_], turn: NDArray[np.int64]) -> float:
    seen, axis = _upwards(inside, turn)
    low = int(seen.any(axis=(0, 1)).argmax())
    hanging = seen[:, :, low + 1 :] & ~seen[:, :, low:-1]
    face = part.grid.voxel_volume / part.grid.spacing[axis]
    return float(np.count_nonzero(hanging) * face)


def _size(
    part: Part, inside: NDArray[np.bool_], turn: NDArray[np.int64]
) -> tuple[float, float, float]:
    """Of the voxels inside, along tray x, y and z."""
    size = []
    for row in turn:
        axis = int(np.flatnonzero(row)[0])
        at = np.flatnonzero(inside.any(axis=tuple(a for a in range(3) if a != axis)))
        size.append(float((at[-1] - at[0] + 1) * part.grid.spacing[axis]))
    return (size[0], size[1], size[2])
