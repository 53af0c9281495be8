"""Designs on a part: regions found, loads laid on, maps checked, every fault with its key."""

from __future__ import annotations

from copy import deepcopy
from pathlib import Path

import numpy as np
import pytest
from PIL import Image

from voxelmat.errors import InputError
from voxelmat.io.design import parse_design
from voxelmat.io.mesh import write_stl
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import BodyForce, Force, GroundSpring, Pressure, PressureMap
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.shape.solid import icosphere
from voxelmat.workflow.maps import sample
from voxelmat.workflow.resolve import resolve

RESIN = Material(
    name="hard",
    kind="rigid",
    E=Constant(value=1000.0),
    nu=Constant(value=0.3),
    density=Constant(value=1.1e-9),
)

#: A block of 12 x 8 x 4 mm in a grid with a margin of 1 mm; 'left' and 'right' meet at x = 6.
GRID = VoxelGrid(shape=(14, 10, 6), spacing=(1.0, 1.0, 1.0), origin=(-1.0, -1.0, -1.0))


def block():
    left, right = np.zeros((2, *GRID.shape), bool)
    left[1:7, 1:9, 1:5] = True
    right[7:13, 1:9, 1:5] = True
    return Part(
        grid=GRID,
        resins=(RESIN, RESIN.replace(name="soft")),
        palette=(EMPTY, Blend.pure("hard"), Blend.of({"hard": 1, "soft": 3})),
        labels=left + 2 * right.astype(int),
        bodies={"left": left, "right": right},
    )


MAP = {
    "kind": "pressure map", "region": "top", "file": "map.csv", "unit": "kPa",
    "cell_mm": [2, 2], "side": "z+", "first_cell_mm": [1, 7], "columns_grow": "x+",
    "rows_grow": "y-",
}  # fmt: skip

DATA = {
    "format": 1,
    "name": "block",
    "grid": {"spacing_mm": [1, 1, 1]},
    "body": [
        {"name": "left", "mesh": "a.stl", "unit": "mm", "resin": "hard"},
        {"name": "right", "mesh": "a.stl", "unit": "mm", "blend": {"hard": 1, "soft": 3}},
    ],
    "region": [
        {"name": "top", "kind": "face", "side": "z+"},
        {"name": "inner", "kind": "box", "low_mm": [2, 2, 1], "high_mm": [4, 4, 2]},
    ],
    "load_case": [
        {
            "name": "push",
            "duration_s": 2.0,
            "temperature_degC": 25.0,
            "cycles": 3,
            "weight": 0.5,
            "support": [{"region": "left", "slide": ["x"]}],
            "load": [
                {"kind": "force", "region": "top", "force_N": [0, 0, -5]},
                {"kind": "pressure", "region": "right", "pressure_MPa": 0.2},
                {"kind": "spring", "region": "right", "stiffness_N_mm": [0, 0, 7]},
                {"kind": "body force", "acceleration_m_s2": [0, 0, -9.80665]},
                {"kind": "body force", "region": "left", "acceleration_m_s2": [1, 0, 0]},
            ],
        }
    ],
}

# Rows from the far edge (y = 7) to the near one, kPa; unlike itself when mirrored.
PRESSURE = np.array(
    [[9, 5, 1, 0, 0, 0], [4, 2, 0, 0, 0, 0], [1, 0, 0, 0, 0, 0], [0, 0, 0, 0, 0, 0]], float
)


@pytest.fixture
def resolved(tmp_path):
    def run(data, values=PRESSURE, part=None):
        np.savetxt(tmp_path / "map.csv", values, delimiter=",")
        design = parse_design(data, path=tmp_path / "design.toml")
        return resolve(design, part or block())

    return run


def with_map(**change):
    data = deepcopy(DATA)
    data["load_case"][0]["load"] = [{**MAP, **change}]
    return data


