"""Material rules: gradients along an axis and away from a body, in order, with one palette."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.io.design import parse_design
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.workflow.layout import apply_layout, distance_outside, mixed

RESIN = Material(
    name="hard",
    kind="rigid",
    E=Constant(value=1000.0),
    nu=Constant(value=0.3),
    density=Constant(value=1.1e-9),
)


def bar(**change):
    """12 voxels along x: a rod of steel in the first two, the rest 'pad' of resin."""
    grid = VoxelGrid(shape=(12, 2, 2), spacing=(0.5, 1.0, 1.0))
    rod = np.zeros(grid.shape, bool)
    rod[:2] = True
    given_ = {
        "grid": grid,
        "resins": (
            RESIN,
            RESIN.replace(name="soft"),
            RESIN.replace(name="steel", kind="bought-in"),
        ),
        "palette": (EMPTY, Blend.pure("hard"), Blend.pure("steel")),
        "labels": np.where(rod, 2, 1),
        "bodies": {"pad": ~rod, "rod": rod},
    }
    return Part(**{**given_, **change})


def laid(*rules, part=None, region=()):
    data = {
        "format": 1,
        "name": "bar",
        "grid": {"spacing_mm": [0.5, 1, 1]},
        "body": [
            {"name": "pad", "mesh": "a.stl", "unit": "mm", "resin": "hard"},
            {"name": "rod", "mesh": "a.stl", "unit": "mm", "bought_in": {"name": "steel"}},
        ],
        "region": list(region),
        "layout": list(rules),
    }
    return apply_layout(parse_design(data), part or bar())


def soft_share(part):
    share = np.array([b.fraction("soft") for b in part.palette])
    return share[part.labels]


ALONG = {
    "region": "pad", "kind": "axis gradient", "axis": "x", "range_mm": [1, 6],
    "from": {"hard": 1}, "to": {"soft": 1}, "levels": 11,
}  # fmt: skip


def test_axis_gradient():
    part = laid(ALONG)
    x = part.grid.centres()[0]
    expected = np.rint(np.clip((x - 1) / 5, 0, 1) * 10) / 10
    np.testing.assert_allclose(soft_share(part)[2:, 0, 0], expected[2:], atol=1e-12)
    turned = laid({**ALONG, "range_mm": [6, 1]})
    np.testing.assert_allclose(soft_share(turned)[2:, 0, 0], 1 - expected[2:], atol=1e-12)


def test_bought_in_bodies_keep_their_material():
    every = {"name": "all", "kind": "half-space", "point_mm": [-9, 0, 0], "normal": [1, 0, 0]}
    part = laid({**ALONG, "region": "all"}, region=[every])
    rod = part.labels[part.bodies["rod"]]
    assert {part.palette[int(v)] for v in rod} == {Blend.pure("steel")}
    with pytest.raises(InputError, match="no printed voxel") as caught:
        laid({**ALONG, "region": "rod"})
    assert caught.value.key == "layout[0]"


def test_distance_gradient():
    part = laid({
        "region": "pad", "kind": "distance gradient", "from_region": "rod", "range_mm": [0, 5],
        "from": {"hard": 1}, "to": {"soft": 1}, "levels": 101})  # fmt: skip
    depth = 0.25 + 0.5 * np.arange(10)  # mm from the rod's end to the voxel's centre
    np.testing.assert_allclose(soft_share(part)[2:, 0, 0], depth / 5, atol=0.0051)


def test_later_rules_win_and_blends_are_shared():
    last = {"region": "tip", "kind": "blend", "blend": {"soft": 2, "hard": 2}}
    tip = {"name": "tip", "kind": "box", "low_mm": [5, 0, 0], "high_mm": [7, 9, 9]}
    part = laid(ALONG, last, region=[tip])
    assert (soft_share(part)[10:] == 0.5).all()
    assert len(set(part.palette)) == len(part.palette)
    assert set(np.unique(part.labels)) | {0} == set(range(len(part.palette)))
    assert sum(b == Blend.of({"soft": 1, "hard": 1}) for b in part.palette) == 1


def test_thin_edges_are_painted_too():
    """A voxel too thin to be solved is still printed, so a rule holds there too."""
    outline = np.full((12, 2, 2), 255)
    outline[:, 1, :] = 9
    part = laid(
        {"region": "pad", "kind": "blend", "blend": {"soft": 1}}, part=bar(occupancy=outline)
    )
    assert (soft_share(part)[2:] == 1.0).all()
    np.testing.assert_array_equal(part.occupancy, outline)


def test_no_rules_no_change():
    part = bar()
    assert laid(part=part) is part


def test_a_region_that_distance_counts_from_must_be_there():
    rule = {"region": "pad", "kind": "distance gradient", "from_region": "none",
            "range_mm": [0, 5], "from": {"hard": 1}, "to": {"soft": 1}}  # fmt: skip
    far = {"name": "none", "kind": "sphere", "centre_mm": [99, 0, 0], "radius_mm": 1}
    with pytest.raises(InputError, match="distance counts from"):
        laid(rule, region=[far])


@settings(deadline=None, max_examples=25)
@given(
    seed=st.integers(0, 2**32 - 1),
    shape=st.tuples(*[st.integers(1, 5)] * 3),
    spacing=st.tuples(*[st.floats(0.2, 2)] * 3),
)
def test_distance_against_a_loop(seed, shape, spacing):
    """Between the distance to the nearest voxel box and half a voxel's diagonal around it."""
    rng = np.random.default_rng(seed)
    held = rng.random(shape) < 0.2
    held[tuple(rng.integers(0, shape))] = True
    where = np.ones(shape, bool)
    found = distance_outside(held, spacing, where).reshape(shape)
    boxes = np.argwhere(held)
    h = np.array(spacing)
    slack = 0.5 * np.linalg.norm(h)
    for at in np.ndindex(shape):
        gap = np.maximum(np.abs(np.array(at) - boxes) - 0.5, 0) * h
        true = np.sqrt((gap**2).sum(axis=1)).min()
        if held[at]:
            assert found[at] == 0.0
        else:
            assert true - 1e-9 <= found[at] <= true + slack
            lone = (np.abs(np.array(at) - boxes) > 0).sum(axis=1)
            if len(boxes) == 1 and lone[0] == 1:
                assert found[at] == pytest.approx(true)


@settings(deadline=None, max_examples=25)
@given(share=st.floats(0, 1), a=st.floats(0.01, 1), b=st.floats(0.01, 1), c=st.floats(0.01, 1))
def test_mixing_is_linear_in_every_resin(share, a, b, c):
    first, second = Blend.of({"x": a, "y": b}), Blend.of({"y": b, "z": c})
    blend = mixed(first, second, share)
    for name in "xyz":
        expected = (1 - share) * first.fraction(name) + share * second.fraction(name)
        assert blend.fraction(name) == pytest.approx(expected, abs=1e-12)
