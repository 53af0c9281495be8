"""Orientations compared on bodies whose figures are known by hand."""

import numpy as np
import pytest
from print_twins import HARD

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing.orient import compare_orientations
from voxelmat.printing.profile import load_profile

STANDARD = load_profile("invented-standard")
COARSE = load_profile("invented-coarse")


def part(labels, spacing=(0.5, 0.5, 0.5), distance=None, name="table"):
    return Part(
        grid=VoxelGrid(shape=labels.shape, spacing=spacing),
        resins=(HARD,),
        palette=(EMPTY, Blend.pure("hard")),
        labels=labels.astype(np.uint16),
        distance=distance,
        name=name,
    )


def stool():
    """A plate of 6 x 4 x 1 mm on one leg of 2 x 4 x 3 mm at its end."""
    labels = np.zeros((12, 8, 8))
    labels[:, :, 6:] = 1
    labels[:4] = 1
    return part(labels)


def by_turns(found):
    return {c.orientation: c for c in found.choices}


def test_figures_of_a_stool():
    found = by_turns(compare_orientations(stool(), STANDARD, turns=True))
    assert len(found) == 12
    standing, over = found[()], found[("x 180",)]
    assert standing.size_mm == (6.0, 4.0, 4.0)
    assert standing.contact_mm2 == 4.0 * 4.0  # the plate's underside beside the leg
    assert over.contact_mm2 == 0.0
    # The space below the plate is full of support: 4 x 4 x 3 mm, less the sites at its rim.
    assert standing.support_mm3 == pytest.approx(4 * 4 * 3, rel=0.05)
    assert over.support_mm3 == pytest.approx(0.0, abs=1e-9)
    assert standing.layers == over.layers == 134
    assert standing.time_s == pytest.approx(found[("z 90",)].time_s)
    assert found[("x 90",)].layers == 134
    assert found[("y 90",)].size_mm == (4.0, 4.0, 6.0)


def test_shares_of_a_box_and_of_a_ball():
    box = part(np.ones((40, 24, 16)), spacing=(0.25, 0.25, 0.25), name="box")
    choice = by_turns(compare_orientations(box, STANDARD))[()]
    x, y, z = 10.0, 6.0, 4.0
    surface = 2 * (x * y + y * z + z * x)
    assert choice.along == pytest.approx(2 * x * y / surface, abs=0.03)
    assert choice.upright == pytest.approx(2 * (x + y) * z / surface, abs=0.06)
    grid = VoxelGrid(shape=(24, 24, 24), spacing=(0.5, 0.5, 0.5))
    a, b, c = np.ix_(*grid.centres())
    depth = np.sqrt((a - 6) ** 2 + (b - 6) ** 2 + (c - 6) ** 2) - 5.0
    steps = np.clip(np.rint(depth * 32), -127, 127).astype(np.int8)
    ball = part(depth < 0.5, distance=steps, name="ball")
    choice = compare_orientations(ball, STANDARD).choices[0]
    # A zone of a sphere has the area of its height (Archimedes): caps 1 - cos 20, belt sin 20.
    assert choice.along == pytest.approx(1 - np.cos(np.radians(20)), abs=0.02)
    assert choice.upright == pytest.approx(np.sin(np.radians(20)), abs=0.03)


def test_ranking_follows_the_order_asked_for():
    by_support = compare_orientations(stool(), STANDARD, order="support")
    amounts = [c.support_mm3 for c in by_support.choices]
    assert amounts == sorted(amounts)
    by_height = compare_orientations(stool(), STANDARD, order="height")
    assert [c.size_mm[2] for c in by_height.choices] == [4.0] * 4 + [6.0] * 2
    text = str(by_height)
    assert "as it is" in text
    assert "contact, mm2" in text.splitlines()[1]
    assert "<table>" in by_height._repr_html_()
    with pytest.raises(InputError, match="ranked by"):
        compare_orientations(stool(), STANDARD, order="beauty")


def test_what_does_not_fit_is_listed_and_machines_add_their_own_support():
    tall = part(np.ones((2, 2, 7)), spacing=(10.0, 10.0, 10.0), name="mast")
    found = compare_orientations(tall, COARSE)
    assert {t for t, _ in found.refused} == {(), ("x 180",)}
    assert all(c.support_mm3 is None for c in found.choices)
    assert "has room for" in str(found)
    huge = part(np.ones((2, 2, 2)), spacing=(100.0, 100.0, 100.0), name="huge")
    with pytest.raises(InputError, match="in no orientation"):
        compare_orientations(huge, COARSE)
