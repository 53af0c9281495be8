"""The surface that a rigid body touches: gaps, steps and areas of the true outline."""

import numpy as np
import pytest

from voxelmat.fea.contact_surface import touch_surface
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.indenter import FlatPunch
from voxelmat.model.part import Part


def domed(resin, radius, h=0.25, n=24, sunk=0.11, what="distance"):
    """A block whose top falls off as a paraboloid of `radius`, a little below the grid's top."""
    grid = VoxelGrid(shape=(n, n, 8), spacing=(h, h, h), origin=(-n * h / 2, -n * h / 2, -8 * h))
    x, y, z = np.meshgrid(*grid.centres(), indexing="ij")
    level = z + sunk + (x**2 + y**2) / (2 * radius)
    labels = (level < 0).astype(np.uint16) if what != "occupancy" else None
    distance = np.clip(np.round(16 * level / h), -127, 127).astype(np.int8)
    fill = np.clip(np.round(255 * (0.5 - level / h)), 0, 255).astype(np.uint8)
    more = {}
    if what == "distance":
        more = {"distance": distance}
    if what == "occupancy":
        more, labels = {"occupancy": fill}, (fill > 0).astype(np.uint16)
    palette = (EMPTY, Blend.pure("rigid-example"))
    return Part(grid=grid, resins=(resin(E=1.0),), palette=palette, labels=labels, **more)


@pytest.mark.parametrize(("what", "within"), [("distance", 1 / 20), ("occupancy", 1 / 20)])
def test_the_gap_is_that_of_the_true_surface(resin, what, within):
    part = domed(resin, 10.0, what=what)
    surface = touch_surface(part, FlatPunch(position=(0.0, 0.0, 1.0)))
    x, y = (c[n] for c, n in zip(part.grid.nodes()[:2], surface.node.T[:2], strict=True))
    inside = np.hypot(x, y) < 2.0
    true = (x**2 + y**2) / 20.0
    assert np.abs(surface.gap - true)[inside].max() < within * 0.25
    assert surface.touch == pytest.approx(1.11, abs=within * 0.25)
    # the bare staircase is off by up to a voxel
    part = domed(resin, 10.0, what="labels")
    bare = touch_surface(part, FlatPunch(position=(0.0, 0.0, 1.0)))
    x, y = (c[n] for c, n in zip(part.grid.nodes()[:2], bare.node.T[:2], strict=True))
    inside = np.hypot(x, y) < 2.0
    assert np.abs(bare.gap - (x**2 + y**2) / 20.0)[inside].max() > 0.4 * 0.25


@pytest.mark.parametrize("known", [True, False])
def test_a_step_is_no_slope(resin, grid, known):
    # a ledge one voxel high: only what stands proud is touched, up to its rim
    labels = np.ones((6, 4, 4), dtype=np.uint16)
    labels[3:, :, 3] = 0
    g = grid(6, 4, 4)
    x, _, z = np.meshgrid(*g.centres(), indexing="ij")
    level = np.where(x < 3, np.maximum(z - 4, -99), z - 3)
    distance = np.round(16 * level).astype(np.int8) if known else None
    palette = (EMPTY, Blend.pure("rigid-example"))
    part = Part(grid=g, resins=(resin(),), palette=palette, labels=labels, distance=distance)
    surface = touch_surface(part, FlatPunch(position=(0.0, 0.0, 5.0)))
    high = surface.node[:, 2] == 4
    np.testing.assert_allclose(surface.gap, np.where(high, 0.0, 1.0), atol=1e-12)
    assert surface.touch == pytest.approx(1.0)
    np.testing.assert_allclose(surface.true_area, surface.area)


def test_areas_of_a_slope(resin, grid):
    # a plane at 26.6 degrees: true area is sqrt(1.25) times the projected one
    g = grid(12, 6, 12)
    x, _, z = np.meshgrid(*g.centres(), indexing="ij")
    level = (z - 2.0 - 0.5 * x) / np.sqrt(1.25)
    distance = np.clip(np.round(16 * level), -127, 127).astype(np.int8)
    labels = (level < 0).astype(np.uint16)
    palette = (EMPTY, Blend.pure("rigid-example"))
    part = Part(grid=g, resins=(resin(),), palette=palette, labels=labels, distance=distance)
    surface = touch_surface(part, FlatPunch(position=(0.0, 0.0, 20.0)))
    assert surface.area.sum() == pytest.approx(72.0)
    assert surface.true_area.sum() == pytest.approx(72.0 * np.sqrt(1.25), rel=0.01)
    ones = surface.round_about(np.ones(len(surface.area)))
    assert ones.max() <= 9
