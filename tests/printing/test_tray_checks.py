"""3-D checks on a tray of several parts: each finding names its part and a place in it."""

import numpy as np
import pytest
from print_twins import HARD

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.printing import coarse as coarse_module
from voxelmat.printing.checks3d import three_d_findings
from voxelmat.printing.profile import load_profile
from voxelmat.printing.tray import TrayEntry, lay_out, write_tray

STANDARD = load_profile("invented-standard")
H = 0.2


def part(labels, name):
    grid = VoxelGrid(shape=labels.shape, spacing=(H, H, H), origin=(-1.0, 5.0, 2.0))
    palette = (EMPTY, Blend.pure("hard"))
    return Part(grid=grid, resins=(HARD,), palette=palette, labels=labels, name=name)


def bottle():
    """A room with a neck of 0.6 mm."""
    labels = np.ones((24, 22, 20), np.uint16)
    labels[6:18, 6:16, 5:15] = 0
    labels[10:13, 9:12, 14:] = 0
    return part(labels, "bottle")


def fin():
    """A block with a wall of 0.2 mm."""
    labels = np.zeros((26, 20, 20), np.uint16)
    labels[:, :, :6] = 1
    labels[12:13, 2:18, 6:] = 1
    return part(labels, "fin")


@pytest.mark.parametrize("cells", [16_000_000, 30_000])
def test_findings_name_their_part(tmp_path, monkeypatch, cells):
    monkeypatch.setattr(coarse_module, "MOST_CELLS", cells)  # all at once, or part by part
    sound = part(np.ones((20, 20, 12), np.uint16), "sound")
    entries = [
        TrayEntry(part=bottle(), mark="none"),
        TrayEntry(part=sound, mark="none"),
        TrayEntry(part=fin(), mark="none", orientation=("z 90",)),
    ]
    tray = lay_out(entries, STANDARD, coupons=False)
    stack = write_tray(tray, tmp_path / "s", support="columns")
    found = {f.part: f for f in three_d_findings(stack)}
    assert set(found) == {"bottle", "fin"}
    drain = found["bottle"]
    assert drain.code == "narrow drain"
    assert drain.value == pytest.approx(0.6, abs=0.09)
    assert np.allclose(drain.place_mm[:2], (-1 + 11.5 * H, 5 + 10.5 * H), atol=2 * H)
    assert 14 * H - 2 * H <= drain.place_mm[2] - 2.0 <= 20 * H
    wall = found["fin"]
    assert wall.code == "wall under minimum"
    assert wall.value == pytest.approx(0.2, abs=0.09)
    assert abs(wall.place_mm[0] - (-1 + 12.5 * H)) <= 2 * H


def test_a_skin_on_a_tray_has_room(tmp_path):
    profile = STANDARD.replace(support_policy="skin")
    blocks = [part(np.ones((15, 12, 10), np.uint16), name) for name in ("one", "two")]
    entries = [TrayEntry(part=b, mark="none") for b in blocks]
    stack = write_tray(lay_out(entries, profile, coupons=False), tmp_path / "s")
    pitch = stack.raster.pitch
    assert stack.support_channel is not None
    for k in range(2):
        n = stack.parts[k].raster.shape
        for axis, edge in enumerate((3.0, 2.4)):
            size = n[axis] * float(pitch[axis])
            assert edge + 1.0 - 0.1 <= size <= edge + 1.0 + 9 * float(pitch[axis])
    with pytest.raises(InputError, match="before the tray is laid out"):
        write_tray(lay_out(entries, STANDARD, coupons=False), tmp_path / "b", support="skin")
