"""`voxelmat convert`: part stores, run folders and volume files into open formats."""

from __future__ import annotations

import json
from itertools import pairwise

import numpy as np
import pytest
from volume_samples import sample

from voxelmat.cli import main
from voxelmat.io.bigpart_write import save_big_part
from voxelmat.io.store import save_part
from voxelmat.io.volumes import export, import_volume, volume_to_part
from voxelmat.model.curve import PairCurve
from voxelmat.model.laws import CalibratedCurve, Reuss
from voxelmat.model.volume import Volume


def convert(capsys, *words):
    code = main(["convert", "--quiet", "--json", *map(str, words)])
    return code, json.loads(capsys.readouterr().out)


@pytest.mark.parametrize("law", [None, Reuss()])
def test_a_part_store_and_a_run_folder(tmp_path, capsys, law):
    part = sample(partly_full=True)
    if law is not None:
        part = part.replace(law=law)
    save_part(part, tmp_path / "part.npz")
    for source in (tmp_path / "part.npz", tmp_path):
        code, data = convert(capsys, source, tmp_path / "out.vti")
        assert code == 0
        assert data["format"] == "vti"
        assert data["grid"]["shape"] == list(part.grid.shape)
        assert any("reuss" in note for note in data["notes"]) == (law is not None)
        back = volume_to_part(tmp_path / "out.vti", law=law)
        assert back == part


def test_a_store_larger_than_memory(tmp_path, capsys):
    part = sample(partly_full=True)
    save_big_part(part, tmp_path / "big", kind="maps")
    code, _ = convert(capsys, tmp_path / "big", tmp_path / "out.ome.zarr")
    assert code == 0
    assert volume_to_part(tmp_path / "out.ome.zarr") == part


def test_round_all_formats(tmp_path, capsys):
    """From one format to the next, and back: the same part."""
    part = sample()
    export(part, tmp_path / "1.nrrd")
    names = ["1.nrrd", "2.nii.gz", "3.ome.zarr", "4.vti", "5.3mf", "6.nrrd"]
    for a, b in pairwise(names):
        code, data = convert(capsys, tmp_path / a, tmp_path / b)
        assert code == 0
        assert data["files"][0] == str(tmp_path / b)
    assert volume_to_part(tmp_path / "6.nrrd") == part
    assert (tmp_path / "6.nrrd").read_bytes() == (tmp_path / "1.nrrd").read_bytes()


def test_surfaces_and_words(tmp_path, capsys):
    export(sample(), tmp_path / "a.nrrd")
    assert main(["convert", "--quiet", str(tmp_path / "a.nrrd"), str(tmp_path / "a.stl")]) == 0
    said = capsys.readouterr().out
    assert "11 x 7 x 5 voxels of 0.0423 x 0.0847 x 0.027 mm, written as stl" in said
    assert "a.1-rigid-example.stl" in said
    assert "note: STL holds single precision and no unit" in said


def test_a_unit_for_a_file_that_does_not_say(tmp_path, capsys):
    nrrd = pytest.importorskip("nrrd")
    nrrd.write(
        str(tmp_path / "a.nrrd"),
        np.ones((2, 3, 4), dtype=np.uint8),
        {"space directions": np.eye(3), "space dimension": 3},
    )
    code, data = convert(capsys, tmp_path / "a.nrrd", tmp_path / "b.vti")
    assert code == 3
    assert data["key"] == "unit"
    code, _ = convert(capsys, tmp_path / "a.nrrd", tmp_path / "b.vti", "--unit", "um")
    assert code == 0
    assert import_volume(tmp_path / "b.vti").grid.spacing == (1e-3, 1e-3, 1e-3)


def test_grey_values_become_one_label(tmp_path, capsys):
    grid = sample().grid
    values = np.random.default_rng(1).normal(size=grid.shape)
    export(Volume(grid=grid, values=values, name="scan"), tmp_path / "a.nrrd")
    code, data = convert(capsys, tmp_path / "a.nrrd", tmp_path / "b.stl")
    assert code == 3
    assert "thresholds" in data["error"]
    more = ("--low", "0.5", "--high", "2")
    code, _ = convert(capsys, tmp_path / "a.nrrd", tmp_path / "b.vti", *more)
    assert code == 0
    back = import_volume(tmp_path / "b.vti")
    np.testing.assert_array_equal(back.values, (values >= 0.5) & (values <= 2))
    assert back.names == {1: "0.5 to 2"}


def test_bad_input(tmp_path, capsys):
    part = sample()
    save_part(part, tmp_path / "part.npz")
    ends = (2400.0, 0.9)
    curve = PairCurve(
        first="rigid-example",
        second="soft-example",
        fraction=(0.0, 1.0),
        E=ends,
        E_low=ends,
        E_high=ends,
    )
    save_part(part.replace(law=CalibratedCurve(curves=(curve,))), tmp_path / "own.npz")
    for source, target, more, words in (
        ("none.npz", "a.vti", (), "no part here"),
        ("none.vti", "a.vti", (), "no such file"),
        ("part.npz", "a.step", (), "ending"),
        ("part.npz", "a.stl", ("--smooth", "-1"), "0 or more"),
        ("own.npz", "a.vti", (), "--design"),
    ):
        code, data = convert(capsys, tmp_path / source, tmp_path / target, *more)
        assert code == 3
        assert words in data["error"]
    assert sorted(p.name for p in tmp_path.iterdir()) == ["own.npz", "part.npz"]
