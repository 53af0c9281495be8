"""3MF packages: unit, placed bodies, and every kind of broken or hostile package."""

import struct
import zipfile

import pytest

from voxelmat.errors import FileFormatError, InputError
from voxelmat.io import package3mf
from voxelmat.io.mesh import read_mesh


def package(path, model, *, compression=zipfile.ZIP_DEFLATED, extra=()):
    with zipfile.ZipFile(path, "w", compression) as archive:
        archive.writestr("3D/3dmodel.model", model)
        for name, data in extra:
            archive.writestr(name, data)
    return path


def tetrahedron(number, *, name="", more=""):
    corners = ((0, 0, 0), (3, 0, 0), (0, 4, 0), (0, 0, 5))
    points = "".join(f'<vertex x="{x}" y="{y}" z="{z}"/>' for x, y, z in corners)
    faces = ((0, 2, 1), (0, 1, 3), (0, 3, 2), (1, 2, 3))
    triangles = "".join(f'<triangle v1="{a}" v2="{b}" v3="{c}"/>' for a, b, c in faces)
    named = f' name="{name}"' if name else ""
    return (
        f'<object id="{number}" type="model"{named}{more}><mesh><vertices>{points}</vertices>'
        f"<triangles>{triangles}</triangles></mesh></object>"
    )


def model(resources, build, root=' unit="millimeter"'):
    return (
        '<?xml version="1.0" encoding="UTF-8"?>'
        f'<model xmlns="http://schemas.microsoft.com/3dmanufacturing/core/2015/02"{root}>'
        f"<resources>{resources}</resources><build>{build}</build></model>"
    )


def test_3mf_states_its_unit(tmp_path):
    text = model(tetrahedron(1), '<item objectid="1"/>', ' unit="inch"')
    path = package(tmp_path / "part.3mf", text)
    (mesh,) = read_mesh(path)
    assert mesh.volume == pytest.approx(10 * 25.4**3)
    assert read_mesh(path, "inch") == [mesh]
    with pytest.raises(InputError, match="given as 'mm', but this 3MF states 'inch'"):
        read_mesh(path, "mm")
    plain = package(tmp_path / "plain.3mf", model(tetrahedron(1), '<item objectid="1"/>', ""))
    assert read_mesh(plain)[0].volume == pytest.approx(10)  # millimetres by the standard
    odd = model(tetrahedron(1), '<item objectid="1"/>', ' unit="furlong"')
    with pytest.raises(FileFormatError, match="furlong"):
        read_mesh(package(tmp_path / "odd.3mf", odd))


def test_3mf_objects_become_placed_bodies(tmp_path):
    text = model(
        tetrahedron(1, name="core") + tetrahedron(2, name="pad"),
        '<item objectid="1" transform="1 0 0 0 1 0 0 0 1 10 0 0"/>'
        '<item objectid="2" transform="-1 0 0 0 1 0 0 0 1 0 20 0"/>'
        '<item objectid="2"/>',
    )
    path = package(tmp_path / "two.3mf", text)
    meshes = {m.name: m for m in read_mesh(path)}
    assert len(meshes) == 3
    assert all(m.volume == pytest.approx(10) for m in meshes.values())
    assert meshes["core"].bounds[0] == pytest.approx([10, 0, 0])
    lows = sorted(tuple(m.bounds[0]) for name, m in meshes.items() if name != "core")
    assert lows == [(-3, 20, 0), (0, 0, 0)]
    (core,) = read_mesh(path, object_name="core")
    assert core == meshes["core"]
    with pytest.raises(InputError, match=r"'cap'.*core"):
        read_mesh(path, object_name="cap")


def test_3mf_components_and_support_objects(tmp_path):
    text = model(
        tetrahedron(1, name="leg")
        + '<object id="2" name="table"><components><component objectid="1"/>'
        '<component objectid="1" transform="1 0 0 0 1 0 0 0 1 9 0 0"/></components></object>'
        + tetrahedron(3, name="prop").replace('type="model"', 'type="support"'),
        '<item objectid="2"/><item objectid="3"/>',
    )
    meshes = read_mesh(package(tmp_path / "table.3mf", text))
    assert len(meshes) == 3
    assert "'prop' is marked as 'support'" in meshes[0].cautions[-1]