def test_loads_and_supports(resolved):
    (case,) = resolved(DATA).load_cases
    assert (case.name, case.duration_s, case.temperature_degC) == ("push", 2.0, 25.0)
    assert (case.cycles, case.weight) == (3, 0.5)
    assert case.supports[0].displacement == (None, 0.0, 0.0)
    assert case.supports[0].region.name == "left"
    force, pressure, spring, gravity, pull = case.loads
    assert isinstance(force, Force)
    assert force.vector == (0.0, 0.0, -5.0)
    assert isinstance(pressure, Pressure)
    assert pressure.pressure == 0.2
    assert isinstance(spring, GroundSpring)
    assert spring.stiffness == (0.0, 0.0, 7.0)
    assert isinstance(gravity, BodyForce)
    assert gravity.acceleration == (0.0, 0.0, -9806.65)  # mm/s^2
    assert gravity.region is None
    assert pull.region.name == "left"


@pytest.mark.parametrize(
    ("settings", "count"),
    [
        ({"kind": "box", "low_mm": [0, 0, 0], "high_mm": [3, 3, 3]}, 27),
        ({"kind": "half-space", "point_mm": [9, 0, 0], "normal": [1, 0, 0]}, 96),
        ({"kind": "sphere", "centre_mm": [3.5, 3.5, 1.5], "radius_mm": 1.0}, 7),
        ({"kind": "cylinder", "start_mm": [2, 2, -9], "end_mm": [2, 2, 9], "radius_mm": 1}, 16),
        ({"kind": "face", "side": "x+", "depth_mm": 1.0}, 64),
        ({"kind": "patch", "side": "z-", "outline_mm": [[1, 1], [3, 1], [3, 4], [1, 4]]}, 6),
        ({"kind": "label", "labels": [2]}, 192),
        ({"kind": "label", "blend": {"soft": 0.75, "hard": 0.25}}, 192),
        ({"kind": "body", "body": "left"}, 192),
    ],
)
def test_every_kind_of_region(resolved, settings, count):
    data = {**DATA, "region": [*DATA["region"], {"name": "it", **settings}]}
    found = resolved(data)
    assert found.regions["it"].voxels(block()).sum() == count
    assert set(found.regions) == {"top", "inner", "it", "left", "right"}


def test_mesh_region(resolved, tmp_path):
    ball = icosphere(3, 2.0, (6.0, 4.0, 2.0))
    write_stl(ball, tmp_path / "ball.stl")
    given = {"name": "ball", "kind": "mesh", "mesh": "ball.stl", "unit": "mm"}
    found = resolved({**DATA, "region": [*DATA["region"], given]})
    x, y, z = np.meshgrid(*GRID.centres(), indexing="ij")
    inside = (x - 6) ** 2 + (y - 4) ** 2 + (z - 2) ** 2 < 4 * 0.98  # the facets cut the ball
    np.testing.assert_array_equal(found.regions["ball"].voxels(block()), inside & block().solid)


@pytest.mark.parametrize(
    ("settings", "said"),
    [
        ({"kind": "box", "low_mm": [20, 0, 0], "high_mm": [30, 9, 9]},
         r"'it' \(box\) holds nothing of the part: the part spans x 0 to 12, y 0 to 8, z 0 to 4"),
        ({"kind": "box", "low_mm": [3, 0, 0], "high_mm": [1, 9, 9]}, "low < high"),
        ({"kind": "half-space", "point_mm": [0, 0, 0], "normal": [0, 0, 0]}, "must not be zero"),
        ({"kind": "cylinder", "start_mm": [0, 0, 0], "end_mm": [0, 0, 9], "radius_mm": 1,
          "inner_radius_mm": 2}, "inner radius"),
        ({"kind": "patch", "side": "z-", "outline_mm": [[50, 0], [52, 0], [52, 3]]}, "nothing"),
        ({"kind": "label", "labels": [3]}, "palette ends at 2"),
        ({"kind": "label", "blend": {"soft": 1}}, "does not have"),
    ],
)  # fmt: skip
def test_bad_regions(resolved, settings, said):
    data = {**DATA, "region": [*DATA["region"], {"name": "it", **settings}]}
    with pytest.raises(InputError, match=said) as caught:
        resolved(data)
    assert caught.value.key == "region[2]"
    assert Path(caught.value.file).name == "design.toml"


