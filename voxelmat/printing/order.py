"""Which resin the thresholds lay first, and what the manifest says of the halftone."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from voxelmat.errors import InputError
from voxelmat.model.halftone import Halftone
from voxelmat.model.material import Material
from voxelmat.printing.mask import mask_digest

__all__ = ["INTERFACE_RULE", "INTERFACE_STEP", "halftone_method", "laying_order"]

#: Neighbouring voxels whose fraction of some resin differs by so much meet at an interface.
INTERFACE_STEP = 0.5
INTERFACE_RULE = (
    "Blend fractions are interpolated between neighbouring voxels, except in a cell of eight "
    "voxels where one is a pure resin and another is something else, or where the fraction of a "
    f"resin differs by {INTERFACE_STEP:g} or more: there each site takes its nearest voxel, so a "
    "pure zone is never dithered and an interface between bodies stays sharp."
)
_RAMP_RULE = (
    " Between pure zones that touch the fractions rise from 0 to 1 over the stated width, "
    "centred on the interface; where three zones come together it stays sharp."
)
_TEXT = {
    "blue noise": "3-D blue noise by void-and-cluster, 64^3 sites, 16 bit, skewed tiles",
    "error diffusion": "3-D error diffusion of all resins at once, with noise",
    "hash noise": "white noise from a hash of the site's place on the tray",
}
_WHY = {
    "stiffness": (
        "from the stiffest to the softest resin: the two ends of the order get the noise of one "
        "threshold, and neighbours in the order differ least in stiffness"
    ),
    "channels": "as the channels are numbered",
}


def laying_order(
    materials: Sequence[Material], resins: Sequence[str], halftone: Halftone
) -> tuple[str, ...]:
    """The resins in the order in which the thresholds lay them.

    Parameters
    ----------
    materials : sequence of Material
        Of the part, or of all parts of a job: they know the moduli. A resin that is not among
        them is laid last; the part has none of it.
    resins : sequence of str
        Each once, in the order of their channels.
    halftone : Halftone

    Raises
    ------
    InputError
        If a stated order does not name each of the resins once.

    Notes
    -----
    A threshold mask makes each *sum* of fractions, taken from the first resin on, as even as
    it makes a single one. The logarithm of the modulus is a mean over fractions (near enough,
    see `voxelmat.model.laws`), so its noise is that of the sums, each times the step in log
    modulus between neighbours in the order: least where the order is one of stiffness.
    """
    if halftone.order == "channels":
        return tuple(resins)
    if halftone.order == "stiffness":
        modulus = {m.name: m.E.value for m in materials}
        return tuple(sorted(resins, key=lambda n: -modulus.get(n, 0.0)))
    if sorted(halftone.order) != sorted(resins):
        raise InputError(
            f"The order of laying names each printed resin once ({', '.join(sorted(resins))}); "
            f"got {', '.join(halftone.order) or 'none'}.",
            key="order",
        )
    return tuple(halftone.order)


def halftone_method(
    materials: Sequence[Material], resins: Sequence[str], halftone: Halftone
) -> dict[str, Any]:
    """What the manifest's ``method`` entry says of the halftone; it decides the bytes.

    Parameters
    ----------
    materials, resins, halftone
        As for `laying_order`.
    """
    order = laying_order(materials, resins, halftone)
    stated = isinstance(halftone.order, tuple)
    entry: dict[str, Any] = {
        "halftone": _TEXT[halftone.method],
        "settings": halftone.as_dict(),
        "interfaces": INTERFACE_RULE + (_RAMP_RULE if halftone.has_widths else ""),
    }
    if halftone.method != "error diffusion":
        entry["order"] = list(order)
        entry["order_reason"] = "as asked" if stated else _WHY[str(halftone.order)]
    if halftone.method == "blue noise":
        entry["mask_sha256"] = mask_digest()
    return entry
