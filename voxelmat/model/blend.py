"""A blend: volume fractions over base resins, as the printer lays droplets side by side."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass

from voxelmat.errors import InputError

__all__ = ["EMPTY", "Blend"]


@dataclass(frozen=True, slots=True)
class Blend:
    """Volume fractions over base resins; hashable, so that a palette can look one up.

    Attributes
    ----------
    fractions : tuple of (str, float)
        Resin name and volume fraction, fractions > 0 that sum to 1, names in ascending order;
        the empty tuple stands for empty space.

    Examples
    --------
    >>> Blend.of({"soft": 3, "rigid": 1})
    Blend(fractions=(('rigid', 0.25), ('soft', 0.75)))
    >>> Blend.pure("soft").is_pure
    True
    """

    fractions: tuple[tuple[str, float], ...] = ()

    def __post_init__(self) -> None:
        names = [n for n, _ in self.fractions]
        if names != sorted(set(names)):
            raise InputError(f"A blend names each resin once, in ascending order; got {names}.")
        if self.fractions:
            total = math.fsum(f for _, f in self.fractions)
            if not all(0 < f <= 1 for _, f in self.fractions) or not abs(total - 1) <= 1e-9:
                raise InputError(
                    f"Volume fractions must lie above 0 and sum to 1; got {dict(self.fractions)} "
                    f"with sum {total:.9g}."
                )

    @classmethod
    def pure(cls, resin: str) -> Blend:
        """One resin alone."""
        return cls(((resin, 1.0),))

    @classmethod
    def of(cls, parts: Mapping[str, float] | Iterable[tuple[str, float]]) -> Blend:
        """From parts by volume that are scaled to sum 1; zero parts are dropped.

        Raises
        ------
        InputError
            If a part is negative or not finite, or if all are zero.
        """
        items = dict(parts)
        if not all(math.isfinite(v) and v >= 0 for v in items.values()) or not items:
            raise InputError(f"Parts by volume must be finite and not negative; got {items}.")
        total = math.fsum(items.values())
        if not total > 0:
            raise InputError(f"A blend needs at least one part above zero; got {items}.")
        kept = sorted((n, v / total) for n, v in items.items() if v / total > 0)
        return cls(tuple(kept))

    @property
    def is_empty(self) -> bool:
        """True for empty space."""
        return not self.fractions

    @property
    def is_pure(self) -> bool:
        """True for one resin alone."""
        return len(self.fractions) == 1

    def fraction(self, resin: str) -> float:
        """Volume fraction of `resin`, 0 where it does not occur."""
        return dict(self.fractions).get(resin, 0.0)

    def __str__(self) -> str:
        if self.is_empty:
            return "empty"
        if self.is_pure:
            return self.fractions[0][0]
        return " + ".join(f"{100 * f:.3g} % {n}" for n, f in self.fractions)


#: Empty space: entry 0 of every palette.
EMPTY = Blend()
