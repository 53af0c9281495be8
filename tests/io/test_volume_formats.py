"""Each volume format, read back by an independent library and by ourselves."""

from __future__ import annotations

import json
import math
from pathlib import Path

import numpy as np
import pytest
import trimesh
from volume_samples import ORIGIN, SHAPE, SPACING, labels, sample

from voxelmat.errors import InputError
from voxelmat.io.volumes import export, import_volume, volume_to_part
from voxelmat.model.blend import Blend
from voxelmat.model.volume import Volume

CENTRE = tuple(o + h / 2 for o, h in zip(ORIGIN, SPACING, strict=True))
ALL = ["a.nrrd", "a.nii", "a.nii.gz", "a.vti", "a.ome.zarr", "a.3mf"]
HOLDS_ALL = ["a.vti", "a.ome.zarr"]


@pytest.mark.parametrize("name", ALL)
def test_a_part_comes_back_exactly(tmp_path, name):
    part = sample()
    done = export(part, tmp_path / name)
    assert [p.name for p in done.files] == [name, name + ".labels.json"]
    back = volume_to_part(tmp_path / name)
    assert back.grid == part.grid
    assert back == part
    assert back.name == part.name


@pytest.mark.parametrize("name", ["part.nrrd", "part.3mf", "part.vti"])
def test_a_bought_in_material_holds_for_any_time(tmp_path, name):
    """Its record has no longest duration, and no hottest temperature."""
    part = sample()
    steel = part.resins[0].replace(
        max_duration_s=math.inf, temperature_range_degC=(-273.15, math.inf)
    )
    part = part.replace(resins=(steel, part.resins[1]))
    export(part, tmp_path / name)
    assert import_volume(tmp_path / name).resins == part.resins


@pytest.mark.parametrize("name", ALL)
def test_the_table_inside_the_file_is_enough(tmp_path, name):
    part = sample()
    done = export(part, tmp_path / name)
    done.files[1].unlink()
    assert volume_to_part(tmp_path / name) == part


@pytest.mark.parametrize("name", ALL)
def test_partly_full_voxels_are_kept_or_said_to_be_lost(tmp_path, name):
    part = sample(partly_full=True)
    done = export(part, tmp_path / name)
    back = volume_to_part(tmp_path / name)
    if name in HOLDS_ALL:
        assert back == part
        assert not any("half full" in n for n in done.notes)
    else:
        kept = np.where(part.occupancy >= 128, part.labels, 0)
        np.testing.assert_array_equal(back.labels, kept)
        assert any("half full" in n for n in done.notes)


@pytest.mark.parametrize("name", ALL)
def test_the_same_part_gives_the_same_values_again(tmp_path, name):
    """A file is replaced as a whole, and nothing is left beside it."""
    export(sample(partly_full=True), tmp_path / name)
    export(sample(), tmp_path / name)
    assert volume_to_part(tmp_path / name) == sample()
    assert sorted(p.name for p in tmp_path.iterdir()) == [name, name + ".labels.json"]


@pytest.mark.parametrize("name", ALL)
def test_changed_labels_are_noticed(tmp_path, name):
    """Foreign labels under our table: read as they are, with a note."""
    part = sample()
    export(part, tmp_path / name)
    other = part.replace(labels=np.where(part.labels == 3, 2, part.labels))
    table = (tmp_path / f"{name}.labels.json").read_text()
    export(other, tmp_path / name)
    (tmp_path / f"{name}.labels.json").write_text(table)
    back = import_volume(tmp_path / name)
    np.testing.assert_array_equal(back.values, other.labels)
    assert any("changed" in n for n in back.notes)


def test_nrrd_read_by_pynrrd(tmp_path):
    """Check L5: labels exact, affine within 4e-9 (ours; here to the last digit)."""
    nrrd = pytest.importorskip("nrrd")
    export(sample(), tmp_path / "a.nrrd")
    values, head = nrrd.read(str(tmp_path / "a.nrrd"))
    assert values.dtype == np.uint8
    np.testing.assert_array_equal(values, labels())
    np.testing.assert_array_equal(head["space directions"], np.diag(SPACING))
    np.testing.assert_array_equal(head["space origin"], CENTRE)
    assert head["space units"] == ["mm", "mm", "mm"]
    table = json.loads(head["voxelmat_label_table"])
    assert [row["label"] for row in table["labels"]] == [1, 2, 3]


