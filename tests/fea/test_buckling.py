"""Linear buckling: columns and plates in closed form, reversed loads, bad input."""

import numpy as np
import pytest

from voxelmat.errors import InputError
from voxelmat.fea import eigen
from voxelmat.fea.buckling import buckling
from voxelmat.fea.static import solve
from voxelmat.model.blend import Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.model.plate import Plate
from voxelmat.model.region import Box, FaceRegion

NEAR, FAR = FaceRegion(name="near", side="x-"), FaceRegion(name="far", side="x+")
CLAMP = Support(region=NEAR)


def block(shape, size, E=1000.0, nu=0.0):
    """A block of `size` mm of an invented material."""
    spacing = tuple(s / n for s, n in zip(size, shape, strict=True))
    material = Material(
        name="a",
        kind="rigid",
        E=Constant(value=E),
        nu=Constant(value=nu),
        density=Constant(value=1e-9),
    )
    grid = VoxelGrid(shape=shape, spacing=spacing, origin=(0.0, 0.0, 0.0))
    return Part.uniform(grid, material)


def case(*vector, supports=(CLAMP,)):
    return LoadCase(name="a", supports=supports, loads=(Force(region=FAR, vector=vector),))


# Column L 40, b = h 2, E 1000, clamped-free: pi^2 E I / (4 L^2) (checks F8, Euler, formula).
EULER = 2.056168


@pytest.mark.parametrize("dense", [0, 3000])
@pytest.mark.parametrize("shape", [(20, 1, 1), (30, 2, 2)])
def test_euler_column(shape, dense, monkeypatch):
    monkeypatch.setattr(eigen, "_DENSE", dense)
    found = buckling(block(shape, (40.0, 2.0, 2.0)), case(-1.0, 0.0, 0.0), count=2)
    # Shear takes .12 % off (Engesser: P / (1 + P / (5/6 G A)), from memory).
    shear = EULER / (1 + EULER / (5 / 6 * 500 * 4))
    np.testing.assert_allclose(found.factors, shear, rtol=0.001)
    np.testing.assert_allclose(found.factors, EULER, rtol=0.002)
    assert found.critical == found.factors[0]
    assert found.reversed_factor is None
    assert found.residuals.max() <= 1e-5
    assert found.shapes.shape == (2, *(n + 1 for n in shape), 3)
    tip = found.shapes[:, -1, 0, 0, 1:]
    np.testing.assert_allclose(np.abs(found.shapes).max(axis=(1, 2, 3, 4)) > 0.5, True)
    np.testing.assert_allclose((tip**2).sum(axis=1), 1.0, rtol=0.01)


# Effective length: ends of a column by what a rigid plate on its head may do (Euler, textbook
# formula): P = pi^2 E I / (k L)^2. Translation and rotation given (0) or free (None).
HEADS = {
    "clamped": ((None, 0.0, 0.0), (0.0, 0.0, 0.0), 0.5),
    "guided": ((None, None, None), (0.0, 0.0, 0.0), 1.0),
    "pinned": ((None, 0.0, 0.0), (0.0, None, None), 0.69916),
    "free": ((None, None, None), (0.0, None, None), 2.0),
}


@pytest.mark.parametrize("dense", [0, 3000])
@pytest.mark.parametrize("head", HEADS)
def test_column_under_a_rigid_plate(head, dense, monkeypatch):
    monkeypatch.setattr(eigen, "_DENSE", dense)
    translation, rotation, k = HEADS[head]
    L = 60.0
    plate = Plate(
        name="head", region=FAR, translation=translation, rotation=rotation, force=(-1.0, 0.0, 0.0)
    )
    load = LoadCase(name="a", supports=(CLAMP,), plates=(plate,))
    found = buckling(block((40, 1, 1), (L, 2.0, 2.0)), load, count=2)
    P = np.pi**2 * 1000 * (2**4 / 12) / (k * L) ** 2
    P = P / (1 + P / (5 / 6 * 500 * 4))  # shear (Engesser, from memory)
    np.testing.assert_allclose(found.factors, P, rtol=0.004)
    # The head stays a plane.
    end = found.shapes[0, -1]
    assert np.abs(end[0, 0] + end[1, 1] - end[0, 1] - end[1, 0]).max() < 1e-6


