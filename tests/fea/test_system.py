"""The multigrid solver against SciPy's direct solver, on awkward small systems."""

import numpy as np
import pytest
import scipy.sparse.linalg
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import Cancelled, ConvergenceError, InputError
from voxelmat.fea.held import check_held
from voxelmat.fea.multigrid import coarse_held
from voxelmat.fea.operator import touched_nodes
from voxelmat.fea.system import LinearSystem, first_method
from voxelmat.kernels.threads import set_threads, threads
from voxelmat.model.grid import VoxelGrid
from voxelmat.monitor import CancelFlag


def lame(E, nu):
    return E * nu / ((1 + nu) * (1 - 2 * nu)), E / (2 * (1 + nu))


def clamped(shape):
    """Held at x = 0, unit forces everywhere else along z and some along y."""
    fixed = np.zeros((3, *(n + 1 for n in shape)), dtype=bool)
    fixed[..., 0] = True
    return fixed


def direct(assembled, lam, mu, spacing, fixed, b, element="icmb", springs=None, given=None):
    """SciPy's sparse LU on the unknowns that exist."""
    K = assembled(lam, mu, spacing, element)
    if springs is not None:
        K = K + scipy.sparse.diags(springs.ravel())
    free = (~fixed & touched_nodes(mu > 0)).ravel()
    u = np.zeros(b.size) if given is None else np.where(fixed.ravel(), given.ravel(), 0.0)
    u *= np.tile(touched_nodes(mu > 0).ravel(), 3)
    r = b.ravel() - K @ u
    u[free] = scipy.sparse.linalg.spsolve(K[free][:, free].tocsc(), r[free])
    return u.reshape(b.shape)


def two_phase(shape, seed, contrast=200.0, void=True):
    """Random stiff and soft voxels, with a solid layer at the clamp; void cut by columns."""
    rng = np.random.default_rng(seed)
    stiff = rng.random(shape) < 0.5
    lam = np.where(stiff, lame(contrast, 0.35)[0], lame(1.0, 0.45)[0])
    mu = np.where(stiff, lame(contrast, 0.35)[1], lame(1.0, 0.45)[1])
    if void:
        empty = np.zeros(shape, dtype=bool)
        empty[-1, -1, shape[2] // 2 :] = True  # a corner rod of exactly empty voxels
        lam[empty], mu[empty] = 0.0, 0.0
    return lam, mu


@settings(deadline=None, max_examples=20)
@given(
    st.tuples(st.integers(2, 6), st.integers(2, 7), st.integers(3, 9)),
    st.sampled_from(["avg2", "gal4b", "auto"]),
    st.sampled_from(["icmb", "full", "bbar"]),
    st.integers(0, 10_000),
)
def test_equals_the_direct_solver(assembled, shape, coarse, element, seed):
    lam, mu = two_phase(shape, seed)
    fixed, spacing = clamped(shape), (0.8, 1.0, 1.1)
    b = np.random.default_rng(seed).standard_normal(fixed.shape)
    system = LinearSystem(lam, mu, spacing, fixed, element=element, coarse=coarse)
    u = system.solve(b, tol=1e-10).u
    expected = direct(assembled, lam, mu, spacing, fixed, b, element)
    assert np.abs(u - expected).max() <= 1e-6 * np.abs(expected).max()


def test_larger_two_phase_block_equals_the_direct_solver(assembled):
    shape = (9, 11, 15)
    lam, mu = two_phase(shape, 1, contrast=2000.0)
    fixed = clamped(shape)
    b = np.zeros(fixed.shape)
    b[2, ..., -1] = -1.0
    expected = direct(assembled, lam, mu, (1.0, 1.0, 1.0), fixed, b)
    for coarse in ("avg2", "gal4b", "direct", "jacobi"):
        system = LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed, coarse=coarse)
        u = system.solve(b, tol=1e-10, maxiter=5000).u
        assert np.abs(u - expected).max() <= 1e-6 * np.abs(expected).max()


