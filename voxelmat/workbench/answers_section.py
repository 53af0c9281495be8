"""The section of answers: quick ones that follow each edit, the full solve, fields and plots."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.design import Design
from voxelmat.model.result import StaticResult
from voxelmat.monitor import Monitor
from voxelmat.units import number, quantity
from voxelmat.workbench import controls as c
from voxelmat.workbench.jobs import Job
from voxelmat.workbench.plots import histogram_png, line_png
from voxelmat.workbench.section import Section, number_from
from voxelmat.workbench.shownresult import FIELDS, field_values
from voxelmat.workflow.interfaces import spot_rows
from voxelmat.workflow.live import LIVE_VOXELS, Answers, answer, live_answer
from voxelmat.workflow.report_tables import verdict_rows

__all__ = ["AnswersSection"]

_SAMPLES = 200  # along a line


class AnswersSection(Section):
    """What the part does under its loads.

    Attributes
    ----------
    quick, full : Answers or None
        The last answers on the coarse grid and on the design's own.
    """

    name = "answers"
    title = "Answers"

    def __init__(self, bench: Any) -> None:
        super().__init__(bench)
        self.quick: Answers | None = None
        self.full: Answers | None = None
        self._digests = {"quick": "", "full": ""}
        self._trouble = ""
        self._line: list[list[float]] | None = None
        self._field, self._case, self._plot = "displacement", "", b""

    # ------------------------------------------------------------------ live answers
    @property
    def live(self) -> bool:
        """Whether a quick answer follows each edit."""
        return bool(self.bench.draft.view.get("live", True))

    def set_live(self, on: bool) -> None:
        """Let quick answers follow each edit, or not."""
        self.bench.draft.view["live"] = bool(on)
        self.bench.draft.autosave()
        if on:
            self.follow()

    def follow(self) -> Job[None] | None:
        """Ask for a quick answer to the design as it stands; the newest counts.

        Returns
        -------
        Job or None
            None where there is no load case yet.
        """
        if self.bench.draft.empty:
            return None
        design = self.bench.design
        if not design.cases:
            return None
        return self.bench.jobs.submit(
            "quick answer", lambda monitor: self._quick(design, monitor), key="quick"
        )

    def _quick(self, design: Design, monitor: Monitor) -> None:
        voxels = self.bench.build(monitor).part.grid.n_voxels
        try:
            found = live_answer(
                design,
                voxels,
                shapes=self.bench.shapes,
                most=LIVE_VOXELS,
                before=self.quick,
                monitor=monitor,
            )
        except InputError as error:
            self._trouble = str(error)
            self.bench.tell("answers")
            return
        self._trouble = ""
        self.quick, self._digests["quick"] = found, design.digest
        self.bench.tell("answers")

    def design_changed(self) -> None:
        """Start a quick answer."""
        if self.live:
            self.follow()

    def opened(self) -> None:
        """The first quick answer."""
        self.design_changed()

    # ------------------------------------------------------------------ the full solve
    def solve(self, error_by_voxels: bool = True) -> Job[Answers]:
        """Solve every load case on the design's own voxels, beside the screen.

        Parameters
        ----------
        error_by_voxels : bool
            Solve at half resolution too and state the error by the voxel size.

        Returns
        -------
        Job
            ``bench.answers.solve().wait()`` gives the `Answers`.

        Raises
        ------
        InputError
            If there is nothing to solve.
        """
        design = self.bench.design
        if not design.cases:
            raise InputError(
                "There is no load case. Add one under Loads: where the part is held, and what "
                "acts on it."
            )

        def work(monitor: Monitor) -> Answers:
            built = self.bench.build(monitor)
            found = answer(built, with_error=error_by_voxels, monitor=monitor)
            self.full, self._digests["full"] = found, design.digest
            self.bench.tell("answers")
            return found

        return self.bench.jobs.submit("solving", work, key="solve")

    def stop(self) -> None:
        """Stop the solve that runs; earlier answers stay."""
        self.bench.jobs.cancel_all()

    # ------------------------------------------------------------------ reading answers
    @property
    def best(self) -> Answers | None:
        """The full answers while they hold, else the quick ones, else what there is."""
        now = self._now()
        if self.full is not None and self._digests["full"] == now:
            return self.full
        if self.quick is not None and self._digests["quick"] == now:
            return self.quick
        return self.full or self.quick

    @property
    def stale(self) -> bool:
        """True where the answers shown belong to an earlier state of the design."""
        return self._now() not in self._digests.values()

    def _now(self) -> str:
        return "" if self.bench.draft.empty else self.bench.design.digest

    def result(self, load_case: str = "") -> StaticResult:
        """The result of a load case, of the best answers there are.

        Raises
        ------
        InputError
            If there is no answer yet, or no such load case.
        """
        best = self.best
        if best is None:
            raise InputError("There is no answer yet; press Solve, or wait for the quick answer.")
        name = load_case or next(iter(best.results))
        if name not in best.results:
            raise InputError(
                f"There is no load case '{name}'; there are {', '.join(best.results)}."
            )
        return best.results[name]

    def show(self, field: str = "displacement", load_case: str = "", factor: float = 0.0) -> None:
        """Show a field of a load case in the pictures.

        Parameters
        ----------
        field : str
            "displacement", "von Mises stress", "stress over strength", "strain energy density",
            ...
        load_case : str
            The first one where left out.
        factor : float
            By which displacements are drawn larger; 0 chooses one.
        """
        result = self.result(load_case)
        field_values(result, field)
        self._field, self._case = field, result.load_case.name
        stage = getattr(self.bench, "stage", None)
        if stage is not None:
            stage.colour_by(field, result.load_case.name, factor)

    def show_material(self) -> None:
        """Show the part in its materials again."""
        stage = getattr(self.bench, "stage", None)
        if stage is not None:
            stage.colour_by("material")

    def along(
        self, start_mm: list[float], end_mm: list[float], field: str = "", load_case: str = ""
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """A field along a straight line, and its plot on the desk.

        Parameters
        ----------
        start_mm, end_mm : list of float
            Ends of the line.
        field, load_case : str
            What is shown where left out.

        Returns
        -------
        tuple of ndarray, shape (200,)
            Distance from the start, mm, and the value in the voxel there; nan outside the part.
        """
        result = self.result(load_case or self._case)
        field = field or self._field
        values, unit = field_values(result, field)
        start, end = np.array(start_mm, dtype=float), np.array(end_mm, dtype=float)
        length = float(np.linalg.norm(end - start))
        if not length > 0:
            raise InputError("The two ends of the line are the same point; move one.")
        grid = result.part.grid
        t = (np.arange(_SAMPLES) + 0.5) / _SAMPLES
        points = start + t[:, None] * (end - start)
        cells = np.floor((points - grid.origin) / grid.spacing).astype(int)
        inside = ((cells >= 0) & (cells < grid.shape)).all(axis=1)
        at = tuple(np.clip(cells, 0, np.array(grid.shape) - 1).T)
        y = np.where(inside & result.part.solid[at], values[at], np.nan).astype(np.float64)
        if np.isnan(y).all():
            raise InputError("The line passes through no material; move its ends.")
        self._line = [list(map(float, start)), list(map(float, end))]
        label = f"{field}, {unit}" if unit else field
        self._plot = line_png(t * length, y, "along the line, mm", label)
        self.bench.tell("answers")
        return t * length, y

    def histogram(self, field: str = "", load_case: str = "") -> NDArray[np.float64]:
        """How a field is spread over the part's voxels: its values, and the plot on the desk."""
        result = self.result(load_case or self._case)
        field = field or self._field
        values, unit = field_values(result, field)
        solid = np.asarray(values[result.part.solid], dtype=np.float64)
        label = f"{field}, {unit}" if unit else field
        self._plot = histogram_png(solid, label, logarithmic=FIELDS[field].decades is not None)
        self.bench.tell("answers")
        return solid

    # ------------------------------------------------------------------ the screen
    def controls(self) -> list[c.Control]:
        """Requirements first, then the figures and the pictures of one load case."""
        busy = self.bench.jobs.current is not None and self.bench.jobs.current.key == "solve"
        shown = [
            c.group(
                c.button("solve", "Solve in full", main=True, disabled=busy, why="it runs"),
                c.toggle("live", "Quick answer after each edit", self.live),
            )
        ]
        if self._trouble:
            shown.append(c.words(self._trouble, tone="bad"))
        best = self.best
        if best is None:
            words = "No answer yet. "
            if self.bench.draft.empty or not self.bench.draft.data.get("load_case"):
                words += "Add a load case under Loads first."
            return [*shown, c.words(words, tone="hint")]
        stale = self.stale
        if best is self.full:
            how = "full solve"
        elif best.coarsening == 1:
            how = "quick answer, on the design's own voxels"
        else:
            how = (
                f"quick answer, on voxels {number(best.coarsening, 2)} times as long; solve in "
                "full before you rely on it"
            )
        out = "Out of date, the design has changed: " if stale else ""
        shown.append(c.words(f"{out}{how} ({number(best.seconds, 2)} s).", tone="hint"))
        shown += self._requirements(best, stale)
        shown += self._figures(best, stale)
        return shown

    def _requirements(self, best: Answers, stale: bool) -> list[c.Control]:
        rows = [
            [f"{r['mark']} {r['name']}", r["value"], r["band"], r["margin"]]
            for r in verdict_rows(best.verdicts)
        ]
        made = c.table(
            ["requirement", "value", "band", "margin"], rows, caption="Requirements, worst first"
        )
        found = [{**made, "stale": stale}]
        doubtful = [v for v in best.verdicts if v.status == "cannot be said"]
        if doubtful:
            first = doubtful[0]
            found.append(
                c.words(f"{first.requirement.name}: {'; '.join(first.reasons)}", tone="hint")
            )
        return found

    def _figures(self, best: Answers, stale: bool) -> list[c.Control]:
        cases = list(best.results)
        case = self._case if self._case in best.results else cases[0]
        result = best.results[case]
        rows = [["largest displacement", quantity(float(result.size.max()), "mm")]]
        rows += [
            [f"movement of {k}", quantity(v, "mm")] for k, v in result.load_displacement.items()
        ]
        rows += [
            [f"reaction {axis} of {k}", quantity(v, "N")]
            for k, force in result.reactions.items()
            for axis, v in zip("xyz", force, strict=True)
            if abs(v) > 1e-6 * max(map(abs, force))
        ]
        rows += [
            ["strain energy", quantity(result.energy, "mJ")],
            ["largest strain", quantity(100 * result.largest_strain.value, "%")],
            ["largest rotation", quantity(math.degrees(result.largest_rotation.value), "°")],
        ]
        made = {**c.table(["figure", "value"], rows, caption=f"Under '{case}'"), "stale": stale}
        shown = [
            c.choice("case", "Load case", case, cases),
            c.choice("field", "Show", self._field, [*FIELDS, "material"]),
            made,
        ]
        if case in best.errors:
            shown.append(c.words(best.errors[case].words, tone="hint"))
        spots = best.interfaces.get(case, ())
        if spots:
            head = ["pair", "at, mm", "normal, MPa", "shear, MPa", "jump, MPa", "used", "note"]
            table = c.table(head, spot_rows(spots), caption="Interfaces, worst places")
            shown.append({**table, "stale": stale})
        shown += [c.words(t, tone="warn") for t in result.cautions]
        low = [round(v, 3) for v in result.part.grid.origin]
        high = [round(v, 3) for v in result.part.grid.upper]
        middle = [0.5 * (a + b) for a, b in zip(low, high, strict=True)]
        line = self._line or [[middle[0], middle[1], low[2]], [middle[0], middle[1], high[2]]]
        shown += [
            c.heading("Along a line"),
            c.vector_box("start", "From", line[0], "mm"),
            c.vector_box("end", "To", line[1], "mm"),
            c.group(c.button("along", "Plot along the line"), c.button("histogram", "Histogram")),
        ]
        self._line = line
        if self._plot:
            shown.append(c.picture(self._plot, f"Plot of {self._field} under {case}"))
        return shown

    def act(self, name: str, value: Any) -> None:
        """One of the controls."""
        if name == "solve":
            self.call("solve")
        elif name == "live":
            self.call("set_live", on=bool(value))
        elif name == "case":
            self.call("show", field=self._field, load_case=str(value))
        elif name == "field" and value == "material":
            self.call("show_material")
        elif name == "field":
            self.call("show", field=str(value), load_case=self._case)
        elif name in ("start", "end"):
            points = self._line or [[0.0] * 3, [0.0] * 3]
            points[name == "end"] = [number_from(v, "The line", "mm") for v in value]
            self._line = points
        elif name == "along" and self._line is not None:
            self.call("along", start_mm=self._line[0], end_mm=self._line[1])
        elif name == "histogram":
            self.call("histogram")
