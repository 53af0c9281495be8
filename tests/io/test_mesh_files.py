"""Mesh files: round trips, units, several bodies, and every kind of broken file."""

import struct

import numpy as np
import pytest
import trimesh
from hypothesis import given, settings
from hypothesis import strategies as st

from voxelmat.errors import FileFormatError, InputError, ResourceError
from voxelmat.io.mesh import read_mesh, write_stl
from voxelmat.model.mesh import TriangleMesh
from voxelmat.shape.solid import box, icosphere

BALL = icosphere(3, 10.0, name="ball")


def library_mesh(mesh):
    return trimesh.Trimesh(mesh.vertices, mesh.faces, process=False)


def export(mesh, path, kind):
    path.write_bytes(
        data
        if isinstance(data := library_mesh(mesh).export(file_type=kind), bytes)
        else data.encode()
    )
    return path


# Check value L4: icosphere(3) of trimesh has volume 4.15274082 at radius 1.
@pytest.mark.parametrize(
    ("kind", "ending", "tolerance"),
    [
        ("stl", "stl", 1e-6),
        ("stl_ascii", "stl", 1e-9),
        ("obj", "obj", 1e-6),
        ("ply", "ply", 1e-6),
        ("3mf", "3mf", 1e-9),
    ],
)
def test_round_trip_through_the_library(tmp_path, kind, ending, tolerance):
    path = export(BALL, tmp_path / f"ball.{ending}", kind)
    (mesh,) = read_mesh(path, None if ending == "3mf" else "mm")
    assert mesh.volume == pytest.approx(4152.74082, rel=tolerance + 1e-9)
    assert len(mesh.vertices) == 642
    assert len(mesh.faces) == 1280
    assert mesh.source == f"ball.{ending}"
    assert len(mesh.source_digest) == 64
    assert mesh.cautions == ()


def test_own_stl_is_read_back_and_by_the_library(tmp_path):
    write_stl(BALL, tmp_path / "ball.stl")
    (mesh,) = read_mesh(tmp_path / "ball.stl", "mm")
    assert mesh.volume == pytest.approx(4152.74082, rel=1e-6)
    other = trimesh.load_mesh(tmp_path / "ball.stl")
    assert other.is_watertight
    assert other.volume == pytest.approx(4152.74082, rel=1e-6)
    assert [p.name for p in tmp_path.iterdir()] == ["ball.stl"]
    with pytest.raises(ResourceError):
        write_stl(BALL, tmp_path / "missing" / "ball.stl")


@settings(deadline=None, max_examples=10)
@given(
    size=st.tuples(*[st.floats(1, 100, width=32)] * 3),
    low=st.tuples(*[st.floats(-50, 50, width=32)] * 3),
)
def test_any_box_survives_stl(tmp_path_factory, size, low):
    path = tmp_path_factory.mktemp("stl") / "box.stl"
    block = box(size, low)
    write_stl(block, path)
    (mesh,) = read_mesh(path, "mm")
    assert len(mesh.vertices) == 8
    assert mesh.volume == pytest.approx(block.volume, rel=1e-4)
    assert np.abs(np.array(mesh.bounds) - block.bounds).max() < 1e-4


def test_unit_is_asked_for(tmp_path):
    path = tmp_path / "ball.stl"
    write_stl(BALL, path)
    with pytest.raises(InputError, match=r"does not say its unit.*mm, cm, m") as caught:
        read_mesh(path)
    assert caught.value.key == "unit"
    with pytest.raises(InputError, match="'milimetre' is not a unit"):
        read_mesh(path, "milimetre")
    (mesh,) = read_mesh(path, "inch")
    assert mesh.size == pytest.approx([508, 508, 508], rel=1e-3)


@pytest.mark.parametrize(("unit", "warned"), [("um", True), ("mm", False), ("m", True)])
def test_implausible_size_is_cautioned(tmp_path, unit, warned):
    write_stl(BALL, tmp_path / "ball.stl")
    (mesh,) = read_mesh(tmp_path / "ball.stl", unit)
    assert len(mesh.cautions) == warned
    if warned:
        assert "Check the unit" in mesh.cautions[0]


