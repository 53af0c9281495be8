"""What is asked about a mesh that is brought in: its size, a voxel to begin with, a free name."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from voxelmat.io.mesh import read_mesh
from voxelmat.model.blend import Blend

__all__ = ["UNITS", "edges_mm", "free_name", "made_of", "start_edge"]

#: Voxels that a new design starts with, about.
_START_VOXELS = 200_000
#: Units that are offered for a mesh that does not state its own.
UNITS = ("mm", "cm", "m", "um", "inch", "foot")


def edges_mm(path: Path, unit: str | None) -> tuple[float, float, float]:
    """Edges of the box round a mesh file, mm."""
    points = np.concatenate([m.vertices for m in read_mesh(path, unit)])
    x, y, z = (float(v) for v in np.ptp(points, axis=0))
    return x, y, z


def start_edge(points: np.ndarray[Any, Any]) -> float:
    """A voxel edge of two digits with which the box holds about `_START_VOXELS`."""
    edges = np.maximum(np.ptp(points, axis=0), 1e-3)
    return float(f"{(float(np.prod(edges)) / _START_VOXELS) ** (1 / 3):.2g}")


def made_of(body: dict[str, Any]) -> str:
    """What a body of the design's tables is made of, in words."""
    if "blend" in body:
        return str(Blend.of(body["blend"]))
    return str(body.get("resin") or body.get("bought_in", {}).get("name", "bought in"))


def free_name(name: str, taken: list[str]) -> str:
    """A name that is not taken yet."""
    if name not in taken:
        return name
    return next(f"{name} {n}" for n in range(2, 10_000) if f"{name} {n}" not in taken)
