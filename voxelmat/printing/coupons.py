"""Witness coupons of each resin on a tray: a density block and a staircase, laid as drawn."""

from __future__ import annotations

import numpy as np

from voxelmat.errors import InputError
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.material import Material
from voxelmat.model.part import Part
from voxelmat.model.profile import PrintProfile

__all__ = ["BLOCK_MM", "STEPS", "coupons_of"]

#: Edge of the density block along x and y, and its height where the parts are that high, mm:
#: large enough to weigh, common practice, no source.
BLOCK_MM = 10.0
#: Steps of the staircase.
STEPS = 4
_TREAD_MM = 4.0  # along the stair, and twice that across


def coupons_of(resin: Material, profile: PrintProfile, *, highest_mm: float) -> tuple[Part, Part]:
    """The block and the staircase of one resin.

    Parameters
    ----------
    resin : Material
    profile : PrintProfile
    highest_mm : float
        Height of the highest part of the tray: coupons do not make a print longer. Heights are
        whole layers.

    Returns
    -------
    block, stair : Part
        Weighed and measured, the block gives the density. The stair's steps give the layer height.

    Raises
    ------
    InputError
        If the tray is lower than the steps can be.
    """
    layers = int(min(BLOCK_MM, highest_mm) / float(profile.layer) + 1e-9)
    per_step = layers // STEPS
    if per_step < 1:
        raise InputError(
            f"Witness coupons need {STEPS} layers; the highest part has {layers}. Leave them out.",
            key="coupons",
        )
    height = float(layers * profile.layer)
    block = Part.uniform(
        VoxelGrid(shape=(1, 1, 1), spacing=(BLOCK_MM, BLOCK_MM, height)),
        resin,
        name=f"block {resin.name}",
    )
    treads = np.arange(STEPS)
    labels = (treads[None, None, :] <= treads[:, None, None]).astype(np.uint16)
    stair = Part(
        grid=VoxelGrid(
            shape=(STEPS, 1, STEPS),
            spacing=(_TREAD_MM, 2 * _TREAD_MM, float(per_step * profile.layer)),
        ),
        resins=(resin,),
        palette=(EMPTY, Blend.pure(resin.name)),
        labels=labels,
        name=f"stair {resin.name}",
    )
    return block, stair