def test_springs_and_prescribed_displacements(assembled):
    shape, spacing = (4, 5, 6), (1.0, 0.5, 2.0)
    lam, mu = two_phase(shape, 2, contrast=30.0)
    rng = np.random.default_rng(2)
    fixed = np.zeros((3, *(n + 1 for n in shape)), dtype=bool)
    fixed[2, 0], fixed[0, :, :, -1] = True, True
    springs = np.zeros(fixed.shape)
    springs[:2, 0] = rng.random((2, *fixed.shape[2:])) * 5
    given = np.where(fixed, rng.standard_normal(fixed.shape), np.nan)  # ignored where free
    b = rng.standard_normal(fixed.shape)
    for coarse in ("avg2", "gal4b"):
        system = LinearSystem(lam, mu, spacing, fixed, springs=springs, coarse=coarse)
        u = system.solve(b, prescribed=given, tol=1e-10).u
        expected = direct(assembled, lam, mu, spacing, fixed, b, "icmb", springs, given)
        assert np.abs(u - expected).max() <= 1e-6 * np.abs(expected).max()
        np.testing.assert_allclose(
            system.apply(u), (assembled(lam, mu, spacing, "icmb") @ u.ravel()
                              + springs.ravel() * u.ravel()).reshape(u.shape), atol=1e-9
        )  # fmt: skip


def test_a_part_that_is_carried_along_keeps_its_accuracy(assembled):
    # the motion of the support alone would ask for a force 1e9 times the load
    shape, spacing = (5, 7, 5), (1.2, 0.8, 1.0)
    lam, mu = two_phase(shape, 3, contrast=6e4)
    fixed = clamped(shape)
    z, y, _ = (c * h for c, h in zip(np.indices(fixed.shape[1:]), spacing[::-1], strict=True))
    given = np.stack([3.0 + 0.1 * z - 0.2 * y, 5.0 + 0 * y, -1.0 + 0 * z])
    b = 1e-3 * np.random.default_rng(1).standard_normal(fixed.shape)
    system = LinearSystem(lam, mu, spacing, fixed)
    moved = system.solve(b, prescribed=given)
    still = direct(assembled, lam, mu, spacing, fixed, b)
    # turning about y by .1 and about z by .2 adds a known motion at every node
    x = np.indices(fixed.shape[1:])[2] * spacing[0]
    carried = given + np.stack([0 * x, 0.2 * x, -0.1 * x])
    touched = touched_nodes(mu > 0)
    off = (moved.u - carried) * touched - still
    assert np.abs(off).max() <= 1e-6 * np.abs(still).max()
    assert np.array_equal(moved.u[fixed & touched], given[fixed & touched])
    # without any load there is nothing left to solve
    assert system.solve(0 * b, prescribed=given).iterations == 0


def test_bodies_parted_by_exact_void_do_not_feel_each_other(assembled):
    # two clamped bars in one grid, only one of them loaded
    shape = (3, 7, 10)
    lam, mu = np.full(shape, 2.0), np.full(shape, 1.0)
    lam[:, 3], mu[:, 3] = 0.0, 0.0
    fixed = clamped(shape)
    b = np.zeros(fixed.shape)
    b[2, :, :3, -1] = 1.0
    u = LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed).solve(b, tol=1e-10).u
    expected = direct(assembled, lam, mu, (1.0, 1.0, 1.0), fixed, b)
    assert np.abs(u - expected).max() <= 1e-7 * np.abs(expected).max()
    assert np.abs(u[:, :, 4:]).max() <= 1e-8 * np.abs(u).max()  # the coarse levels join them


