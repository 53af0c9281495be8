"""Coarsening keeps what matters; the estimated error is near the true one."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.fea.coarsen import coarsened
from voxelmat.fea.refine import error_estimate
from voxelmat.fea.static import solve
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion

ROOT = Support(region=FaceRegion(name="root", side="x-"))


def tip(*vector):
    force = Force(region=FaceRegion(name="tip", side="x+"), vector=vector)
    return LoadCase(name="tip", supports=(ROOT,), loads=(force,))


@settings(deadline=None, max_examples=20)
@given(st.integers(0, 10_000))
def test_coarsening_keeps_volume_and_box(grid, resin, seed):
    rng = np.random.default_rng(seed)
    shape = tuple(rng.integers(1, 8, 3))
    occupancy = rng.integers(26, 256, shape).astype(np.uint8)
    occupancy[rng.random(shape) < 0.2] = 0
    occupancy.flat[0] = 255
    labels = np.where(occupancy > 0, rng.integers(1, 3, shape), 0).astype(np.uint16)
    labels.flat[0] = 1
    if max(np.ptp(np.argwhere(labels), axis=0)) == 0:
        return
    part = Part(
        grid=grid(*(int(n) for n in shape), spacing=(0.5, 1.0, 2.0), origin=(1.0, -2.0, 3.0)),
        resins=(resin("a"), resin("b")),
        palette=(EMPTY, Blend.pure("a"), Blend.pure("b")),
        labels=labels,
        occupancy=occupancy,
        bodies={"all": labels > 0},
    )
    coarse = coarsened(part)
    volume = sum(coarse.volumes().values())
    assert volume == pytest.approx(sum(part.volumes().values()), rel=0.01)
    cells = np.argwhere(part.solid)
    low = np.asarray(part.grid.origin) + cells.min(axis=0) * part.grid.spacing
    high = np.asarray(part.grid.origin) + (cells.max(axis=0) + 1) * part.grid.spacing
    np.testing.assert_allclose(coarse.grid.origin, low)
    np.testing.assert_allclose(coarse.grid.upper, high)
    assert coarse.grid.shape == tuple((np.ptp(cells, axis=0) + 2) // 2)
    np.testing.assert_array_equal(coarse.bodies["all"], coarse.labels > 0)


def test_majority_and_distance(grid, resin):
    labels = np.ones((4, 4, 4), np.uint16)
    labels[:, :, 2:] = 2
    labels[0, 0, 0] = 2
    distance = np.full((4, 4, 4), -40, np.int8)
    distance[0] = 8
    part = Part(
        grid=grid(4, 4, 4),
        resins=(resin("a"), resin("b")),
        palette=(EMPTY, Blend.pure("a"), Blend.pure("b")),
        labels=labels,
        distance=distance,
    )
    coarse = coarsened(part)
    np.testing.assert_array_equal(coarse.labels[:, :, 0], 1)
    np.testing.assert_array_equal(coarse.labels[:, :, 1], 2)
    assert coarse.occupancy is None
    np.testing.assert_array_equal(coarse.distance[:, 0, 0], (-8, -20))  # 1/16 of twice the spacing
    with pytest.raises(InputError, match="one voxel"):
        coarsened(part.replace(grid=grid(1, 1, 1), labels=labels[:1, :1, :1], distance=None))


@pytest.mark.parametrize("shape", [(8, 4, 4), (9, 3, 5)])
def test_a_plain_pull_has_no_error(grid, resin, shape):
    """nu 0: every grid gives F L / (E A) (statics and Hooke's law)."""
    part = Part.uniform(grid(*shape), resin(E=100.0, nu=0.0))
    result = solve(part, tip(2.0, 0, 0), tol=1e-10)
    found = error_estimate(result, tol=1e-10)
    assert abs(found.energy_error) < 1e-6
    assert abs(found.displacement_error) < 1e-6
    assert found.notes == ()
    assert result.size.max() == pytest.approx(
        2.0 * shape[0] / (100.0 * shape[1] * shape[2]), rel=1e-6
    )


@pytest.mark.parametrize("second", [2000.0, 20.0])
def test_the_estimate_is_near_the_true_error(grid, resin, second):
    """Against a grid three times as fine, for a short cantilever of one and of two materials."""

    def beam(n):
        labels = np.ones((3 * n, n, n), np.uint16)
        labels[:, :, n // 2 :] = 2
        part = Part(
            grid=grid(*labels.shape, spacing=(4 / n,) * 3),
            resins=(resin("a", 2000.0, 0.3), resin("b", second, 0.3)),
            palette=(EMPTY, Blend.pure("a"), Blend.pure("b")),
            labels=labels,
        )
        return solve(part, tip(0, 1.0, -2.0), tol=1e-9)

    coarse, fine = beam(8), beam(24)
    found = error_estimate(coarse)
    for estimate, value, truth in (
        (found.energy_error, coarse.energy, fine.energy),
        (found.displacement_error, coarse.size.max(), fine.size.max()),
        (
            next(iter(found.load_displacement_error.values())),
            *(next(iter(r.load_displacement.values())) for r in (coarse, fine)),
        ),
    ):
        true = value / truth - 1
        assert np.sign(estimate) == np.sign(true)
        assert 0.4 * abs(true) < abs(estimate) < 4 * abs(true)
    assert "half resolution" in found.words


def test_what_vanishes_is_said(grid, resin):
    """A film of one voxel is lost at half resolution."""
    labels = np.ones((8, 4, 4), np.uint16)
    labels[4] = 2
    part = Part(
        grid=grid(8, 4, 4),
        resins=(resin("a", 2000.0, 0.3), resin("b", 20.0, 0.3)),
        palette=(EMPTY, Blend.pure("a"), Blend.pure("b")),
        labels=labels,
    )
    notes = " ".join(error_estimate(solve(part, tip(1.0, 0, 0))).notes)
    assert "volume of 'b' changes" in notes


def test_a_part_that_cannot_be_coarsened_gets_no_number(grid, resin):
    part = Part.uniform(grid(8, 2, 2), resin())
    spot = Box(name="spot", low=(7.4, 0.4, 1.9), high=(7.6, 0.6, 2.1))  # one face's centre
    case = LoadCase(name="spot", supports=(ROOT,), loads=(Force(region=spot, vector=(0.0, 0, -1)),))
    found = error_estimate(solve(part, case))
    assert np.isnan(found.energy_error)
    assert "spot" in found.words
