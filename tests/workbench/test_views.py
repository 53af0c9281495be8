"""Views in a notebook: right faces, right slices, right words, and a fallback without OpenGL."""

from __future__ import annotations

import io
import json
import subprocess
import sys
import threading
import types

import numpy as np
import pytest
import traitlets
from PIL import Image

from voxelmat.errors import InputError
from voxelmat.model.surface import carriers
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_stack
from voxelmat.workbench import glprobe, hook
from voxelmat.workbench import show as show_module
from voxelmat.workbench import shownresult as result_module
from voxelmat.workbench.glprobe import Probe, probe_gl
from voxelmat.workbench.shown import of_part, picture_of
from voxelmat.workbench.shownresult import of_result
from voxelmat.workbench.sliceview import SliceView
from voxelmat.workbench.voxfaces import coarser, cut_mask, quads_of
from voxelmat.workflow.colours import palette_rgb
from voxelmat.workflow.report_fields import magnification


@pytest.fixture
def blind(monkeypatch):
    """A machine without OpenGL."""
    no = Probe(works=False, reason="A test drawing with OpenGL failed: it was killed by signal 11.")
    monkeypatch.setattr(show_module, "probe_gl", lambda: no)


def pixels(png):
    return np.asarray(Image.open(io.BytesIO(png)).convert("RGB")).astype(int)


# ---------------------------------------------------------------------- faces
def test_quads_close_the_part_and_look_outwards(made_up):
    part = made_up.grip()
    quads = quads_of(part)
    corner = quads.points.reshape(-1, 4, 3).astype(float)
    area = np.cross(corner[:, 2] - corner[:, 0], corner[:, 3] - corner[:, 1]) / 2
    assert area.sum(axis=0) == pytest.approx(np.zeros(3), abs=1e-6)
    # the divergence theorem gives the volume of the voxels, with its sign
    volume = (area * corner.mean(axis=1)).sum() / 3
    assert volume == pytest.approx(carriers(part).sum() * part.grid.voxel_volume, rel=1e-6)


def test_quads_against_a_slow_twin(made_up):
    part = made_up.grip(6.0)
    full = carriers(part)
    solid = np.pad(full, 1)
    expected = set()
    for i, j, k in np.argwhere(full):
        for axis in range(3):
            for side in (-1, 1):
                beside = [i + 1, j + 1, k + 1]
                beside[axis] += side
                if not solid[tuple(beside)]:
                    centre = np.array(part.grid.origin) + (np.array([i, j, k]) + 0.5) * 6.0
                    centre[axis] += 3.0 * side
                    expected.add((i, j, k, *np.round(centre, 3)))
    quads = quads_of(part)
    middle = quads.points.reshape(-1, 4, 3).mean(axis=1)
    found = {(*v, *np.round(m, 3)) for v, m in zip(quads.voxel, middle.astype(float), strict=True)}
    assert found == expected


def test_corners_move_with_their_nodes(made_up):
    part = made_up.grip(6.0)
    result = made_up.made_up_result(part, made_up.turning_case())
    still, moved = quads_of(part), quads_of(part, move=result.displacement)
    assert (still.voxel == moved.voxel).all()
    shift = moved.points - still.points
    nodes = np.rint((still.points - np.array(part.grid.origin)) / 6.0).astype(int)
    assert shift == pytest.approx(result.displacement[tuple(nodes.T)], abs=1e-5)


@pytest.mark.parametrize(("axis", "share", "kept"), [(0, 0.0, 24), (0, 0.5, 12), (2, 0.99, 1)])
def test_cutting_keeps_the_upper_side(made_up, axis, share, kept):
    part = made_up.grip()
    mask = cut_mask(part, axis, share)
    along = mask.any(axis=tuple(a for a in range(3) if a != axis))
    assert along.sum() == kept
    assert along[-1]


def test_a_large_part_is_thinned_and_it_is_said(made_up):
    part = made_up.grip()
    small, step = coarser(part, largest=200)
    assert step == 3
    assert small.grid.shape == (8, 4, 4)
    assert small.grid.spacing == (9.0, 9.0, 9.0)
    assert (small.labels == part.labels[::3, ::3, ::3]).all()
    assert coarser(part)[1] == 1


def test_a_large_result_is_thinned_with_its_movement(made_up, monkeypatch):
    monkeypatch.setattr(result_module, "coarser", lambda part: coarser(part, largest=200))
    result = made_up.made_up_result(made_up.grip(), made_up.palm_case())
    shown = of_result(result)
    assert "one voxel in 3 is drawn" in shown.note
    assert "deformed" in shown.note
    quads, rgb = shown.surface("y", 0.0)
    assert len(quads) == len(rgb) > 20
    assert np.isfinite(quads.points).all()