def test_a_load_on_empty_space(resolved):
    data = deepcopy(DATA)
    data["load_case"][0]["load"] = [{"kind": "pressure", "region": "inner", "pressure_MPa": 1.0}]
    with pytest.raises(InputError, match="no exposed surface") as caught:
        resolved(data)
    assert caught.value.key == "load_case[0].load[0]"


def test_a_support_on_a_body_that_is_gone(resolved):
    part = block()
    gone = part.replace(labels=np.where(part.bodies["left"], 0, part.labels))
    with pytest.raises(InputError, match="'left' holds nothing") as caught:
        resolved({**DATA, "region": DATA["region"][:1]}, part=gone)
    assert caught.value.key == "load_case[0].support[0].region"


# ------------------------------------------------------------------ pressure maps
def test_a_map_is_laid_on(resolved):
    found = resolved(with_map(expected_force_N=0.088))
    (load,) = found.load_cases[0].loads
    assert isinstance(load, PressureMap)
    np.testing.assert_allclose(load.values, PRESSURE * 1e-3)
    laid = found.maps["push", 0]
    total = PRESSURE.sum() * 1e-3 * 4.0
    x, y = np.meshgrid([1, 3, 5, 7, 9, 11], [7, 5, 3, 1])
    assert laid.map_force == pytest.approx(total)
    assert laid.force == pytest.approx(total, rel=1e-12)
    centre = [(PRESSURE * a).sum() / PRESSURE.sum() for a in (x, y)]
    assert laid.map_centre == pytest.approx(centre)
    assert laid.centre == pytest.approx(centre, abs=1e-9)
    assert "0.0880 N of it press on 'top'" in found.notes[0]
    assert found.cautions == ()


def test_a_picture_lies_as_its_table(resolved, tmp_path):
    """The same map as grey levels, 10 kPa for full white."""
    data = with_map(file="map.png", white_MPa=0.01)
    del data["load_case"][0]["load"][0]["unit"]
    grey = np.rint(PRESSURE * 25.5).astype(np.uint8)
    Image.fromarray(grey).save(tmp_path / "map.png")
    laid, table = resolved(data).maps["push", 0], resolved(with_map()).maps["push", 0]
    assert laid.force == pytest.approx(table.force, rel=0.01)
    assert laid.centre == pytest.approx(table.centre, abs=0.02)


def test_a_map_without_a_region_presses_on_what_is_seen(resolved):
    data = with_map()
    del data["load_case"][0]["load"][0]["region"]
    assert resolved(data).maps["push", 0].force == pytest.approx(0.088)


def test_a_map_beside_the_part(resolved):
    with pytest.raises(InputError, match=r"0\.0880 N, but 0\.0\d+ N press") as caught:
        resolved(with_map(first_cell_mm=[-2, 7]))
    assert caught.value.key == "load_case[0].load[0]"
    found = resolved(with_map(first_cell_mm=[-2, 7], accept_force_within=0.9))
    assert found.maps["push", 0].force < 0.088
    with pytest.raises(InputError, match="no cell of the map"):
        resolved(with_map(first_cell_mm=[100, 100]))


def test_a_map_in_another_unit(resolved):
    with pytest.raises(InputError, match="1000 times the expected_force_N"):
        resolved(with_map(unit="MPa", expected_force_N=0.088))
    found = resolved(with_map(expected_force_N=0.08))
    assert "were expected" in found.cautions[0]


MIRRORED = {
    "left to right": PRESSURE[:, ::-1],
    "top to bottom": PRESSURE[::-1],
    "both ways": PRESSURE[::-1, ::-1],
}


@pytest.mark.parametrize("how", MIRRORED)
def test_a_mirrored_map_is_refused(resolved, how):
    x, y = np.meshgrid([1, 3, 5, 7, 9, 11], [7, 5, 3, 1])
    centre = [float((PRESSURE * a).sum() / PRESSURE.sum()) for a in (x, y)]
    data = with_map(expected_centre_mm=centre)
    assert resolved(data).cautions == ()
    with pytest.raises(InputError, match=f"lies mirrored.*{how}") as caught:
        resolved(data, values=MIRRORED[how])
    assert caught.value.key == "load_case[0].load[0]"


