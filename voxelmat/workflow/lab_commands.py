"""What ``voxelmat lab`` does."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from voxelmat.errors import ResourceError
from voxelmat.monitor import Monitor
from voxelmat.workflow.lab import (
    app_command,
    app_environment,
    lab_command,
    serve_lab,
    working_notebook,
)

__all__ = ["lab"]


def lab(
    *,
    design: Path,
    app: bool,
    port: int | None,
    no_browser: bool,
    dry_run: bool,
    monitor: Monitor,
) -> tuple[int, dict[str, Any], str]:
    """Open a design in the workbench, in JupyterLab or as an app; ends when that is closed."""
    del monitor
    notebook = working_notebook(design)
    command = (app_command if app else lab_command)(notebook, port=port, browser=not no_browser)
    environment = app_environment() if app else {}
    data = {"notebook": str(notebook), "command": command, "environment": environment}
    if not dry_run:
        code = serve_lab(command, environment)
        if code:
            raise ResourceError(f"{command[2]} ended with code {code}; what it said stands above.")
        return 0, data, f"Closed; {notebook} stays."
    line = " ".join([*(f"{k}={v}" for k, v in environment.items()), *command])
    return 0, data, f"{notebook}\n{line}"
