"""A trade-off front: the same question under a sweep of one or two limits, each answer a design."""

from __future__ import annotations

import copy
import shutil
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from itertools import product
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import Cancelled, InputError
from voxelmat.io.atomic import explain_os_error, write_json, write_text
from voxelmat.io.design import complete_design, load_design
from voxelmat.io.store import save_part
from voxelmat.model.design import Design
from voxelmat.model.design_result import DesignResult
from voxelmat.model.design_stages import Price, StagedValue
from voxelmat.monitor import SILENT, Figure, Monitor
from voxelmat.workflow.build import build
from voxelmat.workflow.designing import optimised
from voxelmat.workflow.draft_keys import get_at, set_at
from voxelmat.workflow.draft_toml import updated_toml
from voxelmat.workflow.shapecache import ShapeCache

__all__ = ["Front", "Point", "Sweep", "limit_key", "tradeoff"]

_MOST_POINTS = 100


@dataclass(frozen=True, slots=True, kw_only=True)
class Sweep:
    """One limit and the values that it takes.

    Attributes
    ----------
    key : str
        Of the limit's value in the design file, such as ``"optimise.limit[0].at_most_g"``; see
        `limit_key`.
    values : tuple of float
        In the unit of that key.
    """

    key: str
    values: tuple[float, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Point:
    """One answer of a front.

    Attributes
    ----------
    number : int
        From 1, in the order of the sweep.
    limits : tuple of float
        Value of each sweep, in the unit of its key.
    values : tuple of StagedValue
        The objective, then every limit; empty where the point has no design.
    prices : tuple of Price
    feasible : bool
        Whether the design meets all limits.
    iterations : int
    reason : str
        Why the run stopped, or why there is no design.
    beaten_by : int
        Number of a point with tighter limits and a better objective; 0 where there is none.
    design, part : str
        Names of the files of the design and its part; empty where there is none.
    """

    number: int
    limits: tuple[float, ...]
    values: tuple[StagedValue, ...] = ()
    prices: tuple[Price, ...] = ()
    feasible: bool = False
    iterations: int = 0
    reason: str = ""
    beaten_by: int = 0
    design: str = ""
    part: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Front:
    """All answers of a sweep."""

    sweeps: tuple[Sweep, ...]
    points: tuple[Point, ...]
    folder: Path
    invented: bool = False

    @property
    def rows(self) -> list[dict[str, Any]]:
        """A row a point, plain data: its limits, its objective at every stage, its files."""
        rows = []
        for p in self.points:
            row: dict[str, Any] = {"point": p.number}
            row |= dict(zip((s.key for s in self.sweeps), p.limits, strict=True))
            for v in p.values:
                row[f"{v.name}, {v.unit}".rstrip(", ")] = v.optimised
                row[f"{v.name} of the part"] = v.palette if np.isfinite(v.palette) else None
            row |= {"limits met": p.feasible, "iterations": p.iterations}
            row |= {"design": p.design, "beaten by": p.beaten_by, "reason": p.reason}
            rows.append(row)
        return rows


def limit_key(design: Design, name: str) -> str:
    """The key of a limit's value from a short name.

    Parameters
    ----------
    design : Design
    name : str
        ``"volume"``, ``"mass"``, the resin of a resin limit, a measure such as ``"frequency"``, or
        the number of the limit in the file, from 0.

    Raises
    ------
    InputError
        If no limit, or more than one, answers to it.
    """
    limits = design.data.get("optimise", {}).get("limit", [])
    named = [str(e.get("resin") or e.get("kind") or e.get("measure")) for e in limits]
    found = [i for i, n in enumerate(named) if name in (n, str(i))]
    if len(found) != 1:
        told = ", ".join(f"{i} = {n}" for i, n in enumerate(named)) or "none"
        raise InputError(
            f"'{name}' names {len(found)} limits of the design; use a name or a number of: {told}.",
            file=design.file_name,
            key="optimise.limit",
        )
    (i,) = found
    last = next(k for k in limits[i] if k.startswith(("at_most", "at_least")))
    return f"optimise.limit[{i}].{last}"


def tradeoff(
    design: Design | str | Path,
    sweeps: Sequence[Sweep],
    folder: str | Path,
    *,
    monitor: Monitor = SILENT,
    seen: Callable[[Point], None] | None = None,
) -> Front:
    """Answer the design's question once for every value, or pair of values, of its limits.

    Each run but the first begins with the design of its neighbour. A sweep that was interrupted
    goes on from what it finds in the folder.

    Parameters
    ----------
    design : Design or path
        With an ``[optimise]`` table.
    sweeps : sequence of Sweep
        One or two.
    folder : path
        Gets, for every point, a design file with its part (``point-03.toml``,
        ``point-03.npz``), copies of the files that they name, and ``front.json``.
    monitor : Monitor
    seen : callable, optional
        Given each `Point` when it is done.

    Raises
    ------
    InputError
        Nothing to sweep, a key that is no limit, or more than 100 points. A value that no design
        can meet is a point without a design instead.
    Cancelled
        From the monitor; finished points stay in the folder.
    """
    if not isinstance(design, Design):
        design = load_design(design)
    sweeps = _checked(design, sweeps)
    folder = Path(folder)
    _copy_inputs(design, folder)
    shapes, points = ShapeCache(), []
    start: NDArray[np.float64] | None = None
    order = _serpentine([len(s.values) for s in sweeps])
    for done, (number, at) in enumerate(order):
        limits = tuple(s.values[i] for s, i in zip(sweeps, at, strict=True))
        part = _Point(design, sweeps, limits, number, folder, shapes)
        point, found = part.run(start, _Within(monitor, done, len(order)))
        points.append(point)
        start = found.unknowns if found is not None else start
        if seen is not None:
            seen(point)
    front = Front(
        sweeps=tuple(sweeps), points=_compared(sorted(points, key=lambda p: p.number), sweeps),
        folder=folder, invented=design.invented,
    )  # fmt: skip
    write_json(folder / "front.json", {"invented": design.invented, "points": front.rows})
    return front


def _checked(design: Design, sweeps: Sequence[Sweep]) -> list[Sweep]:
    def refuse(message: str, key: str = "optimise") -> InputError:
        return InputError(message, file=design.file_name, key=key)

    if design.optimise is None:
        raise refuse("The design has no [optimise] table, so there is nothing to trade off.")
    if not 1 <= len(sweeps) <= 2:
        raise refuse(f"A trade-off sweeps one or two limits; got {len(sweeps)}.")
    for sweep in sweeps:
        now = get_at(dict(design.data), sweep.key)
        if not sweep.key.startswith("optimise.limit[") or isinstance(now, str | bool | list):
            raise refuse(f"'{sweep.key}' is not the value of a limit.", sweep.key)
        if not sweep.values or len(set(sweep.values)) != len(sweep.values):
            raise refuse("A sweep takes at least one value, none of them twice.", sweep.key)
    count = int(np.prod([len(s.values) for s in sweeps]))
    if count > _MOST_POINTS:
        raise refuse(f"A trade-off has at most {_MOST_POINTS} points; got {count}.")
    if len({s.key for s in sweeps}) != len(sweeps):
        raise refuse("The same limit is swept twice.", sweeps[0].key)
    return [replace(s, values=tuple(sorted(s.values))) for s in sweeps]


def _serpentine(lengths: list[int]) -> list[tuple[int, tuple[int, ...]]]:
    """Points (number, places) so that each differs from the one before in a single step."""
    numbers = {at: n + 1 for n, at in enumerate(product(*(range(k) for k in lengths)))}
    if len(lengths) == 1:
        return [(n, at) for at, n in numbers.items()]
    order: list[tuple[int, tuple[int, ...]]] = []
    for i in range(lengths[0]):
        row = range(lengths[1]) if i % 2 == 0 else range(lengths[1] - 1, -1, -1)
        order += [(numbers[i, j], (i, j)) for j in row]
    return order


def _copy_inputs(design: Design, folder: Path) -> None:
    """Every file that the design names, beside the designs of the points."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for name in design.inputs:
            if name == design.file_name or Path(name).is_absolute() or ".." in Path(name).parts:
                continue
            target = folder / name
            if design.file(name).is_file() and not target.exists():
                target.parent.mkdir(parents=True, exist_ok=True)
                shutil.copyfile(design.file(name), target)
    except OSError as error:
        raise explain_os_error(folder, error) from error


class _Point:
    """One run of the sweep."""

    def __init__(
        self,
        design: Design,
        sweeps: Sequence[Sweep],
        limits: tuple[float, ...],
        number: int,
        folder: Path,
        shapes: ShapeCache,
    ) -> None:
        self.limits, self.number, self.folder, self.shapes = limits, number, folder, shapes
        self.stem = f"point-{number:02d}"
        self.data: dict[str, Any] = copy.deepcopy(dict(design.data))
        for sweep, value in zip(sweeps, limits, strict=True):
            set_at(self.data, sweep.key, value)
        self.text = design.path.read_text("utf-8") if design.path is not None else ""
        path = folder / f"{self.stem}.toml"
        self.design = complete_design(self.data, path)

    def run(
        self, start: NDArray[np.float64] | None, monitor: Monitor
    ) -> tuple[Point, DesignResult | None]:
        """Optimise, and keep the design and its part; a question that has no answer is told."""
        blank = Point(number=self.number, limits=self.limits)
        built = build(self.design, monitor=monitor, shapes=self.shapes)
        kept = self.folder / f"{self.stem}-{self.design.digest[:12]}.run"
        try:
            found = optimised(built, checkpoint=kept, monitor=monitor, start=start)
        except InputError as error:
            return replace(blank, reason=error.message), None
        if found.cancelled:
            raise Cancelled(f"Stopped by the user at point {self.number}: {found.reason}")
        part = self.folder / f"{self.stem}.npz"
        save_part(found.part, part)
        self._write(part.name, found)
        return replace(
            blank,
            values=found.stages,
            prices=found.prices,
            feasible=found.feasible,
            iterations=found.iterations,
            reason=found.reason,
            design=f"{self.stem}.toml",
            part=part.name,
        ), found

    def _write(self, part: str, found: DesignResult) -> None:
        """The design with this answer laid into it, so that it opens as any other."""
        printed = [m.name for m in found.part.resins if m.kind != "bought-in"]
        used = sorted({n for b in found.part.palette for n, _ in b.fractions if n in printed})
        data = copy.deepcopy(self.data)
        data.setdefault("layout", []).append({"kind": "stored", "file": part, "resins": used})
        data["optimise"]["skip"] = True
        write_text(self.folder / f"{self.stem}.toml", updated_toml(self.text, data))


class _Within:
    """Says at which point of the sweep a run is."""

    def __init__(self, inner: Monitor, done: int, total: int) -> None:
        self._inner, self._done, self._total = inner, done, total

    def report(self, stage: str, *, done: int, total: int, **figures: Figure) -> None:
        self._inner.report(
            "trading off", done=self._done, total=self._total,
            doing=f"{stage} {done} of {total}", **figures,
        )  # fmt: skip


def _compared(points: Sequence[Point], sweeps: Sequence[Sweep]) -> tuple[Point, ...]:
    """Mark points that another beats with tighter limits: their runs ended too early."""
    found = []
    for p in points:
        rivals = [q for q in points if q is not p and q.feasible and _tighter(q, p, sweeps)]
        better = [q for q in rivals if _better(q, p)]
        found.append(replace(p, beaten_by=better[0].number if better else 0))
    return tuple(found)


def _tighter(q: Point, p: Point, sweeps: Sequence[Sweep]) -> bool:
    """Whether q's limits are nowhere looser than p's."""
    looser = [
        a > b if "at_most" in s.key else a < b
        for a, b, s in zip(q.limits, p.limits, sweeps, strict=True)
    ]
    return not any(looser)


def _better(q: Point, p: Point) -> bool:
    if not p.values:
        return False
    mine, other = p.values[0], q.values[0]
    margin = 1e-3 * abs(mine.optimised)
    if mine.sense == "greatest":
        return other.optimised > mine.optimised + margin
    return other.optimised < mine.optimised - margin
