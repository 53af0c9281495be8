"""The shell command `voxelmat`: one subcommand a stage, `--json` on each, documented exit codes."""

from __future__ import annotations

import argparse
import json
import os
import sys
from collections.abc import Callable, Sequence
from importlib import import_module
from pathlib import Path
from typing import Any, NoReturn

from voxelmat.errors import Cancelled, FileFormatError, InputError, VoxelmatError

__all__ = ["EXIT_CODES", "main"]

#: What the exit code of every subcommand means.
EXIT_CODES = {
    0: "every requirement is met (or there is none, and nothing was found)",
    1: "a requirement is not met, or a check says: do not print",
    2: "a requirement cannot be judged; the report says why",
    3: "bad input: nothing was computed from it",
    4: "failed or stopped; what was finished is kept",
}

_EPILOG = "exit codes: " + "; ".join(f"{code} {text}" for code, text in EXIT_CODES.items()) + "."

#: Commands that run no compiled loop.
_WITHOUT_LOOPS = ("materials", "warm", "profile", "convert", "lab")

Answer = tuple[int, dict[str, Any], str]


class _Parser(argparse.ArgumentParser):
    """argparse, except that a wrong command line is bad input (3), not 2."""

    def error(self, message: str) -> NoReturn:
        self.print_usage(sys.stderr)
        print(f"{self.prog}: {message}", file=sys.stderr)
        raise SystemExit(3)


def _parser() -> argparse.ArgumentParser:
    from voxelmat import __version__
    from voxelmat.workflow.printroom_options import add_printroom

    parser = _Parser(
        prog="voxelmat",
        description="From a mesh, loads and resins to a checked stack of bitmaps and a report.",
        epilog=_EPILOG,
    )
    parser.add_argument("--version", action="version", version=f"voxelmat {__version__}")
    commands = parser.add_subparsers(dest="command", required=True, metavar="COMMAND")

    def command(name: str, text: str) -> argparse.ArgumentParser:
        sub = commands.add_parser(name, help=text, description=text, epilog=_EPILOG)
        sub.add_argument("--json", action="store_true", help="print the answer as JSON")
        sub.add_argument("--quiet", action="store_true", help="no progress on standard error")
        return sub

    def design(sub: argparse.ArgumentParser, out: str = "out") -> None:
        sub.add_argument("design", type=Path, metavar="DESIGN.toml")
        sub.add_argument(
            "--out",
            type=Path,
            default=Path(out),
            metavar="FOLDER",
            help=f"where results go, and where an interrupted run goes on (default: {out})",
        )

    def writes(sub: argparse.ArgumentParser) -> None:
        sub.add_argument(
            "--workers",
            type=int,
            default=1,
            metavar="N",
            help="processes that write layers (default: 1, with a thread a core)",
        )
        sub.add_argument(
            "--scheduler",
            metavar="ADDRESS",
            help="a dask.distributed scheduler, tcp://host:port, whose workers write layers",
        )

    sub = command("run", "do everything: part, optimise, solve, stack, check, report")
    design(sub)
    writes(sub)
    sub = command("solve", "solve the load cases and judge the requirements")
    design(sub)
    sub.add_argument(
        "--vti",
        action="store_true",
        help="also write each result as a VTK image file (.vti) into the folder",
    )
    design(command("optimise", "choose blends and where material goes"))
    sub = command("stack", "write the bitmap stacks, read them back and check them")
    design(sub)
    writes(sub)
    sub = command("preflight", "check a stack that is on disk")
    sub.add_argument("stack", type=Path, metavar="STACK")
    sub.add_argument(
        "--design", type=Path, metavar="DESIGN.toml", help="compare volumes with this design too"
    )
    sub.add_argument(
        "--out",
        type=Path,
        default=Path("out"),
        metavar="FOLDER",
        help="where the design's run left its part (default: out)",
    )
    sub = command("fix", "make the safe repairs of what preflight found, as a new part")
    sub.add_argument("stack", type=Path, metavar="STACK")
    sub.add_argument("--design", type=Path, metavar="DESIGN.toml", required=True)
    sub.add_argument("--out", type=Path, default=Path("out"), metavar="FOLDER")
    sub.add_argument(
        "--drain",
        action="append",
        default=[],
        metavar="X,Y,Z:DX,DY,DZ[:D]",
        help="cut a drain hole from this point this way, of diameter D, mm (may be repeated)",
    )
    design(command("report", "write the report of what a run left in its folder"))
    _add_lab(command("lab", "open a design in the workbench, in JupyterLab on this machine"))
    _add_convert(command("convert", "turn a part or a volume file into another open format"))
    sub = command("profile", "show a print profile and draw its tray")
    sub.add_argument("profile", metavar="NAME_OR_FILE", help="a shipped name, or a .toml file")
    sub.add_argument("--picture", type=Path, metavar="FILE.png", help="draw the tray")
    sub = command("tray", "lay out many parts on one tray, write and check their stack")
    sub.add_argument("tray", type=Path, metavar="TRAY.toml")
    sub.add_argument(
        "--out",
        type=Path,
        default=Path("tray"),
        metavar="FOLDER",
        help="gets the stack, a picture and tray.json (default: tray)",
    )
    writes(sub)
    sub = command("orientations", "compare the ways in which a part can lie on the tray")
    design(sub)
    sub.add_argument("--order", default="time", metavar="FIGURE", help="by what they are ranked")
    sub.add_argument("--turns", action="store_true", help="turned by 90 degrees about z as well")
    sub.add_argument("--html", type=Path, metavar="FILE", help="write the table as a page too")
    add_printroom(command)
    command("warm", "compile all inner loops ahead, so that the first run need not")
    sub = command("materials", "show the resin library")
    sub.add_argument(
        "--file",
        type=Path,
        action="append",
        default=[],
        metavar="RESIN.toml",
        help="add a material file of your own (may be repeated)",
    )
    sub.add_argument(
        "--shore-a",
        type=float,
        action="append",
        default=[],
        metavar="S",
        help="show the modulus that a Shore A hardness stands for, as a band",
    )
    return parser


