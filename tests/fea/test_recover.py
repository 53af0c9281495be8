"""Recovered stress: exact where it is linear, never across an interface, known fields at points."""

import json

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.fea.recover import QUANTITIES, node_values, to_nodes, voxel_values
from voxelmat.fea.sample import probe, sample_line, sample_plane, sample_points
from voxelmat.fea.static import solve
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion

EVERYWHERE = Box(name="all", low=(-99, -99, -99), high=(99, 99, 99))


def linear(shape, shift=0.0):
    i, j, k = np.indices(shape) + shift
    return np.stack([1 + 2.0 * i - 3.0 * j + 0.5 * k, 4.0 * k - i + 0.0 * j], axis=-1)


@settings(deadline=None, max_examples=25)
@given(st.integers(0, 10_000))
def test_linear_fields_are_exact_up_to_the_surface(seed):
    rng = np.random.default_rng(seed)
    blocks = rng.random((3, 2, 3)) < 0.7
    mask = blocks.repeat(2, 0).repeat(2, 1).repeat(2, 2)  # no member of one voxel
    field = linear(mask.shape)
    field[~mask] = rng.standard_normal((int((~mask).sum()), 2)) * 1e6  # another material
    found = to_nodes(field, mask)
    exact = linear(found.shape[:3], -0.5)  # a corner lies half a voxel before a centre
    touched = np.zeros(found.shape[:3], dtype=bool)
    for c in range(8):
        at = tuple(slice(c >> a & 1, (c >> a & 1) + mask.shape[a]) for a in range(3))
        touched[at] |= mask
    np.testing.assert_array_equal(np.isfinite(found[..., 0]), touched)
    np.testing.assert_allclose(found[touched], exact[touched], atol=1e-9)


def test_means_stay_between_the_centres():
    rng = np.random.default_rng(0)
    field = rng.random((4, 3, 2, 1))
    found = to_nodes(field, np.ones((4, 3, 2), bool), extrapolate=False)
    assert field.min() <= found.min()
    assert found.max() <= field.max()
    assert found[2, 1, 1, 0] == pytest.approx(field[1:3, 0:2].mean())


def series(grid, resin):
    labels = np.ones((3, 3, 6), np.uint16)
    labels[:, :, 3:] = 2
    soft, hard = resin("soft", 2.0, 0.0), resin("hard", 2000.0, 0.0)
    palette = (EMPTY, Blend.pure("soft"), Blend.pure("hard"))
    part = Part(grid=grid(3, 3, 6), resins=(soft, hard), palette=palette, labels=labels)
    case = LoadCase(
        name="pull",
        supports=(Support(region=FaceRegion(name="low", side="z-")),),
        loads=(Force(region=FaceRegion(name="top", side="z+"), vector=(0, 0, 0.9)),),
    )
    return solve(part, case, tol=1e-11)


def test_no_value_crosses_an_interface(grid, resin):
    """Strain jumps 1000-fold at the bond of a bar in series; both sides keep their own."""
    result = series(grid, resin)
    for label, strain in ((1, 0.05), (2, 5e-5)):
        nodal = node_values(result, "strain", label)[..., 2]
        there = np.isfinite(nodal)
        assert there[:, :, 3].all()
        np.testing.assert_allclose(nodal[there], strain, rtol=1e-4)
        stretch = node_values(result, "largest principal stretch", label)
        np.testing.assert_allclose(stretch[there], 1 + strain, rtol=1e-5)
    below, above = (
        sample_points(result, [(1.5, 1.5, z)], ["strain"]).values["strain"][0, 2]
        for z in (2.999, 3.001)
    )
    assert (below, above) == pytest.approx((0.05, 5e-5), rel=1e-4)


def test_quantities_of_a_pull(grid, resin):
    result = series(grid, resin)
    for name, value in (
        ("von Mises stress", 0.1),
        ("strain energy density", 0.5 * 0.1 * 0.05),
    ):
        field = voxel_values(result, name)
        np.testing.assert_allclose(field[:, :, :3], value, rtol=1e-4)
    np.testing.assert_allclose(voxel_values(result, "principal stress")[..., 0], 0.1, rtol=1e-4)
    with pytest.raises(InputError, match="von Mises"):
        voxel_values(result, "von mises")


def bent(grid, resin, layers):
    """A strip bent by turning both ends: sigma_xx = E z / R (statics), nu 0."""
    h = 2.0 / layers
    part = Part.uniform(grid(6, 1, layers, spacing=(1.0, 1.0, h)), resin(E=100.0, nu=0.0))
    supports = [Support(region=EVERYWHERE, displacement=(None, 0.0, None))]
    for k in range(layers + 1):
        z = k * h
        for x, turn in ((0.0, -0.5), (6.0, 0.5)):
            at = Box(name=f"{x} {z}", low=(x - 0.1, -1, z - 0.1 * h),
                     high=(x + 0.1, 2, z + 0.1 * h))  # fmt: skip
            supports.append(Support(region=at, displacement=(turn * 0.06 * (z - 1), None, None)))
    foot = Box(name="foot", low=(-0.1, -1, -0.1 * h), high=(0.1, 2, 0.1 * h))
    supports.append(Support(region=foot, displacement=(None, None, 0.0)))
    return solve(part, LoadCase(name="bend", supports=tuple(supports)), tol=1e-11)


