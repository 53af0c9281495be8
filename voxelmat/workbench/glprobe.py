"""Can this machine draw with OpenGL? VTK dies where it cannot, so a child is asked first."""

from __future__ import annotations

import os
import subprocess
import sys
from dataclasses import dataclass
from functools import cache

__all__ = ["Probe", "probe_gl"]

_CODE = """
import pyvista
plotter = pyvista.Plotter(off_screen=True, window_size=(32, 32))
plotter.add_mesh(pyvista.Sphere())
picture = plotter.screenshot(None, return_img=True)
raise SystemExit(0 if picture.std() > 0 else 3)
"""
_WINDOW = "VTK_DEFAULT_OPENGL_WINDOW"
_TIMEOUT_S = 90.0


@dataclass(frozen=True, slots=True)
class Probe:
    """The answer.

    Attributes
    ----------
    works : bool
    environment : tuple of (str, str)
        Variables that have to be set before VTK is imported.
    reason : str
        Why it does not work, in words, with what to do.
    """

    works: bool
    environment: tuple[tuple[str, str], ...] = ()
    reason: str = ""


def _ways() -> list[dict[str, str]]:
    """Settings to try. Only a Linux machine without a display needs another window class."""
    if sys.platform != "linux" or os.environ.get("DISPLAY") or os.environ.get(_WINDOW):
        return [{}]
    return [{_WINDOW: "vtkEGLRenderWindow"}, {_WINDOW: "vtkOSOpenGLRenderWindow"}]


def _attempt(way: dict[str, str]) -> str:
    """Draw in a child process; empty when that works, else what happened."""
    command = [sys.executable, "-c", _CODE]
    try:
        done = subprocess.run(
            command,
            env={**os.environ, **way},
            stdin=subprocess.DEVNULL,
            stdout=subprocess.DEVNULL,
            stderr=subprocess.PIPE,
            timeout=_TIMEOUT_S,
            check=False,
        )
    except subprocess.TimeoutExpired:
        return f"it took longer than {_TIMEOUT_S:g} s"
    except OSError as error:
        return f"the child process could not be started ({error.strerror})"
    if done.returncode == 0:
        return ""
    if done.returncode < 0:
        return f"it was killed by signal {-done.returncode}"
    if done.returncode == 3:
        return "it drew an empty picture"
    lines = done.stderr.decode(errors="replace").strip().splitlines()
    return lines[-1][:200] if lines else f"it ended with code {done.returncode}"


@cache
def probe_gl() -> Probe:
    """Ask once a process, in about two seconds.

    Returns
    -------
    Probe
    """
    said = []
    for way in _ways():
        trouble = _attempt(way)
        if not trouble:
            return Probe(works=True, environment=tuple(way.items()))
        said.append(trouble)
    return Probe(
        works=False,
        reason=f"A test drawing with OpenGL failed: {'; '.join(dict.fromkeys(said))}. On Debian, "
        "libegl1 and libgl1-mesa-dri are what it needs.",
    )
