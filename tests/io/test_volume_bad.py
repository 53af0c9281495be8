"""Volume files that are damaged, cut short, hostile or not ours to read: a clear error each."""

from __future__ import annotations

import gzip
import json
import struct
import zlib

import numpy as np
import pytest
from volume_samples import SHAPE, SPACING, labels, sample

from voxelmat.errors import FileFormatError, InputError, ResourceError, VoxelmatError
from voxelmat.io import volume_limits
from voxelmat.io.axes import straighten
from voxelmat.io.volumes import export, import_volume
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.volume import Volume

REFUSED = (FileFormatError, InputError)
SINGLE = ["a.nrrd", "a.nii", "a.nii.gz", "a.vti", "a.3mf"]


@pytest.mark.parametrize("name", SINGLE)
def test_cut_short_anywhere(tmp_path, name):
    export(sample(), tmp_path / name)
    (tmp_path / f"{name}.labels.json").unlink()
    whole = (tmp_path / name).read_bytes()
    for share in np.linspace(0, 0.99, 12):
        (tmp_path / name).write_bytes(whole[: int(share * len(whole))])
        with pytest.raises(REFUSED):
            import_volume(tmp_path / name)


@pytest.mark.parametrize("name", SINGLE)
def test_changed_bytes_give_an_answer_or_an_error(tmp_path, name):
    """Never a traceback of another kind; 60 seeded changes a format."""
    export(sample(), tmp_path / name)
    (tmp_path / f"{name}.labels.json").unlink()
    whole = (tmp_path / name).read_bytes()
    rng = np.random.default_rng(3)
    for _ in range(60):
        data = bytearray(whole)
        reach = len(whole) if rng.random() < 0.5 else min(600, len(whole))
        data[int(rng.integers(reach))] = int(rng.integers(256))
        (tmp_path / name).write_bytes(data)
        try:
            import_volume(tmp_path / name, unit=None)
        except VoxelmatError:
            continue


def nifti_bytes(path, **changes) -> bytes:
    nib = pytest.importorskip("nibabel")
    image = nib.Nifti1Image(labels().astype(np.uint8), np.diag([*SPACING, 1]))
    image.header.set_xyzt_units("mm")
    for key, value in changes.items():
        image.header[key] = value
    nib.save(image, path)
    return path.read_bytes()


def test_a_bomb_is_refused_by_its_head(tmp_path):
    """30000^3 voxels in a file of a kilobyte: nothing is allocated."""
    data = bytearray(nifti_bytes(tmp_path / "a.nii"))
    data[42:48] = struct.pack("<3h", 30000, 30000, 30000)
    (tmp_path / "a.nii").write_bytes(data)
    with pytest.raises(FileFormatError, match="at most 4 GiB"):
        import_volume(tmp_path / "a.nii")
    data[42:48] = struct.pack("<3h", 1500, 1000, 1000)
    (tmp_path / "a.nii").write_bytes(data)
    with pytest.raises(FileFormatError, match="cut short or its head is false"):
        import_volume(tmp_path / "a.nii")
    (tmp_path / "a.nii.gz").write_bytes(gzip.compress(bytes(data)))
    with pytest.raises(FileFormatError, match="cut short or its head is false"):
        import_volume(tmp_path / "a.nii.gz")


def test_a_stream_that_goes_on_is_refused(tmp_path):
    export(sample(), tmp_path / "a.nrrd")
    head = (tmp_path / "a.nrrd").read_bytes().split(b"\n\n")[0] + b"\n\n"
    (tmp_path / "a.nrrd").write_bytes(head + gzip.compress(bytes(50_000_000)))
    with pytest.raises(FileFormatError, match="more than the 385 bytes"):
        import_volume(tmp_path / "a.nrrd")
    (tmp_path / "a.nrrd").write_bytes(head + gzip.compress(bytes(300)))
    with pytest.raises(FileFormatError, match="300 of the 385 bytes"):
        import_volume(tmp_path / "a.nrrd")


