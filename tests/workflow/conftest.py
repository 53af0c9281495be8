"""The made-up grip, and the small design under a short name, for the tests of this folder."""

from __future__ import annotations

import importlib.util
import sys
from pathlib import Path

import numpy as np
import pytest

from voxelmat.io.mesh import write_stl
from voxelmat.model.mesh import TriangleMesh
from voxelmat.shape.solid import box

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


@pytest.fixture
def hollow_pad(design):
    """The design's pad written anew, with a sealed cavity of 4 x 4 x 2 mm in it."""
    outer, inner = box((12.0, 8.0, 4.0), (0.0, 0.0, 2.0)), box((4.0, 4.0, 2.0), (4.0, 2.0, 3.0))
    mesh = TriangleMesh(
        vertices=np.concatenate([outer.vertices, inner.vertices]),
        faces=np.concatenate([outer.faces, inner.faces[:, ::-1] + len(outer.vertices)]),
        name="pad",
    )
    write_stl(mesh, design.parent / "pad.stl")
