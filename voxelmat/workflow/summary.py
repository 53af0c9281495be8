"""A written stack in numbers and a few pictures, for reports and answers."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.printing.estimate import PrintEstimate
from voxelmat.printing.readback import Stack
from voxelmat.units import number
from voxelmat.workflow.report_data import LayerPicture, StackSummary

__all__ = ["summarise"]

#: Pictures of layers at these shares of the height.
_HEIGHTS = (0.25, 0.5, 0.75)
#: Longest side of a layer's picture, pixels: beyond it every n-th site is drawn.
_PIXELS = 1400
#: Width and height of the window that shows single droplets.
_WINDOW_MM = (8.0, 4.0)

_SUPPORT = {
    "columns": "columns below overhangs, laid by us through the support channel",
    "grid": "a grid of walls below overhangs under a solid interface, laid by us",
    "skin": "a thin skin beside and below the part, laid by us",
    "machine": "the machine adds it; none is in the stack, and its volume is not known",
    "none": "none",
}


def _layer_picture(stack: Stack, layer: int) -> LayerPicture:
    """One layer as seen from above, y up, thinned to what a screen can show."""
    site = stack.layer(layer)
    step = max(1, -(-max(site.shape) // _PIXELS))
    pitch = stack.pitch_mm
    return LayerPicture(
        number=layer,
        height_mm=(layer + 0.5) * pitch[2],
        codes=np.ascontiguousarray(site[::step, ::step].T[::-1]),
        size_mm=(site.shape[0] * pitch[0], site.shape[1] * pitch[1]),
        note="" if step == 1 else f"One site in {step} is drawn, each way.",
    )


def _mixture(stack: Stack, site: NDArray[np.uint8]) -> tuple[float, tuple[int, int]]:
    """How mixed the most mixed window of a layer is (0 to 1), and its first site."""
    size = [max(1, round(w / p)) for w, p in zip(_WINDOW_MM, stack.pitch_mm, strict=False)]
    blocks = [n // s for n, s in zip(site.shape, size, strict=True)]
    if min(blocks) < 1:
        return 0.0, (0, 0)
    cut = site[: blocks[0] * size[0], : blocks[1] * size[1]]
    tiles = cut.reshape(blocks[0], size[0], blocks[1], size[1])
    shares = [
        (tiles == n + 1).mean(axis=(1, 3))
        for n, c in enumerate(stack.channels)
        if c.role == "model"
    ]
    full = np.sum(shares, axis=0)
    mixed = np.where(full > 0.999, full - np.max(shares, axis=0), 0.0)
    i, j = np.unravel_index(int(mixed.argmax()), mixed.shape)
    return float(mixed[i, j]), (int(i) * size[0], int(j) * size[1])


def _droplets(stack: Stack, layers: list[int]) -> list[LayerPicture]:
    """The most mixed window of these layers, every droplet site drawn; none where all is pure."""
    pitch = stack.pitch_mm
    found = [(*_mixture(stack, stack.layer(k)), k) for k in layers]
    mixed, (i, j), layer = max(found)
    if not mixed > 0.02:
        return []
    nx, ny = (max(1, round(w / p)) for w, p in zip(_WINDOW_MM, pitch, strict=False))
    codes = stack.layer(layer)[i : i + nx, j : j + ny]
    return [
        LayerPicture(
            number=layer,
            height_mm=(layer + 0.5) * pitch[2],
            codes=np.ascontiguousarray(codes.T[::-1]),
            size_mm=(codes.shape[0] * pitch[0], codes.shape[1] * pitch[1]),
            corner_mm=(i * pitch[0], j * pitch[1]),
            note="A window in which every droplet site is drawn.",
        )
    ]


def _in_words(figures: PrintEstimate) -> dict[str, str]:
    """The estimate as the report prints it."""
    low, high = (t / 3600 for t in figures.time_s)
    rows = {
        "layers": f"{figures.layers}",
        "height, mm": number(figures.height_mm),
        "passes, in all and at most a layer": f"{figures.passes_in_all:.0f}, {figures.passes}",
        "time, h (warm-up and cool-down too, not cleaning)": f"{number(low)} to {number(high)}",
        "files, MB": number(figures.file_bytes / 1e6),
    }
    if figures.cost is not None:
        least, most = figures.cost
        rows[f"cost, {figures.cost_unit}"] = f"{number(least)} to {number(most)}"
    elif figures.unpriced:
        rows["cost"] = f"not known: no price of {', '.join(figures.unpriced)} in the profile"
    if figures.support_mm3 is not None:
        rows["support, cm³"] = number(figures.support_mm3 / 1000)
    else:
        rows["support, cm³"] = "not known: the machine adds it"
    if figures.invented:
        rows["basis"] = "an invented profile: no real printer's time"
    return rows


def _turned(stack: Stack) -> str:
    """How the first part stands on the tray, in words."""
    turn = stack.parts[0].raster.rotation
    if all(turn[a][a] == 1 for a in range(3)):
        return "as drawn, z up"
    along = [next(t for t in range(3) if turn[t][p]) for p in range(3)]
    return "; ".join(
        f"{'xyz'[p]} of the part along {'-' if turn[t][p] < 0 else '+'}{'xyz'[t]} of the tray"
        for p, t in enumerate(along)
    )


def summarise(stack: Stack, figures: PrintEstimate | None = None) -> StackSummary:
    """Gather what a reader wants to know of a stack."""
    method = stack.manifest["method"]
    size = [n * p for n, p in zip(stack.shape, stack.pitch_mm, strict=True)]
    layers = sorted({int(share * (stack.n_layers - 1)) for share in _HEIGHTS})
    return StackSummary(
        folder=stack.folder.name,
        pitch_mm=stack.pitch_mm,
        sites=stack.shape,
        size_mm=(size[0], size[1], size[2]),
        resins=tuple(c.resin for c in stack.channels),
        channels=tuple(c.name for c in stack.channels),
        volumes_mm3=tuple(c.volume_mm3 for c in stack.channels),
        designed_mm3=tuple(c.designed_mm3 for c in stack.channels),
        support=_SUPPORT[stack.support_policy],
        orientation=_turned(stack),
        halftone=f"{method['halftone']}; seed {method['seed']}",
        layers=(*(_layer_picture(stack, k) for k in layers), *_droplets(stack, layers)),
        estimate={} if figures is None else _in_words(figures),
        bill=() if figures is None else figures.bill,
    )