# ---------------------------------------------------------------------- slices
def test_a_slice_has_the_colours_of_its_voxels_and_points_up(made_up):
    part = made_up.grip()
    shown = of_part(part)
    rgb = shown.fields[0].slice_rgb("y", 6)
    nx, _, nz = part.grid.shape
    assert rgb.shape == (nz, nx, 3)
    for i, k in ((5, 5), (20, 4), (3, 2)):
        label = part.labels[i, 6, k] if part.solid[i, 6, k] else 0
        assert (rgb[nz - 1 - k, i] == palette_rgb(part)[label]).all()


def test_fields_of_a_result_state_units_and_reach_both_ends(made_up):
    part = made_up.grip()
    result = made_up.made_up_result(part, made_up.palm_case())
    shown = of_result(result)
    assert [f.name for f in shown.fields] == [
        "displacement, mm",
        "von Mises stress, MPa",
        "material",
    ]
    ramp = shown.fields[0].legend["ramp"]
    assert ramp["low"] == "0 mm"
    assert ramp["high"].endswith(" mm")
    assert "logarithmic" in shown.fields[1].legend["ramp"]["low"]
    assert f"deformed {magnification(result):g} times" in shown.note
    assert "0.358 mm" in shown.html
    mean = result.size
    for axis in range(3):
        mean = 0.5 * (np.delete(mean, 0, axis=axis) + np.delete(mean, -1, axis=axis))
    top = np.unravel_index(np.where(part.solid, mean, 0).argmax(), part.grid.shape)
    yellow = picture_of(np.arange(part.grid.n_voxels).reshape(part.grid.shape), "y", top[1])
    row, column = np.argwhere(yellow == np.ravel_multi_index(top, part.grid.shape))[0]
    assert tuple(shown.fields[0].slice_rgb("y", top[1])[row, column]) == (253, 231, 37)


def test_the_slider_of_a_script_does_what_the_one_on_screen_does(made_up):
    view = SliceView(of_part(made_up.grip()))
    assert view.axis == "z"
    assert view.count == 10
    first = view.picture
    seq = view.seq
    view.index = 1
    assert view.seq == seq + 1
    assert view.picture != first
    assert "z = -10.5 mm" in view.where
    view.axis = "x"
    assert view.count == 24
    assert view.index == 12
    assert view.size_mm == [36.0, 30.0]
    assert view.frame == "y to the right, -18.0 to 18.0 mm; z upwards, -15.0 to 15.0 mm"
    with pytest.raises(traitlets.TraitError):
        view.axis = "w"
    view.index = 999  # beyond the end: the last one
    assert view.index == 23
    assert view.status == ""


def test_trouble_in_a_callback_is_put_on_the_screen(made_up):
    view = SliceView(of_part(made_up.grip()))
    view.field = "no such field"
    assert view.status.startswith("Error")


def test_slices_may_change_from_several_threads(made_up):
    view = SliceView(of_part(made_up.grip()))

    def turn(first):
        for index in range(first, 10):
            view.index = index

    threads = [threading.Thread(target=turn, args=(n,)) for n in range(3)]
    for t in threads:
        t.start()
    for t in threads:
        t.join()
    view.index = 4
    assert pixels(view.picture).shape == (12, 24, 3)
    assert view.status == ""


# ---------------------------------------------------------------------- show
def test_without_opengl_the_slices_stay_and_the_reason_is_said(made_up, blind):
    view = show_module.show(made_up.grip())
    assert view.space is None
    text = "".join(getattr(w, "value", "") for w in view.widget.children if hasattr(w, "value")
                   and isinstance(w.value, str))  # fmt: skip
    assert "killed by signal 11" in text
    assert "stands still" in text
    bundle = view._repr_mimebundle_()
    assert "application/vnd.jupyter.widget-view+json" in bundle
    assert pixels(bundle["image/jpeg"]).shape[1] > 400
    assert pixels(bundle["image/jpeg"]).std() > 20
    assert "run this cell" in bundle["text/plain"]
    view.close()


def test_what_cannot_be_shown_is_refused(made_up, blind):
    with pytest.raises(InputError, match="got int"):
        show_module.show(3)
    part = made_up.grip()
    empty = part.replace(labels=np.zeros_like(part.labels), occupancy=None)
    with pytest.raises(InputError, match="no material"):
        show_module.show(empty)


