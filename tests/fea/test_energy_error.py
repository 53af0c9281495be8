"""The error estimated from the stress alone: 0 where it is exact, near the truth elsewhere."""

import numpy as np
import pytest

from voxelmat.fea import energy_error as module
from voxelmat.fea.energy_error import energy_error
from voxelmat.fea.static import solve
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion


def beam(grid, resin, n, second, vector=(0, 1.0, -2.0), nu=0.3):
    labels = np.ones((3 * n, n, n), np.uint16)
    labels[:, :, n // 2 :] = 2
    part = Part(
        grid=grid(*labels.shape, spacing=(4 / n,) * 3),
        resins=(resin("a", 2000.0, nu), resin("b", second, nu)),
        palette=(EMPTY, Blend.pure("a"), Blend.pure("b")),
        labels=labels,
    )
    case = LoadCase(
        name="tip",
        supports=(Support(region=FaceRegion(name="root", side="x-")),),
        loads=(Force(region=FaceRegion(name="tip", side="x+"), vector=vector),),
    )
    return solve(part, case, tol=1e-9)


@pytest.mark.parametrize("second", [2000.0, 20.0])
def test_near_the_true_error(grid, resin, second):
    """Against a grid three times as fine."""
    found = {n: beam(grid, resin, n, second) for n in (4, 8)}
    truth = beam(grid, resin, 20, second).energy
    for result in found.values():
        true = abs(result.energy / truth - 1)
        assert 0.4 * true < energy_error(result).share < 2.0 * true
    assert energy_error(found[4]).place_mm[0] < 2.0  # at the clamp


def test_nothing_where_the_stress_is_exact(grid, resin):
    """A pull, and two blends in series whose strains jump (nu 0)."""
    assert energy_error(beam(grid, resin, 4, 2000.0, (1.0, 0, 0), nu=0.0)).share < 1e-9
    labels = np.ones((3, 3, 4), np.uint16)
    labels[:, :, 2:] = 2
    part = Part(
        grid=grid(3, 3, 4),
        resins=(resin("a", 2.0, 0.0), resin("b", 2000.0, 0.0)),
        palette=(EMPTY, Blend.pure("a"), Blend.pure("b")),
        labels=labels,
    )
    case = LoadCase(
        name="pull",
        supports=(Support(region=FaceRegion(name="low", side="z-")),),
        loads=(Force(region=FaceRegion(name="top", side="z+"), vector=(0, 0, 1.0)),),
    )
    assert energy_error(solve(part, case, tol=1e-10)).share < 1e-9


def test_bending_of_a_single_layer_is_exact(grid, resin):
    """Ends turned against each other, one voxel through the thickness, nu 0."""
    part = Part.uniform(grid(6, 1, 1), resin(E=100.0, nu=0.0))
    every = Box(name="all", low=(-9, -9, -9), high=(99, 99, 99))
    supports = [Support(region=every, displacement=(None, 0.0, None))]
    for x, turn in ((0.0, -1.0), (6.0, 1.0)):
        for z in (0.0, 1.0):
            at = Box(name=f"{x} {z}", low=(x - 0.1, -1, z - 0.1), high=(x + 0.1, 2, z + 0.1))
            supports.append(Support(region=at, displacement=(turn * (z - 0.5) / 50, None, None)))
    foot = Box(name="foot", low=(-0.1, -1, -0.1), high=(0.1, 2, 0.1))
    supports.append(Support(region=foot, displacement=(None, None, 0.0)))
    result = solve(part, LoadCase(name="bend", supports=tuple(supports)), tol=1e-12)
    assert result.energy > 0
    assert energy_error(result).share < 1e-6


def test_slabs_and_turns_change_nothing(grid, resin, monkeypatch):
    rng = np.random.default_rng(2)
    labels = rng.integers(1, 3, (7, 4, 5)).astype(np.uint16)
    labels[2:4, :2, 3:] = 0
    resins = (resin("a", 2000.0, 0.3), resin("b", 20.0, 0.45))
    palette = (EMPTY, Blend.pure("a"), Blend.pure("b"))
    shares = []
    for turn in (0, 1):
        now = np.transpose(labels, (2, 0, 1)) if turn else labels
        part = Part(grid=grid(*now.shape), resins=resins, palette=palette, labels=now)
        sides = ("z-", "z+") if not turn else ("x-", "x+")
        vector = (1.0, 2.0, 3.0) if not turn else (3.0, 1.0, 2.0)
        plane = Box(name="plane", low=(-1, -1, 1.9), high=(9, 9, 2.1))
        if turn:
            plane = Box(name="plane", low=(1.9, -1, -1), high=(2.1, 9, 9))
        case = LoadCase(
            name="push",
            supports=(Support(region=plane),),
            loads=(Force(region=FaceRegion(name="top", side=sides[1]), vector=vector),),
        )
        result = solve(part, case, tol=1e-10)
        whole = energy_error(result)
        monkeypatch.setattr(module, "_CHUNK", 40)
        cut = energy_error(result)
        monkeypatch.undo()
        np.testing.assert_array_equal(whole.density, cut.density)
        shares.append(whole.share)
    assert shares[0] > 1e-3
    assert shares[1] == pytest.approx(shares[0], rel=1e-4)
