"""The words of the shell command `voxelmat`: subcommands, options and what they are for."""

from __future__ import annotations

import argparse
import sys
from pathlib import Path
from typing import NoReturn

__all__ = ["EXIT_CODES", "parser"]

#: What the exit code of every subcommand means.
EXIT_CODES = {
    0: "every requirement is met (or there is none, and nothing was found)",
    1: "a requirement is not met, or a check says: do not print",
    2: "a requirement cannot be judged; the report says why",
    3: "bad input: nothing was computed from it",
    4: "failed or stopped; what was finished is kept",
}

_EPILOG = "exit codes: " + "; ".join(f"{code} {text}" for code, text in EXIT_CODES.items()) + "."


class _Parser(argparse.ArgumentParser):
    """argparse, except that a wrong command line is bad input (3), not 2."""

    def error(self, message: str) -> NoReturn:
        self.print_usage(sys.stderr)
        sys.stderr.write(f"{self.prog}: {message}\n")
        raise SystemExit(3)


def parser() -> argparse.ArgumentParser:
    """The parser of the whole command line."""
    from voxelmat import __version__
    from voxelmat.workflow.printroom_options import add_printroom

    top = _Parser(
        prog="voxelmat",
        description="From a mesh, loads and resins to a checked stack of bitmaps and a report.",
        epilog=_EPILOG,
    )
    top.add_argument("--version", action="version", version=f"voxelmat {__version__}")
    commands = top.add_subparsers(dest="command", required=True, metavar="COMMAND")

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

    def drain(sub: argparse.ArgumentParser) -> None:
        sub.add_argument(
            "--drain",
            action="append",
            default=[],
            metavar="X,Y,Z:DX,DY,DZ[:D]",
            help="cut a drain hole from this point this way, of diameter D, mm (may be repeated)",
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
    sub = command("optimise", "choose blends and where material goes")
    design(sub)
    sub.add_argument(
        "--animate",
        type=Path,
        metavar="FILE.gif",
        help="draw how the design formed, as a moving picture (.gif or .webp)",
    )
    sub = command("tradeoff", "optimise under a sweep of one or two limits: a front of designs")
    design(sub, "tradeoff")
    sub.add_argument(
        "--limit",
        action="append",
        required=True,
        metavar="NAME=V,V,..",
        help="a limit of [optimise] by its name or number, and its values (at most twice)",
    )
    sub = command("stack", "write the bitmap stacks, read them back and check them")
    design(sub)
    writes(sub)
    sub = command("preflight", "check a stack that is on disk")
    sub.add_argument("stack", type=Path, metavar="STACK")
    sub.add_argument(
        "--design",
        type=Path,
        metavar="DESIGN.toml",
        help="compare layers, outline and volumes with this design, and measure its dimensions",
    )
    sub.add_argument(
        "--out",
        type=Path,
        default=Path("out"),
        metavar="FOLDER",
        help="where the design's run left its part (default: out)",
    )
    sub.add_argument(
        "--shallow", action="store_true", help="leave out what is judged in three dimensions"
    )
    sub.add_argument("--fix", action="store_true", help="make the safe repairs, as 'fix' does")
    drain(sub)
    sub = command("fix", "make the safe repairs of what preflight found, as a new part")
    sub.add_argument("stack", type=Path, metavar="STACK")
    sub.add_argument("--design", type=Path, metavar="DESIGN.toml", required=True)
    sub.add_argument("--out", type=Path, default=Path("out"), metavar="FOLDER")
    drain(sub)
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
    return top


def _add_lab(sub: argparse.ArgumentParser) -> None:
    sub.add_argument(
        "design", type=Path, metavar="DESIGN.toml", help="one that is not there yet is begun"
    )
    sub.add_argument("--app", action="store_true", help="without code, by Voila: the [app] extra")
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
