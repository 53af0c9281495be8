"""Orthotropic constants: limits of stability, turning, reading from a stiffness, layers."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.model.effective import EffectiveConstants
from voxelmat.model.material import Constant, Material
from voxelmat.model.orthotropic import Orthotropic, layered

# Invented.
WOOD = Orthotropic(E=(1000.0, 80.0, 50.0), nu_xy=0.4, nu_xz=0.45, nu_yz=0.5, G=(70.0, 60.0, 8.0))


def resin(source="measured here", E=2000.0, nu=0.36):
    return Material(
        name="example",
        kind="rigid",
        E=Constant(value=E, source=source),
        nu=Constant(value=nu, source=source),
        density=Constant(value=1.1e-9),
    )


def random_stiffness(seed):
    rng = np.random.default_rng(seed)
    A = rng.standard_normal((3, 3))
    C = np.diag([0.0, 0.0, 0.0, *rng.uniform(0.1, 5.0, 3)])
    C[:3, :3] = A @ A.T + 0.1 * np.eye(3)
    return C


def test_stiffness_and_compliance_are_inverse_and_hold_the_moduli():
    np.testing.assert_allclose(WOOD.stiffness @ WOOD.compliance, np.eye(6), atol=1e-13)
    C = WOOD.stiffness
    expected = [C[0, 0], C[1, 1], C[2, 2], C[0, 1], C[0, 2], C[1, 2], C[5, 5], C[4, 4], C[3, 3]]
    np.testing.assert_array_equal(WOOD.constants, expected)
    stress = np.array([0.0, 2.0, 0.0, 0.0, 0.0, 0.0])
    strain = WOOD.compliance @ stress
    assert strain[1] == pytest.approx(2.0 / 80.0)
    assert strain[2] == pytest.approx(-0.5 * 2.0 / 80.0)
    assert strain[0] == pytest.approx(-0.4 * 80.0 / 1000.0 * 2.0 / 80.0)  # nu_yx = nu_xy E_y / E_x


@settings(deadline=None, max_examples=25)
@given(st.integers(0, 10_000))
def test_read_from_a_stiffness_and_back(seed):
    C = random_stiffness(seed)
    made = Orthotropic.from_stiffness(C)
    np.testing.assert_allclose(made.stiffness, C, atol=1e-9 * np.abs(C).max())
    assert made.off_axis == 0.0


@settings(deadline=None, max_examples=25)
@given(st.tuples(*[st.floats(0.5, 500.0)] * 3), st.tuples(*[st.floats(-2.0, 2.0)] * 3))
def test_accepted_exactly_where_positive_definite(E, nu):
    S = np.diag([1 / e for e in E])
    for (a, b), v in zip(((0, 1), (0, 2), (1, 2)), nu, strict=True):
        S[a, b] = S[b, a] = -v / E[a]
    scaled = S * np.sqrt(np.outer(E, E))
    least = np.linalg.eigvalsh(scaled)[0]
    made = {"E": E, "nu_xy": nu[0], "nu_xz": nu[1], "nu_yz": nu[2], "G": (1.0, 1.0, 1.0)}
    if least > 1e-6:
        assert np.linalg.eigvalsh(Orthotropic(**made).stiffness)[0] > 0
    elif least < -1e-6:
        with pytest.raises(InputError, match=r"stable material|too large together"):
            Orthotropic(**made)


def test_messages_name_the_ratio_and_the_limit():
    with pytest.raises(InputError, match=r"nu_xz is 5; .* = 4\.472 in size\. Was nu_zx meant\?"):
        WOOD.replace(nu_xz=5.0)
    with pytest.raises(InputError, match="the volume would grow under pressure"):
        Orthotropic(E=(1.0, 1.0, 1.0), nu_xy=0.6, nu_xz=0.6, nu_yz=0.6, G=(1.0, 1.0, 1.0))
    with pytest.raises(InputError, match="above 0 MPa"):
        WOOD.replace(G=(1.0, 0.0, 1.0))
    with pytest.raises(InputError, match="E is three finite numbers"):
        WOOD.replace(E=(1.0, 2.0))
    with pytest.raises(InputError, match="E is three finite numbers"):
        WOOD.replace(E=(1.0, 2.0, float("nan")))


def test_isotropic_is_isotropic():
    C = Orthotropic.isotropic(200.0, 0.3).stiffness
    lam, mu = 200 * 0.3 / (1.3 * 0.4), 200 / 2.6
    np.testing.assert_allclose(np.diag(C), [lam + 2 * mu] * 3 + [mu] * 3)
    np.testing.assert_allclose(C[0, 1:3], lam)


def test_turned_axes():
    turned = WOOD.turned((2, 0, 1))  # new x is the old z, new y the old x
    np.testing.assert_allclose(turned.E, (50.0, 1000.0, 80.0))
    np.testing.assert_allclose(turned.G, (60.0, 8.0, 70.0))
    assert turned.nu_yz == pytest.approx(0.4)
    assert turned.nu_xy == pytest.approx(0.45 * 50.0 / 1000.0)
    back = turned.turned((1, 2, 0))
    np.testing.assert_allclose(back.stiffness, WOOD.stiffness, rtol=1e-12)
    with pytest.raises(InputError, match="an order of 0, 1, 2"):
        WOOD.turned((0, 0, 1))


def effective(C):
    return EffectiveConstants(
        stiffness=C, expansion=None, density=1e-9, fractions={}, symmetry_error=0.0,
        iterations=(), element="icmb", shape=(1, 1, 1),
    )  # fmt: skip


def test_what_is_not_orthotropic_is_told_or_refused():
    C = WOOD.stiffness.copy()
    C[0, 3] = C[3, 0] = 1.0
    made = Orthotropic.from_effective(effective(C))
    assert made.off_axis == pytest.approx(np.sqrt(2) / np.linalg.norm(C), rel=1e-9)
    assert not made.indicative
    C[0, 3] = C[3, 0] = 100.0
    with pytest.raises(InputError, match="it is not orthotropic along x, y, z"):
        Orthotropic.from_effective(effective(C))
    assert Orthotropic.from_stiffness(C, most_off_axis=0.2).off_axis > 0.1
    with pytest.raises(InputError, match="not symmetric"):
        Orthotropic.from_stiffness(np.triu(WOOD.stiffness))
    with pytest.raises(InputError, match="some strain meets no resistance"):
        Orthotropic.from_stiffness(np.diag([1.0, 1.0, 1.0, 1.0, 1.0, 0.0]))
    with pytest.raises(InputError, match="6x6"):
        Orthotropic.from_stiffness(np.eye(3))


def test_layers():
    same = layered(resin(), 1.0, source="own tests")
    expected = Orthotropic.isotropic(2000.0, 0.36).stiffness
    np.testing.assert_allclose(same.stiffness, expected, rtol=1e-12)
    assert not same.indicative
    soft = layered(resin(), 0.64)
    assert soft.indicative
    np.testing.assert_allclose(soft.E, (2000.0, 2000.0, 1280.0))
    assert soft.G[1] == pytest.approx(0.8 * soft.G[0])
    assert soft.nu_xz * soft.E[2] / soft.E[0] == pytest.approx(0.36 * 0.8)  # nu_zx
    assert layered(resin(source="indicative"), 0.9, source="own tests").indicative
    assert layered(resin(), 0.5, ratio_shear=0.9).G[2] == pytest.approx(0.9 * soft.G[0])
    for ratio in (0.0, -1.0, float("nan")):
        with pytest.raises(InputError, match="must be above 0"):
            layered(resin(), ratio)


@settings(deadline=None, max_examples=25)
@given(st.floats(0.0, 0.4999), st.floats(0.01, 20.0))
def test_layers_stay_stable_at_any_ratio(nu, ratio):
    made = layered(resin(nu=nu), ratio)
    assert np.linalg.eigvalsh(made.stiffness)[0] > 0
