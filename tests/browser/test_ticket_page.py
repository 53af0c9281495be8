"""The job ticket in a real browser: one A4 page, nothing fetched, nothing cut off."""

from __future__ import annotations

import re
import sys
from datetime import date
from pathlib import Path

import pytest

pytestmark = [pytest.mark.browser, pytest.mark.timeout(300)]
sys.path.insert(0, str(Path(__file__).resolve().parents[1]))


@pytest.mark.parametrize("full", [False, True])
def test_one_page(chromium, web_folder, tmp_path, full):
    from print_twins import layered_part

    from voxelmat.printing.profile import load_profile
    from voxelmat.printing.stack import write_stack
    from voxelmat.workflow.ticket import Loaded, write_ticket

    folder, address = web_folder
    part = layered_part("distance", shape=(12, 10, 6))
    notes = {"job_number": "J-0042" * (8 if full else 1), "title": "Invented grip " * 10}
    stack = write_stack(part, load_profile("invented-standard"), tmp_path / "s", notes=notes)
    held = {}
    if full:
        late = Loaded(grams=1.0, lot="LOT-" + "1234567890" * 4, expiry=date(2020, 1, 1))
        held = {c.resin: late for c in stack.channels}
    write_ticket(stack, folder / "ticket.html", loaded=held, day=date(2026, 12, 1))
    context = chromium.new_context(viewport={"width": 794, "height": 1123})  # A4 at 96 dpi
    page = context.new_page()
    asked = []
    page.on("request", lambda r: asked.append(r.url))
    page.goto(f"{address}/ticket.html", wait_until="networkidle")
    assert [u for u in asked if not u.startswith("data:")] == [f"{address}/ticket.html"]
    assert page.evaluate("document.documentElement.scrollWidth") <= 794
    pdf = page.pdf(prefer_css_page_size=True)
    assert len(re.findall(rb"/Type\s*/Page\b", pdf)) == 1
    context.close()
