"""Print on screen: a stack exported, its manifest downloaded; a folder that refuses is said."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

pytestmark = [pytest.mark.browser, pytest.mark.timeout(300)]


def test_a_stack_is_exported_and_a_refusal_is_said(notebook, open_bench, gl):
    desk = open_bench("export")
    notebook.page.set_default_timeout(90_000)
    notebook.ask("bench.printing.folder.write_text('in the way')")
    desk.get_by_role("tab", name="Print", exact=True).click()
    desk.get_by_role("button", name="Export the stack").click()
    desk.locator(".message.bad", has_text="could not be written").wait_for()
    notebook.ask("bench.printing.folder.unlink()")
    desk.get_by_role("button", name="Export the stack").click()
    desk.get_by_text("layers in").wait_for()
    with notebook.page.expect_download() as caught:
        desk.get_by_role("button", name="Get the manifest").click()
    manifest = json.loads(Path(caught.value.path()).read_text("utf-8"))
    assert manifest["format"] == "voxelmat-stack"
    assert {c["resin"] for c in manifest["channels"]} == {"measured-soft", "measured-hard"}
    layers = int(notebook.ask("print(bench.printing.stack.n_layers)"))
    assert all(len(c["sha256"]) == layers for c in manifest["channels"])
    assert notebook.ask("print(bench.printing.stack.manifest['job'])") == manifest["job"]
