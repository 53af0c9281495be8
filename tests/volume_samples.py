"""A small part whose every axis and direction can be told apart, for tests of volume formats."""

from __future__ import annotations

import numpy as np
from fabricated import resin

from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part

SHAPE = (11, 7, 5)
SPACING = (0.0423, 0.0847, 0.027)
ORIGIN = (1.25, -3.5, 0.1)


def labels(shape=SHAPE) -> np.ndarray:
    """Random labels 0 to 3 with no symmetry."""
    return np.random.default_rng(5).integers(0, 4, shape).astype(np.uint16)


def sample(*, partly_full: bool = False) -> Part:
    """Three labels of two resins (invented); optionally with occupancy and signed distance."""
    values = labels()
    rng = np.random.default_rng(6)
    occupancy = np.where(values > 0, rng.integers(1, 256, SHAPE), 0).astype(np.uint8)
    return Part(
        grid=VoxelGrid(shape=SHAPE, spacing=SPACING, origin=ORIGIN),
        resins=(
            resin("rigid-example", "rigid", 2400.0, 0.35, "#0072B2", 50.0),
            resin("soft-example", "elastomer", 0.9, 0.49, "#E69F00", 1.5),
        ),
        palette=(
            EMPTY,
            Blend.pure("rigid-example"),
            Blend.pure("soft-example"),
            Blend.of({"rigid-example": 1, "soft-example": 2}),
        ),
        labels=values,
        occupancy=occupancy if partly_full else None,
        distance=rng.integers(-127, 128, SHAPE).astype(np.int8) if partly_full else None,
        name="sample & co <1>",
    )