@pytest.mark.parametrize("name", ["a.nii", "a.nii.gz"])
def test_nifti_read_by_nibabel(tmp_path, name):
    """Check L5: labels exact, affine within 4e-9 for uint8 (11, 7, 5), zooms .0423/.0847/.027."""
    nib = pytest.importorskip("nibabel")
    part = sample().replace(grid=sample().grid.__class__(shape=SHAPE, spacing=SPACING))
    export(part, tmp_path / name)
    image = nib.load(tmp_path / name)
    assert image.get_data_dtype() == np.uint8
    np.testing.assert_array_equal(np.asanyarray(image.dataobj), labels())
    wanted = np.diag([*SPACING, 1.0])
    wanted[:3, 3] = np.array(SPACING) / 2
    for affine in (image.affine, image.get_sform(), image.get_qform()):
        np.testing.assert_allclose(affine, wanted, rtol=0, atol=4e-9)
    assert image.header.get_xyzt_units()[0] == "mm"
    assert image.header.get_intent()[0] == "label"
    assert nib.aff2axcodes(image.affine) == ("R", "A", "S")


def test_omezarr_read_by_zarr_and_ome_zarr(tmp_path):
    zarr = pytest.importorskip("zarr")
    part = sample(partly_full=True)
    export(part, tmp_path / "a.ome.zarr")
    root = zarr.open_group(str(tmp_path / "a.ome.zarr"), mode="r")
    assert root.metadata.zarr_format == 3
    np.testing.assert_array_equal(root["labels/material/0"][:], part.labels.T)
    np.testing.assert_array_equal(root["distance/0"][:], part.distance.T)
    image = root["0"][:]
    np.testing.assert_array_equal(image[0], part.occupancy.T)
    wanted = part.palette_fractions()[:, 0][part.labels] * part.occupancy
    np.testing.assert_allclose(image[1], wanted.T, atol=0.5 + 1e-9)
    meta = root["labels/material"].attrs["ome"]
    scale, shift = meta["multiscales"][0]["datasets"][0]["coordinateTransformations"]
    assert scale["scale"] == list(SPACING[::-1])
    assert shift["translation"] == list(CENTRE[::-1])
    assert [a["unit"] for a in meta["multiscales"][0]["axes"]] == ["millimeter"] * 3


def test_omezarr_read_by_ome_zarr(tmp_path):
    reader = pytest.importorskip("ome_zarr.reader")
    url = pytest.importorskip("ome_zarr.io")
    part = sample()
    export(part, tmp_path / "a.ome.zarr")
    nodes = list(reader.Reader(url.parse_url(str(tmp_path / "a.ome.zarr")))())
    image, material = nodes[0], nodes[-1]
    assert image.metadata["channel_names"] == ["solid fraction", "rigid-example", "soft-example"]
    np.testing.assert_array_equal(np.asarray(image.data[0][0]), 255 * (part.labels > 0).T)
    np.testing.assert_array_equal(np.asarray(material.data[0]).reshape(SHAPE[::-1]), part.labels.T)


def test_omezarr_metadata_pass_an_independent_model(tmp_path):
    models = pytest.importorskip("ome_zarr_models.v05")
    zarr = pytest.importorskip("zarr")
    export(sample(), tmp_path / "a.ome.zarr")
    image = models.Image.from_zarr(zarr.open_group(str(tmp_path / "a.ome.zarr"), mode="r"))
    assert [a.name for a in image.ome_attributes.multiscales[0].axes] == ["c", "z", "y", "x"]
    assert image.labels is not None
    assert image.labels.label_paths == ["material"]
    label = models.ImageLabel.from_zarr(
        zarr.open_group(str(tmp_path / "a.ome.zarr/labels/material"), mode="r")
    )
    assert [c.label_value for c in label.ome_attributes.image_label.colors] == [1, 2, 3]


def test_vti_read_by_vtk(tmp_path):
    io = pytest.importorskip("vtkmodules.vtkIOXML")
    support = pytest.importorskip("vtkmodules.util.numpy_support")
    part = sample()
    export(part, tmp_path / "a.vti")
    reader = io.vtkXMLImageDataReader()
    reader.SetFileName(str(tmp_path / "a.vti"))
    reader.Update()
    image = reader.GetOutput()
    assert image.GetOrigin() == ORIGIN
    assert image.GetSpacing() == SPACING
    read = support.vtk_to_numpy(image.GetCellData().GetArray("label"))
    np.testing.assert_array_equal(read.reshape(SHAPE, order="F"), part.labels)
    text = image.GetFieldData().GetAbstractArray("voxelmat_label_table").GetValue(0)
    assert json.loads(text)["labels"][2]["fractions"]["soft-example"] == pytest.approx(2 / 3)


