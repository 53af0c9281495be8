"""A part, a result and a stack in a real JupyterLab: pictures, sliders, keys, a living kernel."""

from __future__ import annotations

import io
import re

import numpy as np
import pytest
from PIL import Image

pytestmark = [pytest.mark.browser, pytest.mark.timeout(300)]

START = """
import voxelmat
from voxelmat.workbench.hook import register
register()
import fabricated
part = fabricated.grip()
"""
STACK = """
import pathlib, tempfile
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_stack
small = fabricated.grip(6.0)
folder = pathlib.Path(tempfile.mkdtemp()) / "stack"
stack = write_stack(small, load_profile("invented-coarse"), folder, support="machine")
"""


def pixels(place):
    shot = Image.open(io.BytesIO(place.screenshot())).convert("RGB")
    return np.asarray(shot).astype(int)


def changed(before, after):
    """Share of pixels that look different."""
    rows = min(len(before), len(after))
    return float((np.abs(before[:rows] - after[:rows]).sum(axis=2) > 60).mean())


def is_a_picture(array):
    """Neither black nor blank."""
    return 40 < array.mean() < 254 and array.std() > 15


def wait_for(place, seq):
    place.page.wait_for_function(
        "([node, seq]) => Number(node.dataset.seq || 0) > seq",
        arg=[place.element_handle(), seq],
        timeout=20_000,
    )


def seq_of(place):
    return int(place.get_attribute("data-seq") or 0)


def test_part_turns_and_its_slices_follow_the_slider(notebook, gl):
    notebook.open("part.ipynb", [START, "part"])
    notebook.run_all()
    page = notebook.page
    space = page.get_by_role("img", name=re.compile("3-D view of made-up grip"))
    wait_for(space, 0)
    first = pixels(space)
    assert is_a_picture(first)

    space.focus()
    for _ in range(4):  # the fourth call comes on another thread than the first
        seq = seq_of(space)
        page.keyboard.press("ArrowLeft")
        wait_for(space, seq)
    turned = pixels(space)
    assert is_a_picture(turned)
    assert changed(first, turned) > 0.03

    cut = page.get_by_label("Cut away")
    seq = seq_of(space)
    cut.fill("0")
    wait_for(space, seq)
    whole = pixels(space)
    assert is_a_picture(whole)
    assert changed(turned, whole) > 0.01

    canvas = page.get_by_role("img", name=re.compile("Slice of made-up grip"))
    slider = page.get_by_label("Slice", exact=True)
    last, seen = pixels(canvas), []
    for index in (1, 3, 6, 8, 4):
        seq = seq_of(canvas)
        slider.fill(str(index))
        wait_for(canvas, seq)
        assert page.get_by_text(re.compile(rf"\({index + 1} of 10\)")).first.is_visible()
        seen.append(pixels(canvas))
    assert all(is_a_picture(p) for p in seen)
    moved = [changed(a, b) for a, b in zip([last, *seen], seen, strict=False)]
    assert sum(m > 0.005 for m in moved) >= 4

    page.get_by_label("across").select_option("x")
    page.get_by_text(re.compile("of 24")).first.wait_for()
    assert notebook.ask("print(1 + 1)") == "2"
    assert page.get_by_text("volume, mm³").first.is_visible()


def test_result_says_its_factor_and_shows_fields_with_units(notebook, gl):
    cells = [START, "result = fabricated.made_up_result(part, fabricated.palm_case())\nresult"]
    notebook.open("result.ipynb", cells)
    notebook.run_all()
    page = notebook.page
    space = page.get_by_role("img", name=re.compile("3-D view of made-up grip, load case palm"))
    wait_for(space, 0)
    assert is_a_picture(pixels(space))
    canvas = page.get_by_role("img", name=re.compile("Slice of"))
    before = pixels(canvas)
    seq = seq_of(canvas)
    page.get_by_label("showing").select_option("von Mises stress, MPa")
    wait_for(canvas, seq)
    page.get_by_text(re.compile("MPa or less, logarithmic")).wait_for()
    assert changed(before, pixels(canvas)) > 0.05
    assert page.get_by_text("largest displacement").first.is_visible()
    assert notebook.ask("print(result.iterations)") == "14"


def test_stack_pages_through_its_layers(notebook, gl):
    notebook.open("stack.ipynb", [START, STACK, "stack"])
    notebook.run_all()
    page = notebook.page
    space = page.get_by_role("img", name=re.compile("3-D view of stack"))
    wait_for(space, 0)
    assert is_a_picture(pixels(space))
    canvas = page.get_by_role("img", name=re.compile("Slice of stack"))
    layers = int(notebook.ask("print(stack.n_layers)"))
    seen = []
    for share in (0.1, 0.3, 0.5, 0.7, 0.2):
        seq = seq_of(canvas)
        index = int(share * layers)
        page.get_by_label("Slice", exact=True).fill(str(index))
        wait_for(canvas, seq)
        page.get_by_text(re.compile(f"layer {index} of {layers}")).first.wait_for()
        seen.append(pixels(canvas))
    assert all(p.std() > 15 for p in seen)
    assert changed(seen[0], seen[2]) > 0.01
    assert page.get_by_text("designed, mm³").first.is_visible()


def test_running_a_cell_again_leaves_one_live_view(notebook, gl):
    notebook.open("again.ipynb", [START, "part"])
    for _ in range(3):
        notebook.run_all()
    space = notebook.page.get_by_role("img", name=re.compile("3-D view of made-up grip"))
    wait_for(space, 0)
    live = notebook.ask("from voxelmat.workbench import show; print(len(show._live))")
    scenes = notebook.ask(
        "from voxelmat.workbench import renderthread; print(len(renderthread._open))"
    )
    assert (live, scenes) == ("1", "1")


def test_without_opengl_the_reason_is_said_and_slices_work(notebook):
    blind = """
from voxelmat.workbench import show as view
from voxelmat.workbench.glprobe import Probe
view.probe_gl = lambda: Probe(works=False, reason="A test drawing with OpenGL failed: no libEGL.")
"""
    notebook.open("blind.ipynb", [START, blind, "part"])
    notebook.run_all()
    page = notebook.page
    page.get_by_text("The picture above stands still").wait_for()
    assert is_a_picture(pixels(page.get_by_role("img", name=re.compile("Picture of made-up grip"))))
    canvas = page.get_by_role("img", name=re.compile("Slice of made-up grip"))
    before = pixels(canvas)
    seq = seq_of(canvas)
    page.get_by_label("Slice", exact=True).fill("1")
    wait_for(canvas, seq)
    assert changed(before, pixels(canvas)) > 0.01
    loaded = notebook.ask("import sys; print('pyvista' in sys.modules)")
    assert loaded == "False"  # VTK would have killed the kernel
