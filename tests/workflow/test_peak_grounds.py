"""A safety factor on steps says what the voxels below the surface give."""

import re

import numpy as np

from voxelmat.fea.static import solve
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.model.region import FaceRegion
from voxelmat.model.requirement import Requirement
from voxelmat.workflow.resolve import Resolved
from voxelmat.workflow.verdicts import verdicts


def test_the_filtered_factor_stands_beside_the_peak():
    source = "made up for this test"
    resin = Material(
        name="r",
        kind="rigid",
        E=Constant(value=100.0, source=source),
        nu=Constant(value=0.3, source=source),
        density=Constant(value=1e-9, source=source),
        strength=Constant(value=40.0, source=source),
    )
    labels = np.ones((16, 8, 4), np.uint16)
    labels[7:9, 5:] = 0  # a notch: re-entrant corners
    part = Part(
        grid=VoxelGrid(shape=labels.shape, spacing=(1.0, 1.0, 1.0)),
        resins=(resin,),
        palette=(EMPTY, Blend.pure("r")),
        labels=labels,
    )
    case = LoadCase(
        name="pull",
        supports=(
            Support(region=FaceRegion(name="low", side="x-"), displacement=(0.0, None, None)),
            Support(region=FaceRegion(name="y", side="y-"), displacement=(None, 0.0, None)),
            Support(region=FaceRegion(name="z", side="z-"), displacement=(None, None, 0.0)),
        ),
        loads=(Force(region=FaceRegion(name="high", side="x+"), vector=(32.0, 0.0, 0.0)),),
    )
    need = Requirement(name="f", measure="safety factor", load_case="pull", at_least=1.0)
    resolved = Resolved(regions={}, load_cases=(case,), targets={}, requirements=(need,))
    verdict = verdicts(resolved, part, {"pull": solve(part, case)})[0]
    text = next(r for r in verdict.reasons if "without the voxels at the surface" in r)
    assert verdict.status == "cannot be said"
    assert float(re.search(r"it is ([\d.]+)", text)[1]) > verdict.value
