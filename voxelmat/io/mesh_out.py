"""Writes one STL a label: closed surfaces in mm whose interfaces are the same triangles."""

from __future__ import annotations

import re
from contextlib import ExitStack
from pathlib import Path

import numpy as np

from voxelmat.errors import InputError
from voxelmat.io.atomic import aside
from voxelmat.io.label_surfaces import LabelSurfaces, label_surfaces
from voxelmat.io.mesh import write_stl
from voxelmat.model.volume import Volume
from voxelmat.units import number

__all__ = ["write_label_stl"]


# Less than half a voxel, so that opposite corners of a voxel do not pass each other.
_MOST_MOVED = 0.45


def _slug(volume: Volume, label: int) -> str:
    name = volume.names.get(label, "")
    return re.sub(r"[^A-Za-z0-9]+", "-", name).strip("-")[:40] or "label"


def _notes(volume: Volume, surfaces: LabelSurfaces, smooth: int, worst: float) -> list[str]:
    notes = [
        "STL holds single precision and no unit: the numbers are mm.",
        f"The volume of a surface differs by at most {number(100 * worst)} % from that of its "
        "voxels.",
    ]
    if smooth:
        notes.append(
            f"Smoothed {smooth} rounds: vertices moved by up to {_MOST_MOVED:g} of a voxel along "
            "an axis, and details of one voxel may fold."
        )
    else:
        notes.append("Surfaces follow the voxels' faces, so slopes show steps.")
    if volume.occupancy is not None:
        notes.append("Voxels at least half full are taken as full, the others as empty.")
    if surfaces.touching:
        notes.append(
            f"Along {surfaces.touching} voxel edges a label touched itself; they were thickened to "
            "1/16 of a voxel, so that each surface is closed and simple."
        )
    return notes


def write_label_stl(
    volume: Volume, path: Path, *, smooth: int = 0
) -> tuple[tuple[Path, ...], tuple[str, ...]]:
    """Write ``stem.LABEL-name.stl`` for each label that occurs; all files or none.

    Parameters
    ----------
    volume : Volume
        Labels.
    path : Path
        Gives folder and stem, and ends in ``.stl``.
    smooth : int
        Rounds of smoothing of the shared vertices, 0 for the voxels' own faces; a vertex moves by
        less than half a voxel along an axis.

    Returns
    -------
    tuple
        The files, and what the surfaces do not hold, in words.

    Raises
    ------
    InputError
        No label occurs.
    ResourceError
        If they cannot be written.
    """
    whole = volume.crisp()
    present = whole.present()
    if not present:
        raise InputError("No voxel is at least half full, so there is no surface.", file=path.name)
    surfaces = label_surfaces(whole)
    if smooth:
        surfaces = surfaces.smoothed(smooth, _MOST_MOVED * np.array(volume.grid.spacing))
    counts = np.bincount(whole.values.ravel(order="K"))
    worst = 0.0
    made = []
    with ExitStack() as stack:
        for label in present:
            slug = _slug(volume, label)
            mesh = surfaces.of(label, volume.names.get(label, f"label {label}"))
            voxels = float(counts[label]) * volume.grid.voxel_volume
            worst = max(worst, abs(mesh.volume / voxels - 1.0))
            made.append(path.with_name(f"{path.stem}.{label}-{slug}.stl"))
            write_stl(mesh, stack.enter_context(aside(made[-1])))
    return tuple(made), tuple(_notes(volume, surfaces, smooth, worst))
