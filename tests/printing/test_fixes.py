"""Repairs of a design: each does what it says, is seen in the stack, and keeps off what it must."""

import numpy as np
import pytest
from planted import STANDARD, graded_part, stack_of

from voxelmat.errors import InputError
from voxelmat.model.finding import Finding
from voxelmat.model.fix import DrainHole
from voxelmat.printing.fixes import fix_part, named_fixes
from voxelmat.printing.preflight import preflight

CENTRE, RADIUS = (4.0, 1.5, 2.2), 0.7


def cavity(distance, labels, at):
    off = np.sqrt(sum((a - c) ** 2 for a, c in zip(at, CENTRE, strict=True))) - RADIUS
    return np.maximum(distance, -off), labels


def speck(distance, labels, at):
    off = np.sqrt(sum((a - c) ** 2 for a, c in zip(at, (7.9, 3.3, 3.3), strict=True))) - 0.35
    return np.minimum(distance, off), labels


def thin_fin(distance, labels, at):
    x, y, z = at
    low = np.maximum(distance, z - 2.0)
    fin = np.max([np.abs(x - 4.0) - 0.15, np.abs(y - 1.5) - 1.5, z - 3.6, 1.5 - z], axis=0)
    return np.minimum(low, fin), labels


def codes(findings):
    return {f.code for f in findings}


def test_a_speck_is_removed_and_the_rest_stays(tmp_path):
    part = graded_part(change=speck)
    found = preflight(stack_of(part, tmp_path / "a"), part)
    assert "floating piece" in codes(found)
    done = fix_part(part, found, STANDARD)
    assert done.steps[0].name == "remove speck"
    lost = sum(part.volumes().values()) - sum(graded_part().volumes().values())
    assert done.steps[0].removed_mm3 == pytest.approx(lost, rel=0.01)
    clean = graded_part()
    assert np.abs(done.part.occupancy.astype(int) - clean.occupancy).max() < 16
    assert preflight(stack_of(done.part, tmp_path / "b"), done.part) == []


def test_a_large_piece_is_not_removed():
    def two(distance, labels, at):
        return np.where(np.abs(at[2] - 2.3) < 0.3, 1.0, distance), labels

    part = graded_part(change=two)
    loose = Finding(severity="stop", code="floating piece", message="", place_mm=(4.0, 1.5, 3.3))
    done = fix_part(part, [loose], STANDARD)
    assert done.steps == ()
    assert done.part is part
    assert "more than the 1 mm^3 of a speck" in done.refused[0].reason


def test_a_cavity_is_drained_where_a_person_chose(tmp_path):
    part = graded_part(change=cavity)
    found = preflight(stack_of(part, tmp_path / "a"), part)
    assert "sealed cavity" in codes(found)
    alone = fix_part(part, found, STANDARD)
    assert alone.steps == ()
    assert "no drain was chosen" in alone.refused[0].reason
    hole = DrainHole(point_mm=CENTRE, direction=(0, 0, -1), diameter_mm=1.0)
    done = fix_part(part, found, STANDARD, drains=[hole])
    assert [s.name for s in done.steps] == ["drain"]
    # The hole through a wall of .98 mm below the cavity, whose cap adds little.
    assert done.steps[0].removed_mm3 == pytest.approx(np.pi * 0.25 * 1.02, rel=0.25)
    assert "sealed cavity" not in codes(preflight(stack_of(done.part, tmp_path / "b"), done.part))
    small = DrainHole(point_mm=CENTRE, direction=(0, 0, -1), diameter_mm=0.1)
    assert "is under the" in fix_part(part, found, STANDARD, drains=[small]).refused[0].reason


def test_a_protected_surface_is_never_touched(tmp_path):
    part = graded_part(change=cavity)
    found = preflight(stack_of(part, tmp_path / "a"), part, deep=False)
    hole = DrainHole(point_mm=CENTRE, direction=(0, 0, -1))
    foot = np.zeros(part.grid.shape, bool)
    foot[:, :, :3] = part.labels[:, :, :3] > 0
    done = fix_part(part, found, STANDARD, protected=foot, drains=[hole])
    assert done.steps == ()
    assert "a protected surface" in done.refused[0].reason
    up = DrainHole(point_mm=CENTRE, direction=(0, 0, 1))
    assert fix_part(part, found, STANDARD, protected=foot, drains=[up]).steps


def test_a_thin_wall_is_thickened_to_the_least_size(tmp_path):
    part = graded_part(change=thin_fin)
    found = preflight(stack_of(part, tmp_path / "a"), part)
    thin = [f for f in found if named_fixes([f])[0].fix == "thicken"]
    assert thin
    done = fix_part(part, thin[:1], STANDARD)
    assert [s.name for s in done.steps] == ["thicken"]
    assert done.steps[0].added_mm3 > 0
    after = preflight(stack_of(done.part, tmp_path / "b"), done.part)
    assert [f for f in after if named_fixes([f])[0].fix == "thicken"] == []
    assert "thicken" in done.text()


def test_a_part_without_a_distance_is_refused():
    part = graded_part().replace(distance=None)
    with pytest.raises(InputError, match="without a signed distance"):
        fix_part(part, [], STANDARD)
