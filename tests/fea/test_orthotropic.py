"""The system of orthotropic voxels: against assembly, a patch, turned axes, iterations."""

import numpy as np
import pytest
import scipy.sparse.linalg
import skfem
from hypothesis import given, settings
from hypothesis import strategies as st
from skfem.helpers import sym_grad

from voxelmat.errors import InputError
from voxelmat.fea.orthotropic import METHODS, OrthotropicSystem
from voxelmat.fea.orthotropic_element import FORMS, isotropic_constants
from voxelmat.fea.orthotropic_operator import comparison, stiffness_matrices
from voxelmat.fea.system import LinearSystem
from voxelmat.model.orthotropic import Orthotropic

# Invented, with three different moduli each way.
WOOD = Orthotropic(E=(1000.0, 80.0, 50.0), nu_xy=0.4, nu_xz=0.45, nu_yz=0.5, G=(70.0, 60.0, 8.0))


def random_table(rng, count):
    out = np.zeros((count, 9))
    for n in range(1, count):
        A = rng.standard_normal((3, 3))
        C = A @ A.T + 0.3 * np.eye(3)
        out[n] = [C[0, 0], C[1, 1], C[2, 2], C[0, 1], C[0, 2], C[1, 2], *rng.uniform(0.1, 2, 3)]
    return out


def clamped(shape):
    fixed = np.zeros((3, *(n + 1 for n in shape)), dtype=bool)
    fixed[..., 0] = True
    return fixed


def tip(shape, direction=2):
    load = np.zeros((3, *(n + 1 for n in shape)))
    load[direction, :, :, -1] = 1.0
    return load


# ------------------------------------------------------------------ assembly
def assembled(labels, table, spacing):
    """K by scikit-fem with a full 6x6 stiffness an element; unknowns numbered [d, k, j, i]."""
    nz, ny, nx = labels.shape
    ticks = [h * np.arange(n + 1) for h, n in zip(spacing, (nx, ny, nz), strict=True)]
    mesh = skfem.MeshHex.init_tensor(*ticks)
    basis = skfem.Basis(mesh, skfem.ElementVector(skfem.ElementHex1()), intorder=3)
    centre = mesh.p[:, mesh.t].mean(axis=1)
    i, j, k = (np.floor(centre[d] / spacing[d]).astype(int) for d in range(3))
    C = np.moveaxis(stiffness_matrices(table)[labels[k, j, i]], 0, -1)[..., None]

    def voigt(w):
        e = sym_grad(w)
        return np.stack([e[0, 0], e[1, 1], e[2, 2], 2 * e[0, 1], 2 * e[0, 2], 2 * e[1, 2]])

    @skfem.BilinearForm
    def energy(u, v, _):
        return np.einsum("abeq,beq,aeq->eq", np.broadcast_to(C, (6, 6, *u.grad.shape[2:])),
                         voigt(u), voigt(v))  # fmt: skip

    K = energy.assemble(basis).tocsr()
    place = mesh.p / np.asarray(spacing)[:, None]
    i, j, k = np.rint(place).astype(int)
    node = (k * (ny + 1) + j) * (nx + 1) + i
    size = node.size
    number = np.empty(3 * size, dtype=int)
    for d in range(3):
        number[basis.nodal_dofs[d]] = d * size + node
    order = np.argsort(number)
    return K[order][:, order]


@settings(deadline=None, max_examples=8)
@given(st.tuples(*[st.integers(1, 4)] * 3), st.integers(0, 10_000))
def test_full_equals_an_assembled_matrix(shape, seed):
    rng = np.random.default_rng(seed)
    spacing = tuple(rng.uniform(0.5, 2.0, 3))
    labels = rng.integers(0, 4, shape).astype(np.uint16)
    labels[0, 0, 0] = 1
    table = random_table(rng, 4)
    fixed = clamped(shape)
    system = OrthotropicSystem(labels, table, spacing, fixed, element="full")
    u = rng.standard_normal(fixed.shape)
    expected = (assembled(labels, table, spacing) @ u.ravel()).reshape(u.shape)
    assert np.abs(system.apply(u) - expected).max() <= 1e-12 * np.abs(expected).max()