def test_a_vti_block_that_unpacks_to_more_is_refused(tmp_path):
    export(sample(), tmp_path / "a.vti")
    data = (tmp_path / "a.vti").read_bytes()
    start = data.index(b"   _") + 4
    packed = zlib.compress(bytes(10_000_000))
    array = struct.pack("<4Q", 1, 1 << 20, 770, len(packed)) + packed
    (tmp_path / "a.vti").write_bytes(data[:start] + array + b"</AppendedData></VTKFile>")
    with pytest.raises(FileFormatError, match="stated size"):
        import_volume(tmp_path / "a.vti")


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        (b'Extent="0 11 0 7 0 5"', b'Extent="0 99999 0 99999 0 99999"', "at most 4 GiB"),
        (b'Extent="0 11 0 7 0 5"', b'Extent="0 0 0 7 0 5"', "each axis needs a voxel"),
        (b'Extent="0 11 0 7 0 5"', b'Extent="0 11 0 7"', "needs 6 numbers"),
        (b'Origin="', b'Direction="1 .1 0 0 1 0 0 0 1" Origin="', "degrees off"),
        (b'Spacing="', b'Spacing="x ', "damaged"),
        (b"vtkZLibDataCompressor", b"vtkLZ4DataCompressor", "zlib is read"),
        (b'Name="label"', b'Name="other"', "Say which array"),
        (b'type="UInt16" Name="label"', b'type="String" Name="label"', "not read"),
        (b'offset="0"', b'offset="99999999"', "cut short"),
        (b"<VTKFile", b"<!DOCTYPE x><VTKFile", "entities"),
        (b'type="ImageData"', b'type="PolyData"', "no VTI file"),
        (b"UInt64", b"UInt16", "counters"),
    ],
)
def test_bad_vti(tmp_path, old, new, words):
    export(sample(), tmp_path / "a.vti")
    data = (tmp_path / "a.vti").read_bytes()
    assert old in data
    (tmp_path / "a.vti").write_bytes(data.replace(old, new))
    with pytest.raises(REFUSED, match=words):
        import_volume(tmp_path / "a.vti")


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        (b"NRRD0005", b"NRRD9999", "not an NRRD"),
        (b"sizes: 11 7 5", b"sizes: 99999 99999 99999", "at most 4 GiB"),
        (b"sizes: 11 7 5", b"sizes: 11 7 -5", "each axis needs a voxel"),
        (b"sizes: 11 7 5", b"sizes: 11 7", "three sizes"),
        (b"dimension: 3\nspace", b"dimension: 4\nspace", "has 4 axes"),
        (b"type: uint8", b"type: block", "not read"),
        (b"encoding: gzip", b"encoding: hex", "save it as raw or gzip"),
        (b"endian: little", b"data file: other.raw", "head and values as one file"),
        (b'space units: "mm" "mm" "mm"\n', b"", "unit of length"),
        (b'"mm" "mm" "mm"', b'"mm" "mm" "um"', "different units"),
        (b'"mm" "mm" "mm"', b'"s" "s" "s"', "no unit of length"),
        (b"(0.0423,0.0,0.0)", b"(0.0423,0.01,0.0)", "degrees off"),
        (b"(0.0423,0.0,0.0)", b"(0.0,0.0423,0.0)", "do not span space"),
        (b"(0.0423,0.0,0.0)", b"(0.0423,0.0)", "damaged|needs 3 vectors"),
        (b"(0.0423,0.0,0.0)", b"(nan,0.0,0.0)", "finite|span space"),
        (b"domain domain domain", b"domain domain time", "run along space"),
        (b"space directions", b"comment", "no size of the voxels"),
    ],
)
def test_bad_nrrd(tmp_path, old, new, words):
    export(sample(), tmp_path / "a.nrrd")
    (tmp_path / "a.nrrd.labels.json").unlink()
    data = (tmp_path / "a.nrrd").read_bytes()
    assert old in data
    (tmp_path / "a.nrrd").write_bytes(data.replace(old, new, 1))
    with pytest.raises(REFUSED, match=words):
        import_volume(tmp_path / "a.nrrd")


def test_bad_nifti(tmp_path):
    nib = pytest.importorskip("nibabel")
    file = tmp_path / "a.nii"
    nifti_bytes(file, xyzt_units=0)
    with pytest.raises(InputError, match="unit of length"):
        import_volume(file)
    assert import_volume(file, unit="um").grid.spacing[1] == pytest.approx(8.47e-5)
    nifti_bytes(file)
    with pytest.raises(InputError, match="given as 'cm', but the file states 'mm'"):
        import_volume(file, unit="cm")
    affine = np.diag([*SPACING, 1])
    affine[0, 1] = 0.02
    head = nib.Nifti1Header()
    head.set_xyzt_units("mm")
    nib.save(nib.Nifti1Image(labels().astype(np.uint8), affine, head), file)
    with pytest.raises(InputError, match="oblique"):
        import_volume(file)
    series = np.zeros((*SHAPE, 3), dtype=np.uint8)
    nib.save(nib.Nifti1Image(series, np.eye(4), head), file)
    with pytest.raises(InputError, match="series"):
        import_volume(file)
    nib.save(nib.Nifti1Image(series[:, :, 0, 0], np.eye(4), head), file)
    with pytest.raises(InputError, match="2 axes"):
        import_volume(file)
    colour = np.zeros(SHAPE, dtype=[("R", "u1"), ("G", "u1"), ("B", "u1")])
    nib.save(nib.Nifti1Image(colour, np.eye(4)), file)
    with pytest.raises(InputError, match="one number a voxel"):
        import_volume(file)
    nib.save(nib.Nifti1Image(labels().astype(np.complex64), np.eye(4)), file)
    with pytest.raises(InputError, match="one number a voxel"):
        import_volume(file)
    image = nib.Nifti1Image(labels().astype(np.uint8), None, head)
    image.header["sform_code"] = image.header["qform_code"] = 0
    nib.save(image, file)
    with pytest.raises(InputError, match="where its voxels lie"):
        import_volume(file)


