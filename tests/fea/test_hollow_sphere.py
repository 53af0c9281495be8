"""A hollow ball under inner pressure: stress and displacement in it by Lame's formulas."""

import numpy as np
import pytest

from voxelmat.fea.sample import sample_points
from voxelmat.fea.static import solve
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.loadcase import LoadCase, Pressure, Support
from voxelmat.model.part import Part
from voxelmat.model.region import FaceRegion, Sphere


def displacement(r):
    """a 1, b 2, p 1, E 1, nu .3 (G. Lame, after Timoshenko & Goodier; from memory)."""
    return (0.4 * r + 1.3 * 8 / (2 * r**2)) / 7


def hoop(r):
    return (1 + 8 / (2 * r**3)) / 7


def test_a_hollow_ball_under_pressure(grid, resin):
    assert displacement(1.0) == pytest.approx(0.8)
    assert hoop(1.0) == pytest.approx(0.7142857, rel=1e-6)
    n, samples = 14, 4
    h = 2.0 / n
    t = (np.arange(n * samples) + 0.5) * h / samples
    r = np.sqrt(sum(np.meshgrid(t**2, t**2, t**2, indexing="ij")))
    inside = ((r > 1) & (r < 2)).reshape(n, samples, n, samples, n, samples)
    occupancy = np.round(255 * inside.mean(axis=(1, 3, 5))).astype(np.uint8)
    part = Part(
        grid=grid(n, n, n, spacing=(h, h, h)),
        resins=(resin(E=1.0, nu=0.3),),
        palette=(EMPTY, Blend.pure("rigid-example")),
        labels=(occupancy > 0).astype(np.uint16),
        occupancy=occupancy,
    )
    supports = tuple(
        Support(
            region=FaceRegion(name=a, side=f"{a}-"),
            displacement=tuple(0.0 if a == b else None for b in "xyz"),
        )
        for a in "xyz"
    )
    bore = Sphere(name="bore", centre=(0, 0, 0), radius=1.25)
    case = LoadCase(name="blow", supports=supports, loads=(Pressure(region=bore, pressure=1.0),))
    result = solve(part, case, tol=1e-8)
    way = np.array([[1, 1, 1], [3, 2, 1], [1, 3, 2], [2, 1, 3]]) / np.sqrt([[3], [14], [14], [14]])
    for radius in (1.4, 1.6):
        found = sample_points(result, radius * way, ["stress", "displacement"])
        out = (found.values["displacement"] * way).sum(axis=1)
        np.testing.assert_allclose(out, displacement(radius), rtol=0.03)
        s = found.values["stress"]
        rows = ((0, 3, 4), (3, 1, 5), (4, 5, 2))
        pull = np.stack([(s[:, row] * way).sum(axis=1) for row in rows], axis=1)
        radial = (pull * way).sum(axis=1)
        around = 0.5 * (s[:, :3].sum(axis=1) - radial)
        np.testing.assert_allclose(around, hoop(radius), rtol=0.05)