# ---------------------------------------------------------------- files of other programs
@pytest.mark.parametrize("mode", ["Ascii", "Binary", "Appended", "raw", "plain", "32"])
@pytest.mark.parametrize("on_points", [False, True])
def test_vti_written_by_vtk(tmp_path, mode, on_points):
    model = pytest.importorskip("vtkmodules.vtkCommonDataModel")
    io = pytest.importorskip("vtkmodules.vtkIOXML")
    support = pytest.importorskip("vtkmodules.util.numpy_support")
    image = model.vtkImageData()
    image.SetDimensions(*[n + (0 if on_points else 1) for n in SHAPE])
    image.SetSpacing(*SPACING)
    image.SetOrigin(*ORIGIN)
    array = support.numpy_to_vtk(labels().ravel(order="F"), deep=True)
    array.SetName("tissue")
    (image.GetPointData() if on_points else image.GetCellData()).AddArray(array)
    writer = io.vtkXMLImageDataWriter()
    writer.SetInputData(image)
    writer.SetFileName(str(tmp_path / "a.vti"))
    if mode in ("Ascii", "Binary", "Appended"):
        getattr(writer, f"SetDataModeTo{mode}")()
    writer.SetBlockSize(128)
    if mode == "raw":
        writer.EncodeAppendedDataOff()
    if mode == "plain":
        writer.SetCompressorTypeToNone()
    if mode == "32":
        writer.SetHeaderTypeToUInt32()
    writer.Write()
    with pytest.raises(InputError, match="unit of length"):
        import_volume(tmp_path / "a.vti")
    volume = import_volume(tmp_path / "a.vti", unit="cm")
    np.testing.assert_array_equal(volume.values, labels())
    shift = 0.5 if on_points else 0.0
    origin = [10 * (o - shift * h) for o, h in zip(ORIGIN, SPACING, strict=True)]
    np.testing.assert_allclose(volume.grid.origin, origin, rtol=1e-12)
    np.testing.assert_allclose(volume.grid.spacing, np.multiply(SPACING, 10), rtol=1e-12)


@pytest.mark.parametrize(
    ("order", "flips"), [((0, 1, 2), (1, 1, 1)), ((2, 0, 1), (1, -1, 1)), ((1, 0, 2), (-1, -1, -1))]
)
def test_turned_axes_are_turned_back(tmp_path, order, flips):
    """The same body stored along other axes and directions is read as the same body."""
    nib = pytest.importorskip("nibabel")
    nrrd = pytest.importorskip("nrrd")
    wanted = labels()
    stored = wanted.transpose(order)[tuple(slice(None, None, f) for f in flips)].astype(np.uint8)
    affine = np.eye(4)
    affine[:3, 3] = CENTRE
    for column, (axis, flip) in enumerate(zip(order, flips, strict=True)):
        affine[:3, column] = 0.0
        affine[axis, column] = flip * SPACING[axis]
        if flip < 0:
            affine[axis, 3] += SPACING[axis] * (SHAPE[axis] - 1)
    image = nib.Nifti1Image(stored, affine)
    image.header.set_xyzt_units("mm")
    nib.save(image, tmp_path / "a.nii.gz")
    head = {
        "space": "left-posterior-superior",
        "space directions": (np.diag([-1, -1, 1]) @ affine[:3, :3]).T,
        "space origin": np.array([-1, -1, 1]) * affine[:3, 3],
        "space units": ["mm"] * 3,
    }
    for encoding in ("raw", "gzip"):
        nrrd.write(str(tmp_path / f"{encoding}.nrrd"), stored, head | {"encoding": encoding})
    for name in ("a.nii.gz", "raw.nrrd", "gzip.nrrd"):
        volume = import_volume(tmp_path / name)
        np.testing.assert_array_equal(volume.values, wanted, err_msg=name)
        np.testing.assert_allclose(volume.grid.origin, ORIGIN, atol=1e-6)
        np.testing.assert_allclose(volume.grid.spacing, SPACING, atol=4e-9)


