"""The picture in space on a real screen: turned, cut, picked from, measured, hidden, saved."""

from __future__ import annotations

import io
import itertools
import os
from pathlib import Path

import numpy as np
import pytest
from PIL import Image

pytestmark = [pytest.mark.browser, pytest.mark.timeout(300)]

# Labels and buttons of the tool bar whose text is wider than the box it is drawn in.
CLIPPED = """
() => [...document.querySelectorAll('.vm-space :is(label, button, output, .said)')]
  .filter(n => n.offsetParent && n.scrollWidth > n.clientWidth + 2)
  .filter(n => getComputedStyle(n).display !== 'inline')
  .map(n => n.tagName + ': ' + n.textContent.slice(0, 60))
"""
NAMELESS = """
() => [...document.querySelectorAll('.vm-space :is(button, select, input)')]
  .filter(n => n.offsetParent && !n.getAttribute('aria-label') && !n.labels?.length
          && !n.textContent.trim())
  .map(n => n.outerHTML)
"""


class Space:
    """The picture and its tool bar on the page."""

    def __init__(self, notebook):
        self.page, self.notebook = notebook.page, notebook
        self.box = notebook.page.locator(".vm-space").first
        self.image = self.box.locator("img.space")

    def seq(self):
        return int(self.image.get_attribute("data-seq"))

    def after(self, action):
        """Do something, wait for the frame that shows it and for quiet; the picture then."""
        before = self.seq()
        action()
        self.page.wait_for_function(
            "([node, n]) => Number(node.dataset.seq) > n", arg=[self.image.element_handle(), before]
        )
        last = -1
        while last != self.seq():
            last = self.seq()
            self.page.wait_for_timeout(250)
        return self.pixels()

    def pixels(self):
        shot = self.image.screenshot()
        return np.asarray(Image.open(io.BytesIO(shot)).convert("RGB")).astype(int)

    def drag(self, dx, dy, modifier=None, button="left"):
        box = self.image.bounding_box()
        x, y = box["x"] + box["width"] / 2, box["y"] + box["height"] / 2
        if modifier:
            self.page.keyboard.down(modifier)
        self.page.mouse.move(x, y)
        self.page.mouse.down(button=button)
        self.page.mouse.move(x + dx, y + dy, steps=6)
        self.page.mouse.up(button=button)
        if modifier:
            self.page.keyboard.up(modifier)

    def click(self, u, v):
        box = self.image.bounding_box()
        self.page.mouse.click(box["x"] + u * box["width"], box["y"] + v * box["height"])


def is_a_picture(pixels):
    return pixels.mean() > 40 and pixels.std() > 20


def shot(notebook, name):
    if os.environ.get("VOXELMAT_SHOTS"):
        notebook.page.screenshot(path=Path(os.environ["VOXELMAT_SHOTS"]) / f"{name}.png")


def pair_turns_together(notebook):
    """Two results side by side: what turns one turns the other, and one picture comes back."""
    notebook.ask("pair = bench.stage.compare(bench.answers.result(), bench.answers.result())")
    images = notebook.page.locator(".vm-pair img.space")
    images.nth(1).wait_for()
    notebook.page.wait_for_timeout(500)
    before = images.nth(1).get_attribute("data-seq")
    images.nth(0).focus()
    notebook.page.keyboard.press("ArrowLeft")
    notebook.page.wait_for_function(
        "([node, n]) => node.dataset.seq !== n", arg=[images.nth(1).element_handle(), before]
    )
    assert notebook.ask("print(pair.left.eye == pair.right.eye)") == "True"
    assert images.nth(0).bounding_box()["y"] == images.nth(1).bounding_box()["y"]  # beside
    shot(notebook, "space-pair")
    notebook.page.get_by_role("button", name="Back to one picture").first.click()
    notebook.page.locator(".vm-pair").wait_for(state="detached")


