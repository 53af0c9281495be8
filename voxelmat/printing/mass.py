"""Between which masses a print should weigh, and why."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from voxelmat.errors import InputError
from voxelmat.model.material import Material
from voxelmat.printing.bill import ASSUMED_DENSITY
from voxelmat.printing.occupancy import gather
from voxelmat.printing.readback import Stack

__all__ = ["DENSITY_SPREAD", "DROPLET_TOLERANCE", "MassBand", "mass_band"]

#: Droplets of a tuned head may be so much smaller or larger than stated. Ours, indicative.
DROPLET_TOLERANCE = 0.03
#: Spread of a density whose material file is not at hand. Ours, indicative.
DENSITY_SPREAD = 0.03


@dataclass(frozen=True, slots=True, kw_only=True)
class MassBand:
    """Lowest, expected and highest mass, g, and what the band is made of."""

    low_g: float
    value_g: float
    high_g: float
    basis: str


def mass_band(
    stack: Stack,
    *,
    with_support: bool = False,
    layers: int | None = None,
    materials: Mapping[str, Material] | None = None,
) -> MassBand:
    """The mass of a print.

    Each resin's volume times the range of its density, widened by `DROPLET_TOLERANCE`. All of
    it is taken at its worst at once, so the band is wide rather than likely.

    Parameters
    ----------
    stack : Stack
    with_support : bool
        Weighed before cleaning.
    layers : int, optional
        Layers that were printed, where the print was stopped early; they are counted.
    materials : mapping, optional
        Resin name to material, for the range of the density; `DENSITY_SPREAD` where missing.

    Raises
    ------
    InputError
        If support was weighed that is not in the stack, or the layers are not those of the stack.
    """
    if with_support and stack.support_policy == "machine":
        raise InputError(
            "The machine adds its own support, so its mass is not known; weigh the cleaned part."
        )
    if layers is not None and not 0 <= layers <= stack.n_layers:
        raise InputError(f"The stack has {stack.n_layers} layers; got {layers} printed ones.")
    volumes = [c.volume_mm3 for c in stack.channels]
    if layers is not None:
        site = float(stack.raster.site_volume)
        volumes = [float(n) * site for n in gather(stack).sites[:layers].sum(axis=0)]
    low = value = high = 0.0
    guessed = set()
    for channel, volume in zip(stack.channels, volumes, strict=True):
        if channel.role == "support" and not with_support:
            continue
        known = materials[channel.resin] if materials and channel.resin in materials else None
        density = channel.density_t_mm3
        if known is not None:
            middle, (least, most) = known.density.value, known.density.band
            if density is not None:  # the range of the file round the density that was printed
                least, most, middle = least / middle * density, most / middle * density, density
        else:
            middle = ASSUMED_DENSITY if density is None else density
            least, most = middle * (1 - DENSITY_SPREAD), middle * (1 + DENSITY_SPREAD)
            guessed.add(channel.resin)
        low += volume * least * (1 - DROPLET_TOLERANCE) * 1e6
        value += volume * middle * 1e6
        high += volume * most * (1 + DROPLET_TOLERANCE) * 1e6
    basis = f"droplets within {100 * DROPLET_TOLERANCE:g} % (ours), densities from material files"
    if guessed:
        basis += f" but for {', '.join(sorted(guessed))}: within {100 * DENSITY_SPREAD:g} % (ours)"
    return MassBand(low_g=low, value_g=value, high_g=high, basis=basis)