@pytest.mark.parametrize("layers", [2, 3])
def test_bending_stress_at_the_surface(grid, resin, layers):
    """Centres miss the surface by half a voxel; extrapolation reaches it exactly."""
    result = bent(grid, resin, layers)
    nodal = node_values(result, "stress", 1)[2:5, :, :, 0]
    exact = np.linspace(-1.0, 1.0, layers + 1) * 100.0 * 0.06 / 6
    np.testing.assert_allclose(nodal, np.broadcast_to(exact, nodal.shape), rtol=1e-5, atol=1e-5)
    deep = node_values(result, "stress", 1, extrapolate=False)[3, 0, -1, 0]
    assert deep == pytest.approx(exact[-1] * (1 - 1 / layers), rel=1e-5)
    assert probe(result, (3.3, 0.5, 2.0))["stress xx, MPa"] == pytest.approx(exact[-1], rel=1e-4)


def test_lines_and_planes(grid, resin):
    result = bent(grid, resin, 4)
    line = sample_line(result, (3.0, 0.5, -0.5), (3.0, 0.5, 2.5), 13, ["stress", "displacement"])
    inside = line.label > 0
    np.testing.assert_array_equal(inside, np.abs(line.points[:, 2] - 1) < 1 + 1e-9)
    assert np.isnan(line.values["stress"][~inside]).all()
    np.testing.assert_allclose(
        line.values["stress"][inside, 0], line.points[inside, 2] - 1.0, atol=1e-4
    )
    np.testing.assert_allclose(line.distance, np.linspace(0, 3, 13))
    plain = json.loads(json.dumps(line.as_dict(), allow_nan=False))
    assert plain["stress xx, MPa"][0] is None
    assert plain["material"][0] == "empty"
    assert set(plain) >= {"points_mm", "distance_mm", "displacement x, mm", "stress yz, MPa"}
    plane = sample_plane(result, (2.0, 0.2, 0.0), (2.0, 0, 0), (0, 0, 2.0), (3, 5), ["stress"])
    assert plane.shape == (5, 3)
    xx = plane.values["stress"][:, 0].reshape(plane.shape)
    np.testing.assert_allclose(xx, np.linspace(-1, 1, 5)[:, None] * np.ones(3), atol=1e-4)


def test_samples_of_displacement_agree_with_the_result(grid, resin):
    result = bent(grid, resin, 3)
    point = (2.2, 0.7, 1.3)
    found = probe(result, point)
    moved = [found[f"displacement {a}, mm"] for a in "xyz"]
    np.testing.assert_allclose(moved, result.displacement_at(point), rtol=1e-12)
    assert found["material"] == "rigid-example"


def test_bad_questions(grid, resin):
    result = series(grid, resin)
    for ask in (
        lambda: probe(result, (9.0, 1.0, 1.0)),
        lambda: sample_points(result, [(1.0, 2.0)]),
        lambda: sample_points(result, [(1.0, 2.0, np.nan)]),
        lambda: sample_points(result, [(1.0, 1.0, 1.0)], ["heat"]),
        lambda: sample_line(result, (0, 0, 0), (1, 1, 1), 1),
        lambda: sample_plane(result, (0, 0, 0), (1, 0, 0), (2, 0, 0)),
        lambda: node_values(result, "stress", 7),
    ):
        with pytest.raises(InputError):
            ask()


def test_a_quarter_turn_turns_the_stress(grid, resin):
    rng = np.random.default_rng(5)
    labels = rng.integers(1, 3, (4, 3, 5)).astype(np.uint16)
    soft, hard = resin("soft", 20.0, 0.4), resin("hard", 2000.0, 0.3)
    palette = (EMPTY, Blend.pure("soft"), Blend.pure("hard"))
    found = []
    for turn in (False, True):
        now = np.transpose(labels, (2, 0, 1)) if turn else labels
        part = Part(grid=grid(*now.shape), resins=(soft, hard), palette=palette, labels=now)
        low, top = ("x-", "x+") if turn else ("z-", "z+")
        case = LoadCase(
            name="pull",
            supports=(Support(region=FaceRegion(name="low", side=low)),),
            loads=(
                Force(
                    region=FaceRegion(name="top", side=top),
                    vector=(2.0, 1.0, 0.5) if turn else (1.0, 0.5, 2.0),
                ),
            ),
        )
        point = (3.3, 1.4, 2.2) if turn else (1.4, 2.2, 3.3)
        found.append(sample_points(solve(part, case, tol=1e-11), [point], tuple(QUANTITIES)))
    for name, values in found[0].values.items():
        if QUANTITIES[name].components[:1] != ("xx",):
            np.testing.assert_allclose(values, found[1].values[name], rtol=1e-3, atol=1e-6)
    a, b = (f.values["stress"][0] for f in found)
    np.testing.assert_allclose(a, b[[1, 2, 0, 5, 3, 4]], rtol=1e-3, atol=1e-6)
