"""Closed surfaces of labels: watertight for trimesh, shared interfaces, volumes that add up."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
import trimesh
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from volume_samples import sample

from voxelmat.errors import InputError
from voxelmat.io.label_surfaces import EDGE, label_surfaces
from voxelmat.io.mesh import read_mesh, write_stl
from voxelmat.io.volumes import export
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.volume import Volume

GRID = {"spacing": (0.1, 0.2, 0.3), "origin": (-1.0, 2.0, 3.0)}


def volume(values) -> Volume:
    values = np.asarray(values, dtype=np.uint16)
    return Volume(grid=VoxelGrid(shape=values.shape, **GRID), values=values)


def tri(mesh) -> trimesh.Trimesh:
    return trimesh.Trimesh(mesh.vertices, mesh.faces, process=False)


def touching_edges(values) -> int:
    """Slow twin: edges with a label on one diagonal only, counted one by one."""
    padded = np.pad(np.asarray(values), 1)
    count = 0
    for axis in range(3):
        cells = np.moveaxis(padded, axis, 0)
        for n, i, j in itertools.product(*(range(k - 1) for k in cells.shape)):
            (a, b), (c, d) = cells[n, i : i + 2, j : j + 2]
            one = a == d and a != 0 and b != a and c != a
            two = b == c and b != 0 and a != b and d != b
            count += bool(one or two)
    return count


@given(
    hnp.arrays(
        np.uint16, hnp.array_shapes(min_dims=3, max_dims=3, max_side=5), elements=st.integers(0, 3)
    )
)
@settings(max_examples=25, deadline=None)
def test_any_labels_give_closed_surfaces(values):
    made = label_surfaces(volume(values))
    assert made.touching == touching_edges(values)
    assert made.mended >= made.touching
    total = 0.0
    for label in np.unique(values[values > 0]):
        mesh = tri(made.of(int(label), "label"))
        assert mesh.is_watertight
        assert mesh.is_winding_consistent
        total += mesh.volume
    voxel = 0.1 * 0.2 * 0.3
    lots = np.count_nonzero(values) * voxel
    more = made.mended * (4 * EDGE**2 + 2 * 8 * EDGE**3) * voxel
    assert lots * (1 - 1e-12) - 1e-15 <= total <= lots + more + 1e-12


@pytest.mark.slow
def test_large_noise_gives_closed_surfaces():
    values = np.random.default_rng(2).integers(0, 6, (30, 30, 30)).astype(np.uint16)
    made = label_surfaces(volume(values))
    assert made.mended > made.touching > 10_000
    for label in range(1, 6):
        assert tri(made.of(label, "label")).is_watertight


def test_a_plain_surface_is_exact():
    """A block of two labels: 2 x 12 triangles of the six sides less the interface, no mending."""
    values = np.ones((2, 1, 1))
    values[1] = 2
    made = label_surfaces(volume(values))
    assert (made.touching, len(made.faces), len(made.vertices)) == (0, 22, 12)
    for label in (1, 2):
        mesh = tri(made.of(label, "half"))
        assert mesh.volume == pytest.approx(0.006, rel=1e-12)
        assert mesh.area == pytest.approx(2 * (0.02 + 0.03 + 0.06), rel=1e-12)


def test_the_interface_is_the_same_triangles():
    part = sample()
    made = label_surfaces(Volume.from_part(part))
    one, two = (made.of(n, "label") for n in (1, 2))

    def keys(mesh, turned=False):
        corners = np.round(mesh.triangles[:, ::-1] if turned else mesh.triangles, 12)
        # Rotated so that the least corner is first; the sense of turning is kept.
        rows = [tuple(map(tuple, c)) for c in corners.tolist()]
        return {min(r[k:] + r[:k] for k in range(3)) for r in rows}

    shared = keys(one) & keys(two, turned=True)
    pair = ((made.inner == 1) & (made.outer == 2)) | ((made.inner == 2) & (made.outer == 1))
    assert len(shared) == np.count_nonzero(pair) > 100


def test_voxel_sphere():
    """Check L4: a voxel sphere of 16 voxels across has 2176 of them (n/D 16: 2176)."""
    n = 16
    x = np.arange(n) + 0.5 - n / 2
    inside = (x[:, None, None] ** 2 + x[:, None] ** 2 + x**2) <= (n / 2) ** 2
    assert inside.sum() == 2176
    made = label_surfaces(volume(inside))
    assert made.touching == 0
    assert tri(made.of(1, "sphere")).volume == pytest.approx(2176 * 0.006, rel=1e-12)


def test_smoothing_brings_a_sphere_nearer_to_a_sphere():
    n, h = 24, 1.0
    x = np.arange(n) + 0.5 - n / 2
    r2 = x[:, None, None] ** 2 + x[:, None] ** 2 + x**2
    values = np.where(r2 <= 100, 1, 0) + np.where(r2 <= 36, 1, 0)
    grid = VoxelGrid(shape=(n, n, n), spacing=(h, h, h))
    stepped = label_surfaces(Volume(grid=grid, values=values.astype(np.uint16)))
    smooth = stepped.smoothed(10, 0.45 * np.ones(3))
    assert np.abs(smooth.vertices - stepped.vertices).max() <= 0.45 + 1e-12
    meshes = [tri(s.of(1, "shell")) for s in (stepped, smooth)]
    assert meshes[1].is_watertight
    # A voxel sphere has 1.5 times the area of the sphere in the limit; smoothed it has not.
    area = 4 * np.pi * (100 + 36)
    assert meshes[0].area > 1.4 * area
    assert meshes[1].area == pytest.approx(area, rel=0.08)
    assert meshes[1].volume == pytest.approx(4 / 3 * np.pi * (1000 - 216), rel=0.02)


@pytest.mark.parametrize("smooth", [0, 5])
def test_stl_files_read_by_trimesh(tmp_path, smooth):
    """Single precision of the file moves no vertex onto another."""
    part = sample()
    done = export(part, tmp_path / "grip.stl", smooth=smooth)
    assert [p.name for p in done.files] == [
        "grip.1-rigid-example.stl",
        "grip.2-soft-example.stl",
        "grip.3-33-3-rigid-example-66-7-soft-example.stl",
    ]
    assert sorted(tmp_path.iterdir()) == sorted(done.files)
    said = next(n for n in done.notes if "differs by at most" in n)
    share = float(said.split("at most ")[1].split(" %")[0]) / 100
    counts = np.bincount(part.labels.ravel())
    for label, file in enumerate(done.files, start=1):
        mesh = trimesh.load_mesh(file)
        assert mesh.is_watertight
        assert mesh.is_winding_consistent
        voxels = counts[label] * part.grid.voxel_volume
        assert abs(mesh.volume / voxels - 1) <= 1.01 * share + 1e-5
        if not smooth:
            assert share < 0.01
        (ours,) = read_mesh(file, "mm")
        assert ours.volume == pytest.approx(mesh.volume, rel=1e-6)


@pytest.mark.parametrize("ending", ["stl", "3mf"])
def test_icosphere_there_and_back(tmp_path, ending):
    """Check L4: icosphere(3) has the volume 4.15274082; STL and 3MF round trip."""
    sphere = trimesh.creation.icosphere(3)
    sphere.export(tmp_path / f"a.{ending}")
    (mesh,) = read_mesh(tmp_path / f"a.{ending}", "mm" if ending == "stl" else None)
    assert mesh.volume == pytest.approx(4.15274082, rel=1e-6)  # single precision in STL
    write_stl(mesh, tmp_path / "b.stl")
    back = trimesh.load_mesh(tmp_path / "b.stl")
    assert back.is_watertight
    assert back.volume == pytest.approx(4.15274082, rel=1e-6)


def test_no_surface_no_file(tmp_path):
    with pytest.raises(InputError, match="no surface"):
        export(volume(np.zeros((2, 2, 2))), tmp_path / "a.stl")
    assert not list(tmp_path.iterdir())
