"""What a user has to know before trusting a static result."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part
from voxelmat.model.result import ROTATION_LIMIT, STRAIN_LIMIT, Extreme
from voxelmat.units import number

__all__ = ["film_caution", "record_cautions", "size_cautions"]

Double = NDArray[np.float64]

# A rubbery film between bodies this many times stiffer counts as bonded.
_STIFFER = 50.0


def record_cautions(part: Part, case: LoadCase) -> list[str]:
    """Materials used outside the conditions that their records are meant for."""
    used = set(part.volumes())
    coldest, warmest = case.temperature_ends
    out = []
    for m in part.resins:
        if m.name not in used:
            continue
        low, high = m.temperature_range_degC
        beyond = []
        if not low <= coldest <= warmest <= high:
            ends = f"{coldest:g}" if coldest == warmest else f"{coldest:g} to {warmest:g}"
            beyond.append(f"{ends} degC (record: {low:g} to {high:g})")
        if case.duration_s > m.max_duration_s:
            beyond.append(
                f"{case.duration_s:g} s (record: up to {m.max_duration_s:g}; creep unknown)"
            )
        if case.cycles > m.max_cycles:
            beyond.append(f"{case.cycles} cycles (record: up to {m.max_cycles}; fatigue unknown)")
        if beyond:
            out.append(f"'{m.name}' is used outside its record: {', '.join(beyond)}.")
    return out


def film_caution(part: Part, lam: Double, mu: Double) -> list[str]:
    """Rubbery layers of 1 or 2 voxels bonded between stiff ones, which no hex8 gets right."""
    count, first = 0, None
    rubbery = (mu > 0) & (lam > 9.0 * mu)  # nu above .45
    for axis in range(3):
        m, soft = np.moveaxis(mu, axis, 0), np.moveaxis(rubbery, axis, 0)
        for layers in (1, 2):
            n = m.shape[0] - layers - 1
            if n < 1:
                continue
            film = np.all([soft[1 + d : 1 + d + n] for d in range(layers)], axis=0)
            limit = _STIFFER * np.max([m[1 + d : 1 + d + n] for d in range(layers)], axis=0)
            film &= (m[:n] > limit) & (m[layers + 1 : layers + 1 + n] > limit)
            count += int(film.sum())
            if first is None and film.any():
                at = np.argwhere(film)[0]
                at[0] += 1
                kji = np.insert(at[1:], axis, at[0])
                first = [float(c[i]) for c, i in zip(part.grid.centres(), kji[::-1], strict=True)]
    if first is None:
        return []
    return [
        f"A rubbery layer only 1 or 2 voxels thick is bonded between stiff material at {count} "
        f"places, first near ({first[0]:.4g}, {first[1]:.4g}, {first[2]:.4g}) mm. Its stiffness "
        f"is not reliable: use voxels that give it 3 layers or more."
    ]


def size_cautions(strain: Extreme, rotation: Extreme) -> list[str]:
    """Strain or rotation beyond what a small-displacement solve is good for."""
    out = []
    if abs(strain.value) > STRAIN_LIMIT:
        x, y, z = strain.place_mm
        out.append(
            f"The largest strain is {number(100 * strain.value)} % near ({x:.4g}, {y:.4g}, "
            f"{z:.4g}) mm, above {100 * STRAIN_LIMIT:g} %: this linear answer is a rough guide."
        )
    if rotation.value > ROTATION_LIMIT:
        x, y, z = rotation.place_mm
        out.append(
            f"The largest rotation is {number(np.degrees(rotation.value))} degrees near "
            f"({x:.4g}, {y:.4g}, {z:.4g}) mm, above {np.degrees(ROTATION_LIMIT):.3g}: this linear "
            f"answer is a rough guide."
        )
    return out
