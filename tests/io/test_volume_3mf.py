"""3MF volumes: the package as lib3mf and an XML parser see it, and packages that lib3mf wrote."""

from __future__ import annotations

import io
import re
import zipfile

import numpy as np
import png
import pytest
import trimesh
from lxml import etree
from PIL import Image
from volume_samples import ORIGIN, SHAPE, SPACING, sample

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io.label_surfaces import EDGE
from voxelmat.io.mesh import read_mesh
from voxelmat.io.volumes import export, import_volume, volume_to_part
from voxelmat.model.volume import Volume

V = "{http://schemas.3mf.io/3dmanufacturing/volumetric/2022/01}"
C = "{http://schemas.microsoft.com/3dmanufacturing/core/2015/02}"
TEXTURE = "http://schemas.microsoft.com/3dmanufacturing/2013/01/3dtexture"
# lib3mf 2.5 reads image3d and functionfromimage3d, and warns of them with this code all the same,
# also in packages that it wrote itself. It has no reader of composites.
INVALID_ELEMENT = 32934


@pytest.fixture(scope="module")
def wrapper():
    return pytest.importorskip("lib3mf").get_wrapper()


def opened(wrapper, path):
    model = wrapper.CreateModel()
    reader = model.QueryReader("3mf")
    reader.ReadFromFile(str(path))
    codes = {reader.GetWarning(n)[0] for n in range(reader.GetWarningCount())}
    assert codes <= {INVALID_ELEMENT}
    return model


def listed(iterator, get):
    found = []
    while iterator.MoveNext():
        found.append(getattr(iterator, get)())
    return found


def pixels(sheet) -> np.ndarray:
    """Decoded by pypng."""
    data = sheet.WriteToBuffer()
    width, height, rows, info = png.Reader(bytes=bytes(data)).read()
    table = np.vstack([np.array(row, dtype=np.uint16) for row in rows])
    return table.reshape(height, width, info["planes"])


def test_read_by_lib3mf(wrapper, tmp_path):
    lib3mf = pytest.importorskip("lib3mf")
    part = sample()
    export(part, tmp_path / "a.3mf")
    model = opened(wrapper, tmp_path / "a.3mf")
    (mesh,) = listed(model.GetMeshObjects(), "GetCurrentMeshObject")
    assert mesh.IsManifoldAndOriented()
    assert mesh.GetName() == part.name
    data = mesh.GetVolumeData()
    properties = {}
    for n in range(data.GetPropertyCount()):
        one = data.GetProperty(n)
        properties[one.GetName()] = one
    assert set(properties) == {
        "vm:label", "vm:fraction.rigid-example", "vm:fraction.soft-example"
    }  # fmt: skip
    functions = {f.GetResourceID(): f for f in listed(model.GetFunctions(), "GetCurrentFunction")}
    share = part.palette_fractions()
    wanted = {
        "vm:label": part.labels,
        "vm:fraction.rigid-example": np.rint(65535 * share[:, 0])[part.labels],
        "vm:fraction.soft-example": np.rint(65535 * share[:, 1])[part.labels],
    }
    centres = np.stack(np.meshgrid(*part.grid.centres(), indexing="ij"), axis=-1)
    for name, one in properties.items():
        function = functions[one.GetFunctionResourceID()]
        assert int(function.GetFilter()) == int(lib3mf.TextureFilter.Nearest)
        clamp = int(lib3mf.TextureTileStyle.Clamp)
        assert [int(s) for s in function.GetTileStyles()] == [clamp] * 3
        assert one.GetChannelName() == "red"
        stack = model.GetImageStackByID(function.GetImage3D().GetResourceID())
        assert (stack.GetColumnCount(), stack.GetRowCount(), stack.GetSheetCount()) == SHAPE
        # Sample as the specification says: object space to uvw, then the nearest voxel.
        fields = one.GetTransform().Fields
        matrix = np.array([[fields[r][c] for c in range(3)] for r in range(4)])
        uvw = centres @ matrix[:3] + matrix[3]
        i, j, k = np.moveaxis(np.floor(uvw * SHAPE).astype(int), -1, 0)
        image = np.stack([pixels(stack.GetSheet(n))[::-1, :, 0] for n in range(SHAPE[2])])
        np.testing.assert_array_equal(image[k, j, i], wanted[name], err_msg=name)
    assert functions[properties["vm:label"].GetFunctionResourceID()].GetScale() == 255.0
    assert data.GetColor().GetChannelName() == "color"


