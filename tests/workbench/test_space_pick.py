"""Picking: the place under a pixel against a plain ray march, on previews and deformed parts."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.workbench import shown as shown_module
from voxelmat.workbench.eye import Eye
from voxelmat.workbench.look import Look
from voxelmat.workbench.shown import in_materials, of_part
from voxelmat.workbench.shownresult import of_result
from voxelmat.workbench.voxfaces import coarser


def march(part, stays, start, direction, step=0.002):
    """The slow twin: small steps until a voxel is met; the place and the voxel."""
    grid = part.grid
    length = 4 * np.linalg.norm(np.array(grid.upper) - np.array(grid.origin))
    for t in np.arange(0.0, length, step):
        place = start + t * direction
        cell = np.floor((place - np.array(grid.origin)) / np.array(grid.spacing)).astype(int)
        if ((cell >= 0) & (cell < grid.shape)).all() and stays[tuple(cell)]:
            return place, cell
    return None


def random_part(made_up, seed):
    rng = np.random.default_rng(seed)
    shape = tuple(rng.integers(2, 6, 3))
    soft, hard = made_up.grip(6.0).resins[2], made_up.grip(6.0).resins[1]
    return Part(
        grid=VoxelGrid(shape=shape, spacing=(1.0, 0.7, 1.3), origin=(2.0, -1.0, 0.5)),
        resins=(soft, hard),
        palette=(EMPTY, Blend.pure(soft.name), Blend.pure(hard.name)),
        labels=rng.choice([0, 1, 2], shape, p=[0.45, 0.35, 0.2]).astype(np.uint16),
    ), rng


@given(seed=st.integers(0, 10_000))
@settings(deadline=None, max_examples=25)
def test_a_pick_is_what_a_plain_march_meets(made_up, seed):
    part, rng = random_part(made_up, seed)
    hard = part.resins[1].name
    look = Look(
        axis="xyz"[rng.integers(3)],
        share=float(rng.uniform(0, 1)),
        above=bool(rng.integers(2)),
        hidden=frozenset([hard] if seed % 2 else []),
    )
    # the slow twin of what the look leaves
    stays = part.labels > 0
    if seed % 2:
        stays &= part.labels != 2
    a = "xyz".index(look.axis)
    number = np.arange(part.grid.shape[a])
    first = int(look.share * len(number) + 1e-6)
    kept = number < max(first, 1) if look.above else number >= min(first, len(number) - 1)
    stays &= kept.reshape([-1 if b == a else 1 for b in range(3)])
    solid = in_materials(part)
    surface = solid.surface(look)
    eye = Eye(azimuth=float(rng.uniform(0, 360)), elevation=float(rng.uniform(-80, 80)))
    axes = eye.axes()
    middle = 0.5 * (np.array(part.grid.origin) + np.array(part.grid.upper))
    span = np.linalg.norm(np.array(part.grid.upper) - np.array(part.grid.origin))
    for _ in range(3):
        right, up = axes[:2] @ middle + rng.uniform(-0.3, 0.3, 2) * span
        hit = solid.pick(surface, axes, right, up, look)
        start = right * axes[0] + up * axes[1] + (axes[2] @ middle + span) * axes[2]
        met = march(part, stays, start, -axes[2])
        if met is None:
            # only a ray that grazes an edge may tell the two apart
            assert hit is None or not _inside(part, stays, np.array(hit.place_mm) - 0.01 * axes[2])
            continue
        place, cell = met
        assert hit is not None
        if tuple(cell) == hit.voxel:
            assert hit.place_mm == pytest.approx(tuple(place), abs=0.01)
        else:  # an edge: both places are next to one another
            assert np.linalg.norm(np.array(hit.place_mm) - place) < 0.05


def _inside(part, stays, place):
    cell = np.floor((place - np.array(part.grid.origin)) / np.array(part.grid.spacing)).astype(int)
    return bool(((cell >= 0) & (cell < part.grid.shape)).all() and stays[tuple(cell)])


def test_a_preview_is_picked_on_the_true_voxels(made_up, monkeypatch):
    part = made_up.grip(2.0)
    monkeypatch.setattr(shown_module, "coarser", lambda p: coarser(p, largest=600))
    solid = of_part(part).solid
    assert solid.step == 3
    look = Look(axis="x", share=0.2)
    axes = Eye(azimuth=-90.0, elevation=89.0).axes()  # from above
    top = np.array([40.0, 0.0, 0.0])
    hit = solid.pick(solid.surface(look), axes, *(axes[:2] @ top), look)
    column = np.flatnonzero(part.solid[hit.voxel[0], hit.voxel[1]])
    assert hit.voxel[2] == column[-1]
    upper = part.grid.origin[2] + 2.0 * (column[-1] + 1)
    assert hit.place_mm[2] == pytest.approx(upper, abs=0.6)  # a quarter of a voxel
    assert hit.place_mm[0] == pytest.approx(40.0, abs=0.3)


def test_a_deformed_part_gives_the_place_before_it_deforms(made_up):
    part = made_up.grip()
    result = made_up.made_up_result(part, made_up.turning_case())
    shown = of_result(result, "displacement", 30.0)
    solid, look = shown.solid, Look()
    surface = solid.surface(look)
    axes = Eye(azimuth=-90.0, elevation=89.0).axes()
    # the middle of a face on the upper side near the free end, and where it is drawn: half-way
    # between opposite corners, which both of its triangles hold
    faces = surface.quads.faces
    up = (faces.axis == 2) & (faces.side > 0)
    n = int(np.flatnonzero(up)[faces.centre[up][:, 0].argmax()])
    drawn = surface.quads.points[[4 * n, 4 * n + 2]].mean(axis=0).astype(float)
    assert abs(drawn[1] - faces.centre[n][1]) > 5.0  # 0.4 mm at the end, 30 times
    hit = solid.pick(surface, axes, *(axes[:2] @ drawn), look)
    assert hit.voxel == tuple(faces.voxel[n])
    assert hit.place_mm == pytest.approx(tuple(faces.centre[n]), abs=1e-3)
    assert hit.drawn_mm == pytest.approx(tuple(drawn), abs=1e-3)
    # a node's movement, magnified, is what `moved` adds
    node = np.array(part.grid.origin) + 3.0 * np.array([24, 6, 5])
    at = np.array([24, 6, 5])
    moved = solid.moved(node[None])[0] - node
    assert moved == pytest.approx(30.0 * result.displacement[tuple(at)])


def test_facts_of_a_place_name_material_and_fields_with_units(made_up):
    part = made_up.grip()
    shown = of_result(made_up.made_up_result(part, made_up.palm_case()))
    voxel = tuple(np.argwhere(part.labels == 4)[0])
    facts = shown.solid.material_at(voxel)
    assert facts["material"] == "5 % rigid-example + 95 % soft-example"
    assert facts["blend"] == {"rigid-example": 0.05, "soft-example": 0.95}
    values = shown.values_at(voxel)
    assert set(values) == {"displacement, mm", "von Mises stress, MPa"}
    words = shown.words_at(voxel)
    assert words[0].startswith("displacement ")
    assert words[0].endswith(" mm")


def test_broken_records_of_a_view_are_as_none():
    assert Look.of({"cut": {"axis": "w"}}) == Look()
    assert Look.of({"cut": {"share": "wide"}}) == Look()
    look = Look(axis="z", share=0.25, above=True, hidden=frozenset(["a"]))
    assert Look.of(look.kept()) == look
    eye = Eye(azimuth=10.0, elevation=20.0, zoom=2.0, aside=(1.0, 2.0, 3.0))
    assert Eye.of(eye.kept()) == eye
    assert Eye.of({"azimuth_deg": 3}) == Eye()
    with pytest.raises(InputError, match="'w'"):
        Look(axis="w")
    with pytest.raises(InputError, match="'gone'"):
        Look().seen("a", "gone")


def test_the_other_side_of_a_cut():
    look = Look(axis="x", share=0.3).turned_over()
    assert (look.share, look.above) == (0.3, True)
    none = Look().turned_over()
    assert not none.cuts
    assert none.above
    assert none.turned_over() == Look()
