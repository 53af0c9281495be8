"""Which optimiser a specification gets."""

from __future__ import annotations

from voxelmat.model.design_spec import Compliance, DesignSpec
from voxelmat.model.measure import WorstCompliance
from voxelmat.topopt.criteria import OptimalityCriteria
from voxelmat.topopt.loop import Stepper
from voxelmat.topopt.mirror import MirrorDescent
from voxelmat.topopt.mma import MovingAsymptotes
from voxelmat.topopt.problem import LayoutProblem, suits_criteria
from voxelmat.topopt.response_interface import InterfaceResponse
from voxelmat.topopt.response_strength import StrengthResponse
from voxelmat.topopt.responses import Amount

__all__ = ["stepper_of"]


def stepper_of(spec: DesignSpec, problem: LayoutProblem) -> Stepper:
    """The optimiser that `DesignSpec.method` stands for.

    ``"auto"`` takes optimality criteria for compliance under one amount with only solid or empty
    to choose, else moving asymptotes. Mirror descent is for comparison: on a target deflection
    of 40 resins its steps cost less, but its error after 50 of them was 2.6 times that of moving
    asymptotes (.0010 and .0004), and .154 against .133 with six resins and a budget.
    """
    unknowns = problem.unknowns
    if spec.method == "oc" or (spec.method == "auto" and suits_criteria(spec, unknowns)):
        return OptimalityCriteria(problem.low, problem.high, move=spec.move)
    if spec.method == "mirror":
        return MirrorDescent(unknowns.n - unknowns.blending.n, unknowns.resins)
    if spec.method == "gcmma":
        return MovingAsymptotes(problem.low, problem.high, move=spec.move, back="exceeded")
    amounts = all(isinstance(b.response, Amount) for b in problem.bounds)
    plain = isinstance(spec.measure, Compliance | WorstCompliance) and amounts
    # Stresses are too uneven for convexity that adapts: on an L-shaped bracket of 280 voxels with
    # a stress limit 100 iterations came to 3.9 times the compliance, and to a limit not kept.
    asked = (problem.objective, *(b.response for b in problem.bounds))
    uneven = any(isinstance(r, StrengthResponse | InterfaceResponse) for r in asked)
    return MovingAsymptotes(
        problem.low, problem.high, move=spec.move, back="none" if plain or uneven else "worse"
    )