def test_omezarr_written_by_ome_zarr(tmp_path):
    writer = pytest.importorskip("ome_zarr.writer")
    zarr = pytest.importorskip("zarr")
    root = zarr.open_group(str(tmp_path / "a.ome.zarr"), mode="w", zarr_format=3)
    writer.write_multiscale(
        [labels()],  # stored as it is, so that its first axis is z
        root,
        axes="zyx",
        scale={"z": 27.0, "y": 84.7, "x": 42.3},
        axes_units=dict.fromkeys("zyx", "micrometer"),
    )
    volume = import_volume(tmp_path / "a.ome.zarr")
    np.testing.assert_array_equal(volume.values, labels().T)
    np.testing.assert_allclose(volume.grid.spacing, SPACING, rtol=1e-12)
    np.testing.assert_allclose(volume.grid.origin, -0.5 * np.array(SPACING), rtol=1e-12)
    grey = import_volume(tmp_path / "a.ome.zarr", channel=0)
    assert not grey.is_labels
    np.testing.assert_array_equal(grey.mask(2, 3), labels().T >= 2)


def test_a_real_scan_in_millimetres():
    """nibabel's own test volume: 33 x 41 x 25 voxels of 2 mm, axes left, anterior, superior."""
    nib = pytest.importorskip("nibabel")
    file = Path(nib.__file__).parent / "tests" / "data" / "anatomical.nii"
    if not file.is_file():
        pytest.skip("nibabel came without its test data")
    volume = import_volume(file)
    assert volume.grid.shape == (33, 41, 25)
    assert not volume.is_labels  # some values are negative
    assert volume.grid.spacing == (2.0, 2.0, 2.0)
    canonical = nib.as_closest_canonical(nib.load(file))
    np.testing.assert_array_equal(volume.values, np.asanyarray(canonical.dataobj))


def test_a_real_volume_of_many_materials(tmp_path):
    """pyvista's segmented frog: 500 x 470 x 136 points of 1 x 1 x 1.5, 25 labels and empty."""
    pyvista = pytest.importorskip("pyvista")
    file = Path(pyvista.__file__).parent / "examples" / "frog_tissues.vti"
    if not file.is_file():
        pytest.skip("pyvista came without its example data")
    volume = import_volume(file, unit="mm")
    assert volume.grid.shape == (500, 470, 136)
    assert volume.grid.spacing == (1.0, 1.0, 1.5)
    assert len(volume.present()) == 25
    values = pyvista.read(file)["MetaImage"].reshape(volume.grid.shape, order="F")
    np.testing.assert_array_equal(volume.values, values)
    crop = values[230:270, 200:240, 50:80]
    grid = volume.grid.__class__(shape=crop.shape, spacing=volume.grid.spacing)
    part = Volume(grid=grid, values=crop)
    done = export(part, tmp_path / "frog.stl")
    assert len(done.files) == len(part.present()) > 5
    total = 0.0
    for file in done.files:
        mesh = trimesh.load_mesh(file)
        assert mesh.is_watertight
        total += mesh.volume
    assert total == pytest.approx(np.count_nonzero(crop) * grid.voxel_volume, rel=1e-4)


# ---------------------------------------------------------------- from labels to a part
def test_labels_are_mapped():
    part = sample()
    volume = Volume.from_part(part)
    made = volume.to_part({1: "soft-example", 2: None, 3: Blend.pure("rigid-example")}, part.resins)
    swapped = {0: 0, 1: 1, 2: 0, 3: 2}
    np.testing.assert_array_equal(made.labels, np.vectorize(swapped.get)(part.labels))
    assert [str(b) for b in made.palette] == ["empty", "soft-example", "rigid-example"]
    with pytest.raises(InputError, match=r"label 3 \('33.3 % rigid"):
        Volume.from_part(part).to_part({1: "soft-example", 2: None})
    with pytest.raises(InputError, match="not among"):
        volume.to_part({1: "unknown", 2: None, 3: None})


def test_grey_values_need_thresholds():
    part = sample()
    grey = Volume(grid=part.grid, values=np.where(part.labels == 0, np.nan, part.labels / 2.0))
    with pytest.raises(InputError, match="thresholds"):
        grey.to_part({})
    np.testing.assert_array_equal(grey.mask(1.0), part.labels >= 2)
    assert repr(grey).endswith("x 0.027 mm, grey values)")
    assert repr(Volume.from_part(part)).endswith("x 0.027 mm, 3 labels)")
    with pytest.raises(InputError, match="low <= high"):
        grey.mask(2.0, 1.0)
