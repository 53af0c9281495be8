"""VTI files are read back by an independent reader, every number equal."""

import numpy as np
import pytest

from voxelmat.errors import InputError, ResourceError
from voxelmat.fea.static import solve
from voxelmat.io import vti
from voxelmat.io.vti import write_vti
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.model.region import FaceRegion


def resin(name, E):
    return Material(
        name=name,
        kind="rigid",
        E=Constant(value=E),
        nu=Constant(value=0.3),
        density=Constant(value=1e-9),
    )


@pytest.fixture(scope="module")
def result():
    """An invented part of odd size, partly filled, off the origin, unequal spacing."""
    shape = (5, 4, 3)
    rng = np.random.default_rng(1)
    labels = rng.integers(1, 4, shape).astype(np.uint16)
    occupancy = np.full(shape, 255, np.uint8)
    occupancy[:, 3] = 128
    labels[4, 3, 2] = occupancy[4, 3, 2] = 0
    part = Part(
        grid=VoxelGrid(shape=shape, spacing=(0.5, 0.25, 0.1), origin=(-3.0, 2.0, 1 / 3)),
        resins=(resin("a", 1000.0), resin("b", 10.0)),
        palette=(EMPTY, Blend.pure("a"), Blend.pure("b"), Blend.of({"a": 1, "b": 3})),
        labels=labels,
        occupancy=occupancy,
        distance=rng.integers(-127, 127, shape).astype(np.int8),
    )
    case = LoadCase(
        name="pull",
        supports=(Support(region=FaceRegion(name="low", side="x-")),),
        loads=(Force(region=FaceRegion(name="high", side="x+"), vector=(1.0, 0.5, 0.2)),),
    )
    return solve(part, case)


@pytest.fixture(scope="module")
def reader():
    try:
        from vtkmodules.util.numpy_support import vtk_to_numpy
        from vtkmodules.vtkIOXML import vtkXMLImageDataReader
    except ImportError as error:
        pytest.skip(f"VTK cannot be imported here ({error})")

    def read(path):
        source = vtkXMLImageDataReader()
        source.SetFileName(str(path))
        source.Update()
        image = source.GetOutput()
        found = {}
        for data in (image.GetPointData(), image.GetCellData()):
            for n in range(data.GetNumberOfArrays()):
                array = data.GetArray(n)
                names = [array.GetComponentName(c) for c in range(array.GetNumberOfComponents())]
                found[array.GetName()] = (vtk_to_numpy(array), names)
        return image, found

    return read


@pytest.mark.parametrize("block", [1 << 20, 256, 60, 120])
def test_every_number_comes_back(result, reader, tmp_path, monkeypatch, block):
    monkeypatch.setattr(vti, "_BLOCK", block)  # 60: whole blocks and a last full one
    extra = {"inside": result.part.solid, "on corners": np.arange(120.0).reshape(6, 5, 4)}
    image, found = reader(write_vti(result, tmp_path / "a.vti", extra=extra))
    part = result.part
    assert image.GetDimensions() == part.grid.node_shape
    assert image.GetSpacing() == part.grid.spacing
    assert image.GetOrigin() == part.grid.origin
    plain = {
        "label": part.labels,
        "occupancy_of_255": part.occupancy,
        "inside": part.solid,
        "on corners": extra["on corners"],
        "energy_density_mJ_mm3": result.energy_density,
        "fraction_b": np.array([0, 0, 1, 0.75], np.float32)[part.labels],
        "distance_mm": part.distance * np.float32(0.1 / 16),
    }
    for name, values in plain.items():
        np.testing.assert_array_equal(found[name][0], values.ravel(order="F"), err_msg=name)
    moved, names = found["displacement_mm"]
    assert names == ["X", "Y", "Z"]
    np.testing.assert_array_equal(moved, result.displacement.reshape(-1, 3, order="F"))
    for key, values in (("stress_MPa", result.stress), ("strain", result.strain)):
        tensor, names = found[key]
        for c, name in enumerate(("XX", "YY", "ZZ", "XY", "XZ", "YZ")):
            column = values[..., c].ravel(order="F")
            np.testing.assert_array_equal(tensor[:, names.index(name)], column)


def test_a_corner_lies_where_it_lies(result, reader, tmp_path):
    """The reader's own point and cell numbering agrees with ours."""
    image, found = reader(write_vti(result, tmp_path / "a.vti"))
    x, y, z = result.part.grid.nodes()
    point = image.FindPoint(x[3], y[1], z[2])
    np.testing.assert_array_equal(found["displacement_mm"][0][point], result.displacement[3, 1, 2])


def test_a_part_alone(result, reader, tmp_path):
    _, found = reader(write_vti(result.part, tmp_path / "part.vti"))
    assert set(found) == {"label", "occupancy_of_255", "fraction_a", "fraction_b", "distance_mm"}


def test_bad_input_writes_nothing(result, tmp_path):
    for path, extra in (
        (tmp_path / "a.vtk", {}),
        (tmp_path / "a.vti", {"x": np.zeros((2, 2, 2))}),
        (tmp_path / "a.vti", {"x": np.zeros((5, 4, 3), dtype=complex)}),
    ):
        with pytest.raises(InputError):
            write_vti(result, path, extra=extra)
    with pytest.raises(ResourceError):
        write_vti(result, tmp_path / "missing" / "a.vti")
    assert not list(tmp_path.iterdir())
