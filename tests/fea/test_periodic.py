"""Periodic systems: against a dense solver, exact coarse operators, pieces, loads that drift."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import ConvergenceError, InputError
from voxelmat.fea.fold import array_axes, fold, is_image, wrap
from voxelmat.fea.periodic import PeriodicSystem
from voxelmat.fea.periodic_galerkin import coarse_levels
from voxelmat.fea.periodic_pieces import periodic_pieces

CUBE = (1.0, 1.0, 1.0)
ALL = (True, True, True)


def lame(E, nu):
    return E * nu / ((1 + nu) * (1 - 2 * nu)), E / (2 * (1 + nu))


def folding(shape, periodic):
    """T (open nodes, unique nodes): open nodal values from those of unique nodes."""
    nodes = np.arange(np.prod(shape)).reshape(shape)
    wrap(nodes, array_axes(periodic))
    unique, number = np.unique(nodes.ravel(), return_inverse=True)
    T = np.zeros((nodes.size, len(unique)))
    T[np.arange(nodes.size), number] = 1.0
    return np.kron(np.eye(3), T)


def balanced_load(rng, system):
    """Random forces that are in balance on every piece: those of random strains."""
    u = rng.standard_normal(system.shape)
    wrap(u, array_axes(system.periodic))
    out = np.empty(system.shape)
    system.operator.apply(u, out)
    return out


@settings(max_examples=20, deadline=None)
@given(data=st.data())
def test_agrees_with_a_dense_solver(assembled, data):
    shape = data.draw(st.tuples(*[st.integers(1, 5)] * 3), label="shape")
    flags = st.tuples(*[st.booleans()] * 3).filter(any)
    periodic = data.draw(flags, label="periodic")
    rng = np.random.default_rng(data.draw(st.integers(0, 99), label="seed"))
    spacing = tuple(data.draw(st.sampled_from([0.5, 1.0, 1.5]), label="h") for _ in range(3))
    E = 10.0 ** rng.uniform(0, 3, shape)
    E[rng.random(shape) < data.draw(st.sampled_from([0.0, 0.3]), label="void")] = 0.0
    element = data.draw(st.sampled_from(["icmb", "full", "bbar"]), label="element")
    system = PeriodicSystem(*lame(E, 0.3), spacing, periodic=periodic, element=element)
    if system.empty:
        return
    T = folding(system.shape[1:], periodic)
    A = T.T @ (assembled(system.lam, system.mu, spacing, element) @ T)
    b = balanced_load(rng, system)
    found = system.solve(b, tol=1e-10)
    force = T.T @ b.ravel()
    residual = A @ np.linalg.lstsq(T, found.u.ravel(), rcond=None)[0] - force
    assert np.linalg.norm(residual) <= 2e-10 * np.linalg.norm(force)
    # Energies agree, whatever drift or hinge both answers have.
    x = np.linalg.lstsq(A, force, rcond=1e-11)[0]
    assert found.u.ravel() @ b.ravel() == pytest.approx(x @ force, rel=1e-7)


@settings(max_examples=20, deadline=None)
@given(data=st.data())
def test_supports_agree_with_a_dense_solver(assembled, data):
    """Held unknowns, on copies too, with given displacements."""
    shape = data.draw(st.tuples(*[st.integers(1, 6)] * 3), label="shape")
    flags = st.tuples(*[st.booleans()] * 3).filter(any)
    periodic = data.draw(flags, label="periodic")
    rng = np.random.default_rng(data.draw(st.integers(0, 99), label="seed"))
    E = 10.0 ** rng.uniform(0, 2, shape)
    fixed = np.zeros((3, *(n + 1 for n in shape)), dtype=bool)
    for _ in range(4):
        k, j, i = (rng.integers(0, n + 1) for n in shape)
        fixed[:, k, j, i] = True
    system = PeriodicSystem(*lame(E, 0.3), (1.0, 0.5, 1.5), periodic=periodic, fixed=fixed)
    T = folding(system.shape[1:], periodic)
    A = T.T @ (assembled(system.lam, system.mu, (1.0, 0.5, 1.5), "icmb") @ T)
    unique = np.argmax(T, axis=0)  # an open place of each unknown
    held = (T.T @ fixed.ravel()) > 0
    value = np.where(held, rng.standard_normal(held.size), 0.0)
    prescribed = (T @ value).reshape(system.shape)
    b = rng.standard_normal(system.shape)
    force = T.T @ b.ravel()
    found = system.solve(b, prescribed=prescribed, tol=1e-10).u.ravel()[unique]
    free = ~held
    x = value.copy()
    x[free] = np.linalg.solve(
        A[np.ix_(free, free)], force[free] - A[np.ix_(free, held)] @ value[held]
    )
    assert np.abs(found - x).max() < 1e-6 * np.abs(x).max()


def test_core_between_plates():
    """Pressed along z, free to drift along x and y: layers in uniaxial strain, in series."""
    E = np.repeat([1.0, 100.0, 3.0], 2)[:, None, None] * np.ones((6, 4, 5))
    lam, mu = lame(E, 0.3)
    fixed = np.zeros((3, 7, 5, 6), dtype=bool)
    fixed[2, [0, -1]] = True
    prescribed = np.zeros(fixed.shape)
    prescribed[2, -1] = -0.1
    system = PeriodicSystem(lam, mu, CUBE, periodic=(True, True, False), fixed=fixed)
    u = system.solve(np.zeros(fixed.shape), prescribed=prescribed).u
    stress = -0.1 / (1 / (lam + 2 * mu)[:, 0, 0]).sum()
    assert system.apply_open(u)[2, -1].sum() == pytest.approx(stress * 20, rel=1e-7)
    assert np.abs(u[:2]).max() < 1e-8


def test_held_islands_stay():
    """A post on a held face, in the middle of a cell that repeats along x and y."""
    E = np.zeros((6, 5, 5))
    E[:, 2, 2] = 10.0
    fixed = np.zeros((3, 7, 6, 6), dtype=bool)
    fixed[:, 0] = True
    b = np.zeros(fixed.shape)
    b[2, -1, 2:4, 2:4] = 0.25
    loose = PeriodicSystem(*lame(E, 0.0), CUBE, periodic=(True, True, False))
    assert (loose.empty, loose.loose) == (True, 1)
    post = PeriodicSystem(*lame(E, 0.0), CUBE, periodic=(True, True, False), fixed=fixed)
    assert post.loose == 0
    # A bar: P L / (E A).
    assert post.solve(b).u[2, -1, 2, 2] == pytest.approx(1.0 * 6 / 10, rel=1e-8)


@pytest.mark.parametrize("shape", [(4, 5, 6), (3, 7, 1), (5, 2, 3)])
@pytest.mark.parametrize("periodic", [ALL, (True, False, True), (False, True, False)])
def test_coarse_operators_are_exact(assembled, shape, periodic):
    """Two levels of P^T K P, with P written down node by node."""
    rng = np.random.default_rng(5)
    E = 10.0 ** rng.uniform(0, 2, shape)
    lam, mu = lame(E, 0.35)
    K = assembled(lam, mu, (1.0, 0.5, 2.0), "icmb").toarray()
    dims, total = shape, np.eye(K.shape[0])
    for _ in range(2):
        along = [interpolation(n, p) for n, p in zip(dims, periodic[::-1], strict=True)]  # z, y, x
        P = np.kron(np.eye(3), np.kron(along[0], np.kron(along[1], along[2])))
        total = total @ P
        dims = tuple(-(-n // 2) for n in dims)
    S = coarse_levels(lam, mu, (1.0, 0.5, 2.0), "icmb", periodic, 2)
    wanted = total.T @ K @ total
    found = stencil_matrix(S[1])
    # In single precision.
    assert np.abs(found - wanted).max() < 1e-5 * np.abs(wanted).max()


def interpolation(n, periodic):
    """From the N + 1 coarse to the n + 1 fine nodes of one axis."""
    N = -(-n // 2)
    P = np.zeros((n + 1, N + 1))
    for i in range(n + 1):
        P[i, i // 2] += 0.5
        P[i, -(-i // 2)] += 0.5
    if n % 2 and periodic:
        P[n] = 0.0
        P[n, N] = 1.0  # the copy of node 0 is the copy of coarse node 0
    return P


def stencil_matrix(S):
    nk, nj, _, ni = S.shape
    nodes = np.arange(nk * nj * ni).reshape(nk, nj, ni)
    A = np.zeros((3 * nodes.size, 3 * nodes.size))
    for k, j, i in np.ndindex(nk, nj, ni):
        for o in range(27):
            K, J, other = k + o // 9 - 1, j + o // 3 % 3 - 1, i + o % 3 - 1
            if 0 <= K < nk and 0 <= J < nj and 0 <= other < ni:
                for c in range(3):
                    for d in range(3):
                        row, column = nodes[k, j, i], nodes[K, J, other]
                        A[c * nodes.size + row, d * nodes.size + column] += S[
                            k, j, 9 * o + 3 * c + d, i
                        ]
    return A


@pytest.mark.parametrize("n", [8, 15, 16, 25])
def test_few_iterations_at_contrast_1000(n):
    """Random two-phase cells; odd sizes are no worse."""
    rng = np.random.default_rng(n)
    E = np.where(rng.random((n, n, n)) < 0.5, 1.0, 1000.0)
    system = PeriodicSystem(*lame(E, 0.3), CUBE)
    assert system.solve(balanced_load(rng, system)).iterations <= 20


@pytest.mark.parametrize("n", [16, 25])
def test_few_iterations_with_void(n):
    rng = np.random.default_rng(n)
    E = np.where(rng.random((n, n, n)) < 0.5, 1.0, 0.0)
    system = PeriodicSystem(*lame(E, 0.3), CUBE)
    assert system.loose > 0
    assert system.solve(balanced_load(rng, system)).iterations <= 25


def test_shifting_the_cell_shifts_the_answer():
    rng = np.random.default_rng(2)
    E = 10.0 ** rng.uniform(0, 3, (6, 5, 7))
    one = PeriodicSystem(*lame(E, 0.3), CUBE)
    other = PeriodicSystem(*lame(np.roll(E, (1, 2, 3), (0, 1, 2)), 0.3), CUBE)
    b = balanced_load(rng, one)
    moved = np.zeros_like(b)
    moved[:, :-1, :-1, :-1] = np.roll(b[:, :-1, :-1, :-1], (1, 2, 3), (1, 2, 3))
    u, v = one.solve(b, tol=1e-11).u, other.solve(moved, tol=1e-11).u
    wanted = np.roll(u[:, :-1, :-1, :-1], (1, 2, 3), (1, 2, 3))
    assert np.abs(v[:, :-1, :-1, :-1] - wanted).max() < 1e-8 * np.abs(u).max()


def test_answer_is_periodic_without_mean_and_warm():
    rng = np.random.default_rng(4)
    E = rng.uniform(1, 2, (5, 6, 4))
    system = PeriodicSystem(*lame(E, 0.3), CUBE, periodic=(True, True, False))
    b = balanced_load(rng, system)
    found = system.solve(b)
    assert np.array_equal(found.u[:, :, -1], found.u[:, :, 0])
    assert np.array_equal(found.u[:, :, :, -1], found.u[:, :, :, 0])
    assert not np.array_equal(found.u[:, -1], found.u[:, 0])
    inside = found.u[:, :, :-1, :-1]
    assert np.abs(inside.mean(axis=(1, 2, 3))).max() < 1e-14 * np.abs(inside).max()
    assert system.solve(b, x0=found.u).iterations == 0
    # Forces on the last plane are forces on the first.
    other = b.copy()
    other[:, :, -1], other[:, :, 0] = b[:, :, 0], 0.0
    assert np.allclose(system.solve(other).u, found.u, rtol=0, atol=1e-7 * np.abs(inside).max())


def test_pieces_and_the_directions_that_they_fill():
    solid = np.zeros((6, 6, 6), dtype=bool)
    solid[0, 0, :] = True  # a fibre along x
    solid[3, :, :] = True  # a sheet
    solid[5, 3, 0] = solid[5, 3, 5] = True  # an island through a face of the cell
    labels, ranks = periodic_pieces(solid, ALL)
    assert ranks[labels[0, 0, 0]] == 1
    assert ranks[labels[3, 0, 0]] == 2
    assert labels[5, 3, 0] == labels[5, 3, 5]
    assert ranks[labels[5, 3, 0]] == 0
    assert len(ranks) == 4
    labels, ranks = periodic_pieces(solid, (False, True, True))
    assert ranks[labels[0, 0, 0]] == 0
    assert labels[5, 3, 0] != labels[5, 3, 5]
    assert np.all(periodic_pieces(np.ones((2, 2, 2), dtype=bool), ALL)[1] == (0, 3))


def test_a_stair_that_closes_over_cells_is_endless():
    """Steps that rise by the height of the cell: the copy they meet is one up and one along."""
    solid = np.zeros((3, 1, 3), dtype=bool)
    for n in range(3):
        solid[n, 0, n] = solid[n, 0, (n + 1) % 3] = True
    assert periodic_pieces(solid, (True, False, True))[1][1] == 1
    solid[0, 0, 2] = solid[0, 0, 1] = True  # a landing right along x
    assert periodic_pieces(solid, (True, False, True))[1][1] == 2
    assert periodic_pieces(solid, (False, False, True))[1][1] == 1


def test_diagonal_neighbours_join_by_nodes_only():
    solid = np.zeros((4, 4, 4), dtype=bool)
    solid[0, 0, 0] = solid[3, 3, 3] = solid[2, 2, 2] = solid[1, 1, 1] = True
    assert list(periodic_pieces(solid, ALL)[1]) == [0, 0, 0, 0, 0]
    assert list(periodic_pieces(solid, ALL, by_nodes=True)[1]) == [0, 1]


def test_fold_is_the_transpose_of_wrap():
    rng = np.random.default_rng(0)
    a, b = rng.standard_normal((2, 3, 3, 4, 5))
    axes = array_axes((True, False, True))
    a[:, is_image(a.shape[1:], axes)] = 0
    wrapped, folded = a.copy(), b.copy()
    wrap(wrapped, axes)
    fold(folded, axes)
    assert (wrapped * b).sum() == pytest.approx((a * folded).sum(), rel=1e-13)


def test_loads_that_nothing_carries_are_refused():
    E = np.ones((4, 4, 4))
    system = PeriodicSystem(*lame(E, 0.3), CUBE)
    b = np.zeros(system.shape)
    b[0, 1, 1, 1] = 1.0
    with pytest.raises(InputError, match="add up to 0 along x"):
        system.solve(b)
    E = np.zeros((6, 6, 6))
    E[:, :2, :2] = 1.0
    E[3, 4, 4] = 1.0
    system = PeriodicSystem(*lame(E, 0.3), CUBE)
    assert (system.loose, system.loose_voxels) == (1, 1)
    b = np.zeros(system.shape)
    b[0, 3, 4, 4], b[0, 4, 5, 5] = 1.0, -1.0
    with pytest.raises(InputError, match="island"):
        system.solve(b)
    # Turned about its own axis, a fibre cannot answer: an error, no number.
    b[:] = 0
    b[1, 2, 1, 0], b[1, 2, 1, 2] = -1.0, 1.0
    with pytest.raises(ConvergenceError):
        system.solve(b, maxiter=60)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"periodic": (False, False, False)}, "one at least"),
        ({"spacing": (1.0, 0.0, 1.0)}, "above 0"),
        ({"element": "best"}, "no element"),
        ({"fixed": np.zeros((3, 2, 2, 2), dtype=bool)}, "fixed must be bool"),
        ({"mu": -np.ones((2, 2, 2))}, "impossible"),
    ],
)
def test_bad_systems(change, words):
    given_ = {"lam": np.ones((2, 2, 2)), "mu": np.ones((2, 2, 2)), "spacing": CUBE, **change}
    with pytest.raises(InputError, match=words):
        PeriodicSystem(**given_)


def test_bad_loads():
    system = PeriodicSystem(np.ones((2, 2, 2)), np.ones((2, 2, 2)), CUBE)
    b = np.zeros(system.shape)
    with pytest.raises(InputError, match="shape"):
        system.solve(b[:, 1:])
    with pytest.raises(InputError, match="x0"):
        system.solve(b, x0=np.full_like(b, np.nan))
    with pytest.raises(InputError, match="tol"):
        system.solve(b, tol=0.0)
    assert system.solve(b).iterations == 0
