"""Reading a stack back: hand-edited manifests and images are refused, averages are right."""

import json
import shutil

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from print_twins import HARD, MID, SOFT, layered_part

from voxelmat.errors import FileFormatError, InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing.average import average, stack_to_part
from voxelmat.printing.place import rotation_matrix
from voxelmat.printing.preflight import preflight
from voxelmat.printing.profile import load_profile, shipped_profiles
from voxelmat.printing.readback import read_stack
from voxelmat.printing.stack import write_stack


@pytest.fixture(scope="module")
def stack(tmp_path_factory):
    folder = tmp_path_factory.mktemp("stack") / "s"
    return write_stack(
        layered_part("distance", shape=(8, 7, 6)), load_profile("invented-standard"), folder
    )


@pytest.fixture
def copied(stack, tmp_path):
    return shutil.copytree(stack.folder, tmp_path / "s")


def edit(folder, change):
    path = folder / "manifest.json"
    data = json.loads(path.read_text())
    change(data)
    path.write_text(json.dumps(data))


def channel(**values):
    return lambda m: m["channels"][0].update(values)


def raster(**values):
    return lambda m: m["raster"].update(values)


@pytest.mark.parametrize(
    "change",
    [
        channel(name="../../etc"),
        channel(name="m2"),
        channel(name="/tmp"),
        channel(sites=-1),
        channel(sha256=[]),
        channel(sha256=["x"]),
        channel(role="both"),
        lambda m: m["channels"][0]["sha256"].pop(),
        lambda m: m["channels"].clear(),
        lambda m: m.update(format_number=3),
        lambda m: m.update(surprise=1),
        lambda m: m.pop("profile"),
        raster(pitch_mm=["0", "1", "1"]),
        raster(pitch_mm=["1/0", "1", "1"]),
        raster(pitch_mm=["127/3000", "127/1500", "4/100"]),
        raster(pitch_mm=[0.0423, 0.0847, 0.03]),
        raster(sites=[10, 10, 10]),
        raster(sites=[10**9, 10, 10]),
        raster(rotation=[[1, 0, 0], [0, 1, 0], [0, 0, -1]]),
        raster(rotation=[[1, 1, 0], [0, 1, 0], [0, 0, 1]]),
        raster(offset_sites=[0, 0, 5]),
        lambda m: m["image"].update(width=3),
        lambda m: m["profile"].update(pitch={"x_dpi": 300, "y_dpi": 300, "layer_um": 30}),
        lambda m: m["profile"].pop("name"),
    ],
)
def test_a_hand_edited_manifest_is_refused(copied, change):
    edit(copied, change)
    with pytest.raises(FileFormatError):
        read_stack(copied)


def test_what_is_no_stack_is_refused(copied):
    for text in ("", "{", "[]", "null", '"x"', "[" * 100_000):
        (copied / "manifest.json").write_text(text)
        with pytest.raises(FileFormatError):
            read_stack(copied)
    (copied / "manifest.json").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(FileFormatError):
        read_stack(copied)
    (copied / "manifest.json").unlink()
    with pytest.raises(FileFormatError, match="not a finished stack"):
        read_stack(copied)
    with pytest.raises(FileFormatError, match="no folder"):
        read_stack(copied / "nowhere")


def test_a_changed_or_missing_image_is_refused_when_read(copied):
    stack = read_stack(copied)
    other = stack.path(1, 4).read_bytes()
    stack.path(0, 5).write_bytes(other)
    with pytest.raises(FileFormatError, match="SHA-256"):
        stack.layer(5)
    stack.path(0, 6).unlink()
    with pytest.raises(FileFormatError, match="missing"):
        stack.layer(6)
    with pytest.raises(InputError):
        stack.layer(stack.n_layers)
    stack.layer(4)


def test_a_link_out_of_the_folder_is_not_followed(copied, tmp_path):
    outside = tmp_path / "outside"
    (copied / "m1").rename(outside)
    (copied / "m1").symlink_to(outside)
    with pytest.raises(FileFormatError, match="outside the stack"):
        read_stack(copied).layer(0)


