"""What stands on a test print kit: one row for each feature, its size, and where it is."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from voxelmat.errors import InputError
from voxelmat.model.profile import PrintProfile
from voxelmat.provenance import text_digest

__all__ = ["FACTORS", "TESTED", "KitPlan", "KitRow", "plan_kit"]

#: Sizes of each series, as multiples of the profile's minimum. Ours.
FACTORS = (0.5, 0.75, 1.0, 1.25, 1.5)
#: Series, in the order of the profile's smallest sizes, and the axes along which they are made.
TESTED = (("wall", "xyz"), ("gap", "xyz"), ("strut", "xyz"), ("hole", "xyz"), ("text", ""))
#: Shares of the soft resin in the blend staircase.
_STAIRCASE = (0.0, 0.25, 0.5, 0.75, 1.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class KitRow:
    """One feature of the kit, one row of its sheet.

    Attributes
    ----------
    name : str
        ``"wall x 0.50"``.
    kind : str
        A kind of `TESTED`, "dimension", "blend" or "peel".
    axis : str
        "x", "y", "z" or "", as in `voxelmat.model.minimum_sizes.MinimumSizes`.
    nominal_mm : float
        Size of the feature; share of the soft resin for a blend.
    place_mm : tuple of float
        Where it stands on the kit, x and y.
    """

    name: str
    kind: str
    axis: str
    nominal_mm: float
    place_mm: tuple[float, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class KitPlan:
    """The whole kit, laid out.

    Attributes
    ----------
    profile : PrintProfile
    cell_mm, base_mm, rise_mm : float
        Side of the square in which a feature stands, thickness of the plate, height above it.
    size_mm : tuple of float
        Along x, y, z.
    rows : tuple of KitRow
    """

    profile: PrintProfile
    cell_mm: float
    base_mm: float
    rise_mm: float
    size_mm: tuple[float, float, float]
    rows: tuple[KitRow, ...]

    @property
    def smallest_mm(self) -> float:
        """Voxel size that still holds the smallest feature exactly."""
        round_ = [r.nominal_mm / 2 for r in self.rows if r.kind in ("strut", "hole", "text")]
        flat = [r.nominal_mm for r in self.rows if r.kind in ("wall", "gap")]
        return min(round_ + flat)

    @property
    def digest(self) -> str:
        """SHA-256 of profile and rows: which kit a sheet belongs to."""
        return text_digest(self.as_dict())

    def as_dict(self) -> dict[str, Any]:
        """Plain data."""
        return {
            "profile": self.profile.as_dict(),
            "rows": [[r.name, r.kind, r.axis, r.nominal_mm] for r in self.rows],
        }


def plan_kit(profile: PrintProfile, *, scale: float = 1.0) -> KitPlan:
    """Lay out the kit of a profile.

    Parameters
    ----------
    profile : PrintProfile
        Features are made in the sizes `FACTORS` round its smallest sizes; blends and the peel
        tab only where it has two channels for resins.
    scale : float
        Makes all features so much larger, where a printer reached none of them.

    Raises
    ------
    InputError
        If the scale is out of range, or if the kit does not fit the tray.
    """
    if not 0.1 <= scale <= 10:
        raise InputError(f"A kit is scaled by 0.1 to 10; got {scale}.", key="scale")
    sizes: list[tuple[str, str, list[float]]] = []
    for kind, axes in TESTED:
        least = profile.minimum.xyz(kind)
        for axis in axes or ("",):
            start = least["xyz".index(axis)] if axis else max(least)
            values = [scale * f * start for f in FACTORS]
            if kind in ("wall", "gap"):
                values = _whole(values, float(profile.pitch["xyz".index(axis)]))
            sizes.append((kind, axis, [round(v, 6) for v in values]))
    largest = max(s[-1] for kind, _, s in sizes if kind != "text")
    text = max(s[-1] for kind, _, s in sizes if kind == "text")
    cell = max(4.0, 4.4 * largest, 5.7 * text / FACTORS[-1])
    line_of_text = max(cell, 7.5 * text)  # the last line of the right half
    below = 6 * cell + line_of_text  # where the bars along x begin
    base, rise = max(1.0, 0.2 * cell), 0.6 * cell
    rows: list[KitRow] = []
    for n, (kind, axis, values) in enumerate(sizes):
        left, line = (0, n) if n < 7 else (5, n - 7)
        for m, value in enumerate(values):
            name = " ".join(w for w in (kind, axis, f"{value:.4g}") if w)
            place = ((left + m + 0.5) * cell, (line + 0.5) * cell)
            if kind == "text":
                across = 5.7 * (sum(values[:m]) + value / 2)
                place = (5 * cell + across, below - line_of_text / 2)
            rows.append(KitRow(name=name, kind=kind, axis=axis, nominal_mm=value, place_mm=place))
    if len([c for c in profile.channels if c != profile.support_channel]) > 1:
        rows += _blends(cell, below)
    rows += _dimensions(profile, cell, below, base, rise)
    size = (11.9 * cell, below + 1.9 * cell, base + rise)
    for name, wanted, (low, high) in zip("xyz", size, profile.room, strict=True):
        room = high - low
        if wanted > room:
            raise InputError(
                f"The kit is {wanted:.4g} mm along {name}; the usable tray of "
                f"'{profile.name}' has {room:g} mm. Give a smaller scale than {scale:g}.",
                key="scale",
            )
    return KitPlan(
        profile=profile,
        cell_mm=cell,
        base_mm=base,
        rise_mm=rise,
        size_mm=size,
        rows=tuple(rows),
    )


def _whole(values: list[float], pitch: float) -> list[float]:
    """Rising sizes as whole numbers of sites, so that the raster neither adds nor takes any."""
    found: list[int] = []
    for value in values:
        sites = max(1, round(value / pitch))
        found.append(max(sites, found[-1] + 1) if found else sites)
    return [n * pitch for n in found]


def _blends(cell: float, below: float) -> list[KitRow]:
    """Five blocks of blends in the free line of cells, and the peel tab in the corner."""
    found = [
        KitRow(
            name=f"blend {share:g}",
            kind="blend",
            axis="",
            nominal_mm=share,
            place_mm=((5 + m + 0.5) * cell, 5.5 * cell),
        )
        for m, share in enumerate(_STAIRCASE)
    ]
    corner = (10.95 * cell, below + 0.95 * cell)
    found.append(KitRow(name="peel tab", kind="peel", axis="", nominal_mm=0.0, place_mm=corner))
    return found


def _dimensions(
    profile: PrintProfile, cell: float, below: float, base: float, rise: float
) -> list[KitRow]:
    """Three bars along x, three along y, and the heights of those along x: the steps."""
    found = []
    for m, share in enumerate((0.25, 0.5, 1.0)):
        wanted = (9.5 * cell * share, 6.5 * cell * share, base + rise * (m + 1) / 3)
        length, width, height = (
            round(_whole([v], float(p))[0], 6) for v, p in zip(wanted, profile.pitch, strict=True)
        )
        along_x = (0.25 * cell + length / 2, below + (0.4 + 0.55 * m) * cell)
        along_y = ((10.4 + 0.55 * m) * cell, 0.25 * cell + width / 2)
        for axis, value, place in (("x", length, along_x), ("y", width, along_y)):
            found.append(_dimension(axis, value, place))
        found.append(_dimension("z", height, along_x))
    return found


def _dimension(axis: str, value: float, place: tuple[float, float]) -> KitRow:
    name = f"dimension {axis} {value:.4g}"
    return KitRow(name=name, kind="dimension", axis=axis, nominal_mm=value, place_mm=place)