def _add_lab(sub: argparse.ArgumentParser) -> None:
    sub.add_argument(
        "design", type=Path, metavar="DESIGN.toml", help="one that is not there yet is begun"
    )
    sub.add_argument("--port", type=int, metavar="N", help="port on the loopback address")
    sub.add_argument("--no-browser", action="store_true", help="print the address, open nothing")
    sub.add_argument(
        "--dry-run", action="store_true", help="make the notebook, print the command, start nothing"
    )


def _add_convert(sub: argparse.ArgumentParser) -> None:
    sub.add_argument(
        "source", type=Path, metavar="IN", help="part.npz, the folder of a run, or a volume file"
    )
    sub.add_argument(
        "target",
        type=Path,
        metavar="OUT",
        help="ends in .3mf, .vti, .nrrd, .nii, .nii.gz, .ome.zarr, or .stl (a surface a label)",
    )
    sub.add_argument("--unit", metavar="UNIT", help="unit of length of IN, where it does not say")
    sub.add_argument("--field", metavar="NAME", help="which array, property or labels of IN")
    sub.add_argument(
        "--smooth", type=int, default=0, metavar="N", help="rounds of smoothing of STL surfaces"
    )
    sub.add_argument("--low", type=float, metavar="V", help="make one label of values from here ..")
    sub.add_argument("--high", type=float, metavar="V", help=".. to here, of all others nothing")
    sub.add_argument(
        "--design", type=Path, metavar="DESIGN.toml", help="where IN was made with its own curves"
    )


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
        "stack": commands.stack,
        "preflight": commands.preflight,
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
        options = _parser().parse_args(arguments)
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