def test_zip_bomb_is_refused_before_it_is_unpacked(tmp_path, monkeypatch):
    def forbidden(*_args, **_more):
        raise AssertionError("the bomb was unpacked")

    path = package(tmp_path / "bomb.3mf", b" " * (40 << 20))
    assert path.stat().st_size < 100_000
    monkeypatch.setattr(zipfile.ZipFile, "read", forbidden)
    monkeypatch.setattr(zipfile.ZipFile, "open", forbidden)
    with pytest.raises(FileFormatError, match=r"limit is 200.*zip bomb"):
        read_mesh(path)
    monkeypatch.setattr(package3mf, "MAX_BYTES", 1 << 20)
    with pytest.raises(FileFormatError, match="would unpack to 42 MB; the limit is 1 MB"):
        read_mesh(path)
    monkeypatch.setattr(package3mf, "MAX_MEMBERS", 0)
    with pytest.raises(FileFormatError, match="the limit is 0"):
        read_mesh(path)


@pytest.mark.parametrize("name", ["../../etc/part", "/part", "a\\..\\..\\part", "C:/part"])
def test_package_that_points_outside_itself(tmp_path, name):
    good = model(tetrahedron(1), '<item objectid="1"/>')
    path = package(tmp_path / "part.3mf", good, extra=[(name, b"x")])
    with pytest.raises(FileFormatError, match="outside the package"):
        read_mesh(path)


def test_encrypted_package(tmp_path):
    path = package(tmp_path / "part.3mf", model(tetrahedron(1), '<item objectid="1"/>'))
    data = bytearray(path.read_bytes())
    central = data.index(b"PK\x01\x02")
    data[central + 8] |= 1
    path.write_bytes(bytes(data))
    with pytest.raises(FileFormatError, match="encrypted"):
        read_mesh(path)


def test_package_whose_sizes_lie(tmp_path):
    # The directory says 100 bytes, the data unpacks to far more: the reader must stop.
    path = package(tmp_path / "part.3mf", model(tetrahedron(1), '<item objectid="1"/>'))
    data = bytearray(path.read_bytes())
    central = data.index(b"PK\x01\x02")
    data[central + 24 : central + 28] = struct.pack("<I", 100)
    path.write_bytes(bytes(data))
    with pytest.raises(FileFormatError, match="damaged"):
        read_mesh(path)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("not xml", "damaged"),
        (model(tetrahedron(1), ""), "places no object"),
        (model("", '<item objectid="7"/>'), "no triangles|cannot be read"),
        (
            '<!DOCTYPE m [<!ENTITY a "aaaa">]>' + model(tetrahedron(1), '<item objectid="1"/>'),
            "entities",
        ),
        (
            model(
                tetrahedron(1),
                '<item objectid="1"/>',
                ' xmlns:b="http://example.org/beamlattice" requiredextensions="b"',
            ),
            "needs the 3MF extension 'http://example.org/beamlattice'",
        ),
        (
            model(
                '<object id="1"><components><component objectid="2"/></components></object>'
                '<object id="2"><components><component objectid="1"/></components></object>',
                '<item objectid="1"/>',
            ),
            "contains itself",
        ),
        (
            model(
                tetrahedron(1)
                + "".join(
                    f'<object id="{n + 1}"><components>'
                    + f'<component objectid="{n}"/>' * 10
                    + "</components></object>"
                    for n in range(1, 9)
                ),
                '<item objectid="9"/>',
            ),
            "places 100000000 objects",
        ),
        (model(tetrahedron(1).replace('v3="2"', 'v3="99"'), '<item objectid="1"/>'), "99|read"),
        (model(tetrahedron(1).replace('x="3"', 'x="wide"'), '<item objectid="1"/>'), "read"),
    ],
)
def test_broken_3mf_models(tmp_path, text, message):
    path = package(tmp_path / "part.3mf", text)
    with pytest.raises((FileFormatError, InputError), match=message):
        read_mesh(path)


def test_package_without_a_model_or_in_other_text(tmp_path):
    path = tmp_path / "part.3mf"
    with zipfile.ZipFile(path, "w") as archive:
        archive.writestr("readme.txt", "nothing")
    with pytest.raises(FileFormatError, match=r"no 3D/3dmodel\.model"):
        read_mesh(path)
    text = model(tetrahedron(1), '<item objectid="1"/>').encode("utf-16")
    with pytest.raises(FileFormatError, match="UTF-8"):
        read_mesh(package(path, text))
