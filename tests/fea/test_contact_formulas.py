"""Rigid punches and balls on a half-space against their formulas."""

import numpy as np
import pytest
from held_floor import FLOOR, slides

from voxelmat.fea.contact import contact
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.indenter import FlatPunch, SphereIndenter
from voxelmat.model.loadcase import (
    LoadCase,
)
from voxelmat.model.part import Part


def quarter(resin, a, size, nu):
    """A quarter of a block round the z axis, top at 0; `a` voxels and `size` times 1 mm wide."""
    n, h = a * size, 1.0 / a
    grid = VoxelGrid(shape=(n, n, n), spacing=(h, h, h), origin=(0.0, 0.0, -n * h))
    part = Part.uniform(grid, resin(E=1.0, nu=nu))
    supports = (FLOOR, *slides("x-", "y-", "x+", "y+"))
    return part, LoadCase(name="press", supports=supports)


def punch_stiffness(resin, a, size, nu):
    """F / d over that of the half-space, for the radius that the nodes in contact have."""
    part, case = quarter(resin, a, size, nu)
    found = contact(part, case, FlatPunch(radius=1.0), depth_mm=0.01)
    assert found.changes == (0,)
    radius = np.sqrt(4 * found.contact_area / np.pi)
    assert radius == pytest.approx(1.0, abs=0.25 / a)
    assert found.tangent == pytest.approx(found.secant, rel=1e-6)
    # rigid circular punch F/d = 2 a E / (1 - nu^2) (formula: 2.1978 at nu .3, 2.6667 at .5)
    return 4 * found.force / found.depth / (2 * radius / (1 - nu**2))


def half_space(resin, nu, coarse, fine):
    """Extrapolated to a large block and small voxels.

    The far field of any indenter is that of a point force, so a block of size L takes a share
    ~ 1/L from the compliance; the singular pressure at the rim is seen to first order in h.
    """
    rough = punch_stiffness(resin, coarse, 5, nu)
    wide = punch_stiffness(resin, coarse, 10, nu)
    fine_one = punch_stiffness(resin, fine, 5, nu)
    large = 1.0 / (2.0 / wide - 1.0 / rough)
    small = (fine * fine_one - coarse * rough) / (fine - coarse)
    return large * small / rough


def test_rigid_punch(resin):
    # both corrections at work are 10 % here, so a twentieth is what is left to trust
    assert half_space(resin, 0.3, 4, 6) == pytest.approx(1.0, abs=0.05)


@pytest.mark.slow
@pytest.mark.parametrize("nu", [0.3, 0.4999])
def test_rigid_punch_on_finer_grids(resin, nu):
    assert half_space(resin, nu, 6, 10) == pytest.approx(1.0, abs=0.05)


def test_ball_after_hertz(resin):
    # F = 4/3 E* sqrt(R) d^1.5 (Hertz 1882, formula). A block of size L lacks the far movement
    # c F / L of the half-space: (F / K)^(2/3) = d + c F / L, so two sizes give K and c.
    radius, depth, nu = 10.0, 0.1, 0.3
    hertz = 4 / 3 / (1 - nu**2) * np.sqrt(radius) * depth**1.5
    ratio = []
    for size in (5, 10):
        part, case = quarter(resin, 4, size, nu)
        found = contact(part, case, SphereIndenter(radius=radius), depth_mm=depth)
        ratio.append(4 * found.force / hertz)
        assert found.touch == pytest.approx(0.0, abs=1e-12)
        # log-slope of the curve is 1.5, a little more where the block is small
        assert 1.4 < found.tangent / found.secant < 1.8
    rows = [[r ** (2 / 3), -r / size] for r, size in zip(ratio, (5, 10), strict=True)]
    x, _ = np.linalg.solve(rows, [1.0, 1.0])
    assert x**-1.5 == pytest.approx(1.0, abs=0.03)
    # a = sqrt(R d) holds 4 voxels: their half-voxel rim counts for up to 2 * .5 / 4
    assert 4 * found.contact_area / (np.pi * radius * depth) == pytest.approx(1.0, abs=0.25)
    # p0 = 3 F / (2 pi a^2)
    peak = 1.5 * 4 * found.force / (np.pi * radius * depth)
    assert found.peak_pressure.value == pytest.approx(peak, rel=0.15)
    assert found.peak_pressure.place_mm[2] == 0.0


@pytest.mark.slow
def test_ball_on_a_finer_grid(resin):
    radius, depth, nu = 10.0, 0.1, 0.3
    hertz = 4 / 3 / (1 - nu**2) * np.sqrt(radius) * depth**1.5
    ratio = []
    for size in (5, 10):
        part, case = quarter(resin, 8, size, nu)
        found = contact(part, case, SphereIndenter(radius=radius), depth_mm=depth)
        ratio.append(4 * found.force / hertz)
    rows = [[r ** (2 / 3), -r / size] for r, size in zip(ratio, (5, 10), strict=True)]
    x, _ = np.linalg.solve(rows, [1.0, 1.0])
    assert x**-1.5 == pytest.approx(1.0, abs=0.02)
    assert 4 * found.contact_area / (np.pi * radius * depth) == pytest.approx(1.0, abs=0.125)
