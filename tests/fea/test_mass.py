"""Mass of a part on its nodes: twins, sums, partly filled voxels, threads."""

import numba
import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.fea.mass import MASSES, Mass, densities
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.part import Part

SPACING = (0.9, 0.7, 1.3)


def fields(shape, seed=0):
    rng = np.random.default_rng(seed)
    rho = rng.random(shape) * (rng.random(shape) < 0.8)
    return rho, rng.standard_normal((3, *(n + 1 for n in shape)))


def test_consistent_mass_equals_scikit_fem():
    # scikit-fem: the form rho u . v on ElementHex1, one density a voxel
    skfem = pytest.importorskip("skfem")
    from skfem.helpers import dot

    shape = (5, 3, 4)
    rho, u = fields(shape)
    nz, ny, nx = shape
    mesh = skfem.MeshHex.init_tensor(
        *[np.arange(n + 1) * d for n, d in zip((nx, ny, nz), SPACING, strict=True)]
    )
    basis = skfem.Basis(mesh, skfem.ElementVector(skfem.ElementHex1()), intorder=3)
    centre = mesh.p[:, mesh.t].mean(axis=1)
    i, j, k = ((centre[d] / SPACING[d]).astype(int) for d in range(3))
    cell = rho[k, j, i][:, None]

    @skfem.BilinearForm
    def form(a, b, w):
        return cell * dot(a, b)

    M = form.assemble(basis)
    x, y, z = np.round(mesh.p / np.array(SPACING)[:, None]).astype(int)
    flat = np.zeros(M.shape[0])
    for d in range(3):
        flat[basis.nodal_dofs[d]] = u[d, z, y, x]
    expected = M @ flat
    out = np.empty_like(u)
    Mass(rho, SPACING, "consistent").apply(u, out)
    for d in range(3):
        np.testing.assert_allclose(
            out[d, z, y, x], expected[basis.nodal_dofs[d]], atol=1e-13 * np.abs(expected).max()
        )


def test_lumped_mass_voxel_by_voxel():
    rho, u = fields((3, 2, 4), 1)
    expected = np.zeros(u.shape[1:])
    for k, j, i in np.ndindex(rho.shape):
        for a in range(8):
            expected[k + (a >> 2), j + (a >> 1 & 1), i + (a & 1)] += (
                rho[k, j, i] * np.prod(SPACING) / 8
            )
    mass = Mass(rho, SPACING, "lumped")
    np.testing.assert_allclose(mass.nodal, expected, rtol=1e-14)
    out = np.empty_like(u)
    mass.apply(u, out)
    np.testing.assert_allclose(out, expected * u, rtol=1e-13)


@pytest.mark.parametrize("kind", MASSES)
def test_a_translation_weighs_the_whole_part(kind, grid, resin):
    labels = np.ones((4, 3, 5), np.uint16)
    labels[2:, 1:, 3:] = 2
    labels[0, 0, :] = 0
    occupancy = np.where(labels > 0, 255, 0).astype(np.uint8)
    occupancy[3, :, :] = np.where(labels[3] > 0, 100, 0)
    part = Part(
        grid=grid(4, 3, 5, spacing=SPACING),
        resins=(resin("a"), resin("b").replace(density=resin("a").density.__class__(value=7e-9))),
        palette=(EMPTY, Blend.pure("a"), Blend.of({"a": 1, "b": 1})),
        labels=labels,
        occupancy=occupancy,
    )
    mass = Mass(densities(part), SPACING, kind)
    assert mass.total == pytest.approx(part.mass, rel=1e-6)  # fill is single precision
    u, out = np.zeros((3, 6, 4, 5)), np.empty((3, 6, 4, 5))
    u[1] = 1.0
    mass.apply(u, out)
    assert out[1].sum() == pytest.approx(mass.total, rel=1e-12)
    assert not out[0].any()
    assert not out[2].any()


def test_feathers_that_are_not_solved_have_no_mass(grid, resin):
    occupancy = np.full((2, 2, 2), 255, np.uint8)
    occupancy[0, 0, 0] = 20
    part = Part.uniform(grid(2, 2, 2), resin()).replace(occupancy=occupancy)
    rho = densities(part)
    assert rho[0, 0, 0] == 0
    assert np.all(rho.ravel()[1:] > 0)


def test_same_bits_for_any_number_of_threads():
    rho, u = fields((9, 4, 6), 2)
    mass = Mass(rho, SPACING, "consistent")
    before = numba.get_num_threads()
    found = []
    for count in (1, numba.config.NUMBA_NUM_THREADS):
        numba.set_num_threads(count)
        y = np.empty_like(u)
        mass.apply(u, y)
        found.append(y)
    numba.set_num_threads(before)
    assert np.array_equal(*found)


def test_unknown_kind_of_mass():
    with pytest.raises(InputError, match="consistent, lumped"):
        Mass(np.ones((1, 1, 1)), SPACING, "heavy")
