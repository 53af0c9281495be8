"""What the views draw: a part, a result or a stack turned into slices, surfaces and a table."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.html import part_table
from voxelmat.model.part import Part
from voxelmat.units import number, quantity
from voxelmat.workbench.look import Look
from voxelmat.workbench.solid import Solid
from voxelmat.workbench.voxfaces import Quads, coarser
from voxelmat.workflow.colours import palette_rgb, resin_colours

__all__ = [
    "Field",
    "Shown",
    "in_materials",
    "material_field",
    "of_part",
    "picture_of",
    "preview_words",
    "scalar_field",
    "slices_of",
]

AXES = "xyz"
Rgb = NDArray[np.uint8]


@dataclass(frozen=True, slots=True, kw_only=True)
class Field:
    """Something that has a colour in every voxel.

    Attributes
    ----------
    name : str
        With its unit.
    slice_rgb : callable
        ``slice_rgb(axis, index)``: the slice as an image, shape (rows, columns, 3), the later
        of the two other axes upwards.
    legend : dict
        ``items``: colour and text each; or ``ramp``: colours, low and high.
    values : ndarray of float, shape (nx, ny, nz), or None
        Its numbers, for a field that has any.
    unit : str
    """

    name: str
    slice_rgb: Callable[[str, int], Rgb]
    legend: dict[str, Any]
    values: NDArray[np.floating[Any]] | None = None
    unit: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Shown:
    """What a view needs to know.

    Attributes
    ----------
    title : str
    html : str
        A table with units.
    axes : tuple of str
        Axes that slices can be taken across.
    counts : dict
        Slices across each of these axes.
    best_axis : str
        The one whose slices show most.
    size_mm : callable
        ``size_mm(axis)``: width and height of a slice.
    where : callable
        ``where(axis, index)``: the place of a slice, in words.
    frame : callable
        ``frame(axis)``: which way is right and which is up, and how far, in words.
    fields : tuple of Field
    solid : Solid
        What is drawn in space.
    legend : dict
        Of the colours in space.
    note : str
        Written into every picture in space.
    painted : str
        What the colours in space mean, one of `paints`.
    paints : tuple of str
        What else they could mean.
    factor : float or None
        By which displacements are drawn larger; None where nothing is deformed.
    repaint : callable or None
        ``repaint(paint, factor)``: the same in other colours, or deformed by another factor.
    """

    title: str
    html: str
    axes: tuple[str, ...]
    counts: dict[str, int]
    best_axis: str
    size_mm: Callable[[str], tuple[float, float]]
    where: Callable[[str, int], str]
    frame: Callable[[str], str]
    fields: tuple[Field, ...]
    solid: Solid
    legend: dict[str, Any] = field(default_factory=dict)
    note: str = ""
    painted: str = "material"
    paints: tuple[str, ...] = ("material",)
    factor: float | None = None
    repaint: Callable[[str, float | None], Shown] | None = None

    def surface(self, axis: str, share: float) -> tuple[Quads, Rgb]:
        """Faces and their colours, cut away below `share` (0 to 1) along `axis`."""
        made = self.solid.surface(Look(axis=axis, share=share))
        return made.quads, made.rgb

    def values_at(self, voxel: tuple[int, ...]) -> dict[str, float]:
        """The fields' numbers in a voxel, by name with unit."""
        return {f.name: float(f.values[voxel]) for f in self.fields if f.values is not None}

    def words_at(self, voxel: tuple[int, ...]) -> list[str]:
        """The same in words: ``displacement 0.123 mm``."""
        return [
            f"{f.name.removesuffix(f', {f.unit}')} {quantity(float(f.values[voxel]), f.unit)}"
            for f in self.fields
            if f.values is not None
        ]


def picture_of(array: NDArray[Any], axis: str, index: int) -> NDArray[Any]:
    """A slice of an ``[i, j, k]`` array as an image with its later axis upwards."""
    return np.asarray(np.take(array, index, axis=AXES.index(axis)).T[::-1])


def _material_legend(part: Part) -> dict[str, Any]:
    items = [{"colour": c, "text": n} for n, c in resin_colours(part).items()]
    if any(len(b.fractions) > 1 for b in part.palette):
        items.append({"colour": "transparent", "text": "blends lie between"})
    return {"items": items}


