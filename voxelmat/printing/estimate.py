"""What a stack takes to print: volumes, masses, droplets, layers, and a range of time."""

from __future__ import annotations

import math
from dataclasses import dataclass

from voxelmat.model.profile import PrintProfile
from voxelmat.printing.readback import Stack

__all__ = ["PrintEstimate", "estimate"]


@dataclass(frozen=True, slots=True, kw_only=True)
class PrintEstimate:
    """Figures for one stack on one printer.

    Attributes
    ----------
    volume_mm3 : dict
        Of each resin, support included.
    mass_t : dict
        Of each resin whose density is known, tonne.
    support_mm3 : float or None
        None where the machine adds its own support, which is not known here.
    droplets : dict
        Of each resin: its volume over the profile's droplet volume.
    layers, passes : int
        Layers, and passes of the heads a layer.
    time_s : tuple of float
        Lowest and highest; from the profile's figures for a pass and a layer, warm-up and
        cleaning left out.
    invented : bool
        True where the profile's figures are invented.
    """

    volume_mm3: dict[str, float]
    mass_t: dict[str, float]
    support_mm3: float | None
    droplets: dict[str, float]
    layers: int
    passes: int
    time_s: tuple[float, float]
    invented: bool


def estimate(stack: Stack, profile: PrintProfile | None = None) -> PrintEstimate:
    """Estimate material and time.

    Parameters
    ----------
    stack : Stack
    profile : PrintProfile, optional
        The one in the manifest if left out.

    Returns
    -------
    PrintEstimate
    """
    printer = stack.profile if profile is None else profile
    process = printer.process
    depth = float(stack.raster.shape[1] * stack.raster.pitch[1])
    passes = max(1, math.ceil(depth / process.swath_mm - 1e-9))
    low, high = (
        stack.n_layers * (passes * swath + layer)
        for swath, layer in zip(process.swath_s, process.layer_s, strict=True)
    )
    support = stack.support_channel
    volume = stack.volumes_mm3
    return PrintEstimate(
        volume_mm3=volume,
        mass_t={
            c.resin: c.volume_mm3 * c.density_t_mm3
            for c in stack.channels
            if c.density_t_mm3 is not None
        },
        support_mm3=None
        if stack.support_policy == "machine"
        else (stack.channels[support].volume_mm3 if support is not None else 0.0),
        droplets={r: v / (process.droplet_pl * 1e-6) for r, v in volume.items()},
        layers=stack.n_layers,
        passes=passes,
        time_s=(low, high),
        invented=printer.invented,
    )
