"""The words that the print room's shell commands take."""

from __future__ import annotations

import argparse
from collections.abc import Callable
from pathlib import Path

__all__ = ["add_printroom"]


def add_printroom(command: Callable[[str, str], argparse.ArgumentParser]) -> None:
    """Add `ticket`, `proof`, `record` and `kit`; `command` makes a subcommand."""
    _ticket(command("ticket", "write the job ticket and the bill of materials of a stack"))
    _proof(command("proof", "cut a proof print out of a stack, printable in half an hour"))
    _record(command("record", "note what happened at the printer, or list what was noted"))
    _kit(command("kit", "make a test print kit of a profile, or read its filled sheet back"))


def _several(sub: argparse.ArgumentParser, word: str, form: str, text: str) -> None:
    sub.add_argument(word, action="append", default=[], metavar=form, help=f"{text}; repeatable")


def _ticket(sub: argparse.ArgumentParser) -> None:
    sub.add_argument("stack", type=Path, metavar="STACK")
    sub.add_argument(
        "--out", type=Path, metavar="FILE.html", help="default: STACK.ticket.html, beside STACK"
    )
    sub.add_argument(
        "--bom", type=Path, metavar="FILE.csv", help="default: STACK.bom.csv, beside STACK"
    )
    _several(sub, "--loaded", "RESIN=GRAMS", "grams that the machine holds")
    _several(sub, "--lot", "RESIN=LOT", "lot of a resin")
    _several(sub, "--expiry", "RESIN=YYYY-MM-DD", "last day on which a resin may be used")
    sub.add_argument("--no-check", action="store_true", help="do not check the stack before")


def _proof(sub: argparse.ArgumentParser) -> None:
    sub.add_argument("stack", type=Path, metavar="STACK")
    sub.add_argument("--out", type=Path, metavar="FOLDER", help="default: STACK-proof")
    sub.add_argument(
        "--first", action="store_true", help="the lowest layers, not the worst finding"
    )
    sub.add_argument("--height-mm", type=float, default=3.0, metavar="H", help="default: 3")
    sub.add_argument(
        "--minutes",
        type=float,
        default=30.0,
        metavar="T",
        help="longest printing time; default: 30",
    )


def _record(sub: argparse.ArgumentParser) -> None:
    sub.add_argument("stack", type=Path, metavar="STACK")
    sub.add_argument("--operator", metavar="WHO", help="a role or initials; without it: list")
    sub.add_argument("--started", metavar="TIME", help="as 2026-12-01T08:30; default: now")
    _several(sub, "--lot", "RESIN=LOT", "lot of a resin")
    sub.add_argument(
        "--abort-layer", type=int, metavar="N", help="whole layers printed when it was stopped"
    )
    sub.add_argument("--mass-g", type=float, metavar="G", help="weighed mass")
    sub.add_argument("--with-support", action="store_true", help="weighed before cleaning")
    _several(sub, "--measured", "NAME=DESIGN:MEASURED", "a dimension, both in mm")
    sub.add_argument("--note", default="", metavar="TEXT")
    sub.add_argument(
        "--file", type=Path, action="append", default=[], metavar="RESIN.toml",
        help="a material file of your own, for its density (may be repeated)",
    )  # fmt: skip


def _kit(sub: argparse.ArgumentParser) -> None:
    sub.add_argument("profile", nargs="?", metavar="PROFILE", help="a shipped name or .toml file")
    sub.add_argument(
        "--out", type=Path, metavar="PATH",
        help="folder of the kit (default: kit); with --read the new profile's .toml file",
    )  # fmt: skip
    sub.add_argument("--read", type=Path, metavar="SHEET.csv", help="read a filled sheet back")
    sub.add_argument("--scale", type=float, default=1.0, metavar="F", help="of all features")
    sub.add_argument("--rigid", metavar="RESIN", help="default: one that is loaded, rigid-general")
    sub.add_argument("--soft", metavar="RESIN", help="default: one that is loaded, elastomer-a40")
    sub.add_argument("--date", metavar="YYYY-MM-DD", help="of the measurement; default: today")
