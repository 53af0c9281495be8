"""Pictures of what a load does: the deformed cut, the stress, and how the solvers converged."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import PolyCollection
from matplotlib.colors import LogNorm, Normalize
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from voxelmat.model.design_result import DesignResult
from voxelmat.model.part import Part
from voxelmat.model.result import StaticResult
from voxelmat.units import number, quantity
from voxelmat.workflow.report_canvas import (
    AXES,
    Picture,
    colour_bar,
    figure,
    mm_axes,
    plane_extent,
    plane_of,
    png,
    short,
)

__all__ = [
    "design_history_picture",
    "displacement_picture",
    "field_plane",
    "magnification",
    "safety_picture",
    "solver_picture",
    "stress_picture",
]

_DECADES = 4.0  # of stress that a picture tells apart; soft and rigid differ by thousands


def magnification(result: StaticResult) -> float:
    """Factor that shows the largest displacement as about a twelfth of the part: 1, 2 or 5 e n."""
    largest = float(result.size.max(initial=0.0))
    if not largest > 0:
        return 1.0
    grid = result.part.grid
    wanted = max(u - o for u, o in zip(grid.upper, grid.origin, strict=True)) / 12.0 / largest
    power = 10.0 ** math.floor(math.log10(wanted))
    return power * max(s for s in (1, 2, 5) if s * power <= wanted * (1 + 1e-9))


def field_plane(result: StaticResult) -> tuple[int, int]:
    """Axis and voxel index of the cut that shows most of the movement.

    The plane holds the longest axis of the part and the direction of the largest movement. It
    lies in the middle of the part, or where that shows less than four fifths of the largest
    movement, at the place of the latter.
    """
    grid = result.part.grid
    size = result.size
    at = np.unravel_index(int(size.argmax()), size.shape)
    length = np.array([u - o for u, o in zip(grid.upper, grid.origin, strict=True)])
    order = np.argsort(-length, kind="stable")
    main = int(np.abs(result.displacement[at]).argmax())
    longest = int(order[0]) if order[0] != main else int(order[1])
    axis = 3 - main - longest
    filled = np.flatnonzero(result.part.solid.any(axis=tuple(a for a in range(3) if a != axis)))
    if not len(filled):
        return axis, 0
    centre = int(filled[0] + filled[-1]) // 2
    if np.take(size, [centre, centre + 1], axis=axis).max() >= 0.8 * size.max():
        return axis, centre
    return axis, int(filled[np.abs(filled + 0.5 - at[axis]).argmin()])


def _wide(result: StaticResult, axis: int) -> tuple[Figure, Axes, Axes]:
    """Axes for one cut and its colour bar, with room below in proportion to the part."""
    grid = result.part.grid
    horizontal, vertical = (a for a in range(3) if a != axis)
    span = [u - o for u, o in zip(grid.upper, grid.origin, strict=True)]
    width = 9.0
    high = min(6.0, 7.2 * 1.08 * span[vertical] / (1.08 * span[horizontal]) + 0.3)
    height = high + 0.95
    fig = figure(width, height)
    ax = fig.add_axes((0.62 / width, 0.5 / height, 7.2 / width, high / height))
    bar = fig.add_axes((8.05 / width, 0.5 / height, 0.16 / width, high / height))
    return fig, ax, bar


def _quads(
    result: StaticResult, axis: int, index: int, factor: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Corners of the cut's solid voxels, displaced, (n, 4, 2) mm, and the displacement's size."""
    part = result.part
    horizontal, vertical = (a for a in range(3) if a != axis)
    both = np.take(result.displacement, [index, index + 1], axis=axis)
    move = both.mean(axis=axis)
    nodes = part.grid.nodes()
    at = np.stack(np.meshgrid(nodes[horizontal], nodes[vertical], indexing="ij"), axis=-1)
    moved = at + factor * move[..., [horizontal, vertical]]
    size = np.sqrt((move**2).sum(axis=-1))
    solid = np.take(part.solid, index, axis=axis)
    ring = ((0, 0), (1, 0), (1, 1), (0, 1))

    def corner(array: NDArray[np.float64], a: int, b: int) -> NDArray[np.float64]:
        return np.asarray(array[a : a + solid.shape[0], b : b + solid.shape[1]][solid])

    quads = np.stack([corner(moved, a, b) for a, b in ring], axis=1)
    return quads, np.mean([corner(size, a, b) for a, b in ring], axis=0)


