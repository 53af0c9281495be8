"""A stack of bitmaps turned into layers to page through, a preview in space and a table."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import VoxelmatError
from voxelmat.io.materials import load_library
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.html import table
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.printing.readback import Channel, Stack
from voxelmat.units import number
from voxelmat.workbench.shown import Field, Rgb, Shown, in_materials
from voxelmat.workflow.colours import OKABE_ITO, palette_rgb, resin_colours

__all__ = ["of_stack"]

#: Longest side of a layer's picture, pixels, and of the preview in space, sites.
_PIXELS = 1400
_PREVIEW = 150
_SUPPORT = "#C4C4C4"


def _record(channel: Channel, number_of: int) -> Material:
    """The resin's own record, for its colour; a stand-in where the library has none."""
    name, colour = channel.resin, OKABE_ITO[number_of % len(OKABE_ITO)]
    if channel.role == "support":
        colour = _SUPPORT  # like no resin: it is washed away
    try:
        return load_library()[name]
    except VoxelmatError:
        return Material(
            name=name,
            kind="rigid",
            E=Constant(value=1.0, unit="MPa"),
            nu=Constant(value=0.3),
            density=Constant(value=1e-9),
            colour=colour,
        )


def _preview(stack: Stack) -> tuple[Part, int, int]:
    """Every n-th site of every m-th layer as a part on the tray, and n and m."""
    pitch, shape = stack.pitch_mm, stack.shape
    edge = max(n * p for n, p in zip(shape, pitch, strict=True)) / _PREVIEW
    step = [max(1, round(edge / p)) for p in pitch]
    layers = range(step[2] // 2, shape[2], step[2])
    planes = [stack.layer(k)[step[0] // 2 :: step[0], step[1] // 2 :: step[1]] for k in layers]
    labels = np.stack(planes, axis=2).astype(np.uint16)
    spacing = [s * p for s, p in zip(step, pitch, strict=True)]
    origin = [o * p for o, p in zip(stack.raster.offset, pitch, strict=True)]
    resins = tuple(_record(c, n) for n, c in enumerate(stack.channels))
    part = Part(
        grid=VoxelGrid(
            shape=(labels.shape[0], labels.shape[1], labels.shape[2]),
            spacing=(spacing[0], spacing[1], spacing[2]),
            origin=(origin[0], origin[1], origin[2]),
        ),
        resins=resins,
        palette=(EMPTY, *(Blend.pure(r.name) for r in resins)),
        labels=labels,
        name=stack.folder.name,
    )
    return part, max(step[:2]), step[2]


def _stack_table(stack: Stack) -> str:
    rows = [
        [
            c.name,
            c.resin,
            f"{c.sites:,}",
            number(c.volume_mm3, 4),
            "" if c.designed_mm3 is None else number(c.designed_mm3, 4),
        ]
        for c in stack.channels
    ]
    x, y, z = stack.shape
    dx, dy, dz = (1e3 * p for p in stack.pitch_mm)
    caption = (
        f"{stack.folder.name}: {z:,} layers of {x:,} x {y:,} sites, "
        f"{number(dx, 4)} x {number(dy, 4)} x {number(dz, 4)} µm"
    )
    return table(["channel", "resin", "sites", "laid, mm³", "designed, mm³"], rows, caption)


def of_stack(stack: Stack) -> Shown:
    """A stack: its layers from the files, and a thinned preview in space."""
    part, thin, layers = _preview(stack)
    colours = palette_rgb(part)
    step = max(1, -(-max(stack.shape[:2]) // _PIXELS))
    pitch = stack.pitch_mm

    @lru_cache(maxsize=8)
    def codes(index: int) -> NDArray[np.uint8]:
        return np.ascontiguousarray(stack.layer(index)[::step, ::step])

    def slice_rgb(axis: str, index: int) -> Rgb:
        return np.asarray(colours[codes(index).T[::-1]])

    def where(axis: str, index: int) -> str:
        height = (index + 0.5) * pitch[2]
        shown = "every site" if step == 1 else f"one site in {step} each way"
        return f"layer {index} of {stack.n_layers}, {number(height, 4)} mm over the tray; {shown}"

    items = [{"colour": c, "text": n} for n, c in resin_colours(part).items()]
    return Shown(
        title=f"stack {stack.folder.name}",
        html=_stack_table(stack),
        axes=("z",),
        counts={"z": stack.n_layers},
        best_axis="z",
        size_mm=lambda axis: (stack.shape[0] * pitch[0], stack.shape[1] * pitch[1]),
        where=where,
        frame=lambda axis: (
            f"x of the tray to the right, {number(stack.shape[0] * pitch[0])} mm; "
            f"y upwards, {number(stack.shape[1] * pitch[1])} mm"
        ),
        fields=(Field(name="resin", slice_rgb=slice_rgb, legend={"items": items}),),
        solid=in_materials(part),
        legend={"items": items},
        note=f"preview: one site in {thin} each way, one layer in {layers}",
    )
