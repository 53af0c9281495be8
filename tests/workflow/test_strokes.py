"""Painted rules: brushes against plain loops over voxels, fills, replacements, thinned paths."""

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import InputError
from voxelmat.io.design import load_design
from voxelmat.model.grid import VoxelGrid
from voxelmat.workflow.build import build
from voxelmat.workflow.strokes import stroked, thinned_path

GRID = VoxelGrid(shape=(9, 7, 5), spacing=(1.0, 0.5, 2.0), origin=(-2.0, 1.0, 0.0))
EVERYWHERE = np.ones(GRID.shape, dtype=bool)
POINT = st.tuples(st.floats(-2, 7), st.floats(1, 4.5), st.floats(0, 10))


def _covered(point, path, stroke):
    """One voxel, sampled finely along the path."""
    for a, b in itertools.pairwise(path):
        for t in np.linspace(0, 1, 101):
            gap = np.abs(point - (a + t * (b - a)))
            if stroke["brush"] == "sphere" and np.linalg.norm(gap) <= stroke["radius_mm"]:
                return True
            if stroke["brush"] == "disc" and (
                np.hypot(gap[0], gap[2]) <= stroke["radius_mm"]
                and gap[1] <= 0.5 * stroke["depth_mm"]
            ):
                return True
            if stroke["brush"] == "box" and (gap <= 0.5 * np.array(stroke["size_mm"])).all():
                return True
    return False


@settings(max_examples=8, deadline=None)
@given(st.lists(POINT, min_size=1, max_size=4), st.sampled_from(["sphere", "disc", "box"]))
def test_brushes_cover_what_a_loop_finds(path, brush):
    sizes = {
        "sphere": {"radius_mm": 1.3},
        "disc": {"radius_mm": 1.7, "axis": "y", "depth_mm": 0.8},
        "box": {"size_mm": [1.5, 1.1, 3.0]},
    }[brush]
    stroke = {"brush": brush, "path_mm": [list(p) for p in path], **sizes}
    points = np.array(path if len(path) > 1 else path * 2, dtype=float)
    centres = np.stack(np.meshgrid(*GRID.centres(), indexing="ij"), axis=-1).reshape(-1, 3)
    expected = np.array([_covered(c, points, stroke) for c in centres]).reshape(GRID.shape)
    try:
        found, share = stroked(GRID, stroke, EVERYWHERE)
    except InputError:
        assert not expected.any()
        return
    if not expected.any():  # smaller than a voxel: those that the path's points lie in
        assert found.sum() <= len(path)
        return
    assert (found & ~expected).sum() <= 2  # the loop's samples lie 1/100 of a segment apart
    assert not (expected & ~found).any() or brush != "sphere"
    assert share.min() >= 0
    assert share.max() <= 1


def _with(design, text):
    design.write_text(design.read_text() + text)
    return build(design).part


def _blend_at(part, point):
    return str(part.palette[part.labels[part.grid.index_of(point)]])


def test_a_stroke_and_a_gradient_along_it(design):
    part = _with(
        design,
        """
[[layout]]
kind = "stroke"
brush = "sphere"
radius_mm = 1.6
path_mm = [[1.0, 4.0, 4.0], [11.0, 4.0, 4.0]]
from = { measured-soft = 1.0 }
to = { measured-hard = 1.0 }
levels = 11
""",
    )
    assert _blend_at(part, (0.6, 4.2, 4.2)) == "measured-soft"
    assert _blend_at(part, (11.4, 4.2, 4.2)) == "measured-hard"
    middle = part.palette[part.labels[part.grid.index_of((6.0, 4.2, 4.2))]]
    assert middle.fraction("measured-hard") == pytest.approx(0.55, abs=0.06)
    assert _blend_at(part, (6.0, 7.5, 4.2)) == "25 % measured-hard + 75 % measured-soft"


def test_a_fill_stays_in_what_hangs_together(design):
    part = _with(
        design,
        """
[[layout]]
kind = "stroke"
brush = "box"
size_mm = [1.0, 20.0, 20.0]
path_mm = [[6.5, 4.0, 4.0]]
blend = { measured-hard = 1.0 }

[[layout]]
kind = "fill"
at_mm = [2.0, 4.2, 4.2]
blend = { measured-soft = 1.0 }

[[layout]]
kind = "fill"
at_mm = [10.0, 4.2, 5.5]
axis = "z"
blend = { measured-soft = 1.0 }
""",
    )
    assert _blend_at(part, (2.0, 4.2, 4.2)) == "measured-soft"
    assert _blend_at(part, (10.0, 4.2, 4.2)) == "25 % measured-hard + 75 % measured-soft"
    assert _blend_at(part, (10.0, 1.2, 5.5)) == "measured-soft"


def test_replacing_a_blend_takes_all_of_it_in_a_region(design):
    text = """
[[layout]]
kind = "replace"
old = { measured-soft = 3, measured-hard = 1 }
blend = { measured-soft = 1.0 }
"""
    part = _with(design, text)
    assert part.volumes()["measured-soft"] == pytest.approx(12 * 8 * 4, rel=1e-6)
    with pytest.raises(InputError, match="No voxel holds"):
        _with(design, text)  # the second time there is none left


@pytest.mark.parametrize(
    ("rule", "message"),
    [
        ('brush = "sphere"\npath_mm = [[0, 0, 0]]\nblend = { measured-soft = 1 }', "radius_mm"),
        ('brush = "box"\nsize_mm = [1, 1, 1]\npath_mm = [[0, 0, 0]]', "a blend, or two"),
        (
            'brush = "sphere"\nradius_mm = 1\npath_mm = [[90, 0, 0]]\n'
            "blend = { measured-soft = 1 }",
            "covered no voxel",
        ),
        ('brush = "sphere"\nradius_mm = 0\npath_mm = [[0, 0, 0]]', "radius_mm"),
    ],
)
def test_a_bad_stroke_is_named(design, rule, message):
    design.write_text(f'{design.read_text()}\n[[layout]]\nkind = "stroke"\n{rule}\n')
    with pytest.raises(InputError, match=message) as caught:
        build(load_design(design))
    assert "layout[0]" in str(caught.value)


def test_a_thinned_path_stays_close():
    angle = np.linspace(0, np.pi, 500)
    path = np.column_stack([10 * np.cos(angle), 10 * np.sin(angle), 0 * angle])
    thin = np.array(thinned_path(path, 0.05))
    assert 10 < len(thin) < 60
    t = np.linspace(0, 1, 50)[:, None]
    dense = np.concatenate([a + t * (b - a) for a, b in itertools.pairwise(thin)])
    assert np.abs(np.linalg.norm(dense, axis=1) - 10).max() < 0.06
    assert thinned_path([[1, 2, 3]], 1.0) == [[1.0, 2.0, 3.0]]