def test_anything_with_a_part_is_shown_as_that_part(made_up, blind):
    holder = types.SimpleNamespace(part=made_up.grip())
    assert show_module.show(holder).title == "made-up grip"


def test_old_views_are_closed(made_up, blind, monkeypatch):
    monkeypatch.setattr(show_module, "_live", [])
    monkeypatch.setattr(show_module, "MOST", 2)
    runs = iter([("cell a", "1"), ("cell a", "2"), ("cell b", "3"), ("cell c", "4")])
    monkeypatch.setattr(show_module, "_cell", lambda: next(runs))
    closed = []
    monkeypatch.setattr(show_module.View, "close", lambda self: closed.append(self))
    part = made_up.grip(6.0)
    views = [show_module.show(part) for _ in range(4)]
    assert closed == [views[0], views[1]]  # its cell ran again; it was the oldest of three


def test_space_view_turns_cuts_and_survives_other_threads(made_up, gl):
    part = made_up.grip()
    view = show_module.show(made_up.made_up_result(part, made_up.palm_case()))
    seen = {view.space.jpeg()}
    view.space.cut_away(0.2, "x")
    seen.add(view.space.jpeg())

    def told():
        view.space._told(None, {"kind": "turn", "dx": 80, "dy": 20}, [])

    for _ in range(4):
        thread = threading.Thread(target=told)
        thread.start()
        thread.join()
        seen.add(view.space.jpeg())
    assert len(seen) == 6  # every picture is another one
    for jpeg in seen:
        picture = np.asarray(Image.open(io.BytesIO(jpeg)).convert("RGB")).astype(int)
        assert picture.mean() > 60  # not black
        assert picture.std() > 20  # not blank
    view.space._told(None, {"kind": "view", "to": "nowhere"}, [])
    assert view.space.status.startswith("Error")
    view.close()
    view.close()


def test_a_stack_shows_its_own_layers(made_up, blind, tmp_path):
    profile = load_profile("invented-coarse")
    stack = write_stack(made_up.grip(6.0), profile, tmp_path / "stack", support="machine")
    view = show_module.show(stack)
    assert view.slices.axes == ["z"]
    assert view.slices.count == stack.n_layers
    view.slices.index = 300
    sites = stack.layer(300)
    drawn = pixels(view.slices.picture)
    assert drawn.shape[:2] == sites.T.shape
    empty = sites.T[::-1] == 0
    assert (drawn[empty] == 255).all()
    assert (drawn[~empty] != 255).any(axis=1).all()
    assert "layer 300 of" in view.slices.where
    assert "laid, mm³" in view._repr_html_()
    view.close()


# ---------------------------------------------------------------------- probe and hook
def test_the_probe_says_what_went_wrong(monkeypatch):
    monkeypatch.setattr(glprobe, "_CODE", "import os, signal; os.kill(os.getpid(), signal.SIGSEGV)")
    found = probe_gl.__wrapped__()
    assert not found.works
    assert "killed by signal 11" in found.reason
    assert "libegl1" in found.reason
    monkeypatch.setattr(glprobe, "_CODE", "raise ImportError('no libEGL')")
    assert "no libEGL" in probe_gl.__wrapped__().reason
    monkeypatch.setattr(glprobe, "_CODE", "pass")
    assert probe_gl.__wrapped__().works


class _Formatter:
    def __init__(self):
        self.known = {}

    def for_type_by_name(self, module, name, function):
        self.known[module, name] = function


def test_the_hook_registers_by_name_and_only_in_a_notebook(made_up, blind):
    formatter = _Formatter()
    display = types.SimpleNamespace(mimebundle_formatter=formatter)
    terminal = types.SimpleNamespace(display_formatter=display, kernel=None)
    assert hook.register(terminal) is False
    assert not formatter.known
    notebook = types.SimpleNamespace(display_formatter=display, kernel=object())
    assert hook.register(notebook) is True
    assert ("voxelmat.model.part", "Part") in formatter.known
    bundle = formatter.known["voxelmat.model.part", "Part"](made_up.grip(6.0))
    assert "image/jpeg" in bundle


def test_the_hook_imports_nothing_heavy():
    code = (
        "import sys, json; from voxelmat.workbench.hook import register; r = register();"
        "print(json.dumps([r, [m for m in ('pyvista', 'ipywidgets', 'numba', 'matplotlib', 'numpy')"
        " if m in sys.modules]]))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, check=True, text=True)
    assert json.loads(done.stdout) == [False, []]
