"""Print records: appended, never changed, chained; masses outside their band are flagged."""

import dataclasses
import errno
import json
import os

import pytest
from print_twins import layered_part, resin

from voxelmat.errors import InputError, ResourceError
from voxelmat.model.material import Constant
from voxelmat.printing.mass import DENSITY_SPREAD, DROPLET_TOLERANCE, mass_band
from voxelmat.printing.profile import load_profile
from voxelmat.printing.record import (
    Measured,
    PrintRecord,
    append_record,
    read_records,
    record_path,
)
from voxelmat.printing.stack import write_stack

LOTS = {"hard": "A1", "soft": "B2", "support": "C3"}


def record(**given):
    return PrintRecord(**{"operator": "print room", "started": "2026-12-01T08:30", **given})


@pytest.fixture
def stack(tmp_path):
    part = layered_part("distance", shape=(8, 7, 6), pure=True)
    return write_stack(part, load_profile("invented-standard"), tmp_path / "s", threads=1)


def grams(stack, *roles):
    density = {"model": 1.15e-3, "support": 1.12e-3}  # g/mm3
    return sum(c.volume_mm3 * density[c.role] for c in stack.channels if c.role in roles)


def test_lines_are_appended_and_chained(stack):
    before = {p: p.read_bytes() for p in stack.folder.rglob("*") if p.is_file()}
    first = record(lots=LOTS, measured=(Measured(name="width", nominal_mm=9, measured_mm=9.1),))
    assert append_record(stack, first) == []
    kept = record_path(stack).read_bytes()
    assert {f.code for f in append_record(stack, record(note="zweiter Versuch, µ"))} == {"no lot"}
    assert record_path(stack).read_bytes().startswith(kept)
    found, faults = read_records(stack)
    assert faults == []
    assert [e["record"]["lots"] for e in found] == [LOTS, {}]
    assert found[0]["record"]["measured"][0]["measured_mm"] == 9.1
    assert found[0]["job"] == stack.manifest["job"]
    assert {p: p.read_bytes() for p in stack.folder.rglob("*") if p.is_file()} == before


def test_a_changed_or_missing_line_shows(stack):
    for n in range(3):
        append_record(stack, record(note=str(n)))
    path = record_path(stack)
    lines = path.read_text().splitlines()
    path.write_text(
        "\n".join([lines[0], lines[1].replace("print room", "another"), lines[2]]) + "\n"
    )
    assert read_records(stack)[1] == ["line 3 does not follow on the line before it"]
    path.write_text("\n".join([lines[0], lines[2]]) + "\n")
    assert read_records(stack)[1] == ["line 2 does not follow on the line before it"]


def test_after_a_torn_line_records_go_on(stack):
    append_record(stack, record())
    with record_path(stack).open("a") as handle:
        handle.write('{"format": "voxel')
    append_record(stack, record(note="after"))
    found, faults = read_records(stack)
    assert [e["record"]["note"] for e in found] == ["", "after"]
    assert len(faults) == 1
    assert "line 2 cannot be read" in faults[0]


def test_a_full_disk_leaves_the_file_as_it_was(stack, monkeypatch):
    append_record(stack, record())
    kept = record_path(stack).read_bytes()
    real = os.write

    def half(handle, data):
        """Takes the first half of a record, then no more."""
        if len(data) > 300:
            return real(handle, data[: len(data) // 2])
        raise OSError(errno.ENOSPC, "full")

    monkeypatch.setattr(os, "write", half)
    with pytest.raises(ResourceError, match="disk is full"):
        append_record(stack, record(note="x" * 20))
    monkeypatch.undo()
    assert record_path(stack).read_bytes() == kept
    assert json.loads(kept.splitlines()[0])["record"]["operator"] == "print room"


@pytest.mark.parametrize("with_support", [False, True])
def test_mass_band_by_hand(stack, with_support):
    roles = ("model", "support") if with_support else ("model",)
    band = mass_band(stack, with_support=with_support)
    wanted = grams(stack, *roles)
    spread = (
        (1 - DENSITY_SPREAD) * (1 - DROPLET_TOLERANCE),
        (1 + DENSITY_SPREAD) * (1 + DROPLET_TOLERANCE),
    )
    assert band.value_g == pytest.approx(wanted)
    assert (band.low_g, band.high_g) == pytest.approx([s * wanted for s in spread])
    assert "ours" in band.basis
    for mass, flagged in (
        (band.low_g * 0.999, True),
        (band.low_g * 1.001, False),
        (band.high_g * 0.999, False),
        (band.high_g * 1.001, True),
    ):
        found = append_record(stack, record(lots=LOTS, mass_g=mass, with_support=with_support))
        assert [f.code for f in found] == (["mass"] if flagged else [])


def test_densities_of_material_files_are_used(stack):
    wide = Constant(value=1.15e-9, low=1.0e-9, high=1.3e-9, unit="tonne/mm3")
    library = {n: resin(n) for n in ("hard", "soft")}
    exact = mass_band(stack, materials=library)
    assert exact.low_g == pytest.approx(grams(stack, "model") * (1 - DROPLET_TOLERANCE))
    library["hard"] = dataclasses.replace(library["hard"], density=wide)
    assert mass_band(stack, materials=library).low_g < exact.low_g


def test_a_stopped_print_is_judged_by_its_layers(stack):
    n = stack.n_layers // 2
    site = float(stack.raster.site_volume)
    sites = sum(int(((stack.layer(k) == 1) | (stack.layer(k) == 2)).sum()) for k in range(n))
    band = mass_band(stack, layers=n)
    assert band.value_g == pytest.approx(sites * site * 1.15e-3)
    whole = mass_band(stack).value_g
    assert append_record(stack, record(lots=LOTS, mass_g=band.value_g, abort_layer=n)) == []
    found = append_record(stack, record(lots=LOTS, mass_g=whole, abort_layer=n))
    assert [f.code for f in found] == ["mass"]


@pytest.mark.parametrize(
    ("given", "key"),
    [
        ({"operator": ""}, "operator"),
        ({"operator": "x" * 25}, "operator"),
        ({"started": "yesterday"}, "started"),
        ({"mass_g": 0.0}, "mass_g"),
        ({"mass_g": float("nan")}, "mass_g"),
        ({"measured": (Measured(name="a", nominal_mm=1, measured_mm=-1),)}, "measured"),
        ({"lots": {"other": "1"}}, "lots"),
        ({"abort_layer": 10**6}, "abort_layer"),
    ],
)
def test_bad_records_leave_nothing(stack, given, key):
    with pytest.raises(InputError) as caught:
        append_record(stack, record(**given))
    assert caught.value.key == key
    assert not record_path(stack).exists()
