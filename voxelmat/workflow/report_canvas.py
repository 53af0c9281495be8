"""A drawing surface for the report: one style, no global state, PNG bytes out."""

from __future__ import annotations

import base64
import io
from dataclasses import dataclass
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.cm import ScalarMappable
from matplotlib.colors import LogNorm
from matplotlib.figure import Figure
from matplotlib.patches import Patch
from matplotlib.ticker import FuncFormatter
from numpy.typing import NDArray

from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.workflow.colours import resin_colours

__all__ = [
    "AXES",
    "Picture",
    "colour_bar",
    "figure",
    "legend",
    "legend_patches",
    "mm_axes",
    "plane_extent",
    "plane_of",
    "png",
    "short",
]

AXES = "xyz"
_DPI = 130
_NAMES = 8
_GREY = "#444444"


@dataclass(frozen=True, slots=True, kw_only=True)
class Picture:
    """A picture with the words that go with it.

    Attributes
    ----------
    png : bytes
    alt : str
        What it shows, for those who cannot see it.
    caption : str
    """

    png: bytes
    alt: str
    caption: str

    @property
    def data_uri(self) -> str:
        """The picture as text for an ``<img>``."""
        return "data:image/png;base64," + base64.b64encode(self.png).decode()


def figure(width: float, height: float) -> Figure:
    """An empty white figure, inches."""
    made = Figure(figsize=(width, height), dpi=_DPI, facecolor="white")
    FigureCanvasAgg(made)
    return made


def colour_bar(fig: Figure, bar: Axes, artist: ScalarMappable, label: str) -> None:
    """A colour bar with its label in full and plain numbers on a logarithmic scale."""
    made = fig.colorbar(artist, cax=bar)
    made.set_label(label, fontsize=8)
    made.ax.tick_params(labelsize=8)
    if isinstance(made.norm, LogNorm):
        made.ax.yaxis.set_major_formatter(FuncFormatter(lambda v, _: f"{v:g}"))


def png(fig: Figure) -> bytes:
    """The figure as PNG bytes; the same figure gives the same bytes."""
    store = io.BytesIO()
    fig.savefig(store, format="png", dpi=_DPI, metadata={"Software": None})
    return store.getvalue()


def mm_axes(ax: Axes, horizontal: int, vertical: int, title: str) -> None:
    """Label two axes in mm, at true aspect."""
    ax.set_aspect("equal")
    ax.set_title(title, fontsize=9, loc="left", color="black")
    ax.set_xlabel(f"{AXES[horizontal]}, mm", fontsize=8, color=_GREY)
    ax.set_ylabel(f"{AXES[vertical]}, mm", fontsize=8, color=_GREY)
    ax.tick_params(labelsize=8, colors=_GREY)
    for side in ax.spines.values():
        side.set_color("#BBBBBB")


def plane_extent(
    grid: VoxelGrid, horizontal: int, vertical: int
) -> tuple[float, float, float, float]:
    """Left, right, bottom and top of the grid in two of its axes, mm."""
    low, high = grid.origin, grid.upper
    return low[horizontal], high[horizontal], low[vertical], high[vertical]


def short(place: float) -> str:
    """A coordinate, mm, to a hundredth, without trailing zeros."""
    return f"{round(place, 2) + 0.0:g}"


def legend(fig: Figure, patches: list[Patch]) -> None:
    """Names of materials below the drawing, two rows at most; the tables have them all."""
    shown = patches if len(patches) <= _NAMES else patches[: _NAMES - 1]
    if len(shown) < len(patches):
        rest = f"and {len(patches) - len(shown)} more, see the table"
        shown = [*shown, Patch(facecolor="none", edgecolor="none", label=rest)]
    fig.legend(
        handles=shown,
        loc="lower left",
        ncols=min(4, len(shown)),
        fontsize=8,
        frameon=False,
        bbox_to_anchor=(0.02, 0.0),
    )


def legend_patches(part: Part) -> list[Patch]:
    """A patch a resin of the palette, with its name."""
    colours = resin_colours(part)
    return [
        Patch(facecolor=colour, edgecolor="#333333", linewidth=0.5, label=name)
        for name, colour in colours.items()
    ]


def plane_of(array: NDArray[Any], axis: int, index: int) -> NDArray[Any]:
    """The cut through an ``[i, j, k]`` array, as an image: rows along the later of the two axes."""
    return np.asarray(np.take(array, index, axis=axis).T)