@settings(deadline=None, max_examples=10)
@given(st.tuples(*[st.integers(1, 4)] * 3), st.integers(0, 10_000))
def test_random_parts_agree_with_a_sparse_direct_solve(shape, seed):
    rng = np.random.default_rng(seed)
    spacing = tuple(rng.uniform(0.5, 2.0, 3))
    # Columns of random height on a full base plane, so that every voxel is joined by faces.
    height = rng.integers(1, shape[2] + 1, shape[:2])
    labels = rng.integers(1, 4, shape).astype(np.uint16)
    labels[np.arange(shape[2]) >= height[..., None]] = 0
    table = random_table(rng, 4)
    table[2] *= 1e-3
    fixed = clamped(shape)
    load = rng.standard_normal(fixed.shape)
    system = OrthotropicSystem(labels, table, spacing, fixed, element="full")
    found = system.solve(load, tol=1e-10, maxiter=3000).u
    free = np.flatnonzero(system.free)
    K = assembled(labels, table, spacing)[free][:, free]
    expected = np.zeros(fixed.shape)
    expected.ravel()[free] = scipy.sparse.linalg.spsolve(K.tocsc(), load.ravel()[free])
    np.testing.assert_allclose(found, expected, atol=1e-6 * np.abs(expected).max())


# ------------------------------------------------------------------ exact fields
@pytest.mark.parametrize("element", FORMS)
def test_patch(element):
    # A displacement that is linear in x, y, z is met exactly in a uniform block (patch test)
    shape, spacing = (3, 4, 3), (0.9, 0.7, 1.3)
    A = np.array([[1.0, 0.4, -0.2], [0.1, -0.5, 0.3], [0.2, 0.6, 0.8]]) * 1e-3
    x, y, z = np.meshgrid(
        *(h * np.arange(n + 1) for h, n in zip(spacing, shape[::-1], strict=True)), indexing="ij"
    )
    exact = np.ascontiguousarray(np.einsum("ab,bijk->akji", A, np.stack([x, y, z])))
    fixed = np.ones(exact.shape, dtype=bool)
    fixed[:, 1:-1, 1:-1, 1:-1] = False
    table = np.stack([np.zeros(9), WOOD.constants])
    labels = np.ones(shape, dtype=np.uint16)
    system = OrthotropicSystem(labels, table, spacing, fixed, element=element)
    found = system.solve(np.zeros(exact.shape), prescribed=exact, tol=1e-12)
    np.testing.assert_allclose(found.u, exact, atol=1e-13)


# ------------------------------------------------------------------ ways to solve
def test_every_method_gives_the_same_answer():
    rng = np.random.default_rng(5)
    shape = (4, 5, 7)
    labels = rng.integers(0, 3, shape).astype(np.uint16)
    labels[:, :3, :] = np.maximum(labels[:, :3, :], 1)
    labels[:, 3:, :] = np.where(labels[:, :3, :][:, :2] == 2, labels[:, 3:, :], 0)
    labels[:, 3:, 1:] = 0
    table = np.stack([np.zeros(9), WOOD.constants, *random_table(rng, 2)[1:]])
    fill = rng.integers(50, 256, shape).astype(np.uint8)
    springs = np.zeros((3, *(n + 1 for n in shape)))
    springs[1, 0, 0, -1] = 3.0
    solutions = []
    for coarse in ("auto", *METHODS):
        system = OrthotropicSystem(
            labels, table, (1.0, 0.8, 1.1), clamped(shape), fill=fill, springs=springs,
            coarse=coarse,
        )  # fmt: skip
        solutions.append(system.solve(tip(shape), tol=1e-10, maxiter=3000).u)
        assert system.nbytes > 0
    for u in solutions[1:]:
        np.testing.assert_allclose(u, solutions[0], atol=1e-6 * np.abs(solutions[0]).max())


@pytest.mark.parametrize(("ratio", "most"), [(1.0, 12), (10.0, 15), (100.0, 40)])
def test_iterations_stay_low_with_anisotropy(ratio, most):
    shape = (8, 8, 12)
    G = 1000.0 / 2.6
    soft = Orthotropic(
        E=(1000.0, 1000.0, 1000.0 / ratio), nu_xy=0.3, nu_xz=0.3, nu_yz=0.3,
        G=(G, G / ratio, G / ratio),
    )  # fmt: skip
    table = np.stack([np.zeros(9), soft.constants])
    labels = np.ones(shape, dtype=np.uint16)
    system = OrthotropicSystem(labels, table, (1.0, 1.0, 1.0), clamped(shape))
    assert system.method == ("avg2" if ratio == 1.0 else "exact")
    assert system.solve(tip(shape)).iterations <= most