def _outline(ax: Axes, part: Part, axis: int, index: int, colour: str = "#555555") -> None:
    """The unloaded outline of a cut, dashed."""
    solid = plane_of(part.solid, axis, index)
    if not solid.any():
        return
    horizontal, vertical = (a for a in range(3) if a != axis)
    centres = [
        np.concatenate([[c[0] - h], c, [c[-1] + h]])
        for c, h in ((part.grid.centres()[a], part.grid.spacing[a]) for a in (horizontal, vertical))
    ]
    ax.contour(
        *centres,
        np.pad(solid.astype(float), 1),
        levels=[0.5],
        colors=colour,
        linewidths=0.8,
        linestyles="--",
    )


def displacement_picture(result: StaticResult) -> Picture:
    """A cut through the point that moves most, deformed, its factor written in the picture."""
    axis, index = field_plane(result)
    factor = magnification(result)
    horizontal, vertical = (a for a in range(3) if a != axis)
    fig, ax, bar = _wide(result, axis)
    quads, size = _quads(result, axis, index, factor)
    cells = PolyCollection(
        list(quads), array=size, cmap="viridis", edgecolors="face", linewidths=0.2
    )
    cells.set_norm(Normalize(0.0, max(float(size.max()), 1e-30)))
    ax.add_collection(cells)
    _outline(ax, result.part, axis, index)
    ax.autoscale_view()
    where = result.part.grid.centres()[axis][index]
    drawn = f"deformed {factor:g} times as much as in truth"
    title = f"{result.load_case.name}: cut at {AXES[axis]} = {short(where)} mm, {drawn}"
    mm_axes(ax, horizontal, vertical, title)
    colour_bar(fig, bar, cells, "displacement, mm")
    largest = number(float(result.size.max()))
    return Picture(
        png=png(fig),
        alt=f"Deformed cut of load case {result.load_case.name}; the largest displacement is "
        f"{largest} mm; {drawn}.",
        caption=f"Displacement under '{result.load_case.name}', largest {largest} mm. The dashed "
        f"line is the unloaded outline; the picture is {drawn}.",
    )


def _field_cut(
    result: StaticResult, field: NDArray[np.float64], norm: Normalize, label: str, title: str
) -> bytes:
    """A voxel field on the cut that shows most; nan is drawn grey."""
    axis, index = field_plane(result)
    horizontal, vertical = (a for a in range(3) if a != axis)
    fig, ax, bar = _wide(result, axis)
    extent = plane_extent(result.part.grid, horizontal, vertical)
    solid = plane_of(result.part.solid, axis, index)
    ax.imshow(
        np.repeat(np.where(solid, 0.8, 1.0)[..., None], 3, axis=2),
        origin="lower",
        extent=extent,
        interpolation="nearest",
    )
    values = np.ma.masked_where(~solid, np.ma.masked_invalid(plane_of(field, axis, index)))
    image = ax.imshow(
        values, origin="lower", extent=extent, interpolation="nearest", cmap="cividis", norm=norm
    )
    where = result.part.grid.centres()[axis][index]
    mm_axes(
        ax,
        horizontal,
        vertical,
        f"{result.load_case.name}: {title}, cut at {AXES[axis]} = {short(where)} mm, not deformed",
    )
    colour_bar(fig, bar, image, label)
    return png(fig)


