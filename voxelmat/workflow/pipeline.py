"""The whole job in order: part, optimise, solve, stack, read back, check, solve again, report."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from voxelmat.errors import Cancelled, InputError
from voxelmat.fea.cases import solve_cases
from voxelmat.fea.energy_error import energy_error
from voxelmat.fea.refine import ErrorEstimate, error_estimate
from voxelmat.fea.resources import check_fits, estimate_solve, peak_bytes
from voxelmat.io.atomic import write_json
from voxelmat.io.store import save_part
from voxelmat.kernels.threads import threads
from voxelmat.model.design import Design
from voxelmat.model.design_result import DesignResult
from voxelmat.model.part import Part
from voxelmat.model.requirement import Verdict
from voxelmat.model.result import StaticResult
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.readback import Stack
from voxelmat.provenance import Provenance, utc_now
from voxelmat.topopt.iterate import Iterate
from voxelmat.units import number
from voxelmat.workflow.answer import as_dict, exit_code, joined_verdicts
from voxelmat.workflow.build import Built, build
from voxelmat.workflow.designing import optimised, with_printed
from voxelmat.workflow.interfaces import interface_spots
from voxelmat.workflow.printed import as_printed
from voxelmat.workflow.printing_stage import PrintStage, check_stage, stack_stage
from voxelmat.workflow.report import write_report
from voxelmat.workflow.report_data import RunData
from voxelmat.workflow.running import Clock, held
from voxelmat.workflow.verdicts import safety_factors, verdicts

__all__ = ["STAGES", "RunResult", "run"]

#: The stages of a run, in order. "as printed" needs "stack", "report" needs none.
STAGES = ("optimise", "solve", "grid error", "stack", "as printed", "report")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RunResult:
    """What a run made.

    Attributes
    ----------
    data : RunData
        Everything that the report shows.
    built : Built
    folder : Path
    stack : Stack or None
    report : Path or None
    papers : mapping of str to Path
        For the print room, by what they are.
    """

    data: RunData
    built: Built
    folder: Path
    stack: Stack | None = None
    report: Path | None = None
    papers: Mapping[str, Path] = field(default_factory=dict)

    @property
    def part(self) -> Part:
        """The part as designed."""
        return self.data.part

    @property
    def verdicts(self) -> tuple[Verdict, ...]:
        """One a requirement."""
        return self.data.verdicts

    @property
    def exit_code(self) -> int:
        """0 met, 1 not met or do not print, 2 cannot be said."""
        return exit_code(self.data)

    def as_dict(self) -> dict[str, Any]:
        """Plain data for JSON."""
        return as_dict(
            self.data,
            stack=self.stack,
            report=self.report,
            folder=self.folder,
            papers=self.papers,
        )


def run(
    design: Design | Built | str | Path,
    folder: str | Path = "out",
    *,
    stages: Sequence[str] = STAGES,
    monitor: Monitor = SILENT,
    workers: int = 1,
    scheduler: str | None = None,
    watch: Callable[[Iterate], None] | None = None,
) -> RunResult:
    """Do the whole job, or some of its stages.

    Parameters
    ----------
    design : Design, Built or path
    folder : str or Path
        Results go here. A run that was interrupted goes on from what it finds here: the
        optimiser from its last kept design, the stack from its last whole layer.
    stages : sequence of str
        Some of `STAGES`; the order does not matter.
    monitor : Monitor
    workers, scheduler
        Who writes the layers; see `voxelmat.printing.stack.write_job`.
    watch : callable, optional
        Given each `voxelmat.topopt.iterate.Iterate` of the optimisation.

    Returns
    -------
    RunResult

    Raises
    ------
    InputError, FileFormatError
        With file and key where the design is at fault.
    ResourceError
        If the folder cannot be used.
    ConvergenceError
        If a linear solve fails.
    Cancelled
        From the monitor; what was finished is kept in `folder`.
    """
    unknown = [s for s in stages if s not in STAGES]
    if unknown:
        raise InputError(f"There is no stage {unknown[0]!r}; use some of {', '.join(STAGES)}.")
    if workers < 1:
        raise InputError(f"At least one worker writes the layers; got {workers}.", key="workers")
    folder = Path(folder)
    with held(folder):
        return _Run(folder, frozenset(stages), monitor, workers, scheduler, watch).all(design)


class _Run:
    """One run: carries the folder, the monitor and the clock from stage to stage."""

    def __init__(
        self,
        folder: Path,
        stages: frozenset[str],
        monitor: Monitor,
        workers: int,
        scheduler: str | None,
        watch: Callable[[Iterate], None] | None = None,
    ) -> None:
        self.folder = folder
        self.watch = watch
        self.workers = workers
        self.scheduler = scheduler
        self.stages = stages
        self.monitor = monitor
        self.clock = Clock()
        self.started = utc_now()
        self.expected = 0  # bytes of the largest solve, foretold

    def all(self, design: Design | Built | str | Path) -> RunResult:
        with self.clock.stage("part"):
            built = design if isinstance(design, Built) else build(design, monitor=self.monitor)
        found = self._designed(built)
        part = built.part if found is None else found.part
        save_part(part, self.folder / "part.npz")
        with self.clock.stage("solve"):
            results = self._solved(built, part, "solve")
        with self.clock.stage("grid error"):
            coarser = self._coarser(results)
        stack, stage = self._stacked(built, part)
        again: dict[str, StaticResult] = {}
        if stack is not None and "as printed" in self.stages:
            with self.clock.stage("as printed"):
                printed = as_printed(stack, part, monitor=self.monitor)
                again = self._solved(built, printed, "as printed", results)
                if found is not None:
                    found = with_printed(built, found, printed, monitor=self.monitor)
        with self.clock.stage("verdicts"):
            data = self._data(built, part, found, results, again, stage)
            data = replace(data, grid_error=coarser)
        report = None
        if "report" in self.stages:
            with self.clock.stage("report"):
                report = write_report(data, self.folder / "report.html", monitor=self.monitor)
        result = RunResult(
            data=data,
            built=built,
            folder=self.folder,
            stack=stack,
            report=report,
            papers={} if stage is None else stage.papers,
        )
        write_json(self.folder / "result.json", result.as_dict())
        return result

    def _designed(self, built: Built) -> DesignResult | None:
        """The optimised design, taken up from its checkpoint where there is one."""
        asked = built.design.optimise
        if asked is None or asked.skip or "optimise" not in self.stages:
            return None
        with self.clock.stage("optimise"):
            found = optimised(
                built,
                checkpoint=self.folder / "optimise.npz",
                monitor=self.monitor,
                watch=self.watch,
            )
        if found.cancelled:
            raise Cancelled(f"Stopped by the user while optimising: {found.reason}")
        return found

    def _solved(
        self,
        built: Built,
        part: Part,
        stage: str,
        warm: Mapping[str, StaticResult] | None = None,
    ) -> dict[str, StaticResult]:
        if stage not in self.stages:
            return {}
        if built.load_cases:
            self.expected = max(self.expected, check_fits(part, built.load_cases[0]))
            foretold = estimate_solve(part, built.load_cases[0])
            few, many = foretold.seconds
            self.monitor.report(
                f"estimating, {stage}",
                done=1,
                total=1,
                memory_GiB=foretold.bytes / 2**30,
                seconds_a_case=f"{number(few, 2)} to {number(many, 2)}",
            )
        return solve_cases(
            part,
            built.load_cases,
            monitor=self.monitor,
            warm=warm,
            stage=f"load cases, {stage}",
        )

    def _coarser(self, results: Mapping[str, StaticResult]) -> dict[str, ErrorEstimate]:
        """How far each answer is off by the voxel size, from solving at half resolution."""
        if "grid error" not in self.stages:
            return {}
        return {name: error_estimate(r, monitor=self.monitor) for name, r in results.items()}

    def _stacked(self, built: Built, part: Part) -> tuple[Stack | None, PrintStage | None]:
        if "stack" not in self.stages:
            return None, None
        with self.clock.stage("stack"):
            stack = stack_stage(
                built,
                part,
                self.folder,
                workers=self.workers,
                scheduler=self.scheduler,
                monitor=self.monitor,
            )
        if stack is None:
            return None, None
        with self.clock.stage("preflight"):
            return stack, check_stage(stack, built, part, self.folder, monitor=self.monitor)

    def _data(
        self,
        built: Built,
        part: Part,
        found: DesignResult | None,
        results: dict[str, StaticResult],
        again: dict[str, StaticResult],
        stage: PrintStage | None,
    ) -> RunData:
        answers: tuple[Verdict, ...] = ()
        if results:
            answers = tuple(verdicts(built.resolved, part, results))
            if again:
                printed = next(iter(again.values())).part
                answers = joined_verdicts(answers, verdicts(built.resolved, printed, again))
        cautions = [*built.cautions, *(c for r in results.values() for c in r.cautions)]
        notes = [*built.notes, *(found.notes if found is not None else ())]
        peak = peak_bytes()
        if self.expected and peak is not None:
            notes.append(
                f"A solve was expected to take {number(self.expected / 2**30)} GiB of memory; the "
                f"peak of the whole run was {number(peak / 2**30)} GiB."
            )
        data = RunData(
            name=built.design.name,
            part=part,
            invented=built.design.invented,
            question=built.design.note,
            results=results,
            as_printed=again,
            verdicts=answers,
            safety={name: safety_factors(r) for name, r in results.items()},
            energy_error={name: energy_error(r) for name, r in results.items()},
            interfaces={
                name: interface_spots(r, built.resolved.bonds) for name, r in results.items()
            },
            optimised=found,
            **({} if stage is None else stage.shown()),
            cautions=tuple(dict.fromkeys(cautions)),
            notes=tuple(dict.fromkeys(notes)),
            provenance=Provenance(
                inputs=built.design.inputs,
                seed=built.design.seed,
                threads=threads(),
                started_utc=self.started,
                finished_utc=utc_now(),
            ),
            timings=dict(self.clock.seconds),
        )
        return replace(data, timings=dict(self.clock.seconds))
