"""Every tab of the bench: nothing clipped, small or 4k screen; accessible, light and dark."""

from __future__ import annotations

import os
from pathlib import Path

import pytest

pytestmark = [pytest.mark.browser, pytest.mark.timeout(300)]

SMALL, LARGE = {"width": 1280, "height": 720}, {"width": 3840, "height": 2160}

# Labels, buttons and cells whose text is wider than the box it is drawn in.
CLIPPED = """
() => [...document.querySelectorAll('.vm-bench :is(label, button, td, th, h4, p, span)')]
  .filter(n => n.offsetParent && n.scrollWidth > n.clientWidth + 2)
  .filter(n => getComputedStyle(n).display !== 'inline')
  .filter(n => !n.closest('.scroll') || n.tagName !== 'TD')
  .map(n => n.tagName + ': ' + n.textContent.slice(0, 60))
"""


def _shot(notebook, name):
    if os.environ.get("VOXELMAT_SHOTS"):
        notebook.page.screenshot(path=Path(os.environ["VOXELMAT_SHOTS"]) / f"{name}.png")


def _dark(notebook):
    notebook.page.evaluate(
        "window.jupyterapp.commands.execute('apputils:change-theme', {theme: 'JupyterLab Dark'})"
    )
    notebook.page.wait_for_function("document.body.dataset.jpThemeLight === 'false'")
    notebook.page.wait_for_timeout(300)  # the style sheet of the theme is fetched after that


def test_every_tab_opens_with_nothing_clipped_and_is_accessible(
    notebook, open_bench, axe_findings, gl
):
    desk = open_bench("tabs")
    notebook.ask("bench.jobs.settle(120); bench.optimiser.set_up(); bench.jobs.settle(120)")
    titles = desk.locator("[role=tab]").all_inner_texts()
    assert len(titles) == len(set(titles)) >= 8
    grave = []
    for theme, size in (("light", SMALL), ("dark", SMALL), ("dark", LARGE)):
        notebook.page.set_viewport_size(size)
        if theme == "dark" and size is SMALL:
            _dark(notebook)
        for title in titles:
            desk.get_by_role("tab", name=title, exact=True).click()
            desk.locator(f"[role=tabpanel][aria-label='{title}']").wait_for()
            _shot(notebook, f"tab-{theme}-{size['width']}-{title}")
            assert notebook.page.evaluate(CLIPPED) == [], title
            if size is SMALL:
                grave += [f"{theme}, {title}: {f}" for f in axe_findings(notebook.page)]
    assert not grave, "\n".join(grave)
    assert desk.locator(".message.bad").count() == 0
