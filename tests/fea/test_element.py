"""Element matrices against published and independently computed values."""

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.fea.element import ELEMENTS, basis_matrices, coefficients, element_matrix
from voxelmat.fea.operator import Stiffness

UNIT = (1.0, 1.0, 1.0)


def lame(E, nu):
    return E * nu / ((1 + nu) * (1 - 2 * nu)), E / (2 * (1 + nu))


# Check A1: unit hex8, E 1, nu .3. full: computed with scikit-fem; bbar, icm (nine Wilson-Taylor
# modes) and icmb: with a separate plain numpy code.
@pytest.mark.parametrize(
    ("element", "k11", "trace", "frobenius"),
    [
        ("full", 0.2350427350, 5.6410256410, 1.7240292952),
        ("bbar", 0.1945334758, 4.6688034, None),
        ("icm", 0.2087148962, 5.0091575, None),
        ("icmb", 0.2069978632, 4.9679487179, 1.6210494140),
    ],
)
def test_unit_hexahedron(element, k11, trace, frobenius):
    K = element_matrix(*lame(1.0, 0.3), UNIT, element)
    assert K[0, 0] == pytest.approx(k11, abs=1e-9)
    assert np.trace(K) == pytest.approx(trace, abs=1e-9 if frobenius else 1e-7)
    if frobenius:
        assert np.linalg.norm(K) == pytest.approx(frobenius, abs=1e-9)


# Check A1, eigenvalues: full by scikit-fem, icmb by a separate plain numpy code.
@pytest.mark.parametrize(
    ("element", "values"),
    [
        ("full", [0] * 6 + [0.0641026] * 2 + [0.1175214] * 3 + [0.1923077] * 3 + [0.2564103]
         + [0.3846154] * 8 + [1.25]),
        ("icmb", [0] * 6 + [0.0641026] * 2 + [0.1037851] * 3 + [0.1282051] * 3 + [0.2380952] * 3
         + [0.2564103] + [0.3846154] * 5 + [1.25]),
    ],
)  # fmt: skip
def test_eigenvalues_of_the_unit_hexahedron(element, values):
    K = element_matrix(*lame(1.0, 0.3), UNIT, element)
    np.testing.assert_allclose(np.linalg.eigvalsh(K), values, atol=6e-8)


def test_assembled_two_phase_block(assembled):
    # Check A2: 3 x 2 x 2 voxels, h .5, E 1 / nu .45 for x < .75, else E 100 / nu .3, full;
    # Frobenius norm computed with scikit-fem.
    stiff = (np.arange(3) + 0.5) * 0.5 >= 0.75
    lam = np.broadcast_to(np.where(stiff, lame(100, 0.3)[0], lame(1, 0.45)[0]), (2, 2, 3))
    mu = np.broadcast_to(np.where(stiff, lame(100, 0.3)[1], lame(1, 0.45)[1]), (2, 2, 3))
    K = assembled(lam, mu, (0.5, 0.5, 0.5), "full").toarray()
    assert np.linalg.norm(K) == pytest.approx(367.3105287, abs=1e-6)
    values = np.linalg.eigvalsh(K)
    assert (np.abs(values) < 1e-10 * values[-1]).sum() == 6


def test_product_equals_scikit_fem():
    # scikit-fem's ElementHex1 with 2x2x2 points, random Lame constants, no cube, odd sizes.
    skfem = pytest.importorskip("skfem")
    from skfem.helpers import ddot, sym_grad, trace

    (nx, ny, nz), h = (4, 3, 5), (0.9, 0.7, 1.3)
    rng = np.random.default_rng(0)
    lam, mu = rng.random((nz, ny, nx)) + 0.1, rng.random((nz, ny, nx)) + 0.1
    mesh = skfem.MeshHex.init_tensor(
        *[np.arange(n + 1) * d for n, d in zip((nx, ny, nz), h, strict=True)]
    )
    basis = skfem.Basis(mesh, skfem.ElementVector(skfem.ElementHex1()), intorder=3)
    centre = mesh.p[:, mesh.t].mean(axis=1)
    i, j, k = ((centre[d] / h[d]).astype(int) for d in range(3))
    cell_lam, cell_mu = lam[k, j, i][:, None], mu[k, j, i][:, None]

    @skfem.BilinearForm
    def form(u, v, w):
        eu, ev = sym_grad(u), sym_grad(v)
        return cell_lam * trace(eu) * trace(ev) + 2 * cell_mu * ddot(eu, ev)

    K = form.assemble(basis)
    u = rng.standard_normal((3, nz + 1, ny + 1, nx + 1))
    x, y, z = np.round(mesh.p / np.array(h)[:, None]).astype(int)
    flat = np.zeros(K.shape[0])
    for d in range(3):
        flat[basis.nodal_dofs[d]] = u[d, z, y, x]
    expected = K @ flat
    out = np.empty_like(u)
    Stiffness(lam, mu, h, "full").apply(u, out)
    for d in range(3):
        np.testing.assert_allclose(
            out[d, z, y, x], expected[basis.nodal_dofs[d]], atol=1e-13 * np.abs(expected).max()
        )


@pytest.mark.parametrize("element", ELEMENTS)
def test_six_rigid_motions_and_constant_strain(element):
    h = (0.5, 1.2, 0.8)
    K = element_matrix(2.0, 0.7, h, element)
    values = np.linalg.eigvalsh(K)
    assert (np.abs(values) < 1e-12 * values[-1]).sum() == 6
    # a constant strain has the energy of the continuum in every formulation
    strain = np.array([[1e-3, 2e-4, 3e-4], [2e-4, -5e-4, 1e-4], [3e-4, 1e-4, 2e-3]])
    x = np.array([[(a & 1) * h[0], (a >> 1 & 1) * h[1], (a >> 2) * h[2]] for a in range(8)])
    u = (x @ strain.T).ravel()
    energy = 0.5 * (2.0 * np.trace(strain) ** 2 + 2 * 0.7 * (strain**2).sum()) * np.prod(h)
    assert 0.5 * u @ K @ u == pytest.approx(energy, rel=1e-12)


def test_coefficients_times_basis_is_the_matrix():
    values = coefficients(np.array(2.0), np.array(0.7), "bbar")
    basis = basis_matrices((1.0, 2.0, 3.0), "bbar")
    total = sum(float(v) * b for v, b in zip(values, basis, strict=True))
    np.testing.assert_allclose(total, element_matrix(2.0, 0.7, (1.0, 2.0, 3.0), "bbar"))


def test_unknown_element():
    with pytest.raises(InputError, match="There is no element 'hex20'; choose one of icmb"):
        element_matrix(1.0, 1.0, UNIT, "hex20")
