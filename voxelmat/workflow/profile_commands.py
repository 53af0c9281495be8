"""The shell command that shows a print profile, in words and as a picture."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from voxelmat.io.atomic import write_bytes
from voxelmat.monitor import Monitor
from voxelmat.printing.profile import load_profile
from voxelmat.workflow.report_profile import profile_picture, profile_rows

__all__ = ["profile"]


def profile(
    profile: str, picture: Path | None, monitor: Monitor
) -> tuple[int, dict[str, Any], str]:
    """Check a profile, say what it holds, and draw its tray.

    Parameters
    ----------
    profile : str
        A shipped name or a TOML file.
    picture : Path or None
        Where a PNG of the tray goes.

    Returns
    -------
    tuple
        Exit code, the profile as plain data, text.

    Raises
    ------
    InputError
        If there is no such profile, or it is not one.
    ResourceError
        If the picture cannot be written.
    """
    del monitor  # done in an instant
    found = load_profile(profile)
    rows = profile_rows(found)
    width = max(len(label) for label, _ in rows)
    lines = [f"{label:<{width}}  {text}".rstrip() for label, text in rows]
    head = f"print profile {found.name}" + (", invented: no real printer" if found.invented else "")
    if picture is not None:
        write_bytes(picture, profile_picture(found).png)
        lines.append(f"picture of the tray: {picture}")
    return 0, {"profile": found.as_dict()}, "\n".join([head, *lines])
