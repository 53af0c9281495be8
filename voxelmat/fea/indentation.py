"""From an indentation to the modulus that it stands for, to compare with the material's own.

Small indentations only: a Shore or IRHD hardness is read at strains far beyond a linear answer, so
none is claimed here. On a thin, narrow or graded part the result is an apparent modulus: what
someone with an indenter would take the part for.
"""

from __future__ import annotations

import math

from voxelmat.errors import InputError
from voxelmat.model.contactresult import ContactResult
from voxelmat.model.indenter import FlatPunch, SphereIndenter

__all__ = ["apparent_modulus"]

# Contact radius over ball radius up to which the parabola of the theory stands for a ball; ours.
_SHALLOW = 0.4


def apparent_modulus(found: ContactResult, nu: float) -> float:
    """Young's modulus of the half-space that would answer with the same force, MPa.

    A ball by ``F = 4/3 E / (1 - nu^2) sqrt(R) d^1.5`` (Hertz 1882), a round flat end of radius a
    by ``F = 2 a d E / (1 - nu^2)`` (both textbook formulas).

    Parameters
    ----------
    found : ContactResult
        Of a `SphereIndenter` or a round `FlatPunch`.
    nu : float
        Poisson's ratio to take, 0 to 0.5.

    Raises
    ------
    InputError
        Another indenter, or a ball so deep that the formula does not hold.
    """
    if not 0 <= nu <= 0.5:
        raise InputError(f"Poisson's ratio must lie in 0 to 0.5; got {nu}.")
    tool, d = found.indenter, found.depth
    if isinstance(tool, SphereIndenter):
        if math.sqrt(tool.radius * d) > _SHALLOW * tool.radius:
            raise InputError(
                f"A depth of {d:g} mm is too much for a ball of radius {tool.radius:g} mm: the "
                f"formula holds up to {_SHALLOW**2 * tool.radius:.3g} mm."
            )
        stiffness = 4.0 / 3.0 * math.sqrt(tool.radius) * d**1.5
    elif isinstance(tool, FlatPunch) and tool.radius is not None:
        stiffness = 2.0 * tool.radius * d
    else:
        raise InputError(
            "An apparent modulus is known for a ball and for a round flat end; press one of these."
        )
    return float(found.force / stiffness * (1.0 - nu**2))
