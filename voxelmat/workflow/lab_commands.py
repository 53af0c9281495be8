"""What ``voxelmat lab`` does."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from voxelmat.errors import ResourceError
from voxelmat.monitor import Monitor
from voxelmat.workflow.lab import lab_command, serve_lab, working_notebook

__all__ = ["lab"]


def lab(
    *, design: Path, port: int | None, no_browser: bool, dry_run: bool, monitor: Monitor
) -> tuple[int, dict[str, Any], str]:
    """Open a design in the workbench, in JupyterLab; ends when JupyterLab is closed."""
    del monitor
    notebook = working_notebook(design)
    command = lab_command(notebook, port=port, browser=not no_browser)
    data = {"notebook": str(notebook), "command": command}
    if not dry_run:
        code = serve_lab(notebook, port=port, browser=not no_browser)
        if code:
            raise ResourceError(f"JupyterLab ended with code {code}; what it said stands above.")
    return 0, data, f"{notebook}\n{' '.join(command)}" if dry_run else f"Closed; {notebook} stays."
