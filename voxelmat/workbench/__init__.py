"""Screens: views of parts, results and stacks in a notebook, and the workbench of a design."""

from __future__ import annotations

from typing import Any

__all__ = ["compare"]


def __getattr__(name: str) -> Any:
    """`compare`, fetched when it is first asked for: it needs the notebook's packages."""
    if name == "compare":
        from voxelmat.workbench.comparison import compare

        return compare
    raise AttributeError(f"module 'voxelmat.workbench' has no attribute '{name}'")
