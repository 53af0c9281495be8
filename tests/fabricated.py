"""A small graded grip with made-up fields, for tests of pictures, tables and views."""

from __future__ import annotations

import numpy as np

from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.design_result import ConstraintValue, DesignResult, IterationRecord
from voxelmat.model.finding import Finding
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Force, LoadCase, PressureMap, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import DISTANCE_STEPS, Part
from voxelmat.model.process import ProcessFigures
from voxelmat.model.region import Box, FaceRegion
from voxelmat.model.requirement import Requirement, judge
from voxelmat.model.result import Extreme, StaticResult
from voxelmat.printing.bill import bill_row
from voxelmat.provenance import Provenance
from voxelmat.workflow.report_data import LayerPicture, RunData, StackSummary


def resin(name: str, kind: str, e: float, nu: float, colour: str, strength: float) -> Material:
    """An invented resin."""
    return Material(
        name=name,
        kind=kind,
        E=Constant(value=e, low=0.8 * e, high=1.2 * e, unit="MPa"),
        nu=Constant(value=nu),
        density=Constant(value=1.15e-9),
        strength=Constant(value=strength, unit="MPa"),
        colour=colour,
    )


def grip(spacing: float = 3.0) -> Part:
    """Steel shaft, rigid core, pad that is graded along x in four blends."""
    n = [round(s / spacing) for s in (72.0, 36.0, 30.0)]
    grid = VoxelGrid(shape=tuple(n), spacing=(spacing,) * 3, origin=(0.0, -18.0, -15.0))
    x, y, z = np.meshgrid(*grid.centres(), indexing="ij")
    radius = np.hypot(y, z * 1.15)
    outside = 12.5 + 3.0 * np.sin(np.pi * x / 72.0)
    labels = np.zeros(grid.shape, dtype=np.uint16)
    labels[radius < outside] = 3 + np.clip(x / 18.0, 0, 3).astype(np.uint16)[radius < outside]
    labels[radius < 8.0] = 2
    labels[(radius < 5.0) & (x < 60.0)] = 1
    distance = np.clip(np.rint((radius - outside) * DISTANCE_STEPS / spacing), -127, 127)
    resins = (
        resin("steel-example", "bought-in", 210000.0, 0.3, "#7F7F7F", 400.0),
        resin("rigid-example", "rigid", 2400.0, 0.35, "#0072B2", 50.0),
        resin("soft-example", "elastomer", 0.9, 0.49, "#E69F00", 1.5),
    )
    palette = [EMPTY, Blend.pure("steel-example"), Blend.pure("rigid-example")]
    palette += [
        Blend.of({"soft-example": 1 - f, "rigid-example": f}) for f in (0.0, 0.05, 0.15, 0.3)
    ]
    occupancy = np.where(labels > 0, np.clip(255 * (0.5 - distance / DISTANCE_STEPS), 1, 255), 0)
    return Part(
        grid=grid,
        resins=resins,
        palette=tuple(palette),
        labels=labels,
        distance=distance.astype(np.int8),
        occupancy=occupancy.astype(np.uint8),
        name="made-up grip",
    )


def palm_case() -> LoadCase:
    """A palm that presses from above, off centre."""
    row, column = np.meshgrid(np.arange(6), np.arange(12), indexing="ij")
    kpa = 60.0 * np.exp(-(((column - 7.0) / 3.0) ** 2) - ((row - 2.0) / 1.5) ** 2)
    return LoadCase(
        name="palm",
        supports=(Support(region=FaceRegion(name="shaft end", side="x-")),),
        loads=(
            PressureMap(
                region=Box(name="pad", low=(-1, -30, -30), high=(90, 30, 30)),
                values=kpa * 1e-3,
                cell=(5.0, 5.0),
                side="z+",
                first_cell=(8.0, 12.5),
                column_direction="x+",
                row_direction="y-",
                expected_force=40.0,
                source_file="palm.csv",
            ),
        ),
        duration_s=30.0,
    )


def turning_case() -> LoadCase:
    """A sideways push at the free end."""
    end = Box(name="free end", low=(60, -30, -30), high=(90, 30, 30))
    return LoadCase(
        name="turning",
        supports=(Support(region=FaceRegion(name="shaft end", side="x-")),),
        loads=(Force(region=end, vector=(0.0, 200.0, 0.0)),),
    )


def made_up_result(part: Part, case: LoadCase, scale: float = 1.0) -> StaticResult:
    """Smooth fields that look like a bent and pressed grip; nothing was solved."""
    grid = part.grid
    x, y, z = np.meshgrid(*grid.nodes(), indexing="ij")
    move = np.zeros((*grid.node_shape, 3))
    press = np.exp(-(((x - 45) / 14) ** 2) - (y / 9) ** 2) * np.clip(z / 15, 0, 1)
    if case.name == "palm":
        move[..., 2] = -0.35 * scale * press - 0.02 * (x / 72) ** 2
    else:
        move[..., 1] = 0.4 * scale * (x / 72) ** 2
        move[..., 0] = -0.01 * y * x / 72
    solid = part.solid
    strain = np.zeros((*grid.shape, 6), dtype=np.float32)
    centre = np.meshgrid(*grid.centres(), indexing="ij")
    strain[..., 0] = 1e-4 + 4e-4 * scale * np.abs(centre[1]) * (1 - centre[0] / 80) / 15
    lam, mu = part.palette_lame()
    stress = np.zeros_like(strain)
    stress[..., 0] = ((lam + 2 * mu)[part.labels] * strain[..., 0]) * solid
    force = {"palm": (0.0, 0.0, -40.0), "turning": (0.0, 200.0, 0.0)}[case.name]
    load = f"1 {case.loads[0].region.name}"
    return StaticResult(
        part=part,
        load_case=case,
        displacement=move,
        strain=strain * solid[..., None].astype(np.float32),
        stress=stress.astype(np.float32),
        energy=3.2,
        energy_density=(0.5 * (stress * strain).sum(axis=-1)).astype(np.float32),
        applied=force,
        reactions={"1 shaft end": tuple(-f for f in force)},
        balance=3e-8,
        resultants={load: force},
        load_displacement={load: 0.21 * scale},
        largest_strain=Extreme(value=0.034 * scale, place_mm=(45.0, 0.0, 12.0)),
        largest_rotation=Extreme(value=0.012, place_mm=(70.0, 0.0, 0.0)),
        iterations=14,
        residual=6e-7,
        history=tuple(0.35**k for k in range(14)),
    )