def test_third_factor_of_the_column():
    # Clamped-free: 1, 9, 25 times the first (Euler), less what shear takes.
    found = buckling(block((40, 2, 2), (40.0, 2.0, 2.0)), case(-1.0, 0.0, 0.0), count=4)
    P = 9 * EULER
    assert found.factors[2] == pytest.approx(P / (1 + P / (5 / 6 * 500 * 4)), rel=0.005)


def test_factors_scale_with_the_load_and_the_modulus():
    part = block((12, 2, 1), (24.0, 4.0, 2.0), nu=0.3)
    one = buckling(part, case(-1.0, 0.0, 0.0), count=1).critical
    ten = buckling(part, case(-10.0, 0.0, 0.0), count=1).critical
    stiff = block((12, 2, 1), (24.0, 4.0, 2.0), E=5000.0, nu=0.3)
    assert ten == pytest.approx(one / 10, rel=1e-6)
    assert buckling(stiff, case(-1.0, 0.0, 0.0), count=1).critical == pytest.approx(5 * one, 1e-6)


@pytest.mark.parametrize("dense", [0, 3000])
def test_a_pulled_column_does_not_buckle_and_says_what_would(dense, monkeypatch):
    monkeypatch.setattr(eigen, "_DENSE", dense)
    part = block((30, 2, 2), (40.0, 2.0, 2.0), nu=0.3)
    pulled = buckling(part, case(1.0, 0.0, 0.0))
    pushed = buckling(part, case(-1.0, 0.0, 0.0), count=1)
    assert pulled.factors.shape == (0,)
    assert pulled.critical is None
    assert pulled.reversed_factor == pytest.approx(-pushed.critical, rel=1e-5)
    assert any("No multiple" in c for c in pulled.cautions)
    assert any("other way round" in c for c in pulled.cautions)


def strip(shape, nu=0.0):
    """A plate 20 x 10 x 0.25 mm, simply supported on all edges in its middle plane."""
    part = block(shape, (20.0, 10.0, 0.25), nu=nu)
    e, z = 1e-3, 0.125
    far = (20.0, 10.0)
    edges = []
    for axis in range(2):
        for at in (0.0, far[axis]):
            low, high = [-e, -e, z - e], [far[0] + e, far[1] + e, z + e]
            low[axis], high[axis] = at - e, at + e
            edges.append(Box(name=f"edge {axis} {at}", low=tuple(low), high=tuple(high)))
    hold = [Support(region=r, displacement=(None, None, 0.0)) for r in edges]
    # The plate's edges turn, so only their middle lines are kept from sliding.
    hold.append(Support(region=edges[0], displacement=(0.0, None, None)))
    hold.append(Support(region=edges[2], displacement=(None, 0.0, None)))
    return part, tuple(hold)


def test_simply_supported_plate():
    # Line load k pi^2 D / b^2, k 4 for a plate of whole squares, D = E t^3 / 12 at nu 0 (Bryan
    # 1891, textbook formula from memory); b 10, t .25, E 1000.
    part, hold = strip((40, 20, 2))
    found = buckling(part, case(-1.0, 0.0, 0.0, supports=hold), count=1)
    expected = 4 * np.pi**2 * (1000 * 0.25**3 / 12) / 10**2 * 10
    assert found.critical == pytest.approx(expected, rel=0.02)
    # Two half waves along the plate: the middle stays, the quarters move oppositely.
    w = found.shapes[0, :, 10, 1, 2]
    assert abs(w[20]) < 0.05
    assert w[10] * w[30] < -0.8


