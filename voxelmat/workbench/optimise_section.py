"""The section of the optimiser: what is asked, the part as it forms, runs compared, one taken."""

from __future__ import annotations

import time
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError
from voxelmat.io.store import save_part
from voxelmat.model.design_result import DesignResult
from voxelmat.model.part import Part
from voxelmat.monitor import Monitor
from voxelmat.topopt.iterate import Iterate
from voxelmat.units import number, quantity
from voxelmat.workbench import controls as c
from voxelmat.workbench.jobs import Job
from voxelmat.workbench.optimise_asked import asked_changed, asked_controls, fresh_table
from voxelmat.workbench.plots import lines_png
from voxelmat.workbench.section import Section
from voxelmat.workbench.shown import of_part
from voxelmat.workflow.designing import optimised
from voxelmat.workflow.draft_keys import add_at, set_at

__all__ = ["OptimiseSection", "Run"]

#: Memory for the iterates of one run; beyond it every second one is dropped.
_MOST_BYTES = 128 << 20
#: Seconds between two pictures of the part as it forms.
_PICTURE_EVERY = 1.5


@dataclass(slots=True)
class Run:
    """One optimisation: its iterates, and its result once it has ended.

    Attributes
    ----------
    number : int
        From 1, in the order of starting.
    digest : str
        Of the design that was optimised.
    iterates : list of Iterate
    result : DesignResult or None
    """

    number: int
    digest: str
    iterates: list[Iterate] = field(default_factory=list)
    result: DesignResult | None = None

    def keep(self, iterate: Iterate) -> None:
        """Add an iterate; where memory runs short, drop every second of the earlier ones."""
        self.iterates.append(iterate)
        if sum(i.n_bytes for i in self.iterates) > _MOST_BYTES:
            self.iterates = [*self.iterates[:-1][::2], iterate]

    def at(self, iteration: int) -> Part:
        """The part of one iteration; -1 for the last, as the optimiser finished it."""
        if iteration == -1 and self.result is not None:
            return self.result.part
        if not self.iterates:
            raise InputError(f"Run {self.number} has no iteration yet.")
        if iteration == -1:
            return self.iterates[-1].part()
        for iterate in self.iterates:
            if iterate.record.iteration == iteration:
                return iterate.part()
        there = ", ".join(str(i.record.iteration) for i in self.iterates)
        raise InputError(f"Run {self.number} keeps no iteration {iteration}; it keeps {there}.")


