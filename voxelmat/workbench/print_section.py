"""The section that prints: profile, forecast, export, layers, findings, ticket and report."""

from __future__ import annotations

import datetime
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError
from voxelmat.model.finding import Finding
from voxelmat.model.profile import SUPPORT_POLICIES
from voxelmat.monitor import Monitor
from voxelmat.printing.estimate import PrintEstimate, forecast
from voxelmat.printing.orient import OrientationTable, compare_orientations
from voxelmat.printing.profile import load_profile, shipped_profiles
from voxelmat.printing.readback import Stack, read_stack
from voxelmat.units import number, quantity
from voxelmat.workbench import controls as c
from voxelmat.workbench.jobs import Job
from voxelmat.workbench.plots import tray_png
from voxelmat.workbench.section import Section
from voxelmat.workbench.shownstack import of_stack
from voxelmat.workflow.finding_pictures import finding_picture
from voxelmat.workflow.pipeline import RunResult, run
from voxelmat.workflow.ticket import write_ticket

__all__ = ["PrintSection"]

_TURNS = ("as it is", "x 90", "x 180", "x -90", "y 90", "y -90")
_EXPORT = ("stack",)
_REPORT = ("solve", "grid error", "stack", "as printed", "report")


class PrintSection(Section):
    """From the design to files that the printer takes.

    Attributes
    ----------
    stack : Stack or None
        The last one that was written here.
    findings : tuple of Finding
        Of its preflight.
    """

    name = "printing"
    title = "Print"

    def __init__(self, bench: Any) -> None:
        super().__init__(bench)
        self.stack: Stack | None = None
        self.findings: tuple[Finding, ...] = ()
        self._of = ""
        self._report: Path | None = None
        self._foretold: tuple[str, PrintEstimate] | None = None
        self._turned: tuple[str, OrientationTable] | None = None
        self._picture: tuple[str, bytes] = ("", b"")
        self._chosen, self._spot = -1, b""

    # ------------------------------------------------------------------ how it is printed
    def profile(self, name: str) -> None:
        """Choose the print profile: a shipped one, or a .toml file beside the design."""
        load_profile(self._profile_path(name))
        if "print" in self.bench.draft.data:
            self.bench.set("print.profile", name)
        else:
            self.bench.set("print", {"profile": name})

    def set(self, key: str, value: Any) -> None:
        """Set one key of the design's ``[print]`` table: ``support``, ``orientation``, ..."""
        if "print" not in self.bench.draft.data:
            raise InputError("Choose a print profile first.")
        self.bench.set(f"print.{key}", value)

    def _profile_path(self, name: str) -> str | Path:
        return self.bench.draft.path.parent / name if name.endswith(".toml") else name

    def forecast(self) -> Job[PrintEstimate]:
        """Layers, time, grams and cost before anything is written, beside the screen."""
        design = self.bench.design
        printing = self._printing()
        profile = load_profile(self._profile_path(printing.profile))

        def work(monitor: Monitor) -> PrintEstimate:
            found = forecast(
                self.bench.build(monitor).part,
                profile,
                orientation=printing.orientation,
                position=printing.position_mm,
                support=printing.support,
                monitor=monitor,
            )
            self._foretold = (design.digest, found)
            self.bench.tell("printing")
            return found

        return self.bench.jobs.submit("estimating the print", work, key="forecast")

    def compare_turns(self) -> Job[OrientationTable]:
        """Compare build orientations: height, support, contact, time."""
        design = self.bench.design
        profile = load_profile(self._profile_path(self._printing().profile))

        def work(monitor: Monitor) -> OrientationTable:
            part = self.bench.build(monitor).part
            found = compare_orientations(part, profile, monitor=monitor)
            self._turned = (design.digest, found)
            self.bench.tell("printing")
            return found

        return self.bench.jobs.submit("comparing orientations", work, key="turns")

    def _printing(self) -> Any:
        printing = self.bench.design.printing
        if printing is None:
            raise InputError("Choose a print profile first.")
        return printing

    # ------------------------------------------------------------------ what is written
    @property
    def folder(self) -> Path:
        """Where exports go: ``<design>-out`` beside the design."""
        return self.bench.draft.path.with_name(f"{self.bench.draft.path.stem}-out")

    def export(self, folder: str = "") -> Job[RunResult]:
        """Write the stack, read it back and check it, beside the screen.

        Parameters
        ----------
        folder : str
            `folder` where left out. An interrupted export goes on from there.

        Returns
        -------
        Job
        """
        return self._run(_EXPORT, "writing the stack", folder)

    def report(self, folder: str = "") -> Job[RunResult]:
        """Solve, write the stack, solve it as printed, and write the report."""
        return self._run(_REPORT, "writing the report", folder)

    def _run(self, stages: tuple[str, ...], name: str, folder: str) -> Job[RunResult]:
        design = self.bench.design
        self._printing()
        target = Path(folder) if folder else self.folder

        def work(monitor: Monitor) -> RunResult:
            found = run(self.bench.build(monitor), target, stages=stages, monitor=monitor)
            self.stack, self._of = found.stack, design.digest
            self.findings = found.data.findings
            self._report = found.report or self._report
            self._chosen, self._spot = -1, b""
            self.bench.tell("printing")
            return found

        return self.bench.jobs.submit(name, work, key="export")

    def open_stack(self, folder: str) -> Stack:
        """Look at a stack that is on disk."""
        self.stack, self._of, self.findings = read_stack(folder), "", ()
        self.bench.tell("printing")
        return self.stack

    def _written(self) -> Stack:
        if self.stack is None:
            raise InputError("There is no stack yet; press Export.")
        return self.stack

    def show_layers(self, layer: int = -1) -> None:
        """Show the layers of the stack; the slider of the slices pages through them."""
        stack = self._written()
        stage = getattr(self.bench, "stage", None)
        if stage is not None:
            stage.show(of_stack(stack))
            if 0 <= layer < stack.n_layers:
                stage.slices.index = layer

    def show_finding(self, finding: int) -> bytes:
        """Go to the place of a finding (counted from 0): its layer, and a picture of the spot."""
        stack = self._written()
        if not 0 <= finding < len(self.findings):
            raise InputError(f"There are {len(self.findings)} findings; got number {finding}.")
        found = self.findings[finding]
        self._chosen = finding
        if found.place_mm is None:
            self._spot = b""
            return b""
        self._spot = finding_picture(found, stack, self.bench.part).png
        self.bench.pick(found.place_mm)
        which = found.part or stack.parts[0].name
        raster = stack.part(which).raster
        tray = [
            sum(raster.rotation[r][a] * found.place_mm[a] for a in range(3)) + raster.translation[r]
            for r in range(3)
        ]
        self.show_layers(min(max(int(tray[2] / stack.pitch_mm[2]), 0), stack.n_layers - 1))
        return self._spot

    def ticket(self) -> Path:
        """Write the job ticket beside the stack; its path."""
        stack = self._written()
        path = stack.folder.parent / "ticket.html"
        today = datetime.datetime.now().astimezone().date()
        write_ticket(stack, path, day=today, findings=self.findings if self._of else None)
        return path

    # ------------------------------------------------------------------ the screen
    def controls(self) -> list[c.Control]:
        """The profile, the forecast, the export, what it found."""
        if self.bench.draft.empty:
            return [c.words("Choose a mesh under Shape first.", tone="hint")]
        data = self.bench.draft.data.get("print")
        names = list(shipped_profiles())
        if data is None:
            return [
                c.words(
                    "Choose how it is printed. The shipped profiles are invented.", tone="hint"
                ),
                c.choice("profile", "Print profile", "choose one", ["choose one", *names]),
            ]
        if data["profile"] not in names:
            names.append(data["profile"])
        turns = " ".join(data.get("orientation", [])) or _TURNS[0]
        supports = ["as the profile says", *SUPPORT_POLICIES]
        shown = [
            c.choice("profile", "Print profile", data["profile"], names),
            c.choice("turn", "Turned", turns, [*_TURNS, *([turns] if turns not in _TURNS else [])]),
            c.choice("support", "Support", data.get("support", supports[0]), supports),
            c.picture(self._tray(data["profile"]), f"Tray of {data['profile']} from above"),
            c.group(c.button("forecast", "Estimate"), c.button("turns", "Compare turns")),
            *self._estimates(),
        ]
        shown.append(
            c.group(
                c.button("export", "Export the stack", main=True),
                c.button("report", "Report"),
            )
        )
        return shown + self._after()

    def _tray(self, name: str) -> bytes:
        if self._picture[0] != name:
            profile = load_profile(self._profile_path(name))
            self._picture = (name, tray_png(profile))
        return self._picture[1]

    def _estimates(self) -> list[c.Control]:
        shown = []
        now = self.bench.design.digest
        if self._foretold is not None:
            digest, found = self._foretold
            table = c.table(["estimate", "value"], _estimate_rows(found), caption="Before slicing")
            shown.append({**table, "stale": digest != now})
        if self._turned is not None:
            digest, turns = self._turned
            rows = [
                [
                    " ".join(t.orientation) or "as it is",
                    number(t.size_mm[2]),
                    "" if t.support_mm3 is None else number(t.support_mm3),
                    _hours(t.time_s),
                ]
                for t in turns.choices
            ]
            table = c.table(
                ["turned", "height, mm", "support, mm3", "time, h"],
                rows,
                caption="Orientations; choose one to turn the part so",
                name="turned",
            )
            shown.append({**table, "stale": digest != now})
        return shown

    def _after(self) -> list[c.Control]:
        if self.stack is None:
            return [c.words("No stack yet; Export writes it beside the design.", tone="hint")]
        stale = self._of != self.bench.design.digest
        layers, folder = self.stack.n_layers, self.stack.folder
        words = f"{layers} layers in {folder.parent.name}/{folder.name}."
        shown = [c.words("Out of date, the design has changed: " + words if stale else words)]
        rows = [[f"{n + 1} {f.severity}", f.message, f.remedy] for n, f in enumerate(self.findings)]
        shown.append(
            c.table(
                ["finding", "what", "remedy"],
                rows,
                caption="Findings; choose one to go there",
                name="finding",
                chosen=self._chosen if self._chosen >= 0 else None,
            )
        )
        if self._spot:
            shown.append(c.picture(self._spot, f"Place of finding {self._chosen + 1}"))
        shown.append(
            c.group(
                c.button("layers", "Show layers"),
                c.button("ticket", "Job ticket"),
                c.button("manifest", "Get the manifest"),
                c.button(
                    "get report", "Get the report", disabled=self._report is None,
                    why="press Report first",
                ),
            )
        )  # fmt: skip
        return shown

    def act(self, name: str, value: Any) -> None:
        """One of the controls."""
        if name == "profile" and value != "choose one":
            self.call("profile", name=str(value))
        elif name == "turn":
            turns = [] if value == _TURNS[0] else [str(value)]
            self.call("set", key="orientation", value=turns)
        elif name == "support":
            if value in SUPPORT_POLICIES:
                self.call("set", key="support", value=str(value))
            else:
                self.bench.noted(
                    "bench.remove('print.support')", lambda: self.bench.remove("print.support")
                )
        elif name in ("forecast", "export", "report"):
            self.call(name)
        elif name == "turns":
            self.call("compare_turns")
        elif name == "turned" and self._turned is not None:
            choice = self._turned[1].choices[int(value[1])]
            self.call("set", key="orientation", value=list(choice.orientation))
        elif name == "finding":
            self.call("show_finding", finding=int(value[1]))
        elif name == "layers":
            self.call("show_layers")
        elif name == "ticket":
            path = self.call("ticket")
            self.bench.give(path.name, path.read_bytes())
            self.bench.say(f"{path.name} is written beside the stack.")
        elif name == "manifest":
            self.bench.give(
                "manifest.json", (self._written().folder / "manifest.json").read_bytes()
            )
        elif name == "get report" and self._report is not None:
            self.bench.give(self._report.name, self._report.read_bytes())


def _hours(span: tuple[float, float]) -> str:
    low, high = (number(s / 3600, 2) for s in span)
    return f"{low} to {high}"


def _estimate_rows(found: PrintEstimate) -> list[list[str]]:
    rows = [
        ["layers", str(found.layers)],
        ["time", f"{_hours(found.time_s)} h"],
        ["height", quantity(found.height_mm, "mm")],
        ["files", quantity(found.file_bytes / 1e6, "MB")],
    ]
    rows += [[f"{name}", quantity(1e6 * mass, "g")] for name, mass in found.mass_t.items()]
    if found.support_mm3:
        rows.append(["support", quantity(found.support_mm3, "mm3")])
    if found.cost is not None:
        low, high = (number(v) for v in found.cost)
        rows.append(["cost", f"{low} to {high} {found.cost_unit}".rstrip()])
    return rows