def stress_picture(result: StaticResult) -> Picture:
    """Von Mises stress on the cut, on a logarithmic scale."""
    stress = np.where(result.part.solid, result.von_mises, 0.0)
    top = max(float(stress.max()), 1e-12)
    norm = LogNorm(top * 10**-_DECADES, top, clip=True)
    at = np.unravel_index(int(stress.argmax()), stress.shape)
    place = ", ".join(short(c[i]) for c, i in zip(result.part.grid.centres(), at, strict=True))
    return Picture(
        png=_field_cut(result, stress, norm, "von Mises stress, MPa", "stress"),
        alt=f"Von Mises stress of load case {result.load_case.name}, largest {number(top)} MPa.",
        caption=f"Von Mises stress under '{result.load_case.name}', each step of the scale ten "
        f"times the one before. Largest {number(top)} MPa at x, y, z = {place} mm. Sharp inner "
        "corners and held edges show more stress the finer the voxels are.",
    )


def safety_picture(result: StaticResult, safety: NDArray[np.float32]) -> Picture:
    """Share of the strength that is used, percent; grey where no strength is known."""
    with np.errstate(divide="ignore", invalid="ignore"):
        used = np.where(result.part.solid, 100.0 / safety.astype(np.float64), np.nan)
    known = used[np.isfinite(used)]
    top = float(known.max()) if known.size else 0.0
    norm = LogNorm(0.1, 100.0, clip=True)
    return Picture(
        png=_field_cut(result, used, norm, "strength used, %", "strength used"),
        alt=f"Share of the strength that load case {result.load_case.name} uses, at most "
        f"{number(top)} %.",
        caption=f"Strength used under '{result.load_case.name}': at most {number(top)} %. "
        "100 % is the strength on record; grey where the record states none.",
    )


_LINES = ("-", "--", ":", "-.")
_INKS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00")


def solver_picture(results: Mapping[str, StaticResult]) -> Picture | None:
    """Residual over the solver's iterations, a line a load case; None without a history."""
    kept = {name: r for name, r in results.items() if len(r.history) > 1}
    if not kept:
        return None
    fig = figure(4.4, 2.9)
    ax = fig.add_axes((0.16, 0.18, 0.8, 0.76))
    for n, (name, result) in enumerate(kept.items()):
        residuals = np.maximum(np.asarray(result.history, dtype=float), 1e-16)
        ax.semilogy(residuals, _LINES[n % 4], color=_INKS[n % 5], label=name)
    _plot_frame(ax, "iteration of the solver", "residual over load")
    ax.legend(fontsize=8, frameon=False)
    return Picture(
        png=png(fig),
        alt="Residual of the linear solver falling with its iterations.",
        caption="How the linear solver converged: "
        + "; ".join(
            f"'{n}' to {r.residual:.1e} in {r.iterations} iterations" for n, r in kept.items()
        )
        + ".",
    )


def _plot_frame(ax: Axes, below: str, beside: str) -> None:
    ax.set_xlabel(below, fontsize=8)
    ax.set_ylabel(beside, fontsize=8)
    ax.tick_params(labelsize=8)
    ax.grid(visible=True, color="#DDDDDD", linewidth=0.6)
    ax.set_axisbelow(True)


def design_history_picture(design: DesignResult) -> Picture | None:
    """Objective over the optimiser's iterations; None where there are none."""
    if not design.history:
        return None
    number_of = [r.iteration for r in design.history]
    fig = figure(4.4, 2.9)
    ax = fig.add_axes((0.2, 0.18, 0.76, 0.76))
    ax.plot(number_of, [r.objective for r in design.history], "o-", color=_INKS[0], markersize=3)
    unit = f", {design.objective_unit}" if design.objective_unit else ""
    _plot_frame(ax, "iteration of the optimiser", f"{design.objective_name}{unit}")
    ax.xaxis.set_major_locator(MaxNLocator(integer=True))
    first = number(design.history[0].objective)
    last = quantity(design.objective, design.objective_unit)
    return Picture(
        png=png(fig),
        alt=f"{design.objective_name} over the optimiser's iterations, from {first} to {last}.",
        caption=f"How the optimiser converged: {design.objective_name} from {first} to {last}. "
        f"It stopped because: {design.reason}.",
    )
