"""A trade-off front as a plot and as a table in text."""

from __future__ import annotations

import csv
import io

import numpy as np

from voxelmat.units import number
from voxelmat.workflow.report_canvas import Picture, figure, png
from voxelmat.workflow.tradeoff import Front

__all__ = ["front_csv", "front_lines", "front_picture"]

_INKS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9")
_MARKS = "os^Dv*"


def _label(key: str) -> str:
    """``optimise.limit[0].at_most_g`` in words."""
    sense, unit = key.rsplit(".", 1)[-1].split("_", 2)[1:][:1], key.rsplit(".", 1)[-1]
    rest = unit.split("_")[2:]
    return f"at {sense[0]}" + (f", {' '.join(rest)}" if rest else "")


def front_picture(front: Front, names: tuple[str, ...]) -> Picture | None:
    """The objective over the first limit, a curve for each value of the second.

    Parameters
    ----------
    front : Front
    names : tuple of str
        What people call the limits that are swept.
    """
    drawn = [p for p in front.points if p.values]
    if not drawn:
        return None
    goal = drawn[0].values[0]
    fig = figure(5.6, 3.6)
    ax = fig.add_axes((0.16, 0.16, 0.8, 0.78))
    second = sorted({p.limits[1] for p in drawn}) if len(front.sweeps) == 2 else [None]
    for n, value in enumerate(second):
        mine = [p for p in drawn if value is None or p.limits[1] == value]
        x = [p.limits[0] for p in mine]
        label = None if value is None else f"{names[1]} {_label(front.sweeps[1].key)} {value:g}"
        ink = _INKS[n % len(_INKS)]
        ax.plot(x, [p.values[0].optimised for p in mine], "-", marker=_MARKS[n % len(_MARKS)],
                color=ink, label=label, markersize=5)  # fmt: skip
        made = np.array([p.values[0].palette for p in mine])
        if np.isfinite(made).any():
            ax.plot(x, made, "x", color=ink, markersize=6)
        for p in mine:
            ax.annotate(str(p.number), (p.limits[0], p.values[0].optimised), fontsize=7,
                        xytext=(4, 4), textcoords="offset points")  # fmt: skip
            if not p.feasible:
                ax.plot(p.limits[0], p.values[0].optimised, "o", mfc="none", mec="black", ms=11)
    unit = f", {goal.unit}" if goal.unit else ""
    ax.set_xlabel(f"{names[0]} {_label(front.sweeps[0].key)}", fontsize=8)
    ax.set_ylabel(f"{goal.name}{unit}", fontsize=8)
    ax.tick_params(labelsize=8)
    ax.grid(visible=True, color="#DDDDDD", linewidth=0.6)
    ax.set_axisbelow(True)
    if front.invented:
        fig.text(0.16, 0.955, "invented data", fontsize=8, color="#B00020")
    if second != [None]:
        ax.legend(fontsize=7, frameon=False)
    return Picture(
        png=png(fig),
        alt=f"{goal.name} over the limit on {names[0]}, {len(drawn)} designs.",
        caption=f"{goal.name} over the limit on {names[0]}: optimised (line) and of the part that "
        "was made (x); a ring marks designs that break a limit. Numbers are those of the points.",
    )


def front_lines(front: Front, names: tuple[str, ...]) -> list[str]:
    """A row a point, in columns."""
    drawn = [p for p in front.points if p.values]
    goal = drawn[0].values[0] if drawn else None
    head = ["point", *(f"{n} {_label(s.key)}" for n, s in zip(names, front.sweeps, strict=True))]
    head += [f"{goal.name}, {goal.unit}".rstrip(", ") if goal else "objective", "of the part"]
    head += ["limits", "iterations", "design"]
    rows = [head]
    for p in front.points:
        row = [str(p.number), *(f"{v:g}" for v in p.limits)]
        if p.values:
            row += [number(p.values[0].optimised), number(p.values[0].palette)]
            met = "met" if p.feasible else "NOT met"
            row += [met, str(p.iterations), p.design]
        else:
            row += ["-", "-", "-", "-", p.reason]
        rows.append(row)
    wide = [max(len(r[c]) for r in rows) for c in range(len(head) - 1)]
    lines = [
        "  ".join([*(cell.rjust(w) for cell, w in zip(r[:-1], wide, strict=True)), r[-1]])
        for r in rows
    ]
    lines += [
        f"point {p.number}: point {p.beaten_by} is better under tighter limits; let it run longer."
        for p in front.points
        if p.beaten_by
    ]
    return lines


def front_csv(front: Front) -> str:
    """The rows as comma-separated text."""
    rows = front.rows
    keys = list(dict.fromkeys(k for row in rows for k in row))
    held = io.StringIO()
    writer = csv.DictWriter(held, keys, lineterminator="\n")
    writer.writeheader()
    writer.writerows(rows)
    return held.getvalue()