def test_layers_lie_on_the_part(tmp_path):
    # Two halves along x: the layer read back, whatever the corner and row direction, has the
    # first resin on the low-x side and the tray's x axis first.
    part = layered_part("voxels", shape=(6, 4, 4), pure=True)
    for name in shipped_profiles():
        stack = write_stack(part, load_profile(name), tmp_path / name)
        layer = stack.layer(stack.n_layers // 2)
        assert layer.shape == stack.shape[:2]
        assert (layer[1] == 1).all()
        assert (layer[-2] == 2).all()
        turned = write_stack(part, load_profile(name), tmp_path / name, orientation=["z 90"])
        layer = turned.layer(0)
        assert (layer[:, 1] == 1).all()
        assert (layer[:, -2] == 2).all()


PALETTE = (EMPTY, Blend.pure("hard"), Blend.pure("soft"), Blend.of({"hard": 1, "soft": 1}))


@st.composite
def random_jobs(draw):
    """Small parts of pure and half-and-half voxels whose edges are whole numbers of sites."""
    profile = load_profile(draw(st.sampled_from(shipped_profiles())))
    turns = draw(st.sampled_from([(), ("x 90",), ("z 90", "y 90"), ("y 180",), ("x -90", "z 180")]))
    shape = draw(st.tuples(*[st.integers(1, 3)] * 3))
    along = np.argmax(abs(rotation_matrix(turns)), axis=0)  # tray axis of each part axis
    spacing = tuple(float(8 * profile.pitch[a]) for a in along)
    grid = VoxelGrid(shape=shape, spacing=spacing, origin=(0.5, -3.0, 2.0))
    count = int(np.prod(shape))
    labels = draw(st.lists(st.integers(0, 3), min_size=count, max_size=count))
    if not any(labels):
        labels[0] = 3
    labels = np.array(labels).reshape(shape)
    part = Part(grid=grid, resins=(HARD, SOFT, MID), palette=PALETTE, labels=labels)
    return part, profile, turns, draw(st.integers(0, 9))


@settings(deadline=None, max_examples=25)
@given(random_jobs())
def test_round_trip_of_random_parts(tmp_path_factory, job):
    part, profile, turns, seed = job
    folder = tmp_path_factory.mktemp("random") / "s"
    stack = write_stack(
        part, profile, folder, orientation=turns, seed=seed, support="none", threads=1
    )
    back = average(read_stack(folder), part.grid)
    assert np.abs(back.occupancy - (part.labels > 0)).max() < 1e-4
    for resin, filled in zip(back.resins, back.filled, strict=True):
        wanted = np.array([b.fraction(resin) for b in PALETTE])[part.labels]
        pure = part.labels != 3
        assert np.abs(filled - wanted)[pure].max(initial=0) < 1e-4
        # A window of 8^3 sites keeps within .045 of its fraction (gate of the mask's tests).
        assert np.abs(filled - wanted)[~pure].max(initial=0) <= 0.045
        assert stack.volumes_mm3[resin] == pytest.approx(
            float(filled.sum()) * part.grid.voxel_volume, rel=1e-5
        )
    allowed = {"floating piece", "volume"}  # loose voxels are likely; few sites make few droplets
    found = preflight(stack, part, deep=False)  # what is judged in space never says stop
    assert {f.code for f in found if f.severity == "stop"} <= allowed
    printed = stack_to_part(stack, part)
    table, wanted = printed.palette_fractions(), part.palette_fractions()
    pure = (part.labels == 1) | (part.labels == 2)
    assert np.array_equal(table[printed.labels][pure], wanted[part.labels][pure])
    assert np.abs(table[printed.labels] - wanted[part.labels]).max() <= 0.045 + 1 / 64
    assert np.array_equal(printed.labels > 0, part.labels > 0)


def test_a_gradient_survives(tmp_path):
    n = 24
    t = np.linspace(0.05, 0.95, n)
    palette = (EMPTY, *(Blend.of({"hard": f, "soft": 1 - f}) for f in t))
    grid = VoxelGrid(shape=(n, 4, 4), spacing=(0.37, 0.71, 0.29))
    labels = np.broadcast_to(np.arange(1, n + 1)[:, None, None], grid.shape)
    part = Part(grid=grid, resins=(HARD, SOFT), palette=palette, labels=labels)
    stack = write_stack(part, load_profile("invented-standard"), tmp_path / "s")
    hard = average(stack, grid).fractions()[0]
    assert np.abs(hard - t[:, None, None]).max() < 0.06
    assert np.abs(hard.mean(axis=(1, 2)) - t).max() < 0.02


def test_average_needs_voxels_of_a_pitch_or_more(stack):
    fine = VoxelGrid(shape=(4, 4, 4), spacing=(0.02, 0.5, 0.5))
    with pytest.raises(InputError, match="smaller than"):
        average(stack, fine)


def test_bought_in_bodies_stay_in_the_printed_part(tmp_path):
    steel = HARD.replace(name="steel", kind="bought-in")
    grid = VoxelGrid(shape=(5, 5, 5), spacing=(0.5, 0.5, 0.5))
    labels = np.ones(grid.shape, np.uint16)
    labels[2, 2, :] = 2
    part = Part(
        grid=grid, resins=(HARD, steel), palette=(EMPTY, PALETTE[1], Blend.pure("steel")),
        labels=labels,
    )  # fmt: skip
    stack = write_stack(part, load_profile("invented-standard"), tmp_path / "s", support="none")
    assert [c.resin for c in stack.channels] == ["hard"]
    ix, iy = stack.shape[0] // 2, stack.shape[1] // 2
    assert stack.layer(10)[ix, iy] == 0
    printed = stack_to_part(stack, part)
    names = [str(printed.palette[v]) for v in printed.labels[2, 2, :]]
    assert names == ["steel"] * 5
    assert str(printed.palette[printed.labels[1, 2, 2]]) == "hard"
