"""Support by policy on written stacks: grid with interface, skin, columns, machine, none."""

import numpy as np
import pytest
from print_twins import HARD, sphere_distance
from scipy import ndimage

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.model.profile import PrintProfile
from voxelmat.model.support_figures import SUPPORT_POLICIES, SupportFigures
from voxelmat.printing.estimate import estimate
from voxelmat.printing.preflight import preflight
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_stack
from voxelmat.printing.support import fill_columns
from voxelmat.printing.support_policies import GridSupport, SkinSupport
from voxelmat.workflow.summary import _SUPPORT

PALETTE = (EMPTY, Blend.pure("hard"))
SIZES = SupportFigures(grid_pitch=1.6, grid_wall=0.4, interface=0.8, skin=0.6)
STANDARD = load_profile("invented-standard").replace(support_sizes=SIZES)
H = 0.2


def table():
    """A plate of 8 x 6 mm on one leg, its underside at 3 mm; the plate ends inside its grid."""
    labels = np.zeros((48, 38, 22), np.uint16)
    labels[4:44, 4:34, 15:19] = 1
    labels[4:10, 4:10, :19] = 1
    grid = VoxelGrid(shape=labels.shape, spacing=(H, H, H))
    solid = labels > 0
    far = [ndimage.distance_transform_edt(m) - 0.5 for m in (~solid, solid)]
    distance = np.clip(np.rint(16 * np.where(solid, -far[1], far[0])), -127, 127).astype(np.int8)
    return Part(
        grid=grid,
        resins=(HARD,),
        palette=PALETTE,
        labels=np.where(distance < 16, 1, 0),
        distance=distance,
        name="table",
    )


def sites(stack):
    """Channel of each site ``[layer, x, y]``: 1 part, 2 support."""
    return np.stack([stack.layer(k) for k in range(stack.n_layers)])


def written(tmp_path, policy, **options):
    return write_stack(table(), STANDARD, tmp_path / policy, support=policy, **options)


def test_a_grid_stands_under_a_solid_interface(tmp_path):
    stack = written(tmp_path, "grid")
    block = sites(stack)
    under = np.flatnonzero(block[:, -5, -5] == 1)[0]  # first layer of the plate
    layer = float(stack.raster.pitch[2])
    below = lambda mm: block[under - 1 - round(mm / layer)]  # noqa: E731
    assert ((below(0.0) == 2) | (below(0.0) == 1)).mean() > 0.95  # held all over, no gap
    assert ((below(0.5) == 2) | (below(0.5) == 1)).mean() > 0.95
    share = (below(2.0) == 2).sum() / ((below(2.0) != 1).sum())
    assert share == pytest.approx(1 - 0.75**2, abs=0.06)  # walls of .4 at 1.6, both ways
    line = below(2.0)[-60:-4, 30:-4] == 2  # whole walls run through, both ways
    assert line.all(axis=0).any()
    assert line.all(axis=1).any()
    _, pieces = ndimage.label(block > 0)
    assert pieces == 1
    assert (block[under + 1 :] == 2).mean() < 0.002  # no skin along the upright sides


def test_the_volume_of_a_grid_is_counted_and_less_than_that_of_columns(tmp_path):
    grid, columns = written(tmp_path, "grid"), written(tmp_path, "columns")
    for stack in (grid, columns):
        wanted = float((sites(stack) == 2).sum() * stack.raster.site_volume)
        assert estimate(stack).support_mm3 == pytest.approx(wanted)
    assert np.array_equal(sites(grid) == 1, sites(columns) == 1)  # the part wins in both
    assert not ((sites(grid) == 2) & (sites(columns) == 0)).any()
    assert 0.4 < estimate(grid).support_mm3 / estimate(columns).support_mm3 < 0.7


def test_a_grid_is_the_same_for_any_split_and_orientation(tmp_path):
    options = {"orientation": ["x -90", "z 90"]}
    one = write_stack(table(), STANDARD, tmp_path / "a", support="grid", slab=7, **options)
    two = write_stack(table(), STANDARD, tmp_path / "b", support="grid", threads=1, **options)
    assert [c.sha256 for c in one.channels] == [c.sha256 for c in two.channels]
    assert one.channels[-1].sites > 0


def filled(fill, outline):
    field = np.empty_like(outline)
    fill(outline.__getitem__, field)
    return field


def test_grid_against_a_slow_twin():
    outline = np.random.default_rng(3).integers(-127, 128, (9, 8, 11)).astype(np.int8)
    spacing = (0.3, 0.2, 0.25)
    grid = GridSupport(SIZES, spacing)
    assert grid.interface_planes == 3
    walls = np.full((8, 11), 200.0)
    for r in range(8):
        for c in range(11):
            off = [abs(r - m) * 0.2 for m in range(-16, 33, 8)]
            off += [abs(c - m) * 0.25 for m in range(-12, 37, 6)]  # 1.6 is 6.4 voxels
            walls[r, c] = min(127, np.rint((min(off) - 0.2) * 16 / 0.2))
    for k in range(9):
        near = outline[k : k + 4].min(axis=0).astype(int) + 2
        far = np.maximum(outline[k:].min(axis=0).astype(int) + 2, walls)
        wanted = np.minimum(outline[k], np.minimum(np.minimum(near, far), 127))
        assert np.array_equal(filled(grid, outline)[k], wanted)


def test_every_policy_keeps_the_part_and_leaves_no_gap():
    grid = VoxelGrid(shape=(20, 20, 20), spacing=(0.3,) * 3)
    ball = sphere_distance(grid, (3, 3, 3), 2.0).T.copy()
    for fill in (GridSupport(SIZES, (0.3,) * 3), SkinSupport(0.6, (0.3,) * 3, 1), fill_columns):
        field = filled(fill, ball)
        assert (field <= ball).all()
        support = (field < 0) & (ball >= 0)
        under = (ball[1:] < -2) & (ball[:-1] >= 0)  # the voxel below each lowest one of the ball
        assert (field[:-1][under] < 0).all()
        assert support.any()


