"""Progress on a terminal: a bar a stage on standard error, and Ctrl-C as a clean stop."""

from __future__ import annotations

import signal
import sys
from types import FrameType, TracebackType

from rich.console import Console
from rich.progress import (
    BarColumn,
    MofNCompleteColumn,
    Progress,
    TaskID,
    TextColumn,
    TimeElapsedColumn,
)
from rich.table import Column

from voxelmat.errors import Cancelled
from voxelmat.monitor import Figure
from voxelmat.units import number

__all__ = ["ConsoleMonitor"]


class ConsoleMonitor:
    """A monitor that draws bars, or one line a stage where there is no terminal.

    The first Ctrl-C asks the work to stop at its next safe point, so that everything finished
    is kept; a second one interrupts at once.
    """

    def __init__(self, *, quiet: bool = False) -> None:
        self._quiet = quiet
        self._console = Console(stderr=True, highlight=False)
        self._bars: Progress | None = None
        self._tasks: dict[str, TaskID] = {}
        self._seen: set[str] = set()
        self._stop = False
        self._old_handler: object = None

    def __enter__(self) -> ConsoleMonitor:
        if not self._quiet and self._console.is_terminal:
            self._bars = Progress(
                TextColumn("{task.description}", table_column=Column(no_wrap=True, min_width=22)),
                BarColumn(bar_width=16, table_column=Column(min_width=16)),
                MofNCompleteColumn(table_column=Column(no_wrap=True, min_width=9)),
                TimeElapsedColumn(table_column=Column(no_wrap=True, min_width=7)),
                TextColumn(
                    "{task.fields[figures]}",
                    table_column=Column(no_wrap=True, overflow="ellipsis", ratio=1),
                ),
                console=self._console,
                expand=True,
            )
            self._bars.start()
        try:
            self._old_handler = signal.signal(signal.SIGINT, self._interrupt)
        except ValueError:  # not the main thread: Ctrl-C then stays with whoever owns it
            self._old_handler = None
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        if self._bars is not None:
            self._bars.stop()
            self._bars = None
        if self._old_handler is not None:
            signal.signal(signal.SIGINT, self._old_handler)  # type: ignore[arg-type]

    def _interrupt(self, number: int, frame: FrameType | None) -> None:
        if self._stop:
            raise KeyboardInterrupt
        self._stop = True
        self.say("Stopping at the next safe point; press Ctrl-C again to stop at once.")

    def say(self, text: str) -> None:
        """Print one line on standard error."""
        if not self._quiet:
            self._console.print(text, markup=False)

    def report(self, stage: str, *, done: int, total: int, **figures: Figure) -> None:
        """Draw progress; raise `Cancelled` after Ctrl-C."""
        if self._stop:
            raise Cancelled(f"Stopped by the user during: {stage} ({done} of {total}).")
        if self._quiet:
            return
        text = "  ".join(
            f"{key.replace('_', ' ')} {number(value) if not isinstance(value, str) else value}"
            for key, value in figures.items()
        )
        if self._bars is None:
            if stage not in self._seen:
                self._seen.add(stage)
                self._console.print(f"{stage} ...", markup=False)
                sys.stderr.flush()
            return
        if stage not in self._tasks:
            self._tasks[stage] = self._bars.add_task(stage, total=total or None, figures=text)
        self._bars.update(self._tasks[stage], completed=done, total=total or None, figures=text)
