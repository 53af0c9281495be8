"""The design problem of a specification on a part: unknowns, physics, objective and limits."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from voxelmat.model.design_spec import DesignSpec
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.topopt.cases import as_arrays
from voxelmat.topopt.domain import build_choice, resin_numbers
from voxelmat.topopt.ensemble import SharedSystems, ensemble_of, loads_of
from voxelmat.topopt.interpolation import VoidLaw
from voxelmat.topopt.limits import goal_of, limits_of
from voxelmat.topopt.measures import needs_loads, with_springs
from voxelmat.topopt.physics import Case, Physics
from voxelmat.topopt.problem import LayoutProblem
from voxelmat.topopt.robust import RobustProblem
from voxelmat.topopt.unknowns import Choice, Palette, Unknowns

__all__ = ["layout_problem", "unknowns_of"]


def layout_problem(
    part: Part,
    load_cases: Sequence[LoadCase],
    spec: DesignSpec,
    *,
    element: str = "icmb",
    monitor: Monitor = SILENT,
) -> tuple[LayoutProblem, tuple[str, ...]]:
    """The design problem of a specification on a part, and what was frozen without being asked.

    Raises
    ------
    InputError
        As `optimise`.
    """
    needed = any(needs_loads(m) for m in spec.measures)
    cases = with_springs(as_arrays(part, load_cases, needed=needed), spec.measures)
    loads = loads_of(spec, part, cases)
    # Voxels that carry a load stay solid, wherever that load may act.
    acting = (*cases, *(case for pair in loads for side in pair for case in side))
    choice, notes = build_choice(part, spec, acting)
    unknowns = unknowns_of(part, spec, choice)
    goal = goal_of(spec, part, cases, unknowns)
    bounds = limits_of(spec, part, cases, unknowns)
    if spec.robust is None and not spec.scatter:
        physics = Physics(cases, part.grid.spacing, element=element, monitor=monitor)
        return LayoutProblem(unknowns, physics, goal, bounds, spec.projection), notes
    systems = SharedSystems()

    def physics_of(of: tuple[Case, ...]) -> Physics:
        return Physics(of, part.grid.spacing, element=element, monitor=monitor, system=systems)

    ensemble = ensemble_of(spec, part, cases, loads, unknowns, physics_of)
    problem = RobustProblem(
        unknowns, physics_of(cases), goal, bounds, spec.projection, ensemble, systems
    )
    return problem, notes


def unknowns_of(part: Part, spec: DesignSpec, choice: Choice) -> Unknowns:
    """The unknowns of a specification where its choice lets it."""
    numbers = resin_numbers(part, spec)
    resins = [part.resins[n] for n in numbers]
    palette = Palette(
        names=tuple(m.name for m in resins),
        bulk=np.array([m.bulk for m in resins]),
        shear=np.array([m.shear for m in resins]),
        density=np.array([m.density.value for m in resins]),
        law=part.law,
    )
    void = None
    if spec.void:
        soft = spec.void_stiffness * min(m.E.value for m in resins)
        void = VoidLaw(
            penalty=spec.penalty,
            kind=spec.void_law,
            floor_shear=soft / 2.6,  # nu = 0.3: nothing depends on it
            floor_lame=soft * 0.3 / (1.3 * 0.4),
        )
    return Unknowns(
        choice,
        palette,
        void=void,
        spacing=part.grid.spacing,
        radius=spec.filter_radius,
        threshold=spec.projection.threshold,
        blend_radius=spec.blend_radius,
        pure=spec.blends == "pure",
        width=spec.interface_width,
        overhang=spec.support_angle,
        simplex=spec.method == "mirror",
        empty_beyond=spec.robust is not None,
    )