def test_the_package_and_its_xml(tmp_path):
    part = sample()
    export(part, tmp_path / "a.3mf")
    with zipfile.ZipFile(tmp_path / "a.3mf") as archive:
        assert archive.testzip() is None
        names = archive.namelist()
        assert names[0] == "[Content_Types].xml"
        types = etree.fromstring(archive.read(names[0]))
        endings = {node.get("Extension") for node in types}
        assert {n.rsplit(".", 1)[-1] for n in names[1:]} == endings
        (start,) = etree.fromstring(archive.read("_rels/.rels"))
        assert start.get("Target") == "/3D/3dmodel.model"
        model = etree.fromstring(archive.read("3D/3dmodel.model"))
        relations = etree.fromstring(archive.read("3D/_rels/3dmodel.model.rels"))
    assert model.get("unit") == "millimeter"
    needed = [model.nsmap[p] for p in model.get("requiredextensions").split()]
    assert needed[0] == V.strip("{}")
    sheets = [s.get("path") for s in model.iter(V + "imagesheet")]
    assert sheets == [r.get("Target") for r in relations]
    assert {r.get("Type") for r in relations} == {TEXTURE}
    assert {s[1:] for s in sheets} == {n for n in names if n.endswith(".png")}
    # Every reference points at what stands before it.
    ids = [node.get("id") for node in model.find(C + "resources")]
    assert len(set(ids)) == len(ids)
    data = model.find(f"{C}resources/{V}volumedata")
    for node in data.iter(V + "materialmapping", V + "color", V + "property"):
        assert ids.index(node.get("functionid")) < ids.index(data.get("id"))
    composite = data.find(V + "composite")
    base = next(n for n in model.iter(C + "basematerials") if n.get("id") == composite.get(
        "basematerialid"))  # fmt: skip
    assert [b.get("name") for b in base] == ["rigid-example", "soft-example"]
    assert len(composite) == len(base)
    mesh = next(model.iter(C + "mesh"))
    assert mesh.get(V + "volumeid") == data.get("id")


def test_the_outline_by_trimesh_and_by_our_mesh_reader(tmp_path):
    part = sample()
    export(part, tmp_path / "a.3mf")
    (mesh,) = trimesh.load_scene(tmp_path / "a.3mf").geometry.values()
    assert mesh.is_watertight
    volume = np.count_nonzero(part.labels) * part.grid.voxel_volume
    assert mesh.volume == pytest.approx(volume, rel=3e-3)  # mended edges at the outside
    np.testing.assert_allclose(
        mesh.bounds, [ORIGIN, part.grid.upper], atol=1.001 * EDGE * max(SPACING)
    )
    (ours,) = read_mesh(tmp_path / "a.3mf")
    assert ours.volume == pytest.approx(mesh.volume, rel=1e-9)


def test_without_the_label_the_composite_is_read(tmp_path):
    part = sample()
    export(part, tmp_path / "a.3mf")
    edited(
        tmp_path / "a.3mf",
        lambda s: re.sub(
            r"<metadata name=\"vm.*?</metadata>|<v:property.*?/>", "", s, flags=re.DOTALL
        ),
    )
    (tmp_path / "a.3mf.labels.json").unlink()
    volume = import_volume(tmp_path / "a.3mf")
    back = volume.to_part(resins=part.resins)
    np.testing.assert_allclose(
        back.palette_fractions()[back.labels],
        part.palette_fractions()[part.labels],
        atol=1 / 65535,
    )
    np.testing.assert_allclose(back.grid.origin, ORIGIN, atol=1e-12)


@pytest.mark.parametrize("unit", ["millimeter", "inch"])
def test_written_by_lib3mf(wrapper, tmp_path, unit):
    """A foreign package: other channel, other scale, placed and shifted by its build item."""
    lib3mf = pytest.importorskip("lib3mf")
    values = np.arange(24).reshape(4, 3, 2)
    model = wrapper.CreateModel()
    model.SetUnit(lib3mf.ModelUnit.MilliMeter if unit == "millimeter" else lib3mf.ModelUnit.Inch)
    stack = model.AddImageStack(4, 3, 2)
    # Steps below have few decimals: the library writes six.
    stack.SetColumnCount(4)
    stack.SetRowCount(3)
    for k in range(2):
        out = io.BytesIO()
        sheet = np.zeros((3, 4, 3), dtype=np.uint8)
        sheet[..., 1] = values[:, ::-1, k].T
        Image.fromarray(sheet).save(out, "PNG")
        made = model.AddAttachment(f"/3D/volume/{k}.png", TEXTURE)
        made.ReadFromBuffer(list(out.getvalue()))
        stack.SetSheet(k, made)
    function = model.AddFunctionFromImage3D(stack)
    function.SetFilter(lib3mf.TextureFilter.Nearest)
    function.SetScale(510.0)
    data = model.AddVolumeData()
    entry = data.AddPropertyFromFunction("tissue", function)
    entry.SetChannelName("green")
    to_uvw = lib3mf.Transform()
    for row, step in enumerate((1 / 8, 1 / 4, 1 / 10)):
        to_uvw.Fields[row][row] = step
    entry.SetTransform(to_uvw)
    mesh = model.AddMeshObject()
    corners = []
    for point in ((0, 0, 0), (8, 0, 0), (0, 4, 0), (0, 0, 10)):
        place = lib3mf.Position()
        place.Coordinates[0], place.Coordinates[1], place.Coordinates[2] = map(float, point)
        corners.append(mesh.AddVertex(place))
    for face in ((0, 2, 1), (0, 1, 3), (1, 2, 3), (0, 3, 2)):
        triangle = lib3mf.Triangle()
        triangle.Indices[0], triangle.Indices[1], triangle.Indices[2] = face
        mesh.AddTriangle(triangle)
    mesh.SetVolumeData(data)
    model.AddBuildItem(mesh, wrapper.GetTranslationTransform(5.0, 6.0, 7.0))
    model.QueryWriter("3mf").WriteToFile(str(tmp_path / "b.3mf"))
    with pytest.raises(InputError, match="say which property"):
        import_volume(tmp_path / "b.3mf")
    volume = import_volume(tmp_path / "b.3mf", field="tissue")
    np.testing.assert_array_equal(volume.values, 2 * values)
    factor = 1.0 if unit == "millimeter" else 25.4
    np.testing.assert_allclose(volume.grid.spacing, factor * np.array([2, 4 / 3, 5]), rtol=1e-6)
    np.testing.assert_allclose(volume.grid.origin, factor * np.array([5, 6, 7]), rtol=1e-6)