def test_same_bits_on_one_and_two_threads():
    shape = (12, 9, 14)
    lam, mu = two_phase(shape, 3)
    fixed = clamped(shape)
    b = np.random.default_rng(0).standard_normal(fixed.shape)
    before = threads()
    found = []
    try:
        for count in (1, 2):
            set_threads(count)
            for coarse in ("avg2", "gal4b"):
                system = LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed, coarse=coarse)
                found.append(system.solve(b).u)
    finally:
        set_threads(before)
    assert np.array_equal(found[0], found[2])
    assert np.array_equal(found[1], found[3])


@pytest.mark.parametrize("n", [8, 16, 17, 19, 24])
@pytest.mark.parametrize("end", [0, -1])
def test_iterations_do_not_grow_with_the_grid(n, end):
    # Own measurement of this solver, not a published value: 9 iterations at every even size, 11 at
    # odd ones; 12 to 14 where the clamp is at the odd end, between the coarse nodes.
    lam, mu = (np.full((n, n, n), v) for v in lame(1.0, 0.3))
    fixed = np.zeros((3, n + 1, n + 1, n + 1), dtype=bool)
    fixed[..., end] = True
    b = np.zeros(fixed.shape)
    b[2, ..., -1 - end] = 1.0
    system = LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed)
    solution = system.solve(b)
    assert system.method == "avg2"
    assert solution.iterations <= (15 if n % 2 and end else 12)
    assert solution.residual <= 1e-8
    assert len(solution.history) == solution.iterations + 1


@pytest.mark.parametrize("n", [17, 18, 19])
def test_supports_at_an_odd_end_are_seen_by_the_coarse_grids(n):
    # Own measurement: 9 to 13 iterations; 40 and more where the coarse grids are free there.
    lam, mu = (np.full((n, n, n), v) for v in lame(1.0, 0.3))
    fixed = clamped(lam.shape)
    fixed[..., -1] = True
    b = np.zeros(fixed.shape)
    b[2, ..., n // 2] = 1.0
    solution = LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed, coarse="avg2").solve(b)
    assert solution.iterations <= 16


def test_held_unknowns_of_coarse_grids():
    held = np.zeros((3, 2, 2, 10), dtype=bool)
    held[0, ..., 9] = held[1, ..., 4] = held[2, ..., 3] = True
    assert coarse_held(held, 1)[:, 0, 0].tolist() == [
        [False, False, False, False, False, True],
        [False, False, True, False, False, False],
        [False] * 6,
    ]
    # at a quarter of the resolution, the end (9) lies nearer to node 2 (8) than to node 3 (12)
    assert coarse_held(held, 2)[:, 1, 1].tolist() == [
        [False, False, True, True],
        [False, True, False, False],
        [False] * 4,
    ]


def test_warm_start_takes_no_iterations():
    lam, mu = (np.full((6, 6, 6), v) for v in lame(1.0, 0.3))
    fixed = clamped(lam.shape)
    b = np.random.default_rng(1).standard_normal(fixed.shape)
    system = LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed)
    first = system.solve(b, tol=1e-10)
    assert system.solve(b, x0=first.u, tol=1e-9).iterations == 0


def test_reciprocity():
    # Betti 1872: f1 . u2 = f2 . u1
    lam, mu = two_phase((5, 6, 7), 4)
    fixed = clamped(lam.shape)
    rng = np.random.default_rng(5)
    system = LinearSystem(lam, mu, (1.0, 1.2, 0.9), fixed)
    f1, f2 = rng.standard_normal((2, *fixed.shape)) * ~fixed
    u1, u2 = system.solve(f1, tol=1e-11).u, system.solve(f2, tol=1e-11).u
    assert (f1 * u2).sum() == pytest.approx((f2 * u1).sum(), rel=1e-8)


def test_the_cheap_method_gives_way():
    # avg2 is forced into the automatic choice on a problem that is known to be slow for it
    shape = (16, 16, 16)
    lam, mu = (np.full(shape, v) for v in lame(1.0, 0.4995))
    fixed = clamped(shape)
    b = np.zeros(fixed.shape)
    b[2, ..., -1] = 1.0
    system = LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed)
    system._method = "avg2"
    solution = system.solve(b)
    assert system.method == "gal4b"
    assert solution.residual <= 1e-8


