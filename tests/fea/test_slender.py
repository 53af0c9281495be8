"""Thin members and hinges are found where they are, and nowhere else."""

import numpy as np
import pytest

from voxelmat.fea.slender import hinge_caution, hinges, thin_caution, thin_voxels
from voxelmat.fea.static import solve
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.loadcase import LoadCase, Support
from voxelmat.model.part import Part
from voxelmat.model.region import FaceRegion


def part_of(solid, grid, resin):
    palette = (EMPTY, Blend.pure("rigid-example"))
    labels = solid.astype(np.uint16)
    return Part(
        grid=grid(*solid.shape, spacing=(0.5, 1.0, 2.0), origin=(10.0, 0.0, 0.0)),
        resins=(resin(),),
        palette=palette,
        labels=labels,
    )


def ball(n, hollow=False):
    x = np.arange(n) - (n - 1) / 2
    r = np.sqrt(sum(np.meshgrid(x**2, x**2, x**2, indexing="ij")))
    return (r < n / 2) & ((r > n / 4) if hollow else True)


@pytest.mark.parametrize("n", [9, 12, 17])
@pytest.mark.parametrize("hollow", [False, True])
def test_round_bodies_have_neither(n, hollow):
    solid = ball(n, hollow)
    edges, corners = hinges(solid)
    assert sum(map(len, edges)) + len(corners) == 0


def test_a_plate_and_a_ligament(grid, resin):
    solid = np.zeros((6, 5, 4), bool)
    solid[:, :, 1] = True
    assert thin_voxels(solid).sum() == 30
    solid[:, :, 2] = True
    assert not thin_voxels(solid).any()
    assert thin_caution(part_of(solid, grid, resin)) == []
    solid[3, :, :] = False
    solid[3, 2, 1:3] = True
    text = thin_caution(part_of(solid, grid, resin))[0]
    assert "2 voxels" in text
    assert "(11.75, 2.5, 3)" in text
    assert not thin_voxels(solid[:, :, 1:2])[0].any()  # a single layer is the model's own


@pytest.mark.parametrize("axis", [0, 1, 2])
def test_an_edge_hinge_is_found_along_any_axis(grid, resin, axis):
    solid = np.zeros((4, 4, 3), bool)
    solid[:2, :2] = True
    solid[2:, 2:] = True
    solid = np.moveaxis(solid, 2, axis)
    edges, corners = hinges(solid)
    assert [len(e) for e in edges] == [3 if a == axis else 0 for a in range(3)]
    np.testing.assert_array_equal(np.delete(edges[axis][0], axis), (1, 1))
    assert len(corners) == 0
    assert hinge_caution(part_of(solid, grid, resin)) == []  # two pieces: said where pieces are
    ring = np.ones((5, 5, 4), bool)
    ring[1:3, 1:3, :] = False
    ring[3, 3, :] = False
    ring = np.moveaxis(np.moveaxis(ring, 2, 0), 0, axis)
    count = 4
    edges, _ = hinges(ring)
    assert [len(e) for e in edges] == [count if a == axis else 0 for a in range(3)]
    text = hinge_caution(part_of(ring, grid, resin))[0]
    assert f"{count} edges and 0 corners" in text


def test_a_diagonal_step_that_the_next_layer_joins_is_none():
    solid = np.zeros((4, 4, 2), bool)
    solid[:2, :2, 0] = solid[2:, 2:, 0] = True
    solid[:, :, 1] = True
    assert sum(map(len, hinges(solid)[0])) == 0
    solid[:2, 2:, 1] = False  # three of four still join
    assert sum(map(len, hinges(solid)[0])) == 0
    solid[2:, :2, 1] = False
    assert sum(map(len, hinges(solid)[0])) == 2


def test_a_corner_hinge(grid, resin):
    solid = np.zeros((4, 4, 4), bool)
    solid[:2, 2:, :2] = solid[2:, :2, 2:] = True
    edges, corners = hinges(solid)
    assert sum(map(len, edges)) == 0
    np.testing.assert_array_equal(corners, [[1, 1, 1]])
    assert hinge_caution(part_of(solid, grid, resin)) == []
    solid[3, 3, :] = solid[3, :, 3] = solid[:, 3, 3] = True  # joined elsewhere too
    solid[:, 3, 0:1] = solid[3, :, 3:] = True
    found = hinge_caution(part_of(solid, grid, resin))
    assert "1 corners, first near (11, 2, 4)" in found[0]


def test_a_solve_carries_the_cautions(grid, resin):
    solid = np.ones((9, 4, 4), bool)
    solid[3:6, :, 2:] = False  # a notch, with a fin in it
    solid[4, :, 2:] = True
    part = part_of(solid, grid, resin)
    sides = [(a, f"{a}-", 0.0) for a in "xyz"] + [("x", "x+", 0.01)]
    supports = tuple(
        Support(
            region=FaceRegion(name=side, side=side),
            displacement=tuple(move if axis == b else None for b in "xyz"),
        )
        for axis, side, move in sides
    )
    case = LoadCase(name="pull", supports=supports)
    cautions = " ".join(solve(part, case).cautions)
    assert "one voxel thin" in cautions
    assert "stands on a stepped surface" in cautions
