"""Random, ugly parts end in a right answer or in a clear error: never a hang, never a nan."""

import time

import numpy as np
import pytest
import scipy.sparse
import scipy.sparse.linalg

from voxelmat.errors import ConvergenceError, InputError
from voxelmat.fea.assemble import assemble, moduli
from voxelmat.fea.held import check_held
from voxelmat.fea.operator import touched_nodes
from voxelmat.fea.static import solve
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.loadcase import BodyForce, Force, GroundSpring, LoadCase, Pressure, Support
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion

KINDS = ("islands", "checkerboard", "members", "all soft", "void layers", "dither", "dust")
PATIENCE_S = 120.0


class Deadline:
    """A monitor that fails the test where a solve does not end."""

    def __init__(self):
        self.end = time.monotonic() + PATIENCE_S

    def report(self, stage, *, done, total, **figures):
        assert time.monotonic() < self.end, f"still {stage} after {PATIENCE_S} s"


def solid_of(kind, shape, rng):
    """Where there is material."""
    i, j, k = np.indices(shape)
    if kind == "islands":
        return rng.random(shape) < rng.uniform(0.3, 0.7)
    if kind == "checkerboard":
        return ((i + j + k) % 2 == 0) | (i < rng.integers(0, 3))
    if kind == "members":
        n = rng.integers(2, 4)
        return ((i % n == 0).astype(int) + (j % n == 0) + (k % n == 0)) >= 2
    if kind == "void layers":
        return (i + j * 0 + k * 0) % rng.integers(3, 6) != 2
    if kind == "dust":
        return rng.random(shape) < 0.08
    return np.ones(shape, dtype=bool)


def random_part(seed, grid, resin):
    """Invented resins 2500 to 1 apart, or to 60,000; kinds in turn."""
    rng = np.random.default_rng(seed)
    kind = KINDS[seed % len(KINDS)]
    shape = tuple(int(n) for n in rng.integers(1, 8, size=3))
    solid = solid_of(kind, shape, rng)
    stiff = rng.random(shape) < (0.0 if kind == "all soft" else rng.uniform(0.1, 0.9))
    labels = np.where(solid, np.where(stiff, 1, 2), 0).astype(np.uint16)
    resins = (
        resin("stiff", float(rng.choice([2500.0, 6e4])), 0.35),
        resin("soft", 1.0, float(rng.choice([0.3, 0.49, 0.4995])), kind="elastomer"),
    )
    occupancy = None
    if rng.random() < 0.3:
        occupancy = np.where(solid, rng.integers(1, 256, shape), 0).astype(np.uint8)
    return Part(
        grid=grid(*shape, spacing=tuple(rng.uniform(0.5, 1.5, 3))),
        resins=resins,
        palette=(EMPTY, Blend.pure("stiff"), Blend.pure("soft")),
        labels=labels,
        occupancy=occupancy,
    )


def random_box(part, rng, name):
    """Round a random voxel, empty or not."""
    h = np.array(part.grid.spacing)
    at = (rng.integers(0, part.grid.shape) + 0.5) * h
    return Box(name=name, low=tuple(at - 0.6 * h), high=tuple(at + 0.6 * h))


def random_case(seed, part):
    """Supports on a face, a box, or springs; loads on a face, an island, everywhere."""
    rng = np.random.default_rng([seed, 1])
    root = FaceRegion(name="root", side="x-")
    supports, loads = [], []
    choice = rng.random()
    if choice < 0.7:
        move = (float(rng.choice([0.0, 0.01])), 0.0, 0.0)
        supports.append(Support(region=root, displacement=move))
    elif choice < 0.85:
        supports.append(Support(region=random_box(part, rng, "hold")))
    else:
        loads.append(GroundSpring(region=root, stiffness=tuple(rng.uniform(0, 5, 3))))
    kind = rng.integers(0, 4)
    if kind == 0:
        loads.append(Force(region=FaceRegion(name="tip", side="x+"), vector=(0.1, 0.0, -1.0)))
    elif kind == 1:
        loads.append(Force(region=random_box(part, rng, "island"), vector=(0.0, 1.0, 0.5)))
    elif kind == 2:
        loads.append(Pressure(region=FaceRegion(name="top", side="z+"), pressure=0.01))
    else:
        loads.append(BodyForce(acceleration=(0.0, 0.0, -9806.65)))
    return LoadCase(name="random", supports=tuple(supports), loads=tuple(loads))


def energy_of_error(part, case, u, assembled):
    """Energy of what parts `u` from a sparse direct solve, and the size that it is judged by."""
    lam, mu = moduli(part)
    acts = assemble(part, case)
    springs = np.zeros(acts.held.shape) if acts.springs is None else acts.springs
    loaded = np.ones(acts.held.shape[1:], dtype=bool)
    try:
        keep, _ = check_held(mu > 0, acts.held | (springs > 0), loaded, part.grid)
    except InputError:  # some loose piece: leave out all that are
        loaded = np.any(acts.held & (acts.prescribed != 0), axis=0) | np.any(acts.force, axis=0)
        everywhere = any(load.follows_mass for load in acts.loads)
        loaded &= not everywhere
        keep, _ = check_held(
            mu > 0, acts.held | (springs > 0), loaded, part.grid, everywhere=everywhere
        )
    touched = touched_nodes(keep)
    K = assembled(lam * keep, mu * keep, part.grid.spacing, "icmb")
    K = (K + scipy.sparse.diags((springs * touched).ravel())).tocsc()
    free = (~acts.held & touched).ravel()
    f = (acts.force * touched).ravel()
    v = np.where(acts.held & touched, acts.prescribed, 0.0).ravel()
    r = f - K @ v
    v[free] = v[free] + scipy.sparse.linalg.spsolve(K[free][:, free], r[free])

    flat = np.ascontiguousarray(u.T).ravel()
    assert np.array_equal(flat[~free], v[~free])
    size = float(v @ (K @ v)) + abs(float(f @ v))
    return float((flat - v) @ (K @ (flat - v))), size


def check(seed, grid, resin, assembled):
    """One part; what became of it."""
    part = random_part(seed, grid, resin)
    case = random_case(seed, part)
    try:
        result = solve(part, case, monitor=Deadline())
    except InputError:
        return "refused"
    except ConvergenceError:
        return "not converged"
    for field in (result.displacement, result.strain, result.stress, result.energy_density):
        assert np.all(np.isfinite(field))
    assert result.residual <= 1e-8
    assert result.balance < 1e-4
    asked = sum((np.array(f.vector) for f in case.loads if isinstance(f, Force)), np.zeros(3))
    for component in range(3):  # no load is lost
        assert not asked[component] or result.applied[component] == pytest.approx(asked[component])
    off, size = energy_of_error(part, case, result.displacement, assembled)
    assert off <= 1e-8 * size  # a share of 1e-4 in displacement
    return "solved"


@pytest.mark.parametrize("first", range(0, 50, 10))
def test_fifty_random_parts(first, grid, resin, assembled):
    ends = [check(seed, grid, resin, assembled) for seed in range(first, first + 10)]
    assert ends.count("solved") >= 2
    assert "not converged" not in ends


@pytest.mark.slow
def test_five_hundred_random_parts(grid, resin, assembled):
    ends = [check(seed, grid, resin, assembled) for seed in range(500)]
    assert ends.count("solved") >= 200
    assert ends.count("not converged") <= 5
