"""Compiles what only some prints call: diffusion, ramps, shared channels, trays, overhangs."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

import numpy as np

from voxelmat.io.materials import load_library
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.halftone import Halftone
from voxelmat.model.part import Part
from voxelmat.printing.preflight import preflight
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_job, write_stack
from voxelmat.printing.tray import TrayEntry, lay_out

__all__ = ["rare_prints"]

_RESINS = ("rigid-general", "elastomer-a27")


def _mushroom() -> Part:
    """A stem of one resin under a wider cap of the other, a few voxels large."""
    library = load_library()
    labels = np.zeros((8, 6, 4), dtype=np.uint16, order="F")
    labels[3:5, 2:4, :2] = 1
    labels[:, :, 2:] = 2
    return Part(
        grid=VoxelGrid(shape=labels.shape, spacing=(0.5, 0.5, 0.5)),
        resins=tuple(library[name] for name in _RESINS),
        palette=(EMPTY, *(Blend.pure(name) for name in _RESINS)),
        labels=labels,
        law=library.law("calibrated"),
        name="warm-up",
    )


def rare_prints(folder: Path) -> None:
    """Write and check prints of the kinds that the tiny whole job leaves out.

    Parameters
    ----------
    folder : Path
        Stacks go here.
    """
    part, profile = _mushroom(), load_profile("invented-standard")
    shared = profile.replace(channels=_shared(profile.channels, profile.support_channel))
    for name, halftone in (
        ("diffused", Halftone(method="error diffusion")),
        ("ramps", Halftone(interface_width_mm=1.0)),
    ):
        stack = write_stack(part, shared, folder / name, support="none", halftone=halftone)
        preflight(stack)
    entries = [TrayEntry(part=part, copies=2, mark="none")]
    write_job(lay_out(entries, profile, coupons=False).job(), folder / "tray")


def _shared(channels: Mapping[str, str], support: str | None) -> dict[str, str]:
    """The first three model channels, of which two hold the same resin."""
    names = [name for name in channels if name != support][:3]
    found = dict(zip(names, (*_RESINS, _RESINS[0]), strict=False))
    return found | ({} if support is None else {support: channels[support]})
