"""Every part of a tray against its own design; volumes where the printer has a bias."""

import json

import numpy as np
import pytest
from print_twins import layered_part

from voxelmat.errors import InputError
from voxelmat.printing import partcheck
from voxelmat.printing.preflight import check_stack, preflight
from voxelmat.printing.profile import load_profile
from voxelmat.printing.readback import read_stack
from voxelmat.printing.stack import write_stack
from voxelmat.printing.tray import TrayEntry, lay_out, write_tray

STANDARD = load_profile("invented-standard")


def graded():
    return layered_part("distance", shape=(20, 18, 16), pure=True)


@pytest.fixture(scope="module")
def tray(tmp_path_factory):
    """Two copies, one of them turned, without marks."""
    entries = [
        TrayEntry(part=graded(), name="a", mark="none"),
        TrayEntry(part=graded(), name="b", mark="none", orientation=("z 90",)),
    ]
    made = lay_out(entries, STANDARD, coupons=False)
    return made, write_tray(made, tmp_path_factory.mktemp("tray") / "s")


def test_sound_parts_are_as_designed(tray):
    made, stack = tray
    checks = check_stack(stack, made.designs, deep=False)
    alone = {f.code for f in preflight(stack, deep=False)}
    assert {f.code for f in checks.findings} <= alone | {"thin zone"}
    assert set(checks.outlines) == {"a", "b"}
    assert all(seen.within for seen in checks.outlines.values())


def test_another_design_is_named_with_its_part(tray):
    _, stack = tray
    part = graded()
    labels = np.array(part.labels, order="F")
    labels[:7] = 0
    other = part.replace(labels=labels, distance=None, occupancy=None)
    found = preflight(stack, {"a": part, "b": other}, deep=False)
    named = {c: {f.part for f in found if f.code == c} for c in ("wrong layer", "volume")}
    assert named == {"wrong layer": {"b"}, "volume": {"b"}}
    assert {f.part for f in found if f.code == "other design"} == {"b"}


def test_names_must_fit(tray):
    _, stack = tray
    with pytest.raises(InputError, match="no part 'c'"):
        preflight(stack, {"c": graded()})
    with pytest.raises(InputError, match="design of each by its name"):
        preflight(stack, graded())


def test_at_most_so_many_are_compared_and_that_is_said(tray, monkeypatch):
    made, stack = tray
    monkeypatch.setattr(partcheck, "MOST_COMPARED", 1)
    checks = check_stack(stack, made.designs, deep=False)
    assert set(checks.outlines) == {"a"}
    (note,) = [f for f in checks.findings if f.code == "parts not compared"]
    assert (note.severity, note.value, note.limit) == ("note", 1, 2)


def test_volumes_are_those_of_the_compensated_design(tmp_path):
    part = graded()
    assert part.distance is not None
    share = np.clip(127.5 - 255 / 16 * part.distance.astype(float), 0, 255).round()
    part = part.replace(occupancy=np.where(part.labels > 0, share, 0).astype(np.uint8))
    biased = STANDARD.replace(bias=(0.4, 0.4, 0.0))  # prints 0.2 mm too large to each side
    stack = write_stack(part, biased, tmp_path / "s")
    found = preflight(stack, part, deep=False)
    assert not {"volume", "other design"} & {f.code for f in found}
    # The same images against a design that nobody compensated are too small by far.
    manifest = stack.folder / "manifest.json"
    manifest.write_text(json.dumps(stack.manifest | {"profile": STANDARD.as_dict()}))
    plain = read_stack(stack.folder)
    codes = {f.code for f in preflight(plain, part, deep=False)}
    assert {"volume", "other design"} <= codes
