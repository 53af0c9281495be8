"""What a user does on the bench, from the first look to a design taken: mouse, keys, bad input."""

from __future__ import annotations

import io
import re
import time

import numpy as np
import pytest
from PIL import Image

pytestmark = [pytest.mark.browser, pytest.mark.timeout(300)]


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


def seq_of(place):
    return int(place.get_attribute("data-seq") or 0)


def wait_for(place, seq):
    place.page.wait_for_function(
        "([node, seq]) => Number(node.dataset.seq || 0) > seq",
        arg=[place.element_handle(), seq],
        timeout=60_000,
    )


def steady(place):
    """The picture, once no newer one has come for a while."""
    last, still = seq_of(place), 0
    while still < 4:
        place.page.wait_for_timeout(100)
        now = seq_of(place)
        last, still = now, still + 1 if now == last else 0
    return pixels(place)


def redrawn(place, action):
    """Do something and give the last picture that comes of it."""
    seq = seq_of(place)
    action()
    wait_for(place, seq)
    return steady(place)


def tab(desk, title):
    desk.get_by_role("tab", name=title, exact=True).click()
    desk.locator(f"[role=tabpanel][aria-label='{title}']").wait_for()


def typed(box, text):
    box.fill(text)
    box.press("Enter")


def drag(page, place, start, end):
    """Drag over a picture; places are shares of its width and height."""
    place.scroll_into_view_if_needed()
    box = place.bounding_box()
    (x0, y0), (x1, y1) = (
        (box["x"] + u * box["width"], box["y"] + v * box["height"]) for u, v in (start, end)
    )
    page.mouse.move(x0, y0)
    page.mouse.down()
    page.mouse.move(x1, y1, steps=6)
    page.mouse.up()


def until(notebook, expression, what):
    """Wait until an expression holds in the kernel."""
    end = time.monotonic() + 60
    while time.monotonic() < end:
        if notebook.ask(f"print(bool({expression}))") == "True":
            return
        notebook.page.wait_for_timeout(50)
    pytest.fail(f"{what}; message on the bench: {notebook.ask('print(bench.message)')}")