def test_a_small_shift_that_a_mirror_explains_is_a_caution(resolved):
    """Rows that are nearly alike: mirrored, the centre moves by less than a cell."""
    values = np.array([[1.0] * 6, [1.0] * 6, [1.6] * 6, [1.6] * 6])
    data = with_map(expected_centre_mm=[6.0, float((7 + 5 + 1.6 * 4) / 5.2)])
    assert resolved(data, values=values).cautions == ()
    (caution,) = resolved(data, values=values[::-1]).cautions
    assert "may lie mirrored" in caution
    assert "top to bottom" in caution


def test_a_centre_that_no_mirror_explains(resolved):
    found = resolved(with_map(expected_centre_mm=[6.0, 20.0]))
    assert "mm from where it was expected" in found.cautions[0]


def test_nan_in_a_map_names_the_table(resolved):
    with pytest.raises(InputError, match="Row 1, column 2") as caught:
        resolved(with_map(), values=np.array([[1.0, np.nan]]))
    assert caught.value.file.endswith("map.csv")


# ------------------------------------------------------------------ targets
TARGET = {"name": "give", "region": "top", "load_case": "push", "direction": "z-"}


def test_a_target_of_one_value(resolved):
    found = resolved({**DATA, "target": [{**TARGET, "deflection_mm": 0.5}]}).targets["give"]
    assert found.direction == (0.0, 0.0, -1.0)
    assert found.nodes.sum() == 13 * 9
    assert set(np.unique(found.deflection[found.nodes])) == {0.5}
    assert not found.deflection[~found.nodes].any()


def test_a_target_map_is_interpolated(resolved):
    """A plane in x and y is reproduced between the cells' centres."""
    x, y = np.meshgrid([1, 3, 5, 7, 9, 11], [7, 5, 3, 1])
    settings = {k: MAP[k] for k in MAP if k not in ("kind", "region", "unit")}
    data = {**DATA, "target": [{**TARGET, **settings}]}
    found = resolved(data, values=0.1 * x - 0.02 * y).targets["give"]
    gx, gy, _ = np.meshgrid(*GRID.nodes(), indexing="ij")
    inner = found.nodes & (abs(gx - 6) <= 5) & (abs(gy - 4) <= 3)
    np.testing.assert_allclose(found.deflection[inner], (0.1 * gx - 0.02 * gy)[inner], atol=1e-12)
    # cut to the part that the map covers
    narrow = resolved(data, values=(0.1 * x - 0.02 * y)[:, :3]).targets["give"]
    assert not narrow.nodes[gx > 6].any()
    assert narrow.nodes[gx <= 6].sum() == 7 * 9
    far = {**settings, "first_cell_mm": [500, 7]}
    with pytest.raises(InputError, match="No cell of 'map"):
        resolved({**DATA, "target": [{**TARGET, **far}]})


def test_sample_against_a_table_read_by_hand():
    values = np.array([[1.0, 2.0, 4.0], [10.0, 20.0, 40.0]])
    given = {**MAP, "cell_mm": [2, 1], "first_cell_mm": [10, 5], "columns_grow": "x-",
             "rows_grow": "y+"}  # fmt: skip
    points = np.array([[10, 5, 0], [8, 5, 0], [6, 6, 0], [7, 5.5, 0], [4.9, 5, 0], [10, 4.4, 0]])
    out = sample(values, given, points.astype(float))
    np.testing.assert_allclose(out[:4], [1, 2, 40, (2 + 4 + 20 + 40) / 4])
    assert np.isnan(out[4:]).all()


def test_requirements_keep_their_words(resolved):
    asked = {"name": "light", "measure": "mass", "at_most_g": 5, "resin": "hard"}
    (found,) = resolved({**DATA, "requirement": [asked]}).requirements
    assert (found.name, found.at_most, found.resin, found.unit) == ("light", 5.0, "hard", "g")
