"""Load cases as arrays over the nodes; what depends on the design is refused."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from voxelmat.errors import InputError
from voxelmat.fea.assemble import assemble
from voxelmat.fea.held import check_held
from voxelmat.model.loadcase import BodyForce, LoadCase
from voxelmat.model.part import Part
from voxelmat.topopt.physics import Case

__all__ = ["as_arrays"]


def as_arrays(
    part: Part, load_cases: Sequence[LoadCase], *, needed: bool = True
) -> tuple[Case, ...]:
    """Forces, supports and springs of each load case on the nodes of the part.

    Where none is `needed`, those without a force are left out: they hold a part that vibrates.

    Raises
    ------
    InputError
        No load case where one is `needed`, two of one name, one without a force, a body force or
        a prescribed displacement (their work changes with the design), a part or a piece that is
        not held.
    """
    if needed and not load_cases:
        raise InputError("There is no load case, so there is nothing to design for; add one.")
    names = [c.name for c in load_cases]
    if len(set(names)) != len(names):
        raise InputError(f"Each load case needs a name of its own; got {', '.join(names)}.")
    found = (_case(part, case, needed) for case in load_cases)
    return tuple(case for case in found if case is not None)


def _case(part: Part, case: LoadCase, needed: bool) -> Case | None:
    if any(isinstance(load, BodyForce) for load in case.loads):
        raise InputError(
            f"Load case '{case.name}' has a body force, which would change with the design; the "
            "optimiser takes forces, pressures and springs. Leave it out here and check it in the "
            "solve of the finished design."
        )
    a = assemble(part, case)
    if np.any(a.prescribed != 0):
        raise InputError(
            f"Load case '{case.name}' prescribes a displacement, so its force would change with "
            "the design; give the force instead, or hold that support at 0 mm."
        )
    if not np.any(a.force[~a.held] != 0):
        if not needed:
            return None
        raise InputError(
            f"Load case '{case.name}' has no load on anything that can move, so there is nothing "
            "to design for; add a force, a pressure or a pressure map."
        )
    held = a.held if a.springs is None else a.held | (a.springs > 0)
    solid = np.ascontiguousarray(part.solid.T)
    kept, _ = check_held(solid, held, (a.force != 0).any(axis=0), part.grid)
    loose = int((solid & ~kept).sum())
    if loose:
        raise InputError(
            f"Load case '{case.name}': {loose} voxels of the shape are joined to nothing that is "
            "held. Take them out of the shape or hold them."
        )
    return Case(name=case.name, weight=case.weight, force=a.force, fixed=a.held, springs=a.springs)
