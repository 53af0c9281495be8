"""Serves a working notebook of a design, in JupyterLab or as an app: on this machine, by token."""

from __future__ import annotations

import importlib.util
import json
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

from voxelmat.errors import InputError, ResourceError
from voxelmat.io.atomic import write_text
from voxelmat.io.schema import read_toml

__all__ = ["app_command", "app_environment", "lab_command", "serve_lab", "working_notebook"]

_TEMPLATES = Path(__file__).with_name("templates") / "app"

_FIRST = """# Change this first: the design that is opened. A new name starts a new design.
DESIGN = {name!r}"""
_OPEN = """import voxelmat

bench = voxelmat.open_workbench(DESIGN)
bench"""
_AFTER = """# What the screen does, a script can do: 'Copy script' copies its lines; put them here.
"""


def working_notebook(design: Path) -> Path:
    """A notebook beside a design that opens it in the workbench.

    Parameters
    ----------
    design : Path
        A design file; one that does not exist yet is begun in the workbench.

    Returns
    -------
    Path
        ``<design>.ipynb``; one that is there already is left as it is.

    Raises
    ------
    InputError
        If the folder is not there, or `design` has another ending than .toml.
    FileFormatError, ResourceError
        If the file is not TOML, or the folder cannot be written to.
    """
    if design.suffix != ".toml":
        raise InputError(f"A design file ends in .toml; got '{design.name}'.", key="design")
    if not design.absolute().parent.is_dir():
        raise InputError(f"There is no folder '{design.parent}'; make it first.", key="design")
    if design.exists():
        read_toml(design)
    path = design.with_suffix(".ipynb")
    if path.exists():
        return path
    cells = [_code("first", _FIRST.format(name=design.name)), _code("open", _OPEN)]
    book = {
        "cells": [*cells, _code("script", _AFTER)],
        "metadata": {
            "kernelspec": {"display_name": "Python 3", "language": "python", "name": "python3"}
        },
        "nbformat": 4,
        "nbformat_minor": 5,
    }
    write_text(path, json.dumps(book, indent=1) + "\n")
    return path


def _code(name: str, source: str) -> dict[str, Any]:
    return {
        "cell_type": "code",
        "execution_count": None,
        "id": name,
        "metadata": {},
        "outputs": [],
        "source": source,
    }


def lab_command(notebook: Path, *, port: int | None = None, browser: bool = True) -> list[str]:
    """The command line that serves one notebook's folder, on the loopback address, with a token."""
    command = [
        sys.executable, "-m", "jupyterlab", str(notebook.absolute()),
        "--ServerApp.ip=127.0.0.1",
        f"--ServerApp.root_dir={notebook.absolute().parent}",
        "--LabApp.extension_manager=readonly",
        # Nothing is asked of the network: no news, no look for newer versions.
        "--LabApp.news_url=None",
        "--LabApp.check_for_updates_class=jupyterlab.NeverCheckForUpdate",
    ]  # fmt: skip
    if port is not None:
        command += [f"--ServerApp.port={port}", "--ServerApp.port_retries=0"]
    if not browser:
        command.append("--no-browser")
    if hasattr(os, "geteuid") and os.geteuid() == 0:
        command.append("--allow-root")  # in a container; the address is this machine's alone
    return command


def app_command(notebook: Path, *, port: int | None = None, browser: bool = True) -> list[str]:
    """The command line that serves one notebook without its code, by Voila, in the same way.

    It takes the variables of `app_environment`.

    Raises
    ------
    InputError
        If Voila is not installed.
    """
    if importlib.util.find_spec("voila") is None:
        raise InputError(
            "The app is served by Voila, which is not installed: pip install 'voxelmat[app]'. "
            "Without --app the design opens in JupyterLab.",
            key="app",
        )
    command = [
        sys.executable, "-m", "voila", str(notebook.absolute()),
        "--Voila.ip=127.0.0.1",
        "--Voila.auto_token=True",
        "--VoilaConfiguration.template=voxelmat",  # fetches nothing from elsewhere
    ]  # fmt: skip
    if port is not None:
        command += [f"--Voila.port={port}", "--Voila.port_retries=0"]
    if not browser:
        command.append("--no-browser")
    return command


def app_environment() -> dict[str, str]:
    """What `app_command` needs in its environment: where the app's page lies."""
    before = os.environ.get("JUPYTER_PATH")
    paths = [str(_TEMPLATES), *([before] if before else [])]
    return {"JUPYTER_PATH": os.pathsep.join(paths)}


def serve_lab(command: list[str], environment: dict[str, str] | None = None) -> int:
    """Run JupyterLab or Voila until it is closed; its exit code.

    Parameters
    ----------
    command : list of str
    environment : dict of str, optional
        Variables besides those of this process.

    Raises
    ------
    ResourceError
        If it cannot be started.
    """
    try:
        process = subprocess.Popen(command, env={**os.environ, **(environment or {})})
    except OSError as error:
        raise ResourceError(f"{command[2]} could not be started: {error}.") from None
    while True:
        try:
            return process.wait()
        except KeyboardInterrupt:  # JupyterLab asks by itself whether to stop
            continue
