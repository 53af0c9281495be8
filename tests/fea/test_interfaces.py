"""Tractions between resins: closed forms, balance, clusters, and no strength out of thin air."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.fea.interfaces import interface_tractions
from voxelmat.fea.static import solve
from voxelmat.fea.worst_interfaces import worst_interfaces
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.interface import Bond
from voxelmat.model.loadcase import Force, LoadCase, Support, Temperature
from voxelmat.model.material import Constant
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion

EVERYWHERE = Box(name="all", low=(-99, -99, -99), high=(99, 99, 99))


def two(grid, resin, labels, *, E=(2.0, 2000.0), nu=(0.0, 0.0), **kw):
    soft, hard = resin("soft", E[0], nu[0], kind="elastomer"), resin("hard", E[1], nu[1])
    palette = (EMPTY, Blend.pure("soft"), Blend.pure("hard"))
    return Part(grid=grid(*labels.shape, **kw), resins=(soft, hard), palette=palette, labels=labels)


def layers(*counts, across=(3, 3)):
    column = np.repeat(np.resize([1, 2], len(counts)), counts).astype(np.uint16)
    return np.ascontiguousarray(np.broadcast_to(column, (*across, len(column))))


def bond(tensile=1.0, shear=2.0, **ends):
    return Bond(
        first="hard",
        second="soft",
        tensile=Constant(value=tensile, unit="MPa", **ends),
        shear=Constant(value=shear, unit="MPa"),
    )


def pulled(vector):
    return LoadCase(
        name="pull",
        supports=(Support(region=FaceRegion(name="low", side="z-")),),
        loads=(Force(region=FaceRegion(name="top", side="z+"), vector=vector),),
    )


def test_layers_in_series_carry_the_whole_pull(grid, resin):
    """F / A by statics, on both interfaces, any stiffness ratio."""
    part = two(grid, resin, layers(2, 3, 2))
    found = interface_tractions(solve(part, pulled((0, 0, 1.8)), tol=1e-11))
    assert len(found) == 18
    np.testing.assert_allclose(found.normal, 1.8 / 9, rtol=1e-7)
    np.testing.assert_allclose(found.shear, 0.0, atol=1e-8)
    np.testing.assert_allclose(found.jump, 0.0, atol=1e-6)
    np.testing.assert_allclose(found.force("hard", "soft"), 0.0, atol=1e-8)  # pulled both ways
    assert found.at_edge.sum() == 16


def test_layers_in_simple_shear(grid, resin):
    """tau = d / sum(t / G), statics and Hooke's law."""
    part = two(grid, resin, layers(2, 3), spacing=(0.7, 1.1, 0.5))
    d = 0.01
    case = LoadCase(
        name="slide",
        supports=(
            Support(region=EVERYWHERE, displacement=(None, 0.0, 0.0)),
            Support(region=FaceRegion(name="low", side="z-"), displacement=(0.0, None, None)),
            Support(region=FaceRegion(name="top", side="z+"), displacement=(d, None, None)),
        ),
    )
    found = interface_tractions(solve(part, case, tol=1e-11), [bond()])
    tau = d / (2 * 0.5 / 1.0 + 3 * 0.5 / 1000.0)
    np.testing.assert_allclose(found.shear, tau, rtol=1e-7)
    np.testing.assert_allclose(found.normal, 0.0, atol=1e-9)
    np.testing.assert_allclose(found.utilisation, tau / 2.0, rtol=1e-7)


def test_layers_pulled_along_the_interface_do_not_load_it(grid, resin):
    """Equal Poisson's ratios and equal stretch leave the bond of a laminate free (statics)."""
    part = two(grid, resin, layers(2, 2, across=(4, 3)), nu=(0.3, 0.3))
    case = LoadCase(
        name="stretch",
        supports=(
            Support(region=FaceRegion(name="a", side="x-"), displacement=(0.0, None, None)),
            Support(region=FaceRegion(name="b", side="x+"), displacement=(0.01, None, None)),
            Support(region=FaceRegion(name="c", side="y-"), displacement=(None, 0.0, None)),
            Support(region=FaceRegion(name="d", side="z-"), displacement=(None, None, 0.0)),
        ),
    )
    result = solve(part, case, tol=1e-12)
    found = interface_tractions(result)
    assert np.abs(found.traction).max() < 1e-6 * np.abs(result.stress).max()


