"""Parts: what goes in comes out, digests follow content, amounts follow voxels."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.laws import LogMix, Voigt
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import SOLID_FROM, Part


def resin(name, E=1000.0, density=1.1e-9, kind="rigid"):
    return Material(
        name=name,
        kind=kind,
        E=Constant(value=E),
        nu=Constant(value=0.3),
        density=Constant(value=density),
    )


HARD, SOFT = resin("hard", 2000.0, 1.2e-9), resin("soft", 1.0, 1.0e-9, "elastomer")
PALETTE = (EMPTY, Blend.pure("hard"), Blend.pure("soft"), Blend.of({"hard": 1, "soft": 3}))


@st.composite
def parts(draw):
    shape = tuple(draw(st.lists(st.integers(1, 5), min_size=3, max_size=3)))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    labels = rng.integers(0, len(PALETTE), shape)
    distance = rng.integers(-127, 128, shape) if draw(st.booleans()) else None
    occupancy = rng.integers(0, 256, shape) * (labels > 0) if draw(st.booleans()) else None
    spacing = draw(st.tuples(*[st.floats(0.1, 2.0)] * 3))
    return Part(
        grid=VoxelGrid(shape=shape, spacing=spacing),
        resins=(HARD, SOFT),
        palette=PALETTE,
        labels=labels,
        distance=distance,
        occupancy=occupancy,
    )


@settings(deadline=None, max_examples=25)
@given(part=parts())
def test_replace_by_nothing_is_the_same_part(part):
    again = part.replace()
    assert again == part
    assert again.digest == part.digest
    assert hash(again) == hash(part)
    rebuilt = Part(**{f.name: getattr(part, f.name) for f in dataclasses.fields(part)})
    assert rebuilt == part
    for name in ("labels", "distance", "occupancy"):
        assert getattr(rebuilt, name) is getattr(part, name)  # read-only arrays are shared


@settings(deadline=None, max_examples=25)
@given(part=parts(), seed=st.integers(0, 1000))
def test_any_change_of_content_changes_the_digest(part, seed):
    rng = np.random.default_rng(seed)
    at = tuple(rng.integers(0, part.grid.shape))
    labels = np.array(part.labels)
    labels[at] = labels[at] % 3 + 1
    changed = [part.replace(labels=labels), part.replace(law=Voigt())]
    changed.append(part.replace(resins=(HARD, SOFT.replace(nu=Constant(value=0.4)))))
    changed.append(part.replace(palette=(*PALETTE, Blend.of({"hard": 1, "soft": 1}))))
    grid = part.grid
    changed.append(
        part.replace(grid=VoxelGrid(shape=grid.shape, spacing=grid.spacing, origin=(1.0, 0.0, 0.0)))
    )
    if part.distance is not None:
        changed.append(part.replace(distance=None))
        distance = np.array(part.distance)
        distance[at] += 1 if distance[at] < 127 else -1
        changed.append(part.replace(distance=distance))
    assert all(c != part for c in changed)
    assert len({c.digest for c in changed}) == len(changed)
    assert part.replace(name="another") == part


@settings(deadline=None, max_examples=25)
@given(part=parts())
def test_amounts_against_a_loop_over_voxels(part):
    volume = {"hard": 0.0, "soft": 0.0}
    for at in np.ndindex(part.grid.shape):
        fill = 1.0 if part.occupancy is None else part.occupancy[at] / 255
        for name, fraction in part.palette[part.labels[at]].fractions:
            volume[name] += fill * fraction * part.grid.voxel_volume
    for name, amount in volume.items():
        assert part.volumes().get(name, 0.0) == pytest.approx(amount, rel=1e-12, abs=1e-12)
    mass = volume["hard"] * 1.2e-9 + volume["soft"] * 1.0e-9
    assert part.mass == pytest.approx(mass, rel=1e-12, abs=1e-30)


@settings(deadline=None, max_examples=25)
@given(part=parts())
def test_feather_voxels_have_volume_but_are_not_solved(part):
    for at in np.ndindex(part.grid.shape):
        full = part.labels[at] > 0
        share = 1.0 if part.occupancy is None else part.occupancy[at] / 255
        counts = bool(full and (part.occupancy is None or part.occupancy[at] >= SOLID_FROM))
        assert part.solid[at] == counts
        assert part.fill[at] == pytest.approx(share if counts else 0.0, rel=1e-6)


@settings(deadline=None, max_examples=25)
@given(part=parts())
def test_arrays_are_x_fastest_read_only_and_independent(part):
    for array in (part.labels, part.distance, part.occupancy):
        if array is not None:
            assert array.flags.f_contiguous
            assert not array.flags.writeable
    source = np.array(part.labels)
    made = part.replace(labels=source)
    source[:] = 1
    assert made == part


def test_moduli_of_the_palette():
    part = Part.uniform(VoxelGrid(shape=(2, 2, 2), spacing=(1, 1, 1)), HARD)
    lam, mu = part.palette_lame()
    assert lam[0] == mu[0] == 0.0
    assert mu[1] == pytest.approx(2000 / 2.6)
    assert lam[1] == pytest.approx(2000 * 0.3 / (1.3 * 0.4))
    assert isinstance(part.law, LogMix)


def test_printed_and_bought_in():
    steel = resin("steel", 2e5, kind="bought-in")
    part = Part(
        grid=VoxelGrid(shape=(1, 1, 2), spacing=(1, 1, 1)),
        resins=(HARD, steel),
        palette=(EMPTY, Blend.pure("hard"), Blend.pure("steel")),
        labels=np.array([[[1, 2]]]),
    )
    assert part.printed_labels().tolist() == [False, True, False]
    assert "came without a signed distance" in part.outline
    assert part.replace(distance=np.zeros((1, 1, 2), int)).outline.startswith("true signed")


def block(**change):
    given_ = {
        "grid": VoxelGrid(shape=(2, 2, 2), spacing=(1, 1, 1)),
        "resins": (HARD, SOFT),
        "palette": PALETTE,
        "labels": np.ones((2, 2, 2), int),
    }
    return Part(**{**given_, **change})


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"labels": np.ones((2, 2, 3), int)}, "shape"),
        ({"labels": np.full((2, 2, 2), 4)}, "points past the palette"),
        ({"labels": np.full((2, 2, 2), -1)}, "must lie in"),
        ({"labels": np.full((2, 2, 2), 70000)}, "must lie in"),
        ({"labels": np.full((2, 2, 2), 1.0)}, "whole numbers"),
        ({"palette": PALETTE[1:]}, "Entry 0"),
        ({"palette": (*PALETTE, EMPTY)}, "Only entry 0"),
        ({"resins": (HARD,)}, "not among the part's resins"),
        ({"resins": (HARD, HARD, SOFT)}, "given once"),
        ({"occupancy": np.full((2, 2, 2), 256)}, "must lie in"),
        ({"labels": np.zeros((2, 2, 2), int), "occupancy": np.full((2, 2, 2), 9)}, "no label"),
        ({"distance": np.full((2, 2, 2), 0.5)}, "whole numbers"),
        ({"bodies": {"a": np.ones((1, 1, 1), bool)}}, "Body 'a'"),
    ],
)
def test_refused(change, said):
    with pytest.raises(InputError, match=said):
        block(**change)


def test_unknown_resin_and_table():
    with pytest.raises(InputError, match="no resin 'glass'"):
        block().resin("glass")
    html = block()._repr_html_()
    assert "hard" in html
    assert "mm" in html