def test_turned_cut_painted_mixed_and_grown(notebook, open_bench, gl):
    desk = open_bench("flows")
    page = notebook.page
    notebook.ask("bench.jobs.settle(120)")
    space = page.locator("img.space")
    first = steady(space)
    assert is_a_picture(first)

    turned = redrawn(space, lambda: drag(page, space, (0.4, 0.5), (0.7, 0.6)))
    assert is_a_picture(turned)
    assert changed(first, turned) > 0.03
    cut = page.get_by_label("Cut away", exact=True)
    opened = redrawn(space, lambda: cut.fill("0.5"))
    assert is_a_picture(opened)
    assert changed(turned, opened) > 0.01
    whole = redrawn(space, lambda: cut.fill("0"))
    assert changed(turned, whole) < 0.005 < changed(opened, whole)

    # A face is clicked and grown to a region.
    tab(desk, "Shape")
    space.click()  # in the middle
    desk.get_by_text(re.compile("Clicked: ")).wait_for()
    typed(desk.get_by_label("Its name"), "clicked face")
    desk.get_by_role("button", name="Grow the region").click()
    desk.get_by_role("cell", name="clicked face", exact=True).wait_for()
    assert notebook.ask("print(bench.draft.data['region'][-1]['kind'])") == "grown"
    assert desk.locator("code.line").inner_text().startswith("bench.shape.grow(")

    # The blend slider is moved ten times; by then callbacks come on other threads than the first.
    tab(desk, "Material")
    desk.get_by_label("Blend in").select_option("measured-soft")
    slider = desk.get_by_label("measured-soft", exact=True)
    slider.wait_for()
    notebook.ask(
        "import threading; threads = []\n"
        "bench.listen(lambda what: what == 'mix' and threads.append(threading.current_thread()))"
    )
    patch = desk.locator("img.still").first
    before = pixels(patch)
    for n in range(10):
        share = round(0.86 - 0.09 * n, 2)
        slider.fill(str(share))
        until(notebook, f"abs(bench.mix.parts['measured-soft'] - {share}) < 1e-6",
              "the slider did not reach the kernel")  # fmt: skip
    assert notebook.ask("print(1 + 1)") == "2"
    assert notebook.ask("print(any(t is not threading.main_thread() for t in threads))") == "True"
    after = pixels(patch)
    assert is_a_picture(after)
    assert changed(before, after) > 0.1
    again = redrawn(space, lambda: drag(page, space, (0.6, 0.5), (0.5, 0.4)))
    assert is_a_picture(again)  # drawn for a callback on another thread than the plotter's maker

    # Painted by mouse, taken back by keys; painted by keys, taken back by the button.
    tab(desk, "Paint")
    desk.get_by_label("Paint on the slices").check()
    until(notebook, "bench.stage.slices.brush['on']", "the brush was not taken in hand")
    canvas = page.get_by_role("img", name=re.compile("^Slice of"))
    bare = pixels(canvas)
    rules = "len(bench.draft.data.get('layout', []))"
    drag(page, canvas, (0.3, 0.5), (0.7, 0.5))
    until(notebook, f"{rules} == 1", "the stroke is no rule of the layout")
    notebook.ask("bench.jobs.settle(60)")
    assert changed(bare, pixels(canvas)) > 0.02
    assert float(canvas.get_attribute("data-drawn")) < 50  # ms, in the browser, before any answer
    page.keyboard.press("Control+z")  # the slice has the focus
    until(notebook, f"{rules} == 0", "Ctrl-Z on the slice did not take the stroke back")
    canvas.focus()
    page.keyboard.press("ArrowRight")
    page.keyboard.press("Space")
    until(notebook, f"{rules} == 1", "the dab by keys is no rule of the layout")
    desk.get_by_role("button", name="Undo").click()
    until(notebook, f"{rules} == 0", "the button did not take the dab back")
    desk.get_by_role("button", name="Redo").click()
    until(notebook, f"{rules} == 1", "the button did not paint the dab again")
    assert desk.locator(".message.bad").count() == 0


def test_answers_follow_and_long_work_is_stopped(notebook, open_bench, gl):
    desk = open_bench("work")
    notebook.ask("bench.jobs.settle(120)")

    # A load is edited, and the live number follows.
    tab(desk, "Answers")
    largest = desk.get_by_role("row", name=re.compile("largest displacement")).locator("td").last
    largest.wait_for()
    before = largest.inner_text()
    tab(desk, "Loads")
    typed(desk.get_by_label("Pressure on top"), "0.04")
    tab(desk, "Answers")
    notebook.page.wait_for_function(
        "([node, text]) => node.isConnected && node.textContent !== text || "
        "[...document.querySelectorAll('.vm-desk td')].some(td => td.textContent === "
        "'largest displacement' && td.nextSibling.textContent !== text)",
        arg=[largest.element_handle(), before],
    )
    until(notebook, "not bench.answers.stale", "the quick answer did not follow the load")
    ratio = float(largest.inner_text().split()[0]) / float(before.split()[0])
    assert ratio == pytest.approx(2, rel=0.01)  # twice the pressure; 3 figures are shown

    # A full solve of finer voxels is stopped; the kernel answers meanwhile.
    notebook.ask("bench.answers.set_live(False); bench.set('grid.spacing_mm', [0.2] * 3)")
    notebook.ask("bench.jobs.settle(120)")
    desk.get_by_role("button", name="Solve in full").click()
    desk.locator(".job", has_text=re.compile("load case|solv", re.IGNORECASE)).wait_for()
    assert notebook.ask("print(bench.jobs.current.key)") == "solve"
    desk.locator(".job").get_by_role("button", name="Stop").click()
    desk.locator(".job").wait_for(state="hidden")
    assert notebook.ask("print(bench.answers.full)") == "None"
    assert notebook.ask("print(bench.answers.quick is not None)") == "True"

    # The optimiser runs five iterations and is stopped; its last whole design is kept and shown.
    notebook.ask("bench.set('grid.spacing_mm', [0.5] * 3); bench.jobs.settle(120)")
    tab(desk, "Optimise")
    desk.get_by_role("button", name="Set up").click()
    typed(desk.get_by_label("Iterations, at most"), "400")
    until(notebook, "bench.design.optimise.iterations == 400", "the iterations were not taken")
    desk.get_by_role("button", name="Start").click()
    until(
        notebook,
        "len(bench.optimiser.runs[0].iterates) >= 5 if bench.optimiser.runs else False",
        "there are no five iterations",
    )
    desk.get_by_role("button", name="Stop and keep").click()
    desk.get_by_role("cell", name="stopped", exact=True).wait_for()
    desk.get_by_role("img", name=re.compile("Objective by iteration")).wait_for()
    assert notebook.ask("print(bench.optimiser.runs[0].result.cancelled)") == "True"
    desk.get_by_role("button", name="Take this design").click()
    desk.locator(".message", has_text="Taken; kept in").wait_for()
    assert notebook.ask("print(bench.draft.data['layout'][-1]['kind'])") == "stored"
    assert is_a_picture(pixels(notebook.page.locator("img.space")))