@pytest.mark.parametrize("lower", ["soft", "hard"])
def test_compression_uses_no_strength_and_tension_does(grid, resin, lower):
    labels = layers(2, 2)
    part = two(grid, resin, labels if lower == "soft" else 3 - labels)
    for force, expected in ((-0.9, 0.0), (0.9, 0.1)):
        found = interface_tractions(solve(part, pulled((0, 0, force))), [bond()])
        np.testing.assert_allclose(found.normal, force / 9, rtol=1e-6)
        np.testing.assert_allclose(found.utilisation, expected, atol=1e-6)
        factor = worst_interfaces(found)[0].safety_factor
        assert factor == pytest.approx(10.0, rel=1e-4) if expected else factor > 1e5


def test_a_sloping_interface_without_its_steps(grid, resin):
    """A plane at 45 degrees under a pull s along x bears s / 2 both ways (Mohr's circle)."""
    n = 8
    i, _, k = np.indices((n, 2, n))
    part = two(grid, resin, np.where(i + k < n, 1, 2).astype(np.uint16), E=(100.0, 100.0))
    case = LoadCase(
        name="pull",
        supports=(
            Support(region=FaceRegion(name="a", side="x-"), displacement=(0.0, None, None)),
            Support(region=FaceRegion(name="b", side="x+"), displacement=(0.08, None, None)),
            Support(region=FaceRegion(name="c", side="y-"), displacement=(None, 0.0, None)),
            Support(region=FaceRegion(name="d", side="z-"), displacement=(None, None, 0.0)),
        ),
    )
    found = interface_tractions(solve(part, case, tol=1e-11))
    inside = (np.abs(found.centre[:, 0] - 4) < 2.5) & (np.abs(found.centre[:, 2] - 4) < 2.5)
    assert inside.sum() > 8
    np.testing.assert_allclose(found.normal[inside], 0.5, rtol=1e-6)
    np.testing.assert_allclose(found.shear[inside], 0.5, rtol=1e-6)
    np.testing.assert_allclose(found.area[inside], np.sqrt(0.5), rtol=1e-9)


def inclusion(grid, resin, cells):
    """Goodier's sphere of radius 1 in the octant [0, 2]^3, exact displacement outside."""
    h = 2.0 / cells
    x = (np.arange(cells) + 0.5) * h
    r = np.sqrt(sum(np.meshgrid(x**2, x**2, x**2, indexing="ij")))
    labels = np.where(r < 1.0, 2, 1).astype(np.uint16)
    part = two(grid, resin, labels, E=(1.0, 100.0), nu=(0.3, 0.3), spacing=(h, h, h))
    bulk, shear = part.palette_moduli()
    a = (3 * bulk[1] + 4 * shear[1]) / (3 * bulk[2] + 4 * shear[1])
    supports = [
        Support(
            region=FaceRegion(name=f"{axis}0", side=f"{axis}-"),
            displacement=tuple(0.0 if axis == b else None for b in "xyz"),
        )
        for axis in "xyz"
    ]
    nodes = np.arange(cells + 1) * h
    for axis in range(3):
        for p in nodes:
            for q in nodes:
                place = np.insert([p, q], axis, 2.0)
                low, high = place - 0.01 * h, place + 0.01 * h
                length = np.linalg.norm(place)
                u = place / length * (length + (a - 1) / length**2)
                supports.append(
                    Support(
                        region=Box(name=f"{axis} {p} {q}", low=tuple(low), high=tuple(high)),
                        displacement=tuple(float(v) for v in u),
                    )
                )
    return part, LoadCase(name="grow", supports=tuple(supports)), float(3 * bulk[2] * a), a