def test_first_method():
    lam, mu = (np.full((6, 6, 6), v) for v in lame(1.0, 0.3))
    held = clamped(lam.shape)
    cube = (1.0, 1.0, 1.0)
    assert first_method(lam, mu, cube, held) == "avg2"
    assert first_method(lam, mu, (1.0, 1.0, 2.5), held) == "gal4b"
    assert first_method(lam * 20, mu, cube, held) == "gal4b"
    points = np.zeros_like(held)
    points[:, 1, 1, 1] = points[:, 5, 5, 1] = points[:, 5, 1, 5] = True
    assert first_method(lam, mu, cube, points) == "gal4b"
    checker = np.where(np.indices(mu.shape).sum(axis=0) % 2, 1.0, 1000.0)
    assert first_method(lam * checker, mu * checker, cube, held) == "gal4b"


def test_out_of_reach_is_an_error_with_history():
    lam, mu = two_phase((8, 8, 8), 6)
    fixed = clamped(lam.shape)
    b = np.random.default_rng(1).standard_normal(fixed.shape)
    system = LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed, coarse="jacobi")
    with pytest.raises(ConvergenceError, match="stopped after 5 iterations") as caught:
        system.solve(b, maxiter=5)
    assert len(caught.value.history) == 6
    with pytest.raises(ConvergenceError, match="stalled"):
        LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed, coarse="gal4b").solve(b, tol=1e-30)


def test_small_systems_that_defeat_the_multigrid_are_factorised(assembled):
    # half the voxels empty at random, contrast 60,000, nu near .5: hinges and locking at once
    shape, spacing = (2, 7, 11), (0.67, 0.93, 1.33)
    rng = np.random.default_rng(251)
    stiff = rng.random(shape) < 0.5
    lam = np.where(stiff, lame(6e4, 0.4995)[0], lame(1.0, 0.45)[0])
    mu = np.where(stiff, lame(6e4, 0.4995)[1], lame(1.0, 0.45)[1])
    solid = rng.random(shape) > 0.45
    solid[0, 0, 0] = True
    fixed = clamped(shape)
    loaded = np.zeros(fixed.shape[1:], dtype=bool)
    loaded[0, 0, 0] = True
    keep, _ = check_held(solid, fixed, loaded, VoxelGrid(shape=shape[::-1], spacing=spacing))
    lam, mu = lam * keep, mu * keep
    b = rng.standard_normal(fixed.shape)
    system = LinearSystem(lam, mu, spacing, fixed, element="full")
    u = system.solve(b, tol=1e-8).u
    assert system.method == "direct"
    expected = direct(assembled, lam, mu, spacing, fixed, b, "full")
    assert np.abs(u - expected).max() <= 1e-5 * np.abs(expected).max()


def test_an_unheld_block_is_an_error():
    lam, mu = (np.full((4, 4, 4), v) for v in lame(1.0, 0.3))
    b = np.zeros((3, 5, 5, 5))
    b[2, 2, 2, 2] = 1.0
    with pytest.raises(ConvergenceError, match=r"Check that every\s+piece is held"):
        LinearSystem(lam, mu, (1.0, 1.0, 1.0), np.zeros(b.shape, dtype=bool)).solve(b)


def test_no_load_is_no_displacement():
    lam, mu = (np.full((3, 3, 3), v) for v in lame(1.0, 0.3))
    fixed = clamped(lam.shape)
    solution = LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed).solve(np.zeros(fixed.shape))
    assert solution.iterations == 0
    assert not solution.u.any()