def material_field(part: Part) -> Field:
    """The materials of a part in their colours."""
    colours = palette_rgb(part)

    def slice_rgb(axis: str, index: int) -> Rgb:
        solid = picture_of(part.solid, axis, index)
        rgb = colours[picture_of(part.labels, axis, index)]
        return np.asarray(np.where(solid[..., None], rgb, np.uint8(255)))

    return Field(name="material", slice_rgb=slice_rgb, legend=_material_legend(part))


def _lut(name: str) -> Rgb:
    from matplotlib import colormaps

    return np.asarray(np.rint(255 * colormaps[name](np.arange(256))[:, :3]), dtype=np.uint8)


def _ramp(lut: Rgb, low: str, high: str) -> dict[str, Any]:
    picked = lut[:: 255 // 15]
    colours = ["#{:02x}{:02x}{:02x}".format(*c) for c in picked]
    return {"ramp": {"colours": colours, "low": low, "high": high}}


def scalar_field(
    name: str,
    unit: str,
    values: NDArray[np.floating[Any]],
    solid: NDArray[np.bool_],
    cmap: str,
    decades: float | None = None,
    top: float | None = None,
) -> tuple[Field, Callable[[NDArray[np.floating[Any]]], Rgb]]:
    """A field of numbers, linear from 0 or over some decades below its largest value.

    `top` is the value of the last colour; the field's largest where left out. Returns the field,
    and the function from values to colours.
    """
    if top is None:
        top = float(np.max(values, where=solid, initial=0.0))
    top = max(top, 1e-30)
    lut = _lut(cmap)

    def colour(v: NDArray[np.floating[Any]]) -> Rgb:
        if decades is None:
            share = v / top
        else:
            share = 1.0 + np.log10(np.maximum(v, 1e-30) / top) / decades
        return np.asarray(lut[np.clip(255.0 * share, 0, 255).astype(np.uint8)])

    def slice_rgb(axis: str, index: int) -> Rgb:
        inside = picture_of(solid, axis, index)[..., None]
        rgb = colour(picture_of(values, axis, index))
        return np.asarray(np.where(inside, rgb, np.uint8(255)))

    if decades is None:
        low = quantity(0.0, unit)
    else:
        low = f"{quantity(top * 10**-decades, unit)} or less, logarithmic"
    ramp = _ramp(lut, low, quantity(top, unit))
    made = Field(
        name=f"{name}, {unit}" if unit else name,
        slice_rgb=slice_rgb,
        legend=ramp,
        values=values,
        unit=unit,
    )
    return made, colour


def slices_of(part: Part) -> dict[str, Any]:
    """What `Shown` says of the slices of anything on a part's grid."""
    grid = part.grid
    span = [u - o for u, o in zip(grid.upper, grid.origin, strict=True)]

    def size_mm(axis: str) -> tuple[float, float]:
        u, v = (span[a] for a in range(3) if AXES[a] != axis)
        return u, v

    def where(axis: str, index: int) -> str:
        a = AXES.index(axis)
        place = round(grid.centres()[a][index], 3) + 0.0
        return f"{axis} = {place:g} mm ({index + 1} of {grid.shape[a]})"

    def frame(axis: str) -> str:
        u, v = (a for a in range(3) if AXES[a] != axis)
        low, high = grid.origin, grid.upper
        return (
            f"{AXES[u]} to the right, {number(low[u])} to {number(high[u])} mm; "
            f"{AXES[v]} upwards, {number(low[v])} to {number(high[v])} mm"
        )

    return {
        "axes": ("x", "y", "z"),
        "counts": dict(zip(AXES, grid.shape, strict=True)),
        "best_axis": AXES[int(np.argmin(span))],
        "size_mm": size_mm,
        "where": where,
        "frame": frame,
    }


def preview_words(step: int) -> str:
    """What a picture says where only every n-th voxel is drawn."""
    return "" if step == 1 else f"; preview: one voxel in {step} is drawn, each way"


def in_materials(part: Part) -> Solid:
    """A part in the colours of its materials, in space."""
    drawn, step = coarser(part)
    colours = palette_rgb(part)
    return Solid(part, drawn, step, lambda voxel: colours[drawn.labels[tuple(voxel.T)]])


def of_part(part: Part) -> Shown:
    """A part in the colours of its materials."""
    solid = in_materials(part)
    return Shown(
        title=part.name,
        html=part_table(part),
        fields=(material_field(part),),
        solid=solid,
        legend=_material_legend(part),
        note=preview_words(solid.step).removeprefix("; "),
        **slices_of(part),
    )
