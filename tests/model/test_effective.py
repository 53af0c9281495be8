"""Effective constants: averages, nearest symmetries, anisotropy; extrapolation of blends."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.model.blend_estimate import limit
from voxelmat.model.effective import EffectiveConstants

KELVIN = np.sqrt([1.0, 1.0, 1.0, 2.0, 2.0, 2.0])


def constants(C, **more):
    C = np.asarray(C, dtype=float)
    values = {
        "stiffness": C, "expansion": None, "density": 1e-9, "fractions": {}, "element": "icmb",
        "symmetry_error": 0.0, "iterations": (1,) * 6, "shape": (2, 2, 2), **more,
    }  # fmt: skip
    return EffectiveConstants(**values)


def cubic(C11, C12, C44):
    C = np.diag([C11 - C12] * 3 + [C44] * 3)
    C[:3, :3] += C12
    return C


def random_stiffness(seed):
    A = np.random.default_rng(seed).standard_normal((6, 6))
    return A @ A.T + 0.5 * np.eye(6)


def distance(A, B):
    return np.linalg.norm((A - B) * np.outer(KELVIN, KELVIN))


def test_isotropic_material():
    E, nu = 3.0, 0.35
    G, K = E / 2 / (1 + nu), E / 3 / (1 - 2 * nu)
    found = constants(cubic(K + 4 * G / 3, K - 2 * G / 3, G))
    assert found.young == pytest.approx([E] * 3, rel=1e-12)
    assert found.shear == pytest.approx([G] * 3, rel=1e-12)
    assert found.poisson[0, 1] == pytest.approx(nu, rel=1e-12)
    assert found.poisson[2, 0] == pytest.approx(nu, rel=1e-12)
    assert np.isnan(found.poisson[1, 1])
    assert found.universal_anisotropy == pytest.approx(0.0, abs=1e-12)
    assert found.cubic.zener == pytest.approx(1.0, rel=1e-12)
    assert (found.isotropic.young, found.isotropic.poisson) == pytest.approx((E, nu), rel=1e-12)
    assert found.isotropic.distance < 1e-15


@settings(max_examples=20, deadline=None)
@given(C12=st.floats(0.1, 5.0), more=st.floats(0.1, 5.0), C44=st.floats(0.1, 5.0))
def test_universal_index_of_a_cubic_material(C12, more, C44):
    """6/5 (sqrt(A) - 1/sqrt(A))^2, A Zener's ratio: Ranganathan & Ostoja-Starzewski 2008.

    (from memory)
    """
    found = constants(cubic(C12 + more, C12, C44))
    root = np.sqrt(found.cubic.zener)
    assert found.universal_anisotropy == pytest.approx(1.2 * (root - 1 / root) ** 2, abs=1e-9)
    assert found.cubic.distance < 1e-12
    assert found.cubic.bulk == pytest.approx(found.bulk_bounds[0], rel=1e-9)
    assert found.bulk_bounds[0] == pytest.approx(found.bulk_bounds[1], rel=1e-9)


@settings(max_examples=20, deadline=None)
@given(seed=st.integers(0, 10**6))
def test_nearest_is_nearest(seed):
    """No small change of a constant brings the symmetric stiffness nearer."""
    C = random_stiffness(seed)
    found = constants(C)
    iso, cub = found.isotropic, found.cubic
    K, G = iso.bulk, iso.shear

    def isotropic(K, G):
        return cubic(K + 4 * G / 3, K - 2 * G / 3, G)

    best = distance(C, isotropic(K, G))
    assert iso.distance == pytest.approx(best / distance(C, 0 * C), rel=1e-12)
    for dK, dG in ((1e-3, 0), (-1e-3, 0), (0, 1e-3), (0, -1e-3)):
        assert distance(C, isotropic(K + dK, G + dG)) > best
    best = distance(C, cubic(*cub[:3]))
    for change in np.vstack([np.eye(3), -np.eye(3)]) * 1e-3:
        assert distance(C, cubic(*(np.array(cub[:3]) + change))) > best
    assert cub.distance <= iso.distance + 1e-12
    (k_r, k_v), (g_r, g_v) = found.bulk_bounds, found.shear_bounds
    assert k_r <= k_v * (1 + 1e-12)
    assert g_r <= g_v * (1 + 1e-12)
    assert (k_v, g_v) == pytest.approx((K, G), rel=1e-12)
    assert found.universal_anisotropy >= -1e-9


def test_averages_of_a_published_crystal():
    """Copper, C11 168.4, C12 121.4, C44 75.4 GPa (from memory): Voigt 54.6, Reuss 40.0 GPa."""
    found = constants(cubic(168.4, 121.4, 75.4))
    assert found.shear_bounds == pytest.approx((40.0, 54.6), abs=0.1)
    assert found.bulk_bounds[1] == pytest.approx(137.1, abs=0.05)
    assert found.cubic.zener == pytest.approx(3.21, abs=0.01)


def test_orthotropic_engineering_constants():
    """A compliance written down is read back, with its shear order xy, xz, yz."""
    E, nu, G = np.array([3.0, 5.0, 11.0]), {(0, 1): 0.2, (0, 2): 0.1, (1, 2): 0.3}, [1.0, 2.0, 4.0]
    S = np.diag([*(1 / E), *(1 / np.array(G))])
    for (a, b), v in nu.items():
        S[a, b] = S[b, a] = -v / E[a]
    found = constants(np.linalg.inv(S))
    assert found.young == pytest.approx(E, rel=1e-12)
    assert found.shear == pytest.approx(G, rel=1e-12)
    for (a, b), v in nu.items():
        assert found.poisson[a, b] == pytest.approx(v, rel=1e-12)
        assert found.poisson[b, a] == pytest.approx(v * E[b] / E[a], rel=1e-12)


def test_no_compliance_of_a_soft_direction():
    C = cubic(3.0, 1.0, 1.0)
    C[5, 5] = 0.0
    found = constants(C)
    assert not found.is_stiff
    with pytest.raises(InputError, match="yz"):
        _ = found.compliance
    assert "does not resist" in found._repr_html_()
    assert "Zener" not in constants(np.zeros((6, 6)))._repr_html_()


@settings(max_examples=20, deadline=None)
@given(
    order=st.floats(0.55, 1.9),
    top=st.floats(1.0, 10.0),
    slope=st.floats(0.1, 5.0),
    fall=st.booleans(),
)
def test_limit_finds_a_known_order(order, top, slope, fall):
    r = (2, 3, 4)
    v = [top + (slope if fall else -slope) * n**-order for n in r]
    found = limit(r, v)
    assert found.order == pytest.approx(order, abs=1e-4)
    assert found.value == pytest.approx(top, rel=1e-4, abs=1e-4)
    # One element a droplet is left out.
    assert limit((1, *r), [99.0, *v]) == found


def test_limit_of_two_values_and_of_equal_ones():
    found = limit((2, 4), [3.0, 2.0])
    assert (found.value, found.order) == (1.0, 1.0)
    assert found.uncertainty == pytest.approx(1.0 / (np.sqrt(2) - 1) - 1.0)
    assert limit((1, 2, 3, 4), [5.0, 2.0, 2.0, 2.0])[:2] == (2.0, 0.0)
    with pytest.raises(InputError, match="rising"):
        limit((2, 2), [1.0, 1.0])
    with pytest.raises(InputError, match="two or more"):
        limit((2,), [1.0])