def made_up_design(part: Part) -> DesignResult:
    """Twelve iterations that went well."""
    history = tuple(
        IterationRecord(
            iteration=n,
            objective=0.4 * 0.75**n + 0.05,
            violation=0.0,
            gap=0.1 * 0.7**n,
            grey=0.0,
            change=0.1 * 0.8**n,
            sharpness=0.0,
            cg_iterations=20,
        )
        for n in range(1, 13)
    )
    return DesignResult(
        part=part,
        history=history,
        reason="the iterations ran out",
        converged=False,
        cancelled=False,
        objective=0.053,
        objective_name="deflection error",
        objective_unit="",
        objective_of_palette=0.054,
        palette_error=0.004,
        constraints=(ConstraintValue(name="share of rigid", value=0.2, limit=0.25, unit=""),),
        density=np.ones(part.grid.shape, np.float32),
        fractions=np.zeros((1, *part.grid.shape), np.float32),
        notes=("the shaft was left alone",),
    )


def made_up_stack() -> StackSummary:
    """Numbers and two layers of a stack that was never written."""
    rows, columns = np.indices((90, 360))
    codes = np.where(np.abs(rows - 45) < 30, 2, 0)
    codes[np.abs(rows - 45) < 18] = 1
    codes[(codes == 2) & ((rows * 7 + columns * 3) % 11 == 0)] = 1
    picture = LayerPicture(
        number=500,
        height_mm=15.015,
        codes=codes.astype(np.uint8),
        size_mm=(72.0, 30.0),
        note="One site in 5 is drawn, each way.",
    )
    return StackSummary(
        folder="stack",
        pitch_mm=(25.4 / 600, 25.4 / 300, 0.03),
        sites=(1701, 355, 1000),
        size_mm=(72.0, 30.0, 30.0),
        resins=("rigid-example", "soft-example", "support-example"),
        channels=("A", "B", "S"),
        volumes_mm3=(7012.0, 21040.0, 3100.0),
        designed_mm3=(7000.0, 21050.0, None),
        support="the machine adds support",
        orientation="x of the part along x of the tray",
        halftone="blue noise, seed 7",
        layers=(picture,),
        estimate={"time, h": "1.9 to 3.1", "height, mm": "30.0"},
        bill=(
            bill_row(ProcessFigures(), "rigid-example", ["A"], "model", 7012.0, 1.15e-9),
            bill_row(ProcessFigures(), "support-example", ["S"], "support", 3100.0, None),
        ),
    )


def full_run(spacing: float = 3.0) -> RunData:
    """Everything a report can hold."""
    part = grip(spacing)
    cases = (palm_case(), turning_case())
    results = {c.name: made_up_result(part, c) for c in cases}
    soft = Requirement(
        name="the palm sinks in",
        measure="displacement",
        at_least=0.15,
        at_most=0.45,
        load_case="palm",
        region="palm",
        component="z",
        reduce="mean",
    )
    stiff = Requirement(
        name="handle is stiff", measure="stiffness", at_least=400.0, load_case="turning"
    )
    light = Requirement(name="light enough", measure="mass", at_most=120.0)
    return RunData(
        name="grip <test> & co",
        part=part,
        question="Does the pad give under the palm, and does the handle still carry the push?",
        results=results,
        as_printed={c.name: made_up_result(part, c, scale=1.02) for c in cases},
        verdicts=(
            judge(light, 98.0),
            judge(soft, 0.21, (0.17, 0.26), doubts=["the modulus of soft-example is indicative"]),
            judge(stiff, 310.0),
        ),
        safety={
            n: np.where(part.solid & (part.labels > 1), 40.0 / (r.von_mises + 1e-9), np.nan).astype(
                np.float32
            )
            for n, r in results.items()
        },
        optimised=made_up_design(part),
        stack=made_up_stack(),
        findings=(
            Finding(severity="note", code="volumes", message="0.2 % more rigid than designed."),
            Finding(
                severity="warn",
                code="thin wall",
                message="a wall of 0.3 mm",
                place_mm=(10.0, 2.0, 3.0),
                remedy="make it 0.5 mm",
            ),
        ),
        checked=True,
        cautions=("soft-example: stiffness is indicative.",),
        notes=("Overlap of pad and core, 0.1 mm³, given to core.",),
        provenance=Provenance(
            inputs={"grip.toml": "ab" * 32},
            seed=7,
            threads=2,
            started_utc="2026-01-01T00:00:00Z",
            finished_utc="2026-01-01T00:04:00Z",
        ),
        timings={"voxelise": 1.2, "solve": 31.4, "stack": 40.0},
    )
