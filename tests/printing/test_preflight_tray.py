"""Preflight of a tray of several parts: a finding names its part, and the place in that part."""

import numpy as np
from planted import STANDARD, graded_part

from voxelmat.printing.preflight import preflight
from voxelmat.printing.tray import TrayEntry, lay_out, write_tray
from voxelmat.workflow.finding_pictures import finding_picture

CENTRE, RADIUS = (4.0, 1.5, 2.2), 0.7


def cavity(distance, labels, at):
    """A ball of nothing in the part."""
    off = np.sqrt(sum((a - c) ** 2 for a, c in zip(at, CENTRE, strict=True))) - RADIUS
    return np.maximum(distance, -off), labels


def test_a_cavity_is_placed_in_the_part_that_has_it(tmp_path):
    sound = graded_part().replace(name="sound")
    hollow = graded_part(change=cavity).replace(name="hollow")
    entries = [
        TrayEntry(part=sound, mark="none"),
        TrayEntry(part=hollow, mark="none", orientation=("z 90",)),
    ]
    stack = write_tray(lay_out(entries, STANDARD, coupons=False), tmp_path / "s", support="none")
    found = [f for f in preflight(stack, deep=False) if f.code == "sealed cavity"]
    assert [f.part for f in found] == ["hollow"]
    off = np.linalg.norm(np.subtract(found[0].place_mm, CENTRE))
    assert off <= RADIUS + 0.05
    assert "of hollow" in finding_picture(found[0], stack, hollow).caption
