"""The measure "interface safety factor": values, bands, and every reason for doubt."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from voxelmat.fea.energy_error import energy_error
from voxelmat.fea.static import solve
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.interface import Bond
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion
from voxelmat.model.requirement import Requirement
from voxelmat.workflow.interfaces import interface_spots, spot_rows
from voxelmat.workflow.report import render
from voxelmat.workflow.resolve import Resolved
from voxelmat.workflow.verdicts import verdicts

SOURCE = "made up for this test"
LOW, HIGH = FaceRegion(name="low", side="x-"), FaceRegion(name="high", side="x+")
CORE = Box(name="core", low=(0, 1.2, 1.2), high=(9, 2.8, 2.8))
FAR = Box(name="far", low=(5.2, -1, -1), high=(9, 9, 9))


def resin(name, E):
    return Material(
        name=name,
        kind="rigid",
        E=Constant(value=E, source=SOURCE),
        nu=Constant(value=0.0, source=SOURCE),
        density=Constant(value=1e-9, source=SOURCE),
    )


def bond(**change):
    given = {"value": 0.5, "low": 0.4, "high": 0.6, "unit": "MPa", "source": SOURCE}
    strength = Constant(**{**given, **change})
    return Bond(first="hard", second="soft", tensile=strength, shear=strength)


def judged(*bonds, region=None, at_least=3.0, temperature=23.0, width=4):
    """A bar of soft and hard in series, pulled by 1.6 N over 16 mm^2: 0.1 MPa on the bond."""
    labels = np.ones((8, 4, width), np.uint16)
    labels[4:] = 2
    part = Part(
        grid=VoxelGrid(shape=labels.shape, spacing=(1.0, 1.0, 1.0)),
        resins=(resin("soft", 2.0), resin("hard", 2000.0)),
        palette=(EMPTY, Blend.pure("soft"), Blend.pure("hard")),
        labels=labels,
    )
    case = LoadCase(
        name="pull",
        supports=(Support(region=LOW),),
        loads=(Force(region=HIGH, vector=(1.6, 0.0, 0.0)),),
        temperature_degC=temperature,
    )
    result = solve(part, case, tol=1e-10)
    requirement = Requirement(
        name="holds",
        measure="interface safety factor",
        load_case="pull",
        region=region,
        at_least=at_least,
    )
    resolved = Resolved(
        regions={"core": CORE, "far": FAR},
        load_cases=(case,),
        targets={},
        requirements=(requirement,),
        bonds=bonds,
    )
    return verdicts(resolved, part, {"pull": result})[0], result


def test_strength_over_traction():
    verdict, _ = judged(bond(), region="core")
    assert (verdict.value, verdict.low, verdict.high) == pytest.approx((5.0, 4.0, 6.0), rel=1e-5)
    assert verdict.status == "met"
    assert any("between hard and soft" in r and "pulled apart" in r for r in verdict.reasons)
    assert judged(bond(), region="core", at_least=6.5)[0].status == "not met"
    assert judged(bond(), region="core", at_least=5.5)[0].status == "cannot be said"


@pytest.mark.parametrize(
    ("change", "region", "temperature", "reason"),
    [
        ({"source": "indicative"}, "core", 23.0, "bond strength of hard + soft is indicative"),
        ({}, None, 23.0, "ends in the open"),
        ({}, "core", 60.0, "tested at 23"),
    ],
)
def test_doubts_keep_it_unsaid(change, region, temperature, reason):
    verdict, _ = judged(bond(**change), region=region, temperature=temperature)
    assert verdict.value == pytest.approx(5.0, rel=1e-5)
    assert verdict.status == "cannot be said"
    assert any(reason in r for r in verdict.reasons)


def test_no_record_no_value():
    verdict, result = judged()
    assert verdict.status == "cannot be said"
    assert not np.isfinite(verdict.value)
    assert any("hard + soft has no record" in r for r in verdict.reasons)
    rows = spot_rows(interface_spots(result, ()))
    assert rows[0][0] == "hard + soft"
    assert rows[0][5] == "no record"
    assert rows[0][2] == "0.100"


def test_no_interface_in_the_region():
    verdict, _ = judged(bond(), region="far")
    assert verdict.status == "cannot be said"
    assert any("no two resins meet" in r for r in verdict.reasons)


def test_rows_of_the_report():
    _, result = judged()
    row = spot_rows(interface_spots(result, (dataclasses.replace(bond(), notes="x"),)))[0]
    assert row[5] == "20.0 %"
    assert float(row[3]) == pytest.approx(0.0, abs=1e-6)


def test_the_report_lists_the_worst_places(made_up):
    run = made_up.full_run()
    assert "worst places" not in render(run)
    _, result = judged()
    spots = interface_spots(result, (bond(),))
    errors = {"palm": energy_error(result)}
    page = render(dataclasses.replace(run, interfaces={"palm": spots}, energy_error=errors))
    assert page.count("estimated error by voxel size") == 1
    assert page.count("worst places, mm") == 1
    assert "hard + soft" in page