def test_objects_of_obj_and_solids_of_ascii_stl_become_bodies(tmp_path):
    text = "".join(
        f"o {name}\nv {x} 0 0\nv {x + 3} 0 0\nv {x} 4 0\nv {x} 0 5\n"
        + "".join(
            f"f {a + n} {b + n} {c + n}\n"
            for a, b, c in ((1, 3, 2), (1, 2, 4), (1, 4, 3), (2, 3, 4))
        )
        for name, x, n in (("pad", 0, 0), ("core", 10, 4))
    )
    (tmp_path / "two.obj").write_text(text)
    core, pad = read_mesh(tmp_path / "two.obj", "mm")
    assert (core.name, pad.name) == ("core", "pad")
    assert core.volume == pytest.approx(10)
    assert core.bounds[0] == pytest.approx([10, 0, 0])

    one = library_mesh(pad).export(file_type="stl_ascii")
    two = library_mesh(core).export(file_type="stl_ascii")
    both = one.replace("solid ", "solid pad", 1) + two.replace("solid ", "solid core", 1)
    (tmp_path / "two.stl").write_text(both)
    assert [m.name for m in read_mesh(tmp_path / "two.stl", "mm")] == ["core", "pad"]


def test_cut_binary_stl(tmp_path):
    path = tmp_path / "ball.stl"
    write_stl(BALL, path)
    whole = path.read_bytes()
    assert len(whole) == 84 + 50 * 1280
    for keep in (len(whole) - 1, len(whole) // 2, 84):
        path.write_bytes(whole[:keep])
        with pytest.raises(FileFormatError, match=r"says it holds 1280 triangles.*cut short"):
            read_mesh(path, "mm")
    path.write_bytes(whole[:50])
    with pytest.raises(FileFormatError, match="84-byte head"):
        read_mesh(path, "mm")
    path.write_bytes(whole + b"more")
    with pytest.raises(FileFormatError, match="longer"):
        read_mesh(path, "mm")


def test_binary_stl_that_begins_with_solid(tmp_path):
    path = tmp_path / "ball.stl"
    write_stl(BALL, path)
    path.write_bytes(b"solid ball".ljust(80) + path.read_bytes()[80:])
    assert read_mesh(path, "mm")[0].volume == pytest.approx(4152.74082, rel=1e-6)


def test_cut_ascii_stl(tmp_path):
    path = export(BALL, tmp_path / "ball.stl", "stl_ascii")
    whole = path.read_text()
    for keep in (0.99, 0.5, 0.1):
        path.write_text(whole[: int(len(whole) * keep)])
        with pytest.raises(FileFormatError, match=r"cut short or damaged.*Export or copy"):
            read_mesh(path, "mm")
    path.write_text(whole.replace("vertex", "vertex x", 1))
    with pytest.raises(FileFormatError, match="cannot be read as STL"):
        read_mesh(path, "mm")


@pytest.mark.parametrize("ending", ["stl", "obj", "ply", "3mf"])
def test_empty_file(tmp_path, ending):
    path = tmp_path / f"part.{ending}"
    path.write_bytes(b"")
    with pytest.raises(FileFormatError, match="empty"):
        read_mesh(path, "mm")


def test_wrong_endings_and_missing_files(tmp_path):
    with pytest.raises(InputError, match=r"'\.step' is not read; export the mesh as STL"):
        read_mesh(tmp_path / "part.step", "mm")
    with pytest.raises(InputError, match="no such file"):
        read_mesh(tmp_path / "part.stl", "mm")
    zipped = export(BALL, tmp_path / "part.3mf", "3mf")
    for ending in ("stl", "ply", "obj"):
        path = tmp_path / f"zipped.{ending}"
        path.write_bytes(zipped.read_bytes())
        with pytest.raises(FileFormatError, match="ZIP file"):
            read_mesh(path, "mm")
    write_stl(BALL, tmp_path / "ball.stl")
    data = (tmp_path / "ball.stl").read_bytes()
    for ending, text in (("ply", "not PLY"), ("obj", "binary data"), ("3mf", "not a 3MF")):
        path = tmp_path / f"ball.{ending}"
        path.write_bytes(data)
        with pytest.raises(FileFormatError, match=text):
            read_mesh(path, "mm" if ending != "3mf" else None)


def test_vertices_that_are_not_numbers(tmp_path):
    write_stl(box((1, 1, 1)), tmp_path / "box.stl")
    data = bytearray((tmp_path / "box.stl").read_bytes())
    data[84 + 12 : 84 + 16] = struct.pack("<f", float("nan"))
    (tmp_path / "box.stl").write_bytes(bytes(data))
    with pytest.raises(FileFormatError, match=r"box\.stl.*not finite"):
        read_mesh(tmp_path / "box.stl", "mm")
    (tmp_path / "inf.obj").write_text("v 0 0 inf\nv 1 0 0\nv 0 1 0\nf 1 2 3\n")
    with pytest.raises(FileFormatError, match="not finite"):
        read_mesh(tmp_path / "inf.obj", "mm")


@pytest.mark.parametrize(
    "text",
    [
        "v 0 0 0\nv 1 0 0\nf 1 2 9\n",
        "v 0 0 zero\nv 1 0 0\nv 0 1 0\nf 1 2 3\n",
        "# nothing but a remark\n",
        "v 0 0 0\nv 1 0 0\nv 0 1 0\n",
    ],
)
def test_broken_obj(tmp_path, text):
    (tmp_path / "part.obj").write_text(text)
    with pytest.raises((FileFormatError, InputError)):
        read_mesh(tmp_path / "part.obj", "mm")


@pytest.mark.parametrize("kind", ["ply", "3mf"])
@pytest.mark.parametrize("keep", [0.3, 0.9])
def test_cut_ply_and_3mf(tmp_path, kind, keep):
    path = export(BALL, tmp_path / f"ball.{kind}", kind)
    data = path.read_bytes()
    path.write_bytes(data[: int(len(data) * keep)])
    with pytest.raises(FileFormatError):
        read_mesh(path, "mm" if kind == "ply" else None)


@settings(deadline=None, max_examples=25)
@given(data=st.binary(max_size=400), ending=st.sampled_from(["stl", "obj", "ply", "3mf"]))
def test_garbage_never_gives_a_traceback(tmp_path_factory, data, ending):
    path = tmp_path_factory.mktemp("junk") / f"junk.{ending}"
    path.write_bytes(data)
    with pytest.raises((FileFormatError, InputError)):
        read_mesh(path, None if ending == "3mf" else "mm")


@settings(deadline=None, max_examples=25)
@given(at=st.floats(0, 1), value=st.integers(0, 255), kind=st.sampled_from(["obj", "ply", "3mf"]))
def test_one_wrong_byte_is_an_error_or_a_mesh(tmp_path_factory, at, value, kind):
    path = export(icosphere(0), tmp_path_factory.mktemp("flip") / f"part.{kind}", kind)
    data = bytearray(path.read_bytes())
    data[int(at * (len(data) - 1))] = value
    path.write_bytes(bytes(data))
    try:
        meshes = read_mesh(path, None if kind == "3mf" else "mm")
    except (FileFormatError, InputError):
        return
    assert all(np.isfinite(m.vertices).all() for m in meshes)


def test_mesh_is_checked_and_frozen():
    with pytest.raises(InputError, match="three columns"):
        TriangleMesh(vertices=[[0, 0]], faces=[[0, 0, 0]])
    with pytest.raises(InputError, match="points at vertex -1"):
        TriangleMesh(vertices=[[0, 0, 0]], faces=[[0, 0, -1]])
    with pytest.raises(InputError, match="not finite"):
        TriangleMesh(vertices=[[0, 0, np.nan]], faces=[[0, 0, 0]])
    block = box((1, 2, 3))
    with pytest.raises(ValueError, match="read-only"):
        block.vertices[0, 0] = 5
    assert block == box((1, 2, 3))
    assert block != box((1, 2, 4))
    assert len({block, box((1, 2, 3))}) == 1
    assert block.area == pytest.approx(22)
    assert "1 x 2 x 3 mm" in repr(block)
    mirrored = block.transformed(np.diag([-1, 1, 1, 1]))
    assert mirrored.volume == pytest.approx(6)
    with pytest.raises(InputError, match="4 x 4"):
        block.transformed(np.eye(3))
    with pytest.raises(InputError, match="empty"):
        _ = TriangleMesh(vertices=[], faces=[]).bounds
