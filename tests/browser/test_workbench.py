"""The workbench in a real JupyterLab: opened, changed, taken back, found again after a crash."""

from __future__ import annotations

import pytest

pytestmark = [pytest.mark.browser, pytest.mark.timeout(300)]


def test_a_change_is_taken_back_and_found_again_after_a_crash(notebook, open_bench, gl):
    desk = open_bench("whole")
    desk.get_by_role("tab", name="Design").click()
    name = desk.get_by_label("Name", exact=True)
    name.fill("renamed by hand")
    name.press("Enter")
    desk.locator(".title", has_text="renamed by hand").wait_for()
    assert notebook.ask("print(bench.design.name)") == "renamed by hand"
    assert desk.locator("code.line").inner_text() == "bench.whole.set_name(name='renamed by hand')"
    desk.get_by_role("button", name="Undo").click()
    desk.locator(".title", has_text="pad on a plate").wait_for()
    desk.get_by_role("button", name="Redo").click()
    desk.locator(".title", has_text="renamed by hand").wait_for()
    size = desk.get_by_label("Voxel size x")
    size.fill("wide")
    size.press("Enter")
    desk.locator(".message.bad", has_text="'wide'").wait_for()
    assert notebook.ask("print(bench.design.spacing_mm)") == "(1.0, 1.0, 1.0)"
    notebook.page.evaluate(
        "window.jupyterapp.shell.currentWidget.sessionContext.session.kernel.restart()"
    )
    notebook.run_all()
    notebook.page.locator(".vm-desk .title", has_text="renamed by hand").wait_for()
    assert notebook.ask("print(bench.draft.undo_label)") == "name"