class OptimiseSection(Section):
    """Ask for a layout, watch it form, take it or another.

    Attributes
    ----------
    runs : list of Run
    """

    name = "optimiser"
    title = "Optimise"

    def __init__(self, bench: Any) -> None:
        super().__init__(bench)
        self.runs: list[Run] = []
        self._chosen, self._iteration = 0, -1
        self._other = ""
        self._plot = b""
        self._drawn = 0.0

    # ------------------------------------------------------------------ what is asked
    def set_up(self) -> None:
        """Begin with a sensible question: stiffest layout of the resins that the bodies hold."""
        self.bench.set("optimise", fresh_table(self.bench.design))

    def ask(self, key: str, value: Any) -> None:
        """Set one key of the design's ``[optimise]`` table; None takes it out.

        Examples
        --------
        ``bench.optimiser.ask("iterations", 40)``
        """
        if value is None:
            self.bench.remove(f"optimise.{key}")
        else:
            self.bench.set(f"optimise.{key}", value)

    def limit(self, kind: str, at_most: float, resin: str = "") -> None:
        """Limit "volume" (fraction), "mass" (g) or "resin" (fraction of that resin); 0 lifts it."""
        keys = {"volume": "at_most_fraction", "mass": "at_most_g", "resin": "at_most_fraction"}
        if kind not in keys:
            raise InputError(f"A limit is on volume, mass or resin; got {kind!r}.")

        def edit(data: dict[str, Any]) -> None:
            limits = [
                entry
                for entry in data["optimise"].get("limit", [])
                if (entry.get("kind"), entry.get("resin", "")) != (kind, resin)
            ]
            if at_most:
                new = {"kind": kind, keys[kind]: at_most}
                limits.append({**new, "resin": resin} if resin else new)
            data["optimise"]["limit"] = limits

        self.bench.draft.change(f"limit of {kind} {resin}".strip(), edit)

    # ------------------------------------------------------------------ runs
    def start(self) -> Job[DesignResult]:
        """Optimise the design as it stands, beside the screen.

        Returns
        -------
        Job
            ``bench.optimiser.start().wait()`` gives the `DesignResult`; cancelling it keeps the
            last whole design, which is then the result.

        Raises
        ------
        InputError
            If the design asks for no optimisation.
        """
        design = self.bench.design
        if design.optimise is None:
            raise InputError("Nothing is asked of the optimiser yet; press Set up first.")
        run = Run(len(self.runs) + 1, design.digest)
        self.runs.append(run)
        self._chosen, self._iteration = run.number, -1

        def work(monitor: Monitor) -> DesignResult:
            built = self.bench.build(monitor)
            run.result = optimised(built, monitor=monitor, watch=lambda i: self._seen(run, i))
            self._redraw(run.result.part)
            return run.result

        return self.bench.jobs.submit("optimising", work, key="optimise")

    def stop(self) -> None:
        """Stop the run; its last whole design is kept."""
        job = self.bench.jobs.current
        if job is not None and job.key == "optimise":
            job.cancel()

    def _seen(self, run: Run, iterate: Iterate) -> None:
        run.keep(iterate)
        if time.monotonic() - self._drawn > _PICTURE_EVERY:
            self._redraw(iterate.part())

    def _redraw(self, part: Part) -> None:
        self._drawn = time.monotonic()
        self._plot = self._histories()
        stage = getattr(self.bench, "stage", None)
        if stage is not None:
            stage.show(of_part(part))
        self.bench.tell("runs")

    def _histories(self) -> bytes:
        curves = {}
        for run in self.runs[-4:]:
            records = [i.record for i in run.iterates]
            if records:
                curves[f"run {run.number}"] = (
                    [r.iteration for r in records],
                    [r.objective for r in records],
                )
        if not curves:
            return b""
        positive = all(v > 0 for _, y in curves.values() for v in y)
        return lines_png(curves, "iteration", "objective", logarithmic=positive)

    def run(self, number: int = 0) -> Run:
        """One of the runs; the latest where left out."""
        if not self.runs:
            raise InputError("There is no run yet; press Start.")
        if not 0 <= number <= len(self.runs):
            raise InputError(f"There are runs 1 to {len(self.runs)}; got {number}.")
        return self.runs[number - 1]

    def show(self, run: int = 0, iteration: int = -1) -> Part:
        """Show the design of one iteration of a run in the pictures."""
        found = self.run(run)
        part = found.at(iteration)
        self._chosen, self._iteration = found.number, iteration
        stage = getattr(self.bench, "stage", None)
        if stage is not None:
            stage.show(of_part(part))
        return part

    def compare(self, first: int, second: int) -> tuple[Part, Part]:
        """Show the last designs of two runs side by side, with one camera.

        Returns
        -------
        tuple of Part

        Raises
        ------
        InputError
            If there is no such run, or it has no iteration yet.
        """
        parts = self.run(first).at(-1), self.run(second).at(-1)
        stage = getattr(self.bench, "stage", None)
        if stage is not None:
            stage.compare(*parts, names=(f"run {first}", f"run {second}"))
        return parts

    def take(self, run: int = 0, iteration: int = -1) -> Path:
        """Make the design of one iteration the layout of the design, in one step of undo.

        The part is kept in a file beside the design, named by a layout rule; the question to the
        optimiser stays and is marked as answered.

        Returns
        -------
        Path
            The file.
        """
        found = self.run(run)
        part = found.at(iteration)
        folder = self.bench.draft.path.parent
        stem = f"{self.bench.draft.path.stem}-run{found.number}"
        path = next(p for n in range(1, 10_000) if not (p := folder / f"{stem}-{n}.npz").exists())
        save_part(part, path)
        resins = sorted({n for b in part.palette for n, _ in b.fractions if _is_printed(part, n)})
        rule = {"kind": "stored", "file": path.name, "resins": resins}

        def edit(data: dict[str, Any]) -> None:
            add_at(data, "layout", rule)
            set_at(data, "optimise.skip", True)

        self.bench.draft.change(f"take run {found.number}", edit)
        return path

    # ------------------------------------------------------------------ the screen
    def controls(self) -> list[c.Control]:
        """The question, the run, the runs."""
        if self.bench.draft.empty:
            return [c.words("Choose a mesh under Shape first.", tone="hint")]
        data = self.bench.draft.data
        if "optimise" not in data:
            return [
                c.words("Nothing is asked of the optimiser yet.", tone="hint"),
                c.button("set up", "Set up", main=True),
            ]
        job = self.bench.jobs.current
        busy = job is not None and job.key == "optimise"
        shown = asked_controls(self.bench)
        shown.append(
            c.group(
                c.button("start", "Start", main=True, disabled=busy, why="a run is under way"),
                c.button("stop", "Stop and keep", disabled=not busy, why="no run is under way"),
            )
        )
        if busy and job is not None and job.figures:
            rows = [[k.replace("_", " "), _figure(v)] for k, v in job.figures.items()]
            shown.append(c.table(["now", "value"], rows, caption=f"Iteration {job.done}"))
        return shown + self._compared()

    def _compared(self) -> list[c.Control]:
        if not self.runs:
            return []
        rows = [_row(run) for run in self.runs]
        shown = [
            c.table(
                ["run", "objective", "limits", "grey", "state"],
                rows,
                caption="Runs",
                name="run",
                chosen=self._chosen - 1,
            )
        ]
        if self._plot:
            shown.append(c.picture(self._plot, "Objective by iteration, one curve a run"))
        run = self.run(self._chosen)
        if run.result is not None:
            shown.append(c.words(f"Run {run.number}: {run.result.reason}.", tone="hint"))
            shown += [c.words(n, tone="warn") for n in run.result.notes]
        if run.iterates:
            last = run.iterates[-1].record.iteration
            at = last if self._iteration == -1 else self._iteration
            shown += [
                c.slider("iteration", f"Iteration of run {run.number}", at, 1, last, 1),
                c.group(c.button("take", "Take this design"), c.button("last", "Show the last")),
            ]
        others = [str(r.number) for r in self.runs if r is not run and r.iterates]
        if run.iterates and others:
            if self._other not in others:
                self._other = others[-1]
            shown.append(
                c.group(
                    c.choice("other", f"Beside run {run.number}: run", self._other, others),
                    c.button("compare", "Show side by side"),
                )
            )
        return shown

    def act(self, name: str, value: Any) -> None:
        """One of the controls."""
        if name in ("start", "stop"):
            self.call(name)
        elif name == "set up":
            self.call("set_up")
        elif name == "run":
            self.call("show", run=int(value[1]) + 1)
        elif name == "iteration":
            kept = [i.record.iteration for i in self.run(self._chosen).iterates]
            near = min(kept, key=lambda n: abs(n - float(value)))
            self.call("show", run=self._chosen, iteration=near)
        elif name == "other":
            self._other = str(value)
        elif name == "compare":
            self.call("compare", first=self.run(self._chosen).number, second=int(self._other))
        elif name == "last":
            self.call("show", run=self._chosen)
        elif name == "take":
            path = self.call("take", run=self._chosen, iteration=self._iteration)
            self.bench.say(f"Taken; kept in {path.name}. Undo takes it back.")
        else:
            asked_changed(self, name, value)


def _is_printed(part: Part, name: str) -> bool:
    return part.resin(name).kind != "bought-in"


def _figure(value: float | int | str) -> str:
    return value if isinstance(value, str) else number(float(value))


def _row(run: Run) -> list[str]:
    if run.result is not None:
        r = run.result
        state = "stopped" if r.cancelled else "converged" if r.converged else "iterations used up"
        grey = number(r.history[-1].grey, 2) if r.history else ""
        met = "met" if r.feasible else "not met"
        return [str(run.number), quantity(r.objective, r.objective_unit), met, grey, state]
    if run.iterates:
        last = run.iterates[-1].record
        met = "met" if last.violation <= 1e-3 else f"{number(100 * last.violation, 2)} % over"
        return [str(run.number), number(last.objective), met, number(last.grey, 2), "runs"]
    return [str(run.number), "", "", "", "begins"]
