"""A design as droplets before anything is written: layers halftoned on demand, at true aspect."""

from __future__ import annotations

import threading
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.part import Part
from voxelmat.printing.job import PrintJob
from voxelmat.printing.source import source_of
from voxelmat.units import number
from voxelmat.workbench.shown import Field, Rgb, Shown
from voxelmat.workflow.colours import palette_rgb, resin_colours

__all__ = ["of_droplets"]

_SUPPORT = (196, 196, 196)
_PIXELS = 1400


def of_droplets(
    job: PrintJob,
    still: Shown,
    centre_mm: tuple[float, float] | None = None,
    width_mm: float | None = None,
) -> Shown:
    """Layers of a print job, sliced and halftoned when they are looked at.

    Parameters
    ----------
    job : PrintJob
    still : Shown
        What stays in the view in space.
    centre_mm : tuple of float, optional
        Middle of the window that is shown, mm along tray x and y from its corner; the middle of
        the job where left out.
    width_mm : float, optional
        Of the window; all of it where left out.
    """
    source = source_of(job)
    raster = job.window
    pitch = [float(p) for p in raster.pitch]
    lock = threading.Lock()
    part = _palette_part(job)
    colours = np.zeros((256, 3), dtype=np.uint8)
    rgb = palette_rgb(part)
    colours[: len(rgb)] = rgb
    colours[len(rgb)] = _SUPPORT
    window = _window(job, centre_mm, width_mm)
    shown = [s.stop - s.start for s in window]
    step = max(1, -(-max(shown) // _PIXELS))

    @lru_cache(maxsize=4)
    def layer(index: int) -> NDArray[np.uint8]:
        with lock:
            sites = next(iter(source.sites(index, index + 1)))
            width = raster.image_shape[2]
            view = raster.from_image(sites[:, :width])
            return np.ascontiguousarray(view[window][::step, ::step])

    def slice_rgb(axis: str, index: int) -> Rgb:
        return np.asarray(colours[layer(index).T[::-1]])

    def where(axis: str, index: int) -> str:
        every = "every site" if step == 1 else f"one site in {step} each way"
        height = number((index + 0.5) * pitch[2], 4)
        return f"layer {index} of {raster.shape[2]}, {height} mm over the tray; {every}"

    def size_mm(axis: str) -> tuple[float, float]:
        return shown[0] * pitch[0], shown[1] * pitch[1]

    def frame(axis: str) -> str:
        low = [(s.start + o) * p for s, o, p in zip(window, raster.offset, pitch, strict=False)]
        high = [(s.stop + o) * p for s, o, p in zip(window, raster.offset, pitch, strict=False)]
        return (
            f"x of the tray to the right, {number(low[0], 4)} to {number(high[0], 4)} mm; "
            f"y upwards, {number(low[1], 4)} to {number(high[1], 4)} mm"
        )

    items = [{"colour": c, "text": n} for n, c in resin_colours(part).items()]
    if job.draws_support:
        items.append({"colour": "#c4c4c4", "text": "support"})
    dx, dy, dz = (number(1e3 * p, 4) for p in pitch)
    return Shown(
        title=f"droplets of {part.name}",
        html=f"<p>Sites of {dx} x {dy} x {dz} um, {job.halftone.method}.</p>",
        axes=("z",),
        counts={"z": raster.shape[2]},
        best_axis="z",
        size_mm=size_mm,
        where=where,
        frame=frame,
        fields=(Field(name="droplets", slice_rgb=slice_rgb, legend={"items": items}),),
        solid=still.solid,
        legend=still.legend,
        note=still.note,
    )


def _palette_part(job: PrintJob) -> Part:
    """A part whose palette is the job's resins, in the order of their site numbers."""
    first = job.parts[0].part
    known = {m.name: m for item in job.parts for m in item.part.resins}
    resins = tuple(known[n] for n in job.resins)
    return Part(
        grid=first.grid.__class__(shape=(1, 1, 1), spacing=(1.0, 1.0, 1.0)),
        resins=resins,
        palette=(EMPTY, *(Blend.pure(r.name) for r in resins)),
        labels=np.ones((1, 1, 1), dtype=np.uint16),
        name=job.parts[0].name,
    )


def _window(
    job: PrintJob, centre_mm: tuple[float, float] | None, width_mm: float | None
) -> tuple[slice, slice]:
    """Sites of the job's window that are shown, along tray x and y."""
    raster = job.window
    slices = []
    for axis in (0, 1):
        n, pitch = raster.shape[axis], float(raster.pitch[axis])
        if width_mm is None:
            slices.append(slice(0, n))
            continue
        middle = n // 2
        if centre_mm is not None:
            middle = int(centre_mm[axis] / pitch) - raster.offset[axis]
        half = max(4, round(0.5 * width_mm / pitch))
        low = min(max(0, middle - half), max(0, n - 2 * half))
        slices.append(slice(low, min(n, low + 2 * half)))
    return slices[0], slices[1]
