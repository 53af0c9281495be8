"""A part that reaches a face of its grid ends there, and its outline is no finding."""

import numpy as np
import pytest
from print_twins import HARD, SOFT

from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing.outlines import outline_deviation
from voxelmat.printing.preflight import preflight
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_stack


def dome(cut):
    """A ball of radius 4 mm whose lower half lies beyond the grid, `cut` mm over its middle."""
    grid = VoxelGrid(shape=(36, 36, 18), spacing=(0.25, 0.25, 0.25), origin=(-4.5, -4.5, cut))
    x, y, z = np.meshgrid(*grid.centres(), indexing="ij")
    far = np.sqrt(x**2 + y**2 + z**2) - 4.0
    distance = np.clip(np.rint(16 * far / 0.25), -127, 127).astype(np.int8)
    labels = (far < 0.25).astype(np.uint16)
    return Part(
        grid=grid,
        resins=(HARD, SOFT),
        palette=(EMPTY, Blend.pure("hard")),
        labels=np.asfortranarray(labels),
        distance=np.asfortranarray(distance),
    )


@pytest.mark.parametrize("cut", [0.0, 1.0])
def test_a_dome_on_the_face_of_its_grid(tmp_path, cut):
    stack = write_stack(dome(cut), load_profile("invented-standard"), tmp_path / "s")
    seen = outline_deviation(stack, dome(cut))
    # Half a pitch is what rounding explains, the chord of 0.25 mm on a ball of 4 mm is 2 um, and
    # the distance is rounded to 1/16 of a voxel.
    assert seen.whole.largest < 0.5 * max(stack.pitch_mm) + 0.25 / 16
    assert [f for f in preflight(stack, dome(cut)) if f.code == "outline"] == []