def test_the_part_is_turned_cut_picked_measured_and_saved(notebook, open_bench, gl):
    open_bench("space")
    notebook.ask("bench.jobs.settle(120)")
    space, page = Space(notebook), notebook.page
    shot(notebook, "space-start")
    # turned by the mouse and by keys, moved, enlarged: every picture another one, none black
    seen = [space.pixels()]
    seen.append(space.after(lambda: space.drag(120, 30)))
    seen.append(space.after(lambda: space.drag(60, 0, modifier="Shift")))
    seen.append(space.after(lambda: space.drag(-30, 20, button="middle")))
    space.image.focus()
    keys = ("ArrowLeft", "Shift+ArrowRight", "+", "x", "i", "f")
    seen += [space.after(lambda key=key: page.keyboard.press(key)) for key in keys]
    assert all(is_a_picture(p) for p in seen)
    changed = [np.abs(a - b).mean() for a, b in itertools.pairwise(seen)]
    assert min(changed) > 0.3, changed
    # a click finds the top of the pad and says so
    space.after(lambda: page.keyboard.press("z"))
    space.after(lambda: space.click(0.5, 0.5))
    assert notebook.ask("print(bench.picked['material'], bench.picked['place_mm'][2])") == (
        "25 % measured-hard + 75 % measured-soft 6.0"
    )
    said = space.box.locator(".said")
    assert "body pad" in said.inner_text()
    # two more clicks, then a key, measure
    space.after(lambda: space.box.get_by_role("button", name="Measure between").click())
    space.after(lambda: space.click(0.45, 0.5))
    space.after(lambda: space.click(0.55, 0.5))
    said.filter(has_text="Distance").wait_for()
    x = float(notebook.ask("print(bench.stage.space.distance[1][0])"))
    assert x > 0.5
    shot(notebook, "space-measured")
    space.after(lambda: space.box.get_by_role("button", name="Measure between").click())
    # the cut: slider, keys, the other side, and by dragging the plane
    cut = space.box.get_by_label("Cut away", exact=True)
    whole = space.after(lambda: page.keyboard.press("i") if space.image.focus() is None else None)
    half = space.after(lambda: cut.fill("0.5"))
    assert np.abs(whole - half).mean() > 1
    space.image.focus()
    for key in ("]", "o", "c"):
        before = space.pixels()
        assert np.abs(before - space.after(lambda key=key: page.keyboard.press(key))).mean() > 0.3
    assert notebook.ask("print(bench.stage.space.look.axis)") == "z"
    share = float(notebook.ask("print(bench.stage.space.look.share)"))
    space.after(lambda: space.drag(0, -60, modifier="Alt"))
    assert float(notebook.ask("print(bench.stage.space.look.share)")) > share + 0.05
    # the picture as a file
    with page.expect_download() as download:
        space.box.get_by_role("button", name="Download the picture").click()
    with Image.open(download.value.path()) as picture:
        assert picture.width >= 2 * (space.image.bounding_box()["width"] - 4)
    assert notebook.ask("print(bench.message_is_bad)") == "False"


def test_materials_loads_fields_and_the_state_after_reopening(notebook, open_bench, gl):
    desk = open_bench("spacemore")
    notebook.ask("bench.jobs.settle(120)")
    space = Space(notebook)
    pad = space.box.get_by_role("button", name="75 % measured-soft")
    first = space.pixels()
    ghost = space.after(pad.click)
    hidden = space.after(pad.click)
    assert np.abs(first - ghost).mean() > 1
    assert np.abs(ghost - hidden).mean() > 1
    assert "(hidden)" in pad.inner_text()
    line = desk.locator("code.line").inner_text()
    assert line.startswith("bench.stage.see(name='25 % measured-hard + 75 % measured-soft'")
    shot(notebook, "space-hidden")
    loads = space.box.get_by_role("button", name="Draw loads")
    assert loads.get_attribute("aria-pressed") == "true"
    without = space.after(loads.click)
    assert np.abs(hidden - without).mean() > 0.5
    space.after(loads.click)
    space.after(pad.click)
    space.after(lambda: space.box.get_by_label("Colour").select_option("von Mises stress"))
    assert "bench.answers.show(field='von Mises stress'" in desk.locator("code.line").inner_text()
    factor = space.box.get_by_label("Displacements drawn larger")

    def other_factor():
        factor.fill("100")
        factor.press("Enter")

    space.after(other_factor)
    assert "deformed 100 times" in notebook.ask("print(bench.stage.space._scene.notes)")
    assert notebook.page.evaluate(CLIPPED) == []
    assert notebook.page.evaluate(NAMELESS) == []
    shot(notebook, "space-field")
    space.after(lambda: notebook.change_theme("Dark"))
    corner = space.pixels()[20:40, -40:-20]
    assert corner.mean() < 60
    shot(notebook, "space-dark")
    pair_turns_together(notebook)
    notebook.page.wait_for_timeout(900)  # what was seen is kept a moment later
    notebook.page.evaluate(
        "window.jupyterapp.shell.currentWidget.sessionContext.session.kernel.restart()"
    )
    notebook.run_all()
    notebook.page.locator(".vm-space img[data-seq]").first.wait_for()
    notebook.ask("bench.jobs.settle(120)")
    assert notebook.ask(
        "print(bench.stage.space._shown.painted, bench.stage.space._shown.factor)"
    ) == ("von Mises stress 100.0")