@settings(deadline=None, max_examples=20)
@given(st.integers(0, 10_000))
def test_comparison_medium_bounds_the_energy(seed):
    rng = np.random.default_rng(seed)
    table = random_table(rng, 3)
    table[1] = isotropic_constants(np.array([2.0]), np.array([0.7]))[0]
    medium = comparison(table)
    assert (medium.lam[0], medium.mu[0]) == (0.0, 0.0)
    assert medium.lam[1] == pytest.approx(2.0)
    assert medium.mu[1] == pytest.approx(0.7)
    assert medium.low[1] == pytest.approx(1.0)
    C = stiffness_matrices(table)[2]
    near = stiffness_matrices(isotropic_constants(medium.lam, medium.mu))[2]
    ratio = np.linalg.eigvals(np.linalg.solve(near, C)).real
    assert ratio.min() == pytest.approx(medium.low[2], rel=1e-6)
    assert ratio.max() == pytest.approx(medium.high[2], rel=1e-6)
    # The inverse has the inverse medium: the distance treats both alike.
    assert medium.low[2] <= 1.0 + 1e-12 <= medium.high[2] + 2e-12


# ------------------------------------------------------------------ turned axes
@pytest.mark.parametrize("axes", [(1, 2, 0), (2, 0, 1), (1, 0, 2)])
@pytest.mark.parametrize("element", FORMS)
def test_turned_axes_permute_the_answer(axes, element):
    """Grid, spacing, stiffness and load with axes permuted: a third of a turn, or a mirror."""
    rng = np.random.default_rng(7)
    shape, spacing = (5, 4, 3), (1.0, 0.8, 1.2)  # along x, y, z
    labels = rng.integers(1, 3, shape).astype(np.uint16)
    other = Orthotropic(E=(5.0, 40.0, 9.0), nu_xy=0.1, nu_xz=0.2, nu_yz=0.3, G=(2.0, 3.0, 4.0))
    force = rng.standard_normal((*(n + 1 for n in shape), 3))
    fixed = np.zeros(force.shape, dtype=bool)
    fixed[0] = True

    def answer(order):
        table = np.stack([np.zeros(9), WOOD.turned(order).constants, other.turned(order).constants])

        def put(field):
            return np.ascontiguousarray(np.transpose(field, (*order, 3))[..., list(order)].T)

        system = OrthotropicSystem(
            np.ascontiguousarray(np.transpose(labels, order).T),
            table,
            tuple(spacing[a] for a in order),
            put(fixed),
            element=element,
        )
        return system.solve(put(force), tol=1e-11).u.T, put

    straight, _ = answer((0, 1, 2))
    turned, put = answer(axes)
    np.testing.assert_allclose(turned, put(straight).T, atol=1e-8 * np.abs(straight).max())


# ------------------------------------------------------------------ what is refused
def test_impossible_input_is_refused():
    shape = (2, 2, 2)
    labels = np.ones(shape, dtype=np.uint16)
    table = np.stack([np.zeros(9), WOOD.constants])
    h = (1.0, 1.0, 1.0)
    bad = table.copy()
    bad[1, 3] = 5000.0
    with pytest.raises(InputError, match="Label 1 has an impossible stiffness"):
        OrthotropicSystem(labels, bad, h, clamped(shape))
    with pytest.raises(InputError, match="Label 2 points past the 2 labels"):
        OrthotropicSystem(labels + np.uint16(1), table, h, clamped(shape))
    with pytest.raises(InputError, match="Label 0 is empty space"):
        OrthotropicSystem(labels, table[::-1], h, clamped(shape))
    with pytest.raises(InputError, match="fill must be uint8"):
        OrthotropicSystem(labels, table, h, clamped(shape), fill=labels)
    with pytest.raises(InputError, match="coarse is one of auto, avg2"):
        OrthotropicSystem(labels, table, h, clamped(shape), coarse="fast")


def test_uniform_isotropic_system_takes_the_same_number_of_iterations():
    shape = (8, 8, 8)
    labels = np.ones(shape, dtype=np.uint16)
    lam, mu = np.array([0.0, 500.0]), np.array([0.0, 400.0])
    fixed, load = clamped(shape), tip(shape)
    table = isotropic_constants(lam, mu)
    mine = OrthotropicSystem(labels, table, (1.0, 1.0, 1.0), fixed).solve(load)
    other = LinearSystem(lam[labels], mu[labels], (1.0, 1.0, 1.0), fixed).solve(load)
    assert mine.iterations == other.iterations
    np.testing.assert_allclose(mine.u, other.u, atol=1e-10 * np.abs(other.u).max())
