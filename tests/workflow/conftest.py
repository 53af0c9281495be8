"""The made-up grip, and the small design under a short name, for the tests of this folder."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path

import pytest

# The samples shared between folders are importable.
sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
_SOURCE = Path(__file__).resolve().parents[1] / "fabricated.py"


@pytest.fixture(scope="session")
def made_up():
    """The module `tests/fabricated.py`."""
    spec = importlib.util.spec_from_file_location("fabricated", _SOURCE)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture
def design(small_design):
    return small_design
