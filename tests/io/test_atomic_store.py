"""Atomic writes and parts on disk: whole, or not there, or refused."""

from __future__ import annotations

import errno
import json

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from voxelmat.errors import FileFormatError, ResourceError
from voxelmat.io.atomic import aside, write_json, write_text
from voxelmat.io.store import load_part, save_part
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.laws import LogMix, Voigt
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part


def material(name: str, modulus: float, nu: float = 0.3) -> Material:
    return Material(
        name=name,
        kind="rigid",
        E=Constant(value=modulus, unit="MPa"),
        nu=Constant(value=nu),
        density=Constant(value=1.2e-9, unit="tonne/mm3"),
    )


def sample(labels, occupancy=None, distance=None) -> Part:
    shape = labels.shape
    body = np.zeros(shape, dtype=bool)
    body[0] = labels[0] > 0
    return Part(
        grid=VoxelGrid(shape=shape, spacing=(0.5, 0.4, 0.3), origin=(1, 2, 3)),
        resins=(material("stiff", 2000.0), material("soft", 1.0, 0.49)),
        palette=(EMPTY, Blend.pure("stiff"), Blend.of({"stiff": 1, "soft": 3})),
        labels=labels,
        occupancy=occupancy,
        distance=distance,
        bodies={"core": body},
    )


@settings(deadline=None, max_examples=20)
@given(
    labels=hnp.arrays(np.uint16, (3, 4, 2), elements=st.integers(0, 2)),
    distance=hnp.arrays(np.int8, (3, 4, 2)),
)
def test_a_part_comes_back_equal(labels, distance, tmp_path_factory):
    path = tmp_path_factory.mktemp("store") / "part.npz"
    fill = np.where(labels > 0, 200, 0).astype(np.uint8)
    part = sample(labels, fill, distance)
    save_part(part, path)
    again = load_part(path, LogMix())
    assert again == part
    assert again.masses() == part.masses()
    np.testing.assert_array_equal(again.bodies["core"], part.bodies["core"])


def test_a_cut_or_changed_or_foreign_file_is_refused(tmp_path):
    path = tmp_path / "part.npz"
    save_part(sample(np.ones((2, 2, 2), np.uint16)), path)
    data = path.read_bytes()
    path.write_bytes(data[: len(data) // 2])
    with pytest.raises(FileFormatError, match="not a whole part file"):
        load_part(path, LogMix())
    path.write_bytes(data)
    with pytest.raises(FileFormatError, match="blend law"):
        load_part(path, Voigt())


def test_a_part_of_a_newer_format_is_refused(tmp_path):
    path = tmp_path / "part.npz"
    np.savez(path, head=np.array(json.dumps({"format": 99})))
    with pytest.raises(FileFormatError, match="format 99"):
        load_part(path, LogMix())


def test_a_full_disk_leaves_the_old_file(tmp_path):
    path = tmp_path / "a.txt"
    write_text(path, "before")

    def half_a_file():
        with aside(path) as temporary:
            temporary.write_text("half")
            raise OSError(errno.ENOSPC, "no space")

    with pytest.raises(ResourceError, match="disk is full"):
        half_a_file()
    assert path.read_text() == "before"
    assert [p.name for p in tmp_path.iterdir()] == ["a.txt"]


def test_nan_never_reaches_a_json_file(tmp_path):
    with pytest.raises(ValueError, match="JSON"):
        write_json(tmp_path / "a.json", {"x": float("nan")})
    assert not list(tmp_path.iterdir())


def test_a_missing_folder_is_explained(tmp_path):
    with pytest.raises(ResourceError, match="does not exist"):
        write_text(tmp_path / "none" / "a.txt", "x")