def test_a_stiff_sphere_in_a_stretched_block(grid, resin):
    """Goodier 1933 (B4: a = .016055): inside the stress is 3 K1 a each way, no shear."""
    part, case, exact, a = inclusion(grid, resin, 8)
    assert a == pytest.approx(0.016055, rel=1e-3)
    result = solve(part, case, tol=1e-9)
    found = interface_tractions(result, [bond()])
    mean = float((found.normal * found.area).sum() / found.area.sum())
    assert mean == pytest.approx(exact, rel=0.13)  # 6.5 to 12.5 % in strain at this grid
    assert float((found.shear * found.area).sum() / found.area.sum()) < 0.15 * exact
    assert found.area.sum() == pytest.approx(np.pi / 2, rel=0.05)
    spot = worst_interfaces(found, 1)[0]
    assert spot.stepped
    assert spot.mean_utilisation < spot.utilisation


@settings(deadline=None, max_examples=8)
@given(st.integers(0, 10_000))
def test_what_is_enclosed_is_in_balance(grid, resin, seed):
    """No net force on a closed body inside another, whatever its shape; F across a full cut."""
    rng = np.random.default_rng(seed)
    labels = np.ones((5, 5, 6), np.uint16)
    labels[1:4, 1:4, 1:4] = rng.integers(1, 3, (3, 3, 3))
    labels[2, 2, 2] = 2
    force = rng.standard_normal(3)
    result = solve(two(grid, resin, labels, nu=(0.45, 0.3)), pulled(tuple(force)), tol=1e-10)
    found = interface_tractions(result)
    assert np.abs(found.traction).max() > 1e-4
    np.testing.assert_allclose(found.force("hard", "soft"), 0.0, atol=1e-6)
    labels[:] = 1
    labels[:, :, 3:] = 2
    labels[rng.integers(0, 5), rng.integers(0, 5), 2] = 2
    result = solve(two(grid, resin, labels, nu=(0.45, 0.3)), pulled(tuple(force)), tol=1e-10)
    np.testing.assert_allclose(
        interface_tractions(result).force("soft", "hard"), force, rtol=1e-6, atol=1e-6
    )


def test_heat_between_rigid_planes(grid, resin):
    """Layers that may not grow press on each other: s = -dT sum(a t) / sum(t / E) (Hooke's law).
    Layers that may, do not, if they want the same."""
    for hold, second, exact in (
        (True, 5e-5, -10 * (2e-4 * 2 + 5e-5 * 3) / (2 / 2.0 + 3 / 2000.0)),
        (False, 2e-4, 0.0),
    ):
        part = two(grid, resin, layers(2, 3))
        grown = tuple(
            m.replace(expansion=Constant(value=a))
            for m, a in zip(part.resins, (2e-4, second), strict=True)
        )
        supports = [Support(region=FaceRegion(name="low", side="z-"), displacement=(None, None, 0))]
        if hold:
            supports.append(
                Support(region=FaceRegion(name="top", side="z+"), displacement=(None, None, 0))
            )
            supports.append(Support(region=EVERYWHERE, displacement=(0.0, 0.0, None)))
        for axis in "xy":
            move = tuple(0.0 if axis == b else None for b in "xyz")
            supports.append(
                Support(region=FaceRegion(name=axis, side=f"{axis}-"), displacement=move)
            )
        case = LoadCase(
            name="warm",
            supports=tuple(supports),
            loads=(Temperature(temperature=33.0, stress_free=23.0),),
        )
        result = solve(part.replace(resins=grown), case, tol=1e-12)
        found = interface_tractions(result)
        if exact:
            np.testing.assert_allclose(found.normal, exact, rtol=1e-6)
            force = result.reactions[next(n for n in result.reactions if "top" in n)][2]
            assert found.force("soft", "hard")[2] == pytest.approx(force, rel=1e-5)
        else:
            np.testing.assert_allclose(found.traction, 0.0, atol=1e-9)