def test_a_skin_has_its_thickness_beside_and_below_and_none_above():
    outline = np.full((20, 30, 30), 127, np.int8)
    at = (np.abs(np.arange(30) - 14.5) - 5.25) * 16
    z = (np.abs(np.arange(20) - 9.5) - 5.25) * 16
    box = np.maximum(z[:, None, None], np.maximum(at[:, None], at))
    outline = np.clip(box, -127, 127).astype(np.int8)  # half edge 5.25 voxels of 0.2 mm
    field = filled(SkinSupport(0.45, (0.2,) * 3, 1), outline).astype(float)
    line = field[9, 14, :15]  # from the side: zero at 14.5 - 5.25 - 2.25 voxels
    first = np.flatnonzero(line < 0)[0]
    cross = first - line[first] / (line[first] - line[first - 1])
    assert cross == pytest.approx(14.5 - 5.25 - 2.25, abs=0.07)
    line = field[:10, 14, 14]
    first = np.flatnonzero(line < 0)[0]
    cross = first - line[first] / (line[first] - line[first - 1])
    assert cross == pytest.approx(9.5 - 5.25 - 2.25, abs=0.07)
    assert np.array_equal(field[15:, 10:20, 10:20], outline[15:, 10:20, 10:20])


def test_a_skin_of_a_ball_is_even():
    grid = VoxelGrid(shape=(30, 30, 30), spacing=(0.3,) * 3)
    ball = sphere_distance(grid, (4.5, 4.5, 4.5), 3.0).T.copy()
    field = filled(SkinSupport(0.6, (0.3,) * 3, 1), ball)
    z, y, x = np.nonzero((field < 0) & (ball >= 0))
    r = np.sqrt(sum(((v + 0.5) * 0.3 - 4.5) ** 2 for v in (x, y, z)))
    lower = (z + 0.5) * 0.3 < 4.0
    assert r[lower].max() < 3.6 + 0.1
    outer, inner = (np.pi / 3 * (r - 0.45) ** 2 * (2 * r + 0.45) for r in (3.6, 3.0))  # caps
    area = 2 * np.pi * 3.3 * (3.3 - 0.45)
    assert -0.2 * 0.3 < (lower.sum() * 0.3**3 - (outer - inner)) / area < 0.05 * 0.3
    assert not ((field < 0) & (ball >= 0))[24:].any()


def test_sizes_that_cannot_be():
    with pytest.raises(InputError, match="leave no room") as error:
        SupportFigures(grid_pitch=1.0, grid_wall=1.0)
    assert error.value.key == "support.grid_pitch_mm"
    with pytest.raises(InputError, match="above 0"):
        SupportFigures(skin=0)
    with pytest.raises(InputError, match="too thin"):
        SkinSupport(0.01, (0.3,) * 3, 1)
    data = STANDARD.as_dict()
    assert PrintProfile.from_dict(data).support_sizes == SIZES
    data["support"]["skin_mm"] = "thin"
    with pytest.raises(InputError, match="a number") as error:
        PrintProfile.from_dict(data, file="p.toml")
    assert error.value.key == "support.skin_mm"


@pytest.mark.parametrize("turns", [(), ("x 90",), ("y 180",)])
@pytest.mark.parametrize("outline", ["distance", "voxels"])
def test_a_skin_goes_round_a_part_that_fills_its_grid(tmp_path, turns, outline):
    grid = VoxelGrid(shape=(20, 15, 10), spacing=(0.2, 0.2, 0.2), origin=(1.0, 2.0, 3.0))
    labels = np.ones(grid.shape, np.uint16)
    distance = None
    if outline == "distance":
        deep = [np.minimum(np.arange(n), np.arange(n)[::-1]) + 0.5 for n in grid.shape]
        distance = -16 * np.minimum.reduce(np.meshgrid(*deep, indexing="ij"))
        distance = np.rint(distance).astype(np.int8)
    part = Part(grid=grid, resins=(HARD,), palette=PALETTE, labels=labels, distance=distance)
    stack = write_stack(part, STANDARD, tmp_path / "s", support="skin", orientation=turns)
    block = sites(stack)
    volume = float((block == 1).sum() * stack.raster.site_volume)
    pitch = stack.raster.pitch
    rounding = sum(float(p) / size for p, size in zip(pitch, (2, 2, 2), strict=True))
    assert volume == pytest.approx(4 * 3 * 2, rel=rounding)  # whole sites, shortest edge 2 mm
    z, x, y = (n // 2 for n in block.shape)
    for line, p in ((block[z, :, y], pitch[0]), (block[z, x, :], pitch[1]), (block[:, x, y], 0)):
        inside = np.flatnonzero(line == 1)
        step = float(p or pitch[2])
        below, above = inside[0], len(line) - 1 - inside[-1]
        assert (line[:below] == 2).all()
        assert below * step == pytest.approx(0.6, abs=1.6 * step)
        assert above * step == pytest.approx(0.6 if p else 0.0, abs=1.6 * step)


def test_preflight_takes_a_skin_as_it_is(tmp_path):
    stack = written(tmp_path, "skin")
    found = {f.code for f in preflight(stack, table(), STANDARD)}
    assert found <= {"floating piece", "island in mid-air"}  # a skin does not reach the tray


def test_the_report_has_words_for_every_policy():
    assert set(_SUPPORT) == set(SUPPORT_POLICIES)
