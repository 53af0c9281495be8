"""Method of manufactured solutions, and what linear elasticity must obey, on whole systems."""

import numpy as np
import pytest

from voxelmat.fea.system import LinearSystem

LAM, MU = 1.3, 0.7


def manufactured(shape, h):
    """u = (sin y cos z, sin z cos x, sin x cos y) and its body force (formula).

    Its divergence is 0 and each component is an eigenfunction of the Laplacian with -2, so
    -div sigma = 2 mu u.
    """
    z, y, x = np.meshgrid(
        *[0.3 + d * np.arange(n + 1) for n, d in zip(shape, h[::-1], strict=True)], indexing="ij"
    )
    u = np.stack([np.sin(y) * np.cos(z), np.sin(z) * np.cos(x), np.sin(x) * np.cos(y)])
    return u, 2 * MU * u


def compressible(shape, h):
    """u = grad(sin x sin 2y e^z) (formula): -div sigma = -(lambda + 2 mu) grad lap p."""
    z, y, x = np.meshgrid(
        *[0.2 + d * np.arange(n + 1) for n, d in zip(shape, h[::-1], strict=True)], indexing="ij"
    )
    e = np.exp(z)
    u = np.stack(
        [np.cos(x) * np.sin(2 * y) * e, 2 * np.sin(x) * np.cos(2 * y) * e,
         np.sin(x) * np.sin(2 * y) * e]
    )  # fmt: skip
    return u, (LAM + 2 * MU) * 4 * u  # lap p = (-1 - 4 + 1) p


@pytest.mark.parametrize("element", ["icmb", "full", "bbar"])
@pytest.mark.parametrize("field", [manufactured, compressible])
def test_manufactured_solution_converges_with_order_2(field, element):
    errors = []
    for n in (4, 8, 16):
        shape, h = (n, n, 2 * n), (0.5 / n, 1.2 / n, 0.8 / n)
        exact, force = field(shape, h)
        fixed = np.ones(exact.shape, dtype=bool)
        fixed[:, 1:-1, 1:-1, 1:-1] = False
        lam, mu = np.full(shape, LAM), np.full(shape, MU)
        system = LinearSystem(lam, mu, h, fixed, element=element)
        u = system.solve(force * np.prod(h), prescribed=exact, tol=1e-10).u
        errors.append(np.sqrt(np.mean((u - exact) ** 2)))
    order = np.log2(np.array(errors[:-1]) / errors[1:])
    np.testing.assert_allclose(order, 2.0, atol=0.15)


@pytest.fixture(scope="module")
def solved():
    """Two loads on one random block, and a way to solve for more."""
    rng = np.random.default_rng(4)
    shape = (5, 6, 9)
    mu = rng.choice([1.0, 80.0], size=shape)
    mu[-1, :2, 4:] = 0.0
    fixed = np.zeros((3, *(n + 1 for n in shape)), dtype=bool)
    fixed[..., 0] = True
    system = LinearSystem(2.0 * mu, mu, (1.0, 0.7, 1.2), fixed)
    f, g = rng.standard_normal((2, *fixed.shape)) * system.free

    def solve(force):
        return system.solve(force, tol=1e-11).u

    return system, f, g, solve(f), solve(g), solve


def test_linearity_and_superposition(solved):
    _, f, g, u, v, solve = solved
    size = np.abs(u).max()
    assert np.abs(solve(-7.5 * f) + 7.5 * u).max() <= 1e-7 * size
    assert np.abs(solve(2 * f - 3 * g) - (2 * u - 3 * v)).max() <= 1e-7 * size


def test_reciprocity_and_work(solved):
    # E. Betti 1872: the work of each load on the other's displacement is the same
    system, f, g, u, v, _ = solved
    assert (f * v).sum() == pytest.approx((g * u).sum(), rel=1e-7)
    # B. P. E. Clapeyron: the stored energy is half the work of the load
    assert 0.5 * (u * system.apply(u)).sum() == pytest.approx(0.5 * (f * u).sum(), rel=1e-8)


def test_a_quarter_turn_of_the_grid_changes_nothing():
    shape = (4, 5, 6)
    rng = np.random.default_rng(7)
    mu = rng.uniform(1.0, 50.0, shape)
    fixed = np.zeros((3, *(n + 1 for n in shape)), dtype=bool)
    fixed[..., 0] = True
    b = rng.standard_normal(fixed.shape)

    def turned(a):  # about z: x -> y, y -> -x; arrays [..., k, j, i]
        return np.ascontiguousarray(np.flip(np.swapaxes(a, -1, -2), axis=-1))

    def turned_field(a):
        t = turned(a)
        return np.stack([-t[1], t[0], t[2]])

    here = LinearSystem(1.5 * mu, mu, (0.8, 1.1, 1.0), fixed).solve(b, tol=1e-11).u
    there = LinearSystem(1.5 * turned(mu), turned(mu), (1.1, 0.8, 1.0), turned(fixed))
    again = there.solve(turned_field(b), tol=1e-11).u
    assert np.abs(again - turned_field(here)).max() <= 1e-8 * np.abs(here).max()
