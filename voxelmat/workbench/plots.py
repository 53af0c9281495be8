"""The small plots of the desk: a value along a line, a histogram, a history; as PNG bytes."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.profile import PrintProfile
from voxelmat.workflow.report_canvas import figure, png
from voxelmat.workflow.report_profile import draw_tray

__all__ = ["histogram_png", "line_png", "lines_png", "tray_png"]

_WIDTH, _HEIGHT = 3.6, 2.2  # inches; fits the desk
_COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9")  # Okabe and Ito 2008
_STYLES = ("-", "--", "-.", ":")
_GREY = "#444444"


def _axes(xlabel: str, ylabel: str, height: float = _HEIGHT):  # type: ignore[no-untyped-def]
    made = figure(_WIDTH, height)
    ax = made.add_axes((0.19, 0.21, 0.77, 0.72))
    ax.set_xlabel(xlabel, fontsize=8, color=_GREY)
    ax.set_ylabel(ylabel, fontsize=8, color=_GREY)
    ax.tick_params(labelsize=7.5, colors=_GREY)
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)
    return made, ax


def line_png(x: NDArray[np.float64], y: NDArray[np.float64], xlabel: str, ylabel: str) -> bytes:
    """One curve; gaps (nan) stay gaps."""
    return lines_png({"": (x, y)}, xlabel, ylabel)


def lines_png(
    curves: Mapping[str, tuple[Sequence[float] | NDArray[np.float64], ...]],
    xlabel: str,
    ylabel: str,
    *,
    logarithmic: bool = False,
) -> bytes:
    """Curves by name, told apart by colour and by dashes."""
    made, ax = _axes(xlabel, ylabel)
    for n, (name, (x, y)) in enumerate(curves.items()):
        ax.plot(
            x, y, color=_COLOURS[n % len(_COLOURS)], linestyle=_STYLES[n % len(_STYLES)],
            linewidth=1.6, label=name,
        )  # fmt: skip
    if logarithmic:
        ax.set_yscale("log")
    ax.grid(color="#DDDDDD", linewidth=0.6)
    if any(curves):
        ax.legend(fontsize=7, frameon=False)
    return png(made)


def histogram_png(values: NDArray[np.float64], xlabel: str, *, logarithmic: bool = False) -> bytes:
    """Share of the voxels by value; the ends are said by the axis."""
    made, ax = _axes(xlabel, "share of voxels, %")
    if logarithmic:
        values = values[values > 0]
    if len(values):
        if logarithmic:
            top = float(values.max())
            edges = np.geomspace(max(float(values.min()), top * 1e-6), top * (1 + 1e-9), 41)
            ax.set_xscale("log")
        else:
            edges = np.linspace(float(values.min()), float(values.max()) + 1e-30, 41)
        ax.hist(values, edges, weights=np.full(len(values), 100.0 / len(values)), color="#0072B2")
    return png(made)


def tray_png(profile: PrintProfile) -> bytes:
    """The tray from above, at true aspect, in the width of the desk."""
    width, depth, _ = profile.tray_size
    height = float(np.clip(0.72 * _WIDTH * depth / width + 0.8, 1.8, 4.5))
    made = figure(_WIDTH, height)
    ax = made.add_axes((0.17, 0.5 / height, 0.8, 1 - 0.8 / height))
    draw_tray(ax, profile)
    ax.set_xlabel("mm", fontsize=8)
    ax.tick_params(labelsize=7.5)
    return png(made)
