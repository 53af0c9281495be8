"""The workbench as an app, without code: served by Voila on this machine, a slider works."""

from __future__ import annotations

import io

import numpy as np
import pytest
from PIL import Image

from voxelmat.workflow.lab import working_notebook

pytestmark = [pytest.mark.browser, pytest.mark.timeout(300)]


def test_the_desk_appears_without_code_and_a_slider_works(voila, chromium, small_design, gl):
    base, address = voila(working_notebook(small_design))
    context = chromium.new_context(viewport={"width": 1280, "height": 720}, reduced_motion="reduce")
    page = context.new_page()
    broken, outside = [], []
    page.on("pageerror", lambda e: broken.append(str(e)))
    page.on(
        "request",
        lambda r: None if r.url.startswith((base, "data:", "blob:")) else outside.append(r.url),
    )
    page.goto(base)
    assert "/login" in page.url  # nobody without the token
    page.goto(address, timeout=120_000)
    desk = page.locator(".vm-desk")
    desk.wait_for(timeout=120_000)
    image = page.locator("img.space[data-seq]")
    image.wait_for(timeout=60_000)
    assert page.locator(".jp-InputArea-editor").count() == 0
    assert page.get_by_text("open_workbench").count() == 0

    def pixels():
        return np.asarray(Image.open(io.BytesIO(image.screenshot())).convert("RGB")).astype(int)

    desk.get_by_role("tab", name="Answers", exact=True).click()
    desk.get_by_role("cell", name="largest displacement").wait_for(timeout=60_000)
    before, seq = pixels(), int(image.get_attribute("data-seq"))
    page.get_by_label("Cut away", exact=True).fill("0.5")
    page.wait_for_function(
        "seq => Number(document.querySelector('img.space').dataset.seq) > seq", arg=seq
    )
    page.wait_for_timeout(300)
    after = pixels()
    assert after.std() > 15
    assert (np.abs(before - after).sum(axis=2) > 60).mean() > 0.005
    context.close()
    assert not broken, broken
    assert not outside, outside
