"""The demo's input files: small, closed, made by the script beside them, and marked as invented."""

from __future__ import annotations

import importlib.util
from pathlib import Path

import numpy as np
import pytest
import trimesh

from voxelmat.io.design import load_design

FOLDER = Path(__file__).resolve().parents[2] / "notebooks" / "grip"


@pytest.fixture(scope="module")
def maker():
    spec = importlib.util.spec_from_file_location("make_inputs", FOLDER / "make_inputs.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.mark.parametrize("name", ["shaft", "core", "pad"])
def test_each_mesh_is_closed_small_and_what_the_script_makes(maker, name):
    path = FOLDER / f"{name}.stl"
    assert path.stat().st_size < 300_000
    kept = trimesh.load_mesh(path)
    made = getattr(maker, name)()
    assert kept.is_watertight
    assert kept.volume == pytest.approx(made.volume, rel=1e-6)
    assert kept.bounds == pytest.approx(made.bounds, abs=1e-5)
    assert len(kept.faces) == len(made.faces)


def test_bodies_touch_without_a_gap_or_an_overlap(maker):
    shaft, core, pad = maker.shaft(), maker.core(), maker.pad()
    # All cut with the same corners, so the shared walls cancel: the sum is the whole grip.
    rings = np.array([r[1] for r in maker.core_profile()])
    inner = {tuple(np.round(v, 6)) for v in pad.vertices if np.hypot(v[1], v[2]) < 11.5}
    outer = {tuple(np.round(v, 6)) for v in core.vertices}
    assert inner <= outer
    assert rings.min() == maker.CORE_RADIUS
    bore = {tuple(np.round(v, 6)) for v in shaft.vertices if abs(v[1]) + abs(v[2]) > 1}
    assert bore <= outer


def test_the_pressure_map_is_the_scripts_lopsided_and_called_invented(maker):
    text = (FOLDER / "palm.csv").read_text(encoding="utf-8")
    assert "INVENTED" in text
    kept = np.loadtxt(FOLDER / "palm.csv", delimiter=",", comments="#")
    assert kept == pytest.approx(maker.palm_pressure(), abs=0.051)
    assert kept.sum() * 1e-3 * maker.CELL**2 == pytest.approx(maker.PALM_FORCE, rel=1e-3)
    for mirrored in (kept[::-1], kept[:, ::-1]):  # a flipped map would show
        assert np.abs(mirrored - kept).sum() > 0.5 * kept.sum()


def test_the_design_reads_and_says_that_it_is_invented():
    design = load_design(FOLDER / "grip.toml")
    assert design.invented
    assert {"shaft.stl", "core.stl", "pad.stl", "palm.csv"} <= set(design.inputs)
    # at least 100,000 voxels of the printed bodies (volumes of the meshes over that of a voxel)
    volume = sum(trimesh.load_mesh(FOLDER / f"{n}.stl").volume for n in ("core", "pad"))
    assert volume / np.prod(design.spacing_mm) > 100_000