@pytest.mark.parametrize(("shape", "off"), [((120, 1, 1), 0.06), ((240, 1, 6), 0.03)])
def test_lateral_buckling_of_a_cantilever_in_bending(shape, off):
    # Narrow strip, tip load through the middle: P = 4.0126 sqrt(E Iz G J) / L^2 (Timoshenko &
    # Gere, Theory of Elastic Stability, from memory), less than what the clamped end adds by
    # holding the warp of the root. L 240, h 6, t .5, E 1000, nu 0.
    L, h, t, E = 240.0, 6.0, 0.5, 1000.0
    found = buckling(block(shape, (L, t, h), E=E), case(0.0, 0.0, -0.1), count=1)
    J = h * t**3 / 3 * (1 - 0.63 * t / h)
    expected = 4.0126 * np.sqrt(E * h * t**3 / 12 * E / 2 * J) / L**2
    assert 1.0 < 0.1 * found.critical / expected < 1 + off
    # Symmetric: the reverse load does the same.
    assert found.reversed_factor == pytest.approx(-found.critical, rel=1e-3)
    if shape[2] == 1:
        # The stress of bending is all in what varies over the voxel: there is none at its centre.
        assert np.abs(found.static.stress[..., 0]).max() < 1e-4 * 0.1 * L * 6 / (t * h**2)


def test_turning_the_grid_changes_nothing():
    a = buckling(block((16, 3, 2), (24.0, 3.0, 2.0), nu=0.3), case(-1.0, 0.1, 0.0), count=2)
    root = Support(region=FaceRegion(name="root", side="z-"))
    load = Force(region=FaceRegion(name="top", side="z+"), vector=(0.0, 0.1, -1.0))
    turned = LoadCase(name="a", supports=(root,), loads=(load,))
    b = buckling(block((2, 3, 16), (2.0, 3.0, 24.0), nu=0.3), turned, count=2)
    np.testing.assert_allclose(a.factors, b.factors, rtol=1e-6)


@pytest.mark.parametrize("seed", range(4))
def test_iteration_equals_dense_eigenvalues_on_random_parts(seed, monkeypatch):
    rng = np.random.default_rng(seed)
    part = block((8, 3, 2), (16.0, 3.0, 2.0), nu=0.3)
    soft = part.resins[0].replace(name="soft", E=Constant(value=20.0))
    part = part.replace(
        resins=(*part.resins, soft),
        palette=(*part.palette, Blend.pure("soft")),
        labels=rng.integers(1, 3, part.grid.shape).astype(np.uint16),
    )
    load = case(*rng.standard_normal(3))
    static = solve(part, load)
    found = []
    for dense in (0, 3000):
        monkeypatch.setattr(eigen, "_DENSE", dense)
        found.append(buckling(part, load, static=static, count=3, tol=1e-6))
    np.testing.assert_allclose(found[0].factors, found[1].factors, rtol=1e-7)
    assert found[0].iterations > found[1].iterations == 0
    assert len(found[0].factors) > 0


def test_a_static_result_is_used(monkeypatch):
    part, load = block((10, 1, 1), (20.0, 2.0, 2.0)), case(-1.0, 0.0, 0.0)
    static = solve(part, load)
    found = buckling(part, load, static=static, count=1)
    assert found.static is static
    with pytest.raises(InputError, match="another part"):
        buckling(part, case(-2.0, 0.0, 0.0), static=static)


def test_a_stocky_part_gets_a_caution():
    found = buckling(block((3, 3, 3), (3.0, 3.0, 3.0)), case(-1.0, 0.0, 0.0), count=1)
    assert any("rough guide" in c for c in found.cautions)


def test_what_is_not_held_is_refused():
    part = block((6, 2, 2), (6.0, 2.0, 2.0))
    slide = Support(region=NEAR, displacement=(0.0, None, None))
    with pytest.raises(InputError, match="not held: translation along y"):
        buckling(part, case(-1.0, 0.0, 0.0, supports=(slide,)))
    labels = np.ones((6, 2, 4), np.uint16)
    labels[:, :, 2] = 0
    labels[1:3, :, 3] = 0
    labels[5, :, 3] = 0
    labels[0, :, 3] = 0
    loose = block((6, 2, 4), (6.0, 2.0, 4.0)).replace(labels=labels)
    with pytest.raises(InputError, match="1 pieces of the part are not held, first x 3 to 5"):
        buckling(loose, case(-1.0, 0.0, 0.0))
    with pytest.raises(InputError, match="count"):
        buckling(part, case(-1.0, 0.0, 0.0), count=0)