@pytest.mark.parametrize(
    "bad", [(1.0, -1.0), (-0.7, 1.0), (np.nan, 1.0), (1.0, np.inf), (1.0, 0.0)]
)
def test_impossible_moduli(bad):
    lam, mu = (np.full((3, 3, 3), v) for v in lame(1.0, 0.3))
    lam[0, 1, 2], mu[0, 1, 2] = bad
    with pytest.raises(InputError, match=r"first at voxel \(2, 1, 0\)"):
        LinearSystem(lam, mu, (1.0, 1.0, 1.0), clamped(lam.shape))


def test_wrong_arrays():
    lam, mu = (np.full((3, 3, 3), v) for v in lame(1.0, 0.3))
    fixed = clamped(lam.shape)
    with pytest.raises(InputError, match="fixed must be bool"):
        LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed[:, 1:])
    with pytest.raises(InputError, match="springs must be"):
        LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed, springs=-np.ones(fixed.shape))
    with pytest.raises(InputError, match="coarse is one of"):
        LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed, coarse="fast")
    system = LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed)
    with pytest.raises(InputError, match="must be finite"):
        system.solve(np.full(fixed.shape, np.nan))


def test_cancel():
    lam, mu = (np.full((6, 6, 6), v) for v in lame(1.0, 0.3))
    fixed = clamped(lam.shape)
    flag = CancelFlag()
    system = LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed, monitor=flag)
    flag.cancel()
    with pytest.raises(Cancelled):
        system.solve(np.ones(fixed.shape))


@pytest.mark.parametrize(("coarse", "most"), [("avg2", 270), ("gal4b", 390)])
def test_bytes_a_voxel(coarse, most):
    # Own limits, the four vectors of the iteration included.
    n = 48
    lam, mu = (np.full((n, n, n), v) for v in lame(1.0, 0.3))
    fixed = clamped(lam.shape)
    system = LinearSystem(lam, mu, (1.0, 1.0, 1.0), fixed, coarse=coarse)
    b = np.zeros(fixed.shape)
    b[2, ..., -1] = 1.0
    system.solve(b, tol=1e-3)
    assert (system.nbytes + 4 * 8 * fixed.size) / lam.size < most


def test_a_tolerance_that_makes_no_sense():
    lam, mu = (np.full((2, 2, 2), v) for v in lame(1.0, 0.3))
    system = LinearSystem(lam, mu, (1.0, 1.0, 1.0), clamped(lam.shape))
    for tol in (0.0, -1.0, float("nan")):
        with pytest.raises(InputError, match="tol must lie in 0 to 1"):
            system.solve(np.ones(system.shape), tol=tol)


@settings(deadline=None, max_examples=20)
@given(
    st.tuples(st.integers(2, 6), st.integers(2, 6), st.integers(2, 8)),
    st.sampled_from(["avg2", "gal4b"]),
    st.integers(0, 10_000),
)
def test_ragged_parts_with_islands_equal_the_direct_solver(assembled, shape, coarse, seed):
    # a third of the voxels empty at random, loose pieces taken out as the static solve does
    rng = np.random.default_rng(seed)
    lam, mu = two_phase(shape, seed, contrast=500.0, void=False)
    solid = rng.random(shape) > 0.35
    solid[0, 0, 0] = True
    fixed = clamped(shape)
    loaded = np.zeros(fixed.shape[1:], dtype=bool)
    loaded[0, 0, 0] = True
    grid = VoxelGrid(shape=shape[::-1], spacing=(0.7, 1.0, 1.3))
    keep, _ = check_held(solid, fixed, loaded, grid)
    lam, mu = lam * keep, mu * keep
    b = rng.standard_normal(fixed.shape)
    system = LinearSystem(lam, mu, grid.spacing, fixed, coarse=coarse)
    u = system.solve(b, tol=1e-10).u
    expected = direct(assembled, lam, mu, grid.spacing, fixed, b)
    assert np.abs(u - expected).max() <= 1e-5 * np.abs(expected).max()
    assert not u[:, ~touched_nodes(keep)].any()
