"""What a blend is before anything is built: modulus with its band, density, cost, hardness."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from voxelmat.errors import InputError
from voxelmat.io.materials import Library
from voxelmat.material.hardness import modulus_from_shore_a, shore_a_from_modulus
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.workflow.colours import palette_rgb
from voxelmat.workflow.spread import palette_range

__all__ = ["BlendFacts", "blend_facts", "blend_of_hardness"]

_STEPS = 60  # of the bisection


@dataclass(frozen=True, slots=True, kw_only=True)
class BlendFacts:
    """Figures of one blend.

    Attributes
    ----------
    blend : Blend
    E, E_low, E_high : float
        Young's modulus and its band from the resins' records and the blend curve, MPa.
    nu : float
    density : float
        tonne/mm^3.
    cost_per_kg : float or None
        None where a resin states no cost.
    shore_A : tuple of float or None
        Band of hardness that the modulus stands for; None where there is none.
    colour : str
        ``#rrggbb``.
    calibrated : bool
        False where no curve covers the blend, and a law without measurements was used.
    indicative : tuple of str
        Records that state no source.
    """

    blend: Blend
    E: float
    E_low: float
    E_high: float
    nu: float
    density: float
    cost_per_kg: float | None
    shore_A: tuple[float, float] | None
    colour: str
    calibrated: bool
    indicative: tuple[str, ...]


def _tiny(library: Library, law: str, blends: Sequence[Blend]) -> Part:
    """A part of one voxel a blend: what is known of parts then answers for blends."""
    names = sorted({n for b in blends for n, _ in b.fractions})
    return Part(
        grid=VoxelGrid(shape=(len(blends), 1, 1), spacing=(1.0, 1.0, 1.0)),
        resins=tuple(library[n] for n in names),
        palette=(EMPTY, *blends),
        labels=np.arange(1, len(blends) + 1, dtype=np.uint16).reshape(-1, 1, 1),
        law=library.law(law),
        name="blends",
    )


def blend_facts(library: Library, law: str, blend: Blend) -> BlendFacts:
    """Figures of a blend.

    Parameters
    ----------
    library : Library
    law : str
        Key of the blend law, see `voxelmat.model.laws.LAWS`.
    blend : Blend
        Not empty.

    Raises
    ------
    InputError
        For an empty blend or a resin that is not in the library.
    """
    if blend.is_empty:
        raise InputError("A blend needs at least one part above zero.")
    part = _tiny(library, law, [blend])
    bulk, shear = (float(m[1]) for m in part.palette_moduli())
    low, high = palette_range(part)
    E = [
        9 * bulk * k * shear * g / (3 * bulk * k + shear * g)
        for k, g in ((1.0, 1.0), (low[0, 1], low[1, 1]), (high[0, 1], high[1, 1]))
    ]
    used = [(library[n], f) for n, f in blend.fractions]
    density = sum(f * m.density.value for m, f in used)
    costs = [m.cost_per_kg for m, _ in used]
    cost = None
    if all(c is not None for c in costs):
        cost = sum(f * m.density.value * (m.cost_per_kg or 0.0) for m, f in used) / density
    try:
        band = shore_a_from_modulus(E[0])
        hardness: tuple[float, float] | None = (band.low, band.high)
    except InputError:
        hardness = None
    value = part.law.evaluate(
        part.palette_fractions()[1:],
        [m.bulk for m in part.resins],
        [m.shear for m in part.resins],
        resins=[m.name for m in part.resins],
    )
    rgb = palette_rgb(part)[1]
    return BlendFacts(
        blend=blend,
        E=E[0],
        E_low=min(E),
        E_high=max(E),
        nu=(3 * bulk - 2 * shear) / (2 * (3 * bulk + shear)),
        density=density,
        cost_per_kg=cost,
        shore_A=hardness,
        colour="#{:02x}{:02x}{:02x}".format(*rgb),
        calibrated=blend.is_pure or not bool(value.uncalibrated[0]),
        indicative=tuple(m.name for m, _ in used if m.indicative),
    )


def blend_of_hardness(library: Library, law: str, shore_a: float, soft: str, stiff: str) -> Blend:
    """The blend of two resins whose modulus stands for a Shore A hardness.

    Parameters
    ----------
    library : Library
    law : str
    shore_a : float
        Turned into a modulus by Gent's relation.
    soft, stiff : str
        Resins to blend.

    Raises
    ------
    InputError
        If the hardness lies outside what the two can make, with what they can.
    """
    wanted = modulus_from_shore_a(shore_a).gent
    ends = [blend_facts(library, law, Blend.pure(n)).E for n in (soft, stiff)]
    if not min(ends) <= wanted <= max(ends):
        raise InputError(
            f"Shore A {shore_a:g} stands for {wanted:.3g} MPa; blends of '{soft}' and '{stiff}' "
            f"reach from {min(ends):.3g} to {max(ends):.3g} MPa. Choose another resin or hardness."
        )
    low, high = 0.0, 1.0
    rising = ends[1] >= ends[0]
    for _ in range(_STEPS):
        middle = 0.5 * (low + high)
        E = blend_facts(library, law, Blend.of({soft: 1 - middle, stiff: middle})).E
        if (wanted > E) == rising:
            low = middle
        else:
            high = middle
    return Blend.of({soft: 1 - high, stiff: high} if high < 1 else {stiff: 1.0})