def test_a_quarter_turn_changes_nothing(grid, resin):
    rng = np.random.default_rng(3)
    labels = rng.integers(1, 3, (4, 4, 4)).astype(np.uint16)
    first = interface_tractions(solve(two(grid, resin, labels), pulled((0.3, 0, 1.0)), tol=1e-11))
    turned = LoadCase(
        name="pull",
        supports=(Support(region=FaceRegion(name="low", side="x-")),),
        loads=(Force(region=FaceRegion(name="top", side="x+"), vector=(1.0, 0.3, 0)),),
    )
    again = np.transpose(labels, (2, 0, 1))  # z to x, x to y, y to z
    second = interface_tractions(solve(two(grid, resin, again), turned, tol=1e-11))
    for name in ("normal", "shear", "jump", "area"):
        a, b = np.sort(getattr(first, name)), np.sort(getattr(second, name))
        np.testing.assert_allclose(a, b, atol=1e-6)


def test_gradients_are_no_interface(grid, resin):
    fractions = np.linspace(0.0, 1.0, 6)
    palette = (EMPTY, *(Blend.of({"soft": 1 - f, "hard": f}) for f in fractions))
    labels = np.ascontiguousarray(np.broadcast_to(np.arange(1, 7, dtype=np.uint16), (2, 2, 6)))
    soft, hard = resin("soft", 2.0, 0.4, kind="elastomer"), resin("hard", 2000.0, 0.3)
    part = Part(grid=grid(2, 2, 6), resins=(soft, hard), palette=palette, labels=labels)
    assert len(interface_tractions(solve(part, pulled((0, 0, 1.0))))) == 0
    jumped = part.replace(labels=np.where(labels == 4, 5, np.where(labels == 3, 2, labels)))
    found = interface_tractions(solve(jumped, pulled((0, 0, 1.0))))
    assert len(found) == 4
    np.testing.assert_allclose(found.traction.sum(axis=0), (0, 0, 1.0), atol=1e-6)


def test_without_a_record_no_verdict_but_the_tractions(grid, resin):
    result = solve(two(grid, resin, layers(2, 2)), pulled((0, 0, 0.9)))
    found = interface_tractions(result)
    assert found.missing == (("soft", "hard"),)
    assert np.isnan(found.utilisation).all()
    spot = worst_interfaces(found)[0]
    assert np.isnan(spot.safety_factor)
    assert spot.normal == pytest.approx(0.1, rel=1e-5)
    strong = interface_tractions(result, [bond(low=0.5, high=4.0)])
    spot = worst_interfaces(strong)[0]
    assert strong.missing == ()
    assert (spot.utilisation_low, spot.utilisation, spot.utilisation_high) == pytest.approx(
        (0.025, 0.1, 0.2), rel=1e-4
    )
    assert spot.indicative


def test_soft_over_rigid_peels_where_it_is_pulled_off(grid, resin):
    """A soft strip lifted at one end opens its bond there: tension far above shear, at the edge."""
    labels = layers(2, 2, across=(12, 3))[:, :, ::-1].copy()
    part = two(grid, resin, labels, E=(2.0, 2000.0), nu=(0.45, 0.3))
    lift = Box(name="lifted end", low=(10.9, -1, 3.9), high=(13, 9, 5))
    case = LoadCase(
        name="peel",
        supports=(Support(region=FaceRegion(name="low", side="z-")),),
        loads=(Force(region=lift, vector=(0, 0, 0.3)),),
    )
    found = interface_tractions(solve(part, case), [bond(1.0, 1.0)])
    spots = worst_interfaces(found, 3)
    assert spots[0].place_mm[0] > 10
    assert spots[0].normal > 2 * spots[0].shear
    assert spots[0].at_edge
    places = np.array([s.place_mm for s in spots])
    gaps = np.linalg.norm(places[:, None] - places[None], axis=2)[np.triu_indices(len(spots), 1)]
    assert (gaps > 4.0 - 1e-9).all()
    assert spots[0].utilisation == pytest.approx(np.nanmax(found.utilisation))