def test_scaled_values_are_grey(tmp_path):
    nib = pytest.importorskip("nibabel")
    nifti_bytes(tmp_path / "a.nii", scl_slope=0.5, scl_inter=-1.0)
    head = bytearray((tmp_path / "a.nii").read_bytes())
    head[112:120] = struct.pack("<2f", 0.5, -1.0)
    (tmp_path / "a.nii").write_bytes(head)
    volume = import_volume(tmp_path / "a.nii")
    assert not volume.is_labels
    np.testing.assert_array_equal(volume.values, labels() * 0.5 - 1)
    np.testing.assert_array_equal(volume.values, nib.load(tmp_path / "a.nii").get_fdata())


def edit_zarr(folder, change):
    place = folder / "zarr.json"
    data = json.loads(place.read_text())
    change(data)
    place.write_text(json.dumps(data))


@pytest.mark.parametrize(
    ("inner", "change", "words"),
    [
        ("0", lambda d: d.update(shape=[99999] * 3), "at most 4 GiB"),
        ("0", lambda d: d["chunk_grid"]["configuration"].update(chunk_shape=[900] * 3), "chunks"),
        ("0", lambda d: d.update(codecs=[{"name": "bytes"}, {"name": "other"}]), "no whole|packed"),
        ("", lambda d: d["attributes"]["ome"].pop("multiscales"), "metadata are damaged"),
        ("", lambda d: d["attributes"].pop("ome"), "metadata are damaged"),
        (
            "",
            lambda d: d["attributes"]["ome"]["multiscales"][0]["axes"][0].update(unit="second"),
            "different units",
        ),
        (
            "",
            lambda d: [a.pop("unit") for a in d["attributes"]["ome"]["multiscales"][0]["axes"]],
            "unit of length",
        ),
        (
            "",
            lambda d: d["attributes"]["ome"]["multiscales"][0]["axes"][0].update(type="time"),
            "along x, y and z",
        ),
        (
            "",
            lambda d: d["attributes"]["ome"]["multiscales"][0]["datasets"][0].update(
                coordinateTransformations=[{"type": "affine"}]
            ),
            "'affine' is not read",
        ),
        (
            "",
            lambda d: d["attributes"]["ome"]["multiscales"][0]["datasets"][0].update(
                coordinateTransformations=[{"type": "scale", "scale": [1, 1]}]
            ),
            "needs 3 values",
        ),
    ],
)
def test_bad_omezarr(tmp_path, inner, change, words):
    pytest.importorskip("zarr")
    folder = tmp_path / "a.ome.zarr"
    export(sample(), folder)
    edit_zarr(folder / "labels" / "material" / inner, change)
    with pytest.raises(REFUSED, match=words):
        import_volume(folder)


