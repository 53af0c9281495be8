"""The small design for all folders; on the CI machine (VOXELMAT_CI=1) a skip is a failure."""

from __future__ import annotations

import importlib.util
import os
from pathlib import Path

import pytest
from hypothesis import settings

STRICT = bool(os.environ.get("VOXELMAT_CI"))

# The same examples each time, so that a run that passed passes again. To look for new ones:
# pytest --hypothesis-profile=explore
settings.register_profile("steady", derandomize=True)
settings.register_profile("explore", derandomize=False)
settings.load_profile("steady")


@pytest.fixture
def small_design(tmp_path):
    """Path of the small design of `tests/small_design.py`."""
    source = Path(__file__).with_name("small_design.py")
    spec = importlib.util.spec_from_file_location("small_design", source)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module.write_small_design(tmp_path)


def _harden(report) -> None:
    if STRICT and report.skipped and not hasattr(report, "wasxfail"):
        report.outcome = "failed"
        report.longrepr = f"VOXELMAT_CI is set, so nothing may be skipped: {report.longrepr}"


@pytest.hookimpl(hookwrapper=True)
def pytest_runtest_makereport(item, call):
    outcome = yield
    _harden(outcome.get_result())


@pytest.hookimpl(hookwrapper=True)
def pytest_make_collect_report(collector):
    outcome = yield
    _harden(outcome.get_result())
