"""Cells as parts: what they weigh, expand, are made of, and what is said of them."""

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.fea.homogenise import homogenise
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.material import Constant
from voxelmat.model.part import Part


@pytest.fixture(scope="module")
def resins(resin):
    soft = resin("soft-example", E=1.0, nu=0.45).replace(
        expansion=Constant(value=1.0), density=Constant(value=1.0e-9)
    )
    stiff = resin("stiff-example", E=10.0, nu=0.3).replace(
        expansion=Constant(value=0.2), density=Constant(value=1.3e-9)
    )
    return soft, stiff


def part_of(resins, labels, spacing=(0.5, 0.5, 0.5), **more):
    palette = (EMPTY, *(Blend.pure(m.name) for m in resins))
    grid = VoxelGrid(shape=labels.shape, spacing=spacing, origin=(0.0, 0.0, 0.0))
    return Part(grid=grid, resins=resins, palette=palette, labels=labels, **more)


def random_labels(seed, low=1, shape=(5, 4, 6)):
    return np.random.default_rng(seed).integers(low, 3, shape)


def test_axes_of_a_part_are_x_y_z(resins):
    """Layers normal to x: soft along x, stiff along y and z."""
    labels = np.ones((4, 3, 2), dtype=int)
    labels[2:] = 2
    found = homogenise(part_of(resins, labels, spacing=(0.2, 0.5, 1.0)))
    assert found.shape == (4, 3, 2)
    assert found.young[1] == pytest.approx(found.young[2], rel=1e-9)
    assert found.young[0] < 0.8 * found.young[1]
    # Backus 1962: across the layers the harmonic mean of lambda + 2 mu, and of mu.
    P, G = [m.bulk + 4 * m.shear / 3 for m in resins], [m.shear for m in resins]
    assert found.stiffness[0, 0] == pytest.approx(2 / (1 / P[0] + 1 / P[1]), rel=1e-9)
    assert found.shear[:2] == pytest.approx([2 / (1 / G[0] + 1 / G[1])] * 2, rel=1e-9)
    # In the plane of the layers shear strains are alike: the arithmetic mean.
    assert found.shear[2] == pytest.approx((1 / 2.9 + 10 / 2.6) / 2, rel=1e-9)
    assert found.expansion[1] == pytest.approx(found.expansion[2], rel=1e-9)
    assert found.expansion[0] > found.expansion[1]
    assert found.density == pytest.approx(1.15e-9, rel=1e-12)
    assert found.fractions == {"soft-example": 0.5, "stiff-example": 0.5}


def test_levin_of_a_cell_of_pure_resins_and_of_a_blend(resins):
    """Levin 1967 (C2), as a tensor for cells of any anisotropy; a blend is given its law's K.

    a = a1 + (a2 - a1) (3 sum_k S_ik - 1 / K1) / (1 / K2 - 1 / K1): B. W. Rosen & Z. Hashin,
    Int. J. Engng Sci. 8 (1970) 157 (from memory).
    """
    found = homogenise(part_of(resins, random_labels(1)), tol=1e-10)
    soft, stiff = resins
    unit = np.array([1.0, 1, 1, 0, 0, 0])
    a1, a2 = soft.expansion.value, stiff.expansion.value
    share = (3 * found.compliance @ unit - unit / soft.bulk) / (1 / stiff.bulk - 1 / soft.bulk)
    assert found.expansion == pytest.approx(a1 * unit + (a2 - a1) * share, abs=1e-9)
    assert np.abs(found.expansion[3:]).max() > 1e-4
    assert found.expansion[:3].mean() == pytest.approx(
        levin(found.bulk_bounds[0], soft, stiff), rel=1e-9
    )
    grid = VoxelGrid(shape=(2, 2, 2), spacing=(1.0, 1.0, 1.0), origin=(0.0, 0.0, 0.0))
    half = Blend.of({soft.name: 1, stiff.name: 1})
    part = Part(grid=grid, resins=resins, palette=(EMPTY, half), labels=np.ones((2, 2, 2), int))
    uniform = homogenise(part)
    K = uniform.isotropic.bulk
    assert uniform.expansion[:3] == pytest.approx([levin(K, soft, stiff)] * 3, rel=1e-12)


def levin(K, one, two):
    a1, a2 = one.expansion.value, two.expansion.value
    return a1 + (a2 - a1) * (1 / K - 1 / one.bulk) / (1 / two.bulk - 1 / one.bulk)


