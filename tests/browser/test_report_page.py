"""The report in a real browser: nothing fetched, nothing broken, readable light, dark and on A4."""

from __future__ import annotations

import re

import pytest

from voxelmat.workflow.report import write_report

pytestmark = [pytest.mark.browser, pytest.mark.timeout(300)]


@pytest.fixture
def report(web_folder, made_up):
    folder, address = web_folder
    write_report(made_up.full_run(), folder / "report.html")
    return f"{address}/report.html"


def _opened(chromium, address, **options):
    context = chromium.new_context(viewport={"width": 1280, "height": 720}, **options)
    page = context.new_page()
    asked, said = [], []
    page.on("request", lambda r: asked.append(r.url))
    page.on("console", lambda m: said.append(m.text))
    page.on("pageerror", lambda e: said.append(str(e)))
    page.goto(address, wait_until="networkidle")
    return context, page, [u for u in asked if not u.startswith("data:")], said


def test_the_page_asks_for_nothing_else(chromium, report):
    context, page, asked, said = _opened(chromium, report)
    assert asked == [report]
    assert said == []
    assert page.title() == "grip <test> & co: report"
    loaded = page.evaluate(
        "[...document.images].map(i => i.complete && i.naturalWidth > 200 && i.alt.length > 20)"
    )
    assert len(loaded) >= 12
    assert all(loaded)
    assert page.get_by_text("cannot be said").first.is_visible()
    context.close()


@pytest.mark.parametrize("width", [1280, 400])
def test_nothing_sticks_out_sideways(chromium, report, width):
    context, page, _, _ = _opened(chromium, report)
    page.set_viewport_size({"width": width, "height": 720})
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    context.close()


def test_light_and_dark_follow_the_reader(chromium, report):
    seen = {}
    for scheme in ("light", "dark"):
        context, page, _, _ = _opened(chromium, report, color_scheme=scheme)
        seen[scheme] = page.evaluate(
            "(() => { const s = getComputedStyle(document.body);"
            " return [s.backgroundColor, s.color]; })()"
        )
        context.close()
    assert seen["light"][0] == "rgb(255, 255, 255)"
    assert seen["dark"] != seen["light"]


def test_it_prints_on_a4(chromium, report):
    context, page, _, _ = _opened(chromium, report)
    paper = page.pdf(prefer_css_page_size=True)
    assert paper.startswith(b"%PDF")
    page.set_viewport_size({"width": 680, "height": 1000})  # A4 less its margins, in CSS px
    page.emulate_media(media="print")
    wide = page.evaluate("[...document.querySelectorAll('table, img')].map(t => t.scrollWidth)")
    assert max(wide) <= 680
    size = re.search(rb"/MediaBox \[0 0 ([\d.]+) ([\d.]+)\]", paper)
    assert [float(s) for s in size.groups()] == pytest.approx([595.3, 841.9], abs=1)  # points
    context.close()
