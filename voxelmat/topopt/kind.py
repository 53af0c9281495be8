"""What a kind of unknown is: one field of the design, and what it does to the moduli.

The kinds that stand are `voxelmat.topopt.density` (solid or empty) and
`voxelmat.topopt.blending` (which resins). Another one is a file with a class of these methods,
handed to `voxelmat.topopt.unknowns.Unknowns` as `extra`.
"""

from __future__ import annotations

from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from voxelmat.topopt.fields import Draft

__all__ = ["Kind", "Slopes"]

Array = NDArray[np.float64]
#: Derivatives of a response by what a draft holds, by the name of its attribute.
Slopes = dict[str, Array]


class Kind(Protocol):
    """One kind of unknown."""

    @property
    def n(self) -> int:
        """How many unknowns, each in [0, 1]."""

    def start(self, rho: float, fractions: Array) -> Array:
        """Unknowns, (n,), of a uniform design of this density and these fractions (K,)."""

    def make(self, x: Array, draft: Draft) -> None:
        """Put the field of this kind into the draft (`rho`, `w`, or one in `memory`)."""

    def stiffen(self, draft: Draft) -> None:
        """Put into the draft what the field does to `bulk` and `shear`, or `lam` and `mu`.

        Kinds before this one have had their turn.
        """

    def transpose(self, draft: Draft, slopes: Slopes) -> Array:
        """Derivative by the unknowns, (n,).

        Kinds after this one have had their turn. Slopes of what `stiffen` made are turned into
        those of what it read, in place.
        """

    def weight(self, draft: Draft) -> Array:
        """How much a change of each unknown matters, (n,)."""
