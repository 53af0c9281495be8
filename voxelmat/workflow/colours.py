"""One fixed colour a resin in every picture, and from it the colour of each blend."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.part import Part

__all__ = ["OKABE_ITO", "palette_rgb", "resin_colours"]

#: Colours that people with any common colour vision tell apart: Okabe and Ito 2008, "Color
#: Universal Design", from memory. Black is left out: it is kept for outlines and text.
OKABE_ITO = ("#E69F00", "#56B4E9", "#009E73", "#F0E442", "#0072B2", "#D55E00", "#CC79A7")


def resin_colours(part: Part) -> dict[str, str]:
    """Resin name to ``#rrggbb``, for the resins that occur in the part's palette.

    A resin keeps the colour of its record; where two would look the same, the later one gets the
    next colour of `OKABE_ITO` that is free.
    """
    used = {name for blend in part.palette for name, _ in blend.fractions}
    found: dict[str, str] = {}
    for material in part.resins:
        if material.name not in used:
            continue
        wanted = material.colour.upper()
        if wanted in found.values():
            free = [c for c in OKABE_ITO if c not in found.values()]
            wanted = free[0] if free else wanted
        found[material.name] = wanted
    return found


def palette_rgb(part: Part) -> NDArray[np.uint8]:
    """Colour of each palette entry, shape (palette, 3); entry 0 (empty) is white.

    A blend is mixed from its resins' colours by volume, as light and not as stored numbers.
    """
    names = resin_colours(part)
    table = part.palette_fractions()
    light = np.ones((len(part.resins), 3))
    for row, material in enumerate(part.resins):
        if material.name in names:
            text = names[material.name]
            stored = np.array([int(text[a : a + 2], 16) for a in (1, 3, 5)]) / 255.0
            light[row] = stored**2.2
    mixed = table @ light
    mixed[0] = 1.0
    return np.asarray(np.rint(255.0 * np.clip(mixed, 0.0, 1.0) ** (1 / 2.2)), dtype=np.uint8)
