"""Turn a part and set it on the tray: build orientation, position, and whether it fits."""

from __future__ import annotations

import re
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.raster import Raster

__all__ = ["Box", "place", "rotation_matrix"]

#: Low and high corner, mm.
Box = tuple[tuple[float, float, float], tuple[float, float, float]]
_TURN = re.compile(r"^\s*([xyz])\s*([+-]?\d+)\s*$")
_EPSILON = 1e-9  # of a site: lets 10 mm at 0.1 mm be 100 sites and not 101


def rotation_matrix(turns: Sequence[str] = ()) -> NDArray[np.int64]:
    """The rotation of a build orientation, always right-handed.

    Parameters
    ----------
    turns : sequence of str
        Turns about the axes of the tray, in order, each an axis and a multiple of 90 degrees:
        ``["x 90", "z -90"]``. Other angles would need the shape again, not its voxels; turn the
        mesh before it is voxelised.

    Returns
    -------
    ndarray of int, shape (3, 3)
        ``tray = R @ part``; a signed permutation.

    Raises
    ------
    InputError
        For anything but an axis and a multiple of 90.

    Examples
    --------
    >>> rotation_matrix(["z 90"]).tolist()
    [[0, -1, 0], [1, 0, 0], [0, 0, 1]]
    """
    if isinstance(turns, str):
        turns = [turns]
    total = np.eye(3, dtype=np.int64)
    if not isinstance(turns, Sequence):
        raise InputError(f"A build orientation is a list of turns; got {turns!r}.")
    for turn in turns:
        match = _TURN.match(str(turn))
        if match is None or int(match[2]) % 90:
            raise InputError(
                f"A build orientation is a list of turns such as 'x 90' or 'z -90', an axis and a "
                f"multiple of 90 degrees; got {turn!r}. For another angle turn the mesh itself.",
                key="orientation",
            )
        axis = "xyz".index(match[1])
        a, b = (axis + 1) % 3, (axis + 2) % 3
        quarter = np.zeros((3, 3), dtype=np.int64)
        quarter[axis, axis] = 1
        quarter[b, a], quarter[a, b] = 1, -1
        for _ in range(int(match[2]) // 90 % 4):
            total = quarter @ total
    return total


def place(
    box: Box,
    profile: PrintProfile,
    turns: Sequence[str] = (),
    position: tuple[float, float] | None = None,
) -> Raster:
    """Turn a part and set it on the tray.

    Parameters
    ----------
    box : pair of tuples of float
        Low and high corner of the part's outline in part coordinates, mm.
    profile : PrintProfile
    turns : sequence of str
        See `rotation_matrix`.
    position : tuple of float, optional
        Where the low x and y corner of the turned part goes on the tray, mm from its front left
        corner, moved down to whole sites. In the middle where it is left out.

    Raises
    ------
    InputError
        If the part does not fit on the usable tray, with the numbers.
    """
    turn = rotation_matrix(turns)
    corners = np.stack([turn @ np.array(box[0]), turn @ np.array(box[1])])
    low, high = corners.min(axis=0), corners.max(axis=0)
    size = high - low
    pitch = [float(p) for p in profile.pitch]
    shape = [max(1, int(np.ceil(s / p - _EPSILON))) for s, p in zip(size, pitch, strict=True)]
    room = [b - a for a, b in profile.room]
    if any(s > r + _EPSILON for s, r in zip(size, room, strict=True)):
        raise InputError(
            f"The part takes {_mm(size)} on the tray, but profile '{profile.name}' has room for "
            f"{_mm(room)} (a tray of {_mm(profile.tray_size)}; {profile.edge_margin:g} mm stay "
            "empty at each side). Turn the part, or take a printer with a larger tray.",
            key="profile",
        )
    if position is None:
        x, y = ((a + b - s) / 2 for (a, b), s in zip(profile.room, size[:2], strict=False))
        corner = (float(x), float(y))
    else:
        corner = _position(position)
    for axis, (first, last) in enumerate(profile.room[:2]):
        if not (first - _EPSILON <= corner[axis] and corner[axis] + size[axis] <= last + _EPSILON):
            raise InputError(
                f"At position {corner[0]:g}, {corner[1]:g} mm a part of {_mm(size)} reaches past "
                f"the usable tray: {'xy'[axis]} must lie in {first:g} to "
                f"{last - size[axis]:g} mm.",
                key="position",
            )
    offset = [int(np.floor(c / p + _EPSILON)) for c, p in zip(corner, pitch, strict=False)] + [0]
    origin = [float(o * p) for o, p in zip(offset, profile.pitch, strict=True)]
    move = [float(o - v) for o, v in zip(origin, low, strict=True)]
    sites = profile.tray_sites
    return Raster(
        pitch=profile.pitch,
        shape=(shape[0], shape[1], shape[2]),
        offset=(offset[0], offset[1], 0),
        rotation=tuple(tuple(int(v) for v in row) for row in turn),  # type: ignore[arg-type]
        translation=(move[0], move[1], move[2]),
        tray_sites=(sites[0], sites[1]),
        origin_corner=profile.origin_corner,
        row_direction=profile.row_direction,
    )


def _position(value: object) -> tuple[float, float]:
    """Two numbers, or an `InputError`."""
    try:
        x, y = (float(v) for v in value)  # type: ignore[attr-defined]
    except (TypeError, ValueError):
        raise InputError(
            f"A position is two lengths in mm, along x and y of the tray; got {value!r}.",
            key="position",
        ) from None
    return x, y


def _mm(values: Sequence[float] | NDArray[np.float64]) -> str:
    return " x ".join(f"{float(v):.4g}" for v in values) + " mm"
