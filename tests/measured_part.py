"""A small part of invented resins, its loads and specifications, for measures of designs."""

import itertools

import numpy as np

from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.design_spec import Compliance, DesignSpec, Projection, VolumeLimit
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.loadcase import Force, LoadCase, Support
from voxelmat.model.material import Constant, Material
from voxelmat.model.part import Part
from voxelmat.model.region import Box, FaceRegion
from voxelmat.topopt.measures import response_of
from voxelmat.topopt.responses import told
from voxelmat.topopt.setting import Setting
from voxelmat.topopt.setup import layout_problem

SHAPE = (8, 2, 4)


def constant(value, unit=""):
    return Constant(value=value, unit=unit)


def resin(name, E, nu, density, strength, elongation, cost, kind="rigid"):
    """An invented resin."""
    return Material(
        name=name, kind=kind, E=constant(E, "MPa"), nu=constant(nu),
        density=constant(density, "tonne/mm3"), cost_per_kg=cost,
        strength=None if strength is None else constant(strength, "MPa"),
        elongation=None if elongation is None else constant(elongation),
    )  # fmt: skip


SOFT = resin("soft", 1.0, 0.49, 1.1e-9, 2.0, 1.5, 300.0, "elastomer")
RIGID = resin("rigid", 2000.0, 0.35, 1.2e-9, 50.0, 0.1, 200.0)
PLAIN = resin("plain", 500.0, 0.35, 1.0e-9, None, None, None)


def block(shape=SHAPE, resins=(SOFT, RIGID, PLAIN)):
    grid = VoxelGrid(shape=shape, spacing=(1.0, 1.0, 1.0))
    palette = (EMPTY, *(Blend.pure(m.name) for m in resins))
    return Part(grid=grid, resins=resins, palette=palette, labels=np.ones(shape, np.uint16))


def pulled(part, vector=(0, 0, -1), name="tip"):
    hx, _, _ = part.grid.upper
    return LoadCase(
        name=name,
        supports=(Support(region=FaceRegion(name="wall", side="x-")),),
        loads=(Force(region=Box(name="end", low=(hx - 0.1, -1, -1), high=(hx + 1, 99, 99)),
                     vector=vector),),
    )  # fmt: skip


def spec(**kw):
    base = {
        "resins": ("soft", "rigid"), "objective": Compliance(), "filter_radius": 1.6,
        "limits": (VolumeLimit(fraction=0.5),), "iterations": 12,
        "projection": Projection(sharpness=(0.0, 4.0), every=6),
    }  # fmt: skip
    return DesignSpec(**{**base, **kw})


def nodes_at(part, **where):
    """Nodes with some of i, j, k given."""
    out = np.zeros(part.grid.node_shape, bool)
    out[tuple(where.get(a, slice(None)) for a in "ijk")] = True
    return out


def problem_of(part, cases, s, x=None):
    """A problem at a design, and a function from measures to what people are told."""
    problem, _ = layout_problem(part, cases, s)
    u = problem.unknowns
    x = np.random.default_rng(8).uniform(0.2, 0.9, u.n) if x is None else x
    problem.physics.tolerance = 1e-10
    problem.physics.update(u.forward(x))
    numbers = itertools.count()

    def value(measure):
        setting = Setting(
            part=part, cases=problem.physics.cases, unknowns=u, key=f"m{next(numbers)}"
        )
        r = response_of(measure, setting)
        return told(r, problem.physics, r.value(problem.physics)[0])

    return problem, value