def test_lost_and_damaged_chunks(tmp_path):
    """The format reads a chunk that is missing as zeros; the table's digest notices."""
    pytest.importorskip("zarr")
    folder = tmp_path / "a.ome.zarr"
    export(sample(), folder)
    (chunk,) = (folder / "labels" / "material" / "0" / "c").rglob("0/0/0")
    data = chunk.read_bytes()
    chunk.write_bytes(data[: len(data) // 2])
    with pytest.raises(FileFormatError, match="no whole OME-Zarr"):
        import_volume(folder)
    chunk.unlink()
    assert any("lost" in note for note in import_volume(folder).notes)


def test_something_else_in_the_place_is_left_alone(tmp_path):
    pytest.importorskip("zarr")
    folder = tmp_path / "a.ome.zarr"
    folder.mkdir()
    (folder / "diary.txt").write_text("mine")
    with pytest.raises(InputError, match="no Zarr folder"):
        export(sample(), folder)
    assert (folder / "diary.txt").read_text() == "mine"


def test_limits_follow_the_constant(tmp_path, monkeypatch):
    export(sample(), tmp_path / "a.nrrd")
    monkeypatch.setattr(volume_limits, "MAX_BYTES", 300)
    with pytest.raises(FileFormatError, match="are read"):
        import_volume(tmp_path / "a.nrrd")


@pytest.mark.parametrize("name", [*SINGLE, "a.ome.zarr", "a.stl"])
def test_a_folder_that_is_not_there(tmp_path, name):
    with pytest.raises(ResourceError):
        export(sample(), tmp_path / "missing" / name)
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize("name", ["a.nrrd", "a.vti", "a.3mf", "a.stl", "a.nii.gz"])
def test_a_write_that_fails_leaves_the_old_file(tmp_path, monkeypatch, name):
    """The disk is full while the new file is written."""
    export(sample(), tmp_path / name)
    before = {p.name: p.read_bytes() for p in tmp_path.iterdir()}

    def full(*args, **kwargs):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("pathlib.Path.replace", full)
    with pytest.raises(ResourceError, match="disk is full"):
        export(sample(partly_full=True), tmp_path / name)
    assert {p.name: p.read_bytes() for p in tmp_path.iterdir()} == before


@pytest.mark.parametrize(("name", "package"), [("a.nii", "nibabel"), ("a.ome.zarr", "zarr")])
def test_a_missing_package_is_named(tmp_path, monkeypatch, name, package):
    monkeypatch.setitem(__import__("sys").modules, package, None)
    with pytest.raises(InputError, match=rf"{package}.*voxelmat\[formats\]"):
        export(sample(), tmp_path / name)
    assert not list(tmp_path.iterdir())


def test_unknown_endings_and_formats(tmp_path):
    with pytest.raises(InputError, match="ending"):
        export(sample(), tmp_path / "a.step")
    with pytest.raises(InputError, match="no format 'x'"):
        export(sample(), tmp_path / "a.vti", "x")
    with pytest.raises(InputError, match="no such file"):
        import_volume(tmp_path / "a.vti")
    (tmp_path / "a.stl").write_bytes(b"solid")
    with pytest.raises(InputError, match="surfaces, not voxels"):
        import_volume(tmp_path / "a.stl")


@pytest.mark.parametrize(
    "text", ["{", "[]", '{"format": "x"}', '{"format": "voxelmat label table"}', "[" * 5000]
)
def test_a_bad_table_beside_is_said(tmp_path, text):
    export(sample(), tmp_path / "a.nrrd")
    (tmp_path / "a.nrrd.labels.json").write_text(text)
    with pytest.raises(FileFormatError, match=r"label table|labels\.json"):
        import_volume(tmp_path / "a.nrrd")


def test_nifti_counts_to_32767(tmp_path):
    pytest.importorskip("nibabel")
    grid = VoxelGrid(shape=(40000, 1, 1), spacing=(0.1, 0.1, 0.1))
    long = Volume(grid=grid, values=np.ones(grid.shape, dtype=np.uint16))
    with pytest.raises(InputError, match="32767"):
        export(long, tmp_path / "a.nii")
    export(long, tmp_path / "a.nrrd")
    assert import_volume(tmp_path / "a.nrrd").grid == grid


def test_whole_numbers_too_large_are_refused():
    grid = VoxelGrid(shape=(2, 1, 1), spacing=(1, 1, 1))
    with pytest.raises(InputError, match="too large"):
        Volume(grid=grid, values=np.array([0, 1 << 30]).reshape(2, 1, 1))
    assert not Volume(grid=grid, values=np.array([0, 70000]).reshape(2, 1, 1)).is_labels


def test_straighten_keeps_every_voxel_in_its_place():
    """All 48 ways to store a straight volume give the same array and place."""
    from itertools import permutations, product

    values = labels((4, 3, 2))
    h, first = np.array([1.0, 2.0, 3.0]), np.array([10.0, 20.0, 30.0])
    for order in permutations(range(3)):
        for signs in product((1, -1), repeat=3):
            stored = values.transpose(order)[tuple(slice(None, None, s) for s in signs)]
            directions = np.zeros((3, 3))
            centre = first.copy()
            for column, (axis, sign) in enumerate(zip(order, signs, strict=True)):
                directions[axis, column] = sign * h[axis]
                if sign < 0:
                    centre[axis] += h[axis] * (values.shape[axis] - 1)
            back = straighten(stored, directions, centre, "x")
            np.testing.assert_array_equal(back.values, values)
            assert back.spacing == tuple(h)
            np.testing.assert_allclose(back.origin, first - h / 2)