def edited(path, change, drop=()):
    """Rewrite the model of a package."""
    with zipfile.ZipFile(path) as archive:
        members = {n: archive.read(n) for n in archive.namelist() if n not in drop}
    text = change(members["3D/3dmodel.model"].decode())
    members["3D/3dmodel.model"] = text.encode()
    with zipfile.ZipFile(path, "w") as archive:
        for name, data in members.items():
            archive.writestr(name, data)


FIRST = "/3D/volume/label/00000.png"


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda s: s.replace('sheetcount="5"', 'sheetcount="999999999"'), "at most"),
        (lambda s: s.replace('sheetcount="5"', 'sheetcount="6"'), "6 sheets are stated"),
        (lambda s: s.replace('columncount="11"', 'columncount="12"'), "the model states 12 x 7"),
        (lambda s: s.replace('columncount="11"', 'columncount="x"'), "damaged"),
        (lambda s: s.replace(FIRST, "/3D/volume/none.png"), "missing"),
        (lambda s: s.replace('filter="nearest"', 'filter="linear"'), "nearest"),
        (lambda s: s.replace('functionid="1000"', 'functionid="77"'), "no functionfromimage3d"),
        (lambda s: s.replace('image3did="10"', 'image3did="77"'), "no image3d"),
        (lambda s: s.replace('valuescale="255"', 'valuescale="nan"'), "finite"),
        (lambda s: s.replace(' v:volumeid="2"', ""), "No placed mesh"),
        (lambda s: s.replace("imagestack", "openvdb"), "no stack of PNG"),
        (lambda s: re.sub(r'transform="[^ ]+ 0.0 ', 'transform="0.5 0.3 ', s), "degrees off"),
        (lambda s: re.sub(r'transform="[^"]*"', 'transform="1 2 3"', s), "damaged"),
        (lambda s: re.sub(r'transform="[^"]*"', f'transform="{"0 " * 12}"', s), "flattens"),
        (lambda s: s[: len(s) // 2], "damaged|contains itself|build is empty"),
        (lambda s: s.replace("<model", "<!DOCTYPE m><model"), "entities"),
    ],
)
def test_bad_packages(tmp_path, change, words):
    export(sample(), tmp_path / "a.3mf")
    edited(tmp_path / "a.3mf", change)
    with pytest.raises((FileFormatError, InputError), match=words):
        import_volume(tmp_path / "a.3mf")


def test_a_sheet_of_another_size_or_kind_is_refused(tmp_path):
    export(sample(), tmp_path / "a.3mf")
    whole = (tmp_path / "a.3mf").read_bytes()
    for image, words in (
        (Image.new("L", (9000, 9000)), "9000 x 9000"),
        (Image.new("P", (11, 7)), "of kind P"),
        (None, "damaged"),
    ):
        (tmp_path / "a.3mf").write_bytes(whole)
        out = io.BytesIO()
        if image is not None:
            image.save(out, "PNG")
        edited(tmp_path / "a.3mf", str, drop=(FIRST[1:],))
        with zipfile.ZipFile(tmp_path / "a.3mf", "a") as archive:
            archive.writestr(FIRST[1:], out.getvalue())
        with pytest.raises((FileFormatError, InputError), match=words):
            import_volume(tmp_path / "a.3mf")


def test_many_labels_take_sixteen_bits(tmp_path):
    part = sample()
    values = part.labels.astype(np.uint16) * 500
    export(Volume(grid=part.grid, values=values, name="many"), tmp_path / "a.3mf")
    np.testing.assert_array_equal(import_volume(tmp_path / "a.3mf").values, values)


def test_the_same_part_gives_the_same_bytes(tmp_path):
    export(sample(), tmp_path / "a.3mf")
    export(volume_to_part(tmp_path / "a.3mf"), tmp_path / "b.3mf")
    assert (tmp_path / "a.3mf").read_bytes() == (tmp_path / "b.3mf").read_bytes()


def test_nothing_filled_is_refused(tmp_path):
    empty = Volume(grid=sample().grid, values=np.zeros(SHAPE, dtype=np.uint16))
    with pytest.raises(InputError, match="no outline"):
        export(empty, tmp_path / "a.3mf")
    assert not list(tmp_path.iterdir())
