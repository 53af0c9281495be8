"""The made-up grip for the tests of this folder."""

from __future__ import annotations

import importlib.util
import os
from pathlib import Path

import pytest

_SOURCE = Path(__file__).resolve().parents[1] / "fabricated.py"


@pytest.fixture(scope="session")
def made_up():
    """The module `tests/fabricated.py`."""
    spec = importlib.util.spec_from_file_location("fabricated", _SOURCE)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="session")
def gl():
    """A machine that can draw with OpenGL; CI installs it, so there a skip is a failure."""
    from voxelmat.workbench.glprobe import probe_gl

    probe = probe_gl()
    if not probe.works:
        if os.environ.get("VOXELMAT_CI") == "1":
            pytest.fail(f"VOXELMAT_CI is set, so this may not be skipped: {probe.reason}")
        pytest.skip(probe.reason)
