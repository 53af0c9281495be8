"""How far the outline of a stack lies from the outline of its design."""

from __future__ import annotations

from dataclasses import dataclass

from voxelmat.units import number

__all__ = ["ChannelOutline", "OutlineDeviation"]

Triple = tuple[float, float, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class ChannelOutline:
    """Deviation of the outline that one resin forms; positive where the stack is too large.

    Attributes
    ----------
    name : str
        Of the resin; ``"all"`` for the whole outline.
    points : int
    mean, rms, p95, largest : float
        mm; the last two of the size without the sign.
    place_mm : tuple of float
        Where it is largest, part coordinates.
    fit : float
        Share of the points where the solid site lies inside the design and the empty one outside.
    shift : tuple of int
        Layers, rows and columns that the images are moved by, where moving them back makes all
        fit that does not fit as it is; else zeros.
    """

    name: str
    points: int
    mean: float
    rms: float
    p95: float
    largest: float
    place_mm: Triple
    fit: float = 1.0
    shift: tuple[int, int, int] = (0, 0, 0)


@dataclass(frozen=True, slots=True, kw_only=True)
class OutlineDeviation:
    """The outline of a stack against its design.

    Attributes
    ----------
    against : str
        What it was compared with, in words.
    whole : ChannelOutline
    channels : tuple of ChannelOutline
    layers : int
        Layers whose outline was taken; between them the stack was not looked at.
    beyond : int
        Points that lie farther off than the distance field reaches, counted at its reach.
    limit_p95, limit_largest : float
        mm; what rounding to whole sites and the chords between voxel centres explain.
    """

    against: str
    whole: ChannelOutline
    channels: tuple[ChannelOutline, ...]
    layers: int
    beyond: int
    limit_p95: float
    limit_largest: float

    @property
    def within(self) -> bool:
        """True where both limits hold."""
        return self.whole.p95 <= self.limit_p95 and self.whole.largest <= self.limit_largest

    #: Heads of the columns of `rows`.
    HEAD = ("outline of", "points", "mean, um", "rms, um", "95 %, um", "largest, um", "at, mm")

    def rows(self) -> list[list[str]]:
        """A table as text, the whole outline first; micrometres."""
        return [
            [
                c.name,
                str(c.points),
                *(number(1000 * v, 2) for v in (c.mean, c.rms, c.p95, c.largest)),
                ", ".join(number(v) for v in c.place_mm),
            ]
            for c in (self.whole, *self.channels)
        ]

    def text(self) -> str:
        """The table and what it was compared with, for a terminal."""
        lines = [list(self.HEAD), *self.rows()]
        width = [max(len(line[c]) for line in lines) for c in range(len(self.HEAD))]
        body = [
            "  ".join(
                cell.ljust(w) if c == 0 else cell.rjust(w)
                for c, (cell, w) in enumerate(zip(line, width, strict=True))
            )
            for line in lines
        ]
        return "\n".join([f"Outline against {self.against}, {self.layers} layers:", *body])

    def _repr_html_(self) -> str:
        from voxelmat.model.html import table

        return table(list(self.HEAD), self.rows(), f"Outline against {self.against}")