NEWER = """
import pathlib
newer = pathlib.Path("bad") / "newer.toml"
newer.write_text(path.read_text().replace("format = 1", "format = 99"))
try:
    voxelmat.open_workbench(newer)
except voxelmat.errors.VoxelmatError as error:
    print(error)
print(newer.read_text().count("format = 99"))
"""


def test_bad_input_is_said_and_nothing_is_lost(notebook, open_bench, gl):
    desk = open_bench("bad")
    notebook.ask("bench.jobs.settle(120)")
    bad = desk.locator(".message.bad")

    # A wrong number.
    tab(desk, "Loads")
    before = notebook.ask("print(bench.design.digest)")
    typed(desk.get_by_label("Pressure on top"), "lots")
    desk.locator(".message.bad", has_text="'lots'").wait_for()
    assert notebook.ask("print(bench.design.digest)") == before

    # A region that holds nothing: said until it is mended, whatever is clicked meanwhile.
    notebook.ask("bench.shape.box_region('nowhere', [90, 90, 90], [91, 91, 91])")
    notebook.ask("bench.jobs.settle(60)")
    tab(desk, "Answers")
    desk.locator(".message.bad", has_text="'nowhere'").wait_for()
    desk.get_by_role("button", name="Solve in full").click()
    desk.locator(".message.bad", has_text="'nowhere'").wait_for()
    assert notebook.ask("print(bench.draft.data['region'][-1]['name'])") == "nowhere"
    desk.get_by_role("button", name="Undo").click()
    until(notebook, "len(bench.draft.data['region']) == 2", "undo did not take the region away")
    notebook.ask("bench.jobs.settle(60)")
    bad.wait_for(state="detached")

    # Solving what is not held.
    tab(desk, "Loads")
    desk.get_by_role("button", name="Remove held: bottom").click()
    until(notebook, "not bench.draft.data['load_case'][0].get('support')", "it is still held")
    notebook.ask("bench.jobs.settle(60)")
    tab(desk, "Answers")
    desk.get_by_role("button", name="Solve in full").click()
    bad.wait_for()
    assert re.search("support|held", bad.inner_text())
    desk.get_by_role("button", name="Undo").click()
    until(notebook, "len(bench.draft.data['load_case'][0]['support']) == 1", "no undo")
    desk.get_by_role("button", name="Solve in full").click()
    until(notebook, "bench.answers.full is not None", "it does not solve any more")

    # A design of a newer version is left as it is, and the open one stays.
    said = notebook.ask(NEWER)
    assert "99" in said.splitlines()[0]
    assert re.search("newer|version|format", said.splitlines()[0])
    assert said.splitlines()[-1] == "1"
    assert notebook.ask("print(bench.design.name)") == "pad on a plate"