def test_expansion_is_unknown_where_a_resin_has_none(resins):
    bare = resins[1].replace(expansion=None)
    assert homogenise(part_of((resins[0], bare), random_labels(2))).expansion is None
    # A resin that no voxel holds is not asked.
    labels = np.ones((2, 2, 2), dtype=int)
    assert homogenise(part_of((resins[0], bare), labels)).expansion is not None


def test_voids_do_not_change_the_expansion(resins):
    labels = np.ones((6, 6, 6), dtype=int)
    labels[2:4, 2:4, 2:4] = 0
    found = homogenise(part_of(resins, labels))
    assert found.expansion == pytest.approx([1.0] * 3 + [0.0] * 3, abs=1e-8)
    assert found.density == pytest.approx(1e-9 * (1 - 8 / 216), rel=1e-12)
    assert sum(found.fractions.values()) == pytest.approx(1 - 8 / 216)


def test_partly_filled_voxels(resins):
    labels = np.ones((4, 4, 4), dtype=int)
    full = homogenise(part_of(resins, labels))
    occupancy = np.full(labels.shape, 51, dtype=np.uint8)
    found = homogenise(part_of(resins, labels, occupancy=occupancy))
    assert found.stiffness == pytest.approx(0.2 * full.stiffness, abs=1e-6)
    assert found.density == pytest.approx(0.2 * full.density, rel=1e-12)


def test_refined_cells_are_softer_and_cautioned(resins):
    labels = random_labels(5)
    stiffer = (resins[0], resins[1].replace(E=Constant(value=200.0)))
    one = homogenise(part_of(stiffer, labels))
    two = homogenise(part_of(stiffer, labels), refine=2)
    three = homogenise(part_of(stiffer, labels), refine=3)
    assert two.shape == (10, 8, 12)
    assert three.isotropic.bulk < two.isotropic.bulk < one.isotropic.bulk
    assert any("too stiff" in c for c in one.cautions)
    assert any("too stiff" in c for c in two.cautions)
    assert not three.cautions
    by_hand = np.repeat(np.repeat(np.repeat(labels, 2, 0), 2, 1), 2, 2)
    again = homogenise(part_of(stiffer, by_hand, spacing=(0.25, 0.25, 0.25)))
    assert again.stiffness == pytest.approx(two.stiffness, rel=1e-9, abs=1e-9)


def test_islands_are_named(resins):
    labels = np.ones((6, 6, 6), dtype=int)
    labels[1:5, 1:5, 1:5] = 0
    empty = homogenise(part_of(resins, labels))
    labels[2:4, 2:4, 2:4] = 2
    found = homogenise(part_of(resins, labels))
    assert any("Islands" in c and "(1, 3.7 % of the cell)" in c for c in found.cautions)
    assert np.array_equal(found.stiffness, empty.stiffness)
    assert found.density > empty.density


def test_cells_that_do_not_hang_together(resins):
    labels = np.zeros((5, 5, 5), dtype=int)
    labels[1:4, 1:4, 1:4] = 1
    found = homogenise(part_of(resins, labels))
    assert not found.stiffness.any()
    assert not found.is_stiff
    assert found.expansion is None
    assert any("stiffness is 0" in c for c in found.cautions)
    labels[:, 2, 2] = 1
    fibre = homogenise(part_of(resins, labels))
    assert fibre.stiffness[0, 0] > 0.04
    assert fibre.expansion is None
    for name in ("young", "shear", "poisson", "universal_anisotropy"):
        with pytest.raises(InputError, match="no stiffness against"):
            getattr(fibre, name)
    assert "does not resist every strain" in fibre._repr_html_()


def test_table_has_units_and_cautions(resins):
    found = homogenise(part_of(resins, random_labels(7, low=0, shape=(8, 8, 8))))
    page = found._repr_html_()
    for words in ("MPa", "g/cm³", "1e-6/K", "universal anisotropy", "Zener", "refine = 1"):
        assert words in page
    assert "K" in repr(found)


def test_warm_start(resins):
    part = part_of(resins, random_labels(9))
    cold = homogenise(part, keep_fields=True)
    assert homogenise(part).fields is None
    assert homogenise(part, warm=cold).iterations == (0,) * 6


def test_bad_cells(resins):
    with pytest.raises(InputError, match="empty"):
        homogenise(part_of(resins, np.zeros((2, 2, 2), dtype=int)))
    with pytest.raises(InputError, match="refine"):
        homogenise(part_of(resins, np.ones((2, 2, 2), dtype=int)), refine=0)
    with pytest.raises(InputError, match="no element"):
        homogenise(part_of(resins, np.ones((2, 2, 2), dtype=int)), element="best")
