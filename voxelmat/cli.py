"""The shell command `voxelmat`: one subcommand a stage, `--json` on each, documented exit codes."""

from __future__ import annotations

import argparse
import json
import os
import sys
from collections.abc import Callable, Sequence
from importlib import import_module
from pathlib import Path
from typing import Any

from voxelmat.cli_parser import EXIT_CODES, parser
from voxelmat.errors import Cancelled, FileFormatError, InputError, VoxelmatError

__all__ = ["EXIT_CODES", "main"]

#: Commands that run no compiled loop.
_WITHOUT_LOOPS = ("materials", "warm", "profile", "convert", "lab")

Answer = tuple[int, dict[str, Any], str]


def _dispatch(options: argparse.Namespace) -> Answer:
    from voxelmat.console import ConsoleMonitor
    from voxelmat.workflow import (
        commands,
        convert_commands,
        lab_commands,
        profile_commands,
        tray_commands,
    )

    calls: dict[str, Callable[..., Answer]] = {
        "run": commands.run,
        "solve": commands.solve,
        "optimise": commands.optimise,
        "tradeoff": _later("tradeoff_commands", "tradeoff"),
        "stack": commands.stack,
        "preflight": _later("check_commands", "preflight"),
        "fix": _later("fix_commands", "fix"),
        "report": commands.report,
        "materials": commands.materials,
        "warm": commands.warm,
        "profile": profile_commands.profile,
        "convert": convert_commands.convert,
        "lab": lab_commands.lab,
        "ticket": _later("printroom_commands", "ticket"),
        "proof": _later("printroom_commands", "proof"),
        "record": _later("printroom_commands", "record"),
        "kit": _later("kit_commands", "kit"),
        "tray": tray_commands.tray,
        "orientations": tray_commands.orientations,
    }
    given = {k: v for k, v in vars(options).items() if k not in ("command", "json", "quiet")}
    with ConsoleMonitor(quiet=options.quiet) as monitor:
        if (
            options.command not in ("materials", "warm", "profile", "convert", "lab")
            and not _compiled()
        ):
            monitor.say("First run here: the inner loops are compiled, once; about half a minute.")
        return calls[options.command](monitor=monitor, **given)


def _later(module: str, name: str) -> Callable[..., Answer]:
    """A command whose module loads the compiled loops, so that it is imported when called."""

    def call(**given: Any) -> Answer:
        answer: Answer = getattr(import_module(f"voxelmat.workflow.{module}"), name)(**given)
        return answer

    return call


def _compiled() -> bool:
    """Whether an earlier run left compiled kernels behind."""
    folder = os.environ.get("NUMBA_CACHE_DIR")
    here = Path(folder) if folder else Path(__file__).parent / "kernels" / "__pycache__"
    return any(here.rglob("*.nbi"))


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line.

    Parameters
    ----------
    arguments : sequence of str, optional
        The words after ``voxelmat``; those of the process where left out.

    Returns
    -------
    int
        See `EXIT_CODES`.
    """
    try:
        options = parser().parse_args(arguments)
    except SystemExit as stop:
        return int(stop.code or 0)
    # Idle threads that spin cost more than they gain on the few cores of a desk machine.
    os.environ.setdefault("OMP_WAIT_POLICY", "passive")
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    code, text = 4, ""
    data: dict[str, Any] = {}
    try:
        code, data, text = _dispatch(options)
    except (InputError, FileFormatError) as error:
        code, text = 3, str(error)
        data = {"error": text, "kind": "bad input"}
        if isinstance(error, InputError):
            data |= {"file": error.file, "key": error.key}
    except Cancelled as error:
        text = f"{error} What was finished is kept; call the same command again to go on."
        data = {"error": text, "kind": "stopped"}
    except KeyboardInterrupt:
        text = "Interrupted. What was finished is kept; call the same command again to go on."
        data = {"error": text, "kind": "stopped"}
    except VoxelmatError as error:
        text = str(error)
        data = {"error": text, "kind": "failed"}
    except MemoryError:
        text = "There is not enough memory for this grid; use larger voxels (grid.spacing_mm)."
        data = {"error": text, "kind": "failed"}
    try:
        _print(options, code, data, text)
    except BrokenPipeError:  # whoever read our output has seen enough
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    return code


def _print(options: argparse.Namespace, code: int, data: dict[str, Any], text: str) -> None:
    if options.json:
        print(json.dumps({"exit_code": code, **data}, indent=2, allow_nan=False))
    elif code in (3, 4) and "error" in data:
        print(f"voxelmat {options.command}: {text}", file=sys.stderr)
    else:
        print(text)
    sys.stdout.flush()


if __name__ == "__main__":
    raise SystemExit(main())
