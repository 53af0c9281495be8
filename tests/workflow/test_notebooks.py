"""Every notebook runs from top to bottom, coarse, and is kept without outputs."""

from __future__ import annotations

import json
import os
from pathlib import Path

import pytest

nbclient = pytest.importorskip("nbclient")
import nbformat  # noqa: E402

ROOT = Path(__file__).resolve().parents[2]
FOLDER = ROOT / "notebooks"
BOOKS = sorted(FOLDER.glob("*.ipynb"))

#: What the tests set in the cell tagged "parameters": name to value. PLACE is a folder of the test.
PLACE = "a folder of the test"
COARSE = {
    "bracket.ipynb": {"SPACING_MM": 2.7, "ITERATIONS": 5, "VOLUME": 0.8, "OUT": PLACE},
    "designs.ipynb": {
        "NAMES": ["bracket", "pad"], "COARSER": 2.0, "ITERATIONS": 3, "FRONT": [0.35, 0.5],
        "OUT": PLACE,
    },
    "grip.ipynb": {
        "SPACING_MM": 3.0, "PRINTER": "invented-coarse", "SUPPORT": "machine", "OUT": PLACE,
    },
    "tray.ipynb": {
        "PRINTER": "invented-coarse", "COPIES": {"foot": 1, "buffer": 1}, "MARKS": False,
        "OUT": PLACE,
    },
    "workbench.ipynb": {"SPACING_MM": 4.0, "WORK": PLACE},
}  # fmt: skip
#: How many live views each shows, how many other pictures, and what it leaves in PLACE.
SHOWN = {
    "bracket.ipynb": 2, "designs.ipynb": 1, "grip.ipynb": 4, "tray.ipynb": 1, "workbench.ipynb": 1,
}  # fmt: skip
PICTURES = {
    "bracket.ipynb": 1, "designs.ipynb": 3, "grip.ipynb": 2, "tray.ipynb": 1, "workbench.ipynb": 0,
}  # fmt: skip
LEFT = {
    "bracket.ipynb": "bracket.npz",
    "designs.ipynb": "front/front.json",
    "grip.ipynb": "report.html",
    "tray.ipynb": "ticket.html",
    "workbench.ipynb": "grip.toml",
}


def _read(path):
    return nbformat.reads(path.read_text(encoding="utf-8"), as_version=4)


def test_there_are_notebooks_and_each_has_its_settings():
    assert [b.name for b in BOOKS] == sorted(COARSE)


@pytest.mark.parametrize("path", BOOKS, ids=lambda p: p.name)
def test_kept_without_outputs_and_paths(path):
    book = _read(path)
    nbformat.validate(book)
    for cell in book.cells:
        if cell.cell_type == "code":
            assert cell.outputs == []
            assert cell.execution_count is None
    assert "widgets" not in book.metadata
    assert str(ROOT) not in json.dumps(book)
    assert book.cells[1].source.startswith("# Change this first.")


@pytest.mark.timeout(300)
@pytest.mark.parametrize("path", BOOKS, ids=lambda p: p.name)
def test_runs_from_top_to_bottom(path, tmp_path, monkeypatch):
    monkeypatch.setenv("PYTHONPATH", os.pathsep.join([str(ROOT), os.environ.get("PYTHONPATH", "")]))
    monkeypatch.delenv("MPLBACKEND", raising=False)  # the kernel shows plots by its own
    book = _read(path)
    (cell,) = [c for c in book.cells if "parameters" in c.metadata.get("tags", [])]
    lines = cell.source.splitlines()
    place = tmp_path / "out"
    for name, given in COARSE[path.name].items():
        value = str(place) if given is PLACE else given
        (at,) = [n for n, line in enumerate(lines) if line.startswith(f"{name} = ")]
        lines[at] = f"{name} = {value!r}"
    cell.source = "\n".join(lines)
    client = nbclient.NotebookClient(
        book, timeout=280, kernel_name="python3", resources={"metadata": {"path": str(FOLDER)}}
    )
    client.execute()
    outputs = [o for c in book.cells if c.cell_type == "code" for o in c.outputs]
    assert not [o for o in outputs if o.output_type == "error"]
    warned = [o.text for o in outputs if o.get("name") == "stderr"]
    assert not warned, warned
    views = [o for o in outputs if "application/vnd.jupyter.widget-view+json" in o.get("data", {})]
    assert len(views) == SHOWN[path.name]
    assert all("image/jpeg" in v["data"] for v in views)  # a picture without a kernel
    pictures = [o for o in outputs if "image/png" in o.get("data", {})]
    assert len(pictures) == PICTURES[path.name]
    assert (place / LEFT[path.name]).stat().st_size > 1000
    assert not list(FOLDER.glob("*/.*")), "something was written beside the demo's files"
