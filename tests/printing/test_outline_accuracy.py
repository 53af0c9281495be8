"""Outlines finer than the voxels, and blends that the empty space beside them does not dilute."""

import numpy as np
import pytest
from print_twins import HARD, SOFT, sphere_distance

from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing.designed import designed_volumes
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_stack

RADIUS, SPACING = 2.5, 0.3
THIRD = Blend.of({"hard": 1, "soft": 2})


def ball(*, with_distance):
    n = 20
    grid = VoxelGrid(shape=(n, n, n), spacing=(SPACING,) * 3)
    distance = sphere_distance(grid, (3.0, 3.0, 3.0), RADIUS)
    return Part(
        grid=grid,
        resins=(HARD, SOFT),
        palette=(EMPTY, THIRD),
        labels=(distance < (14 if with_distance else 0)).astype(np.uint16),
        distance=distance if with_distance else None,
    )


def printed(part, folder):
    return write_stack(part, load_profile("invented-fine"), folder, support="none")


def surface_shift(stack):
    """Mean distance of the outline's sites from the sphere, mm, over the middle layers."""
    shift = []
    for k in range(stack.n_layers // 3, 2 * stack.n_layers // 3, 9):
        inside = stack.layer(k) > 0
        edge = np.argwhere(inside[1:] & ~inside[:-1])
        for i, j in edge[::3]:
            points = [stack.raster.site_to_part((i + d, j, k)) for d in (0, 1)]
            middle = np.mean(points, axis=0) - 3.0
            shift.append(abs(np.linalg.norm(middle) - RADIUS))
    return float(np.mean(shift))


def test_a_signed_distance_outlines_finer_than_the_voxels(tmp_path):
    exact = 4 / 3 * np.pi * RADIUS**3
    fine = printed(ball(with_distance=True), tmp_path / "fine")
    stepped = printed(ball(with_distance=False), tmp_path / "stepped")
    assert sum(fine.volumes_mm3.values()) == pytest.approx(exact, rel=0.01)
    assert surface_shift(fine) < 0.015  # a twentieth of a voxel, most of it the pitch of 21 um
    assert surface_shift(stepped) > 3 * surface_shift(fine)
    assert "signed distance" in fine.manifest["method"]["outline"]
    assert "nearest voxel" in stepped.manifest["method"]["outline"]
    for stack in (fine, stepped):
        wanted = designed_volumes(ball(with_distance=stack is fine))
        for resin, volume in wanted.items():
            assert stack.volumes_mm3[resin] == pytest.approx(volume, rel=0.015)


def test_empty_voxels_do_not_dilute_a_blend(tmp_path):
    stack = printed(ball(with_distance=True), tmp_path / "s")
    volumes = stack.volumes_mm3
    assert volumes["hard"] / sum(volumes.values()) == pytest.approx(1 / 3, abs=5e-4)
    # Nor near the surface: the outermost 0.2 mm of the ball, where every site lies beside or
    # beyond voxels that are empty.
    hard = soft = 0
    for k in range(0, stack.n_layers, 5):
        layer = stack.layer(k)
        x, y = np.meshgrid(*(np.arange(n) for n in layer.shape), indexing="ij")
        x0, y0, z = stack.raster.site_to_part((0, 0, k))
        px, py, _ = stack.pitch_mm
        r = np.sqrt((x0 + px * x - 3) ** 2 + (y0 + py * y - 3) ** 2 + (z - 3) ** 2)
        shell = r > RADIUS - 0.2
        hard += int((shell & (layer == 1)).sum())
        soft += int((shell & (layer == 2)).sum())
    assert hard / (hard + soft) == pytest.approx(1 / 3, abs=0.003)
