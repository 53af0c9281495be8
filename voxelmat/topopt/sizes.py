"""Least sizes of solid, gaps and phases: what a robust design keeps, and what a result has.

A robust design with thresholds 1/2 +- m keeps a slab of the nominal design that is as thin as one
that just does not vanish when eroded. Filtered across, a slab of raw thickness b is
C(x + b/2) - C(x - b/2), with C the cumulated cone seen from the side; its greatest value is
C(b/2) - C(-b/2) = 1/2 + m at the least b, and the nominal slab is where it is above 1/2. Struts and
lumps vanish sooner than slabs, so what is left of them is thicker. With the same margin both ways,
gaps have the same least size as solid.

References
----------
The cone seen from the side, of radius R: (R^3 / 6 - R x^2 / 2 + |x|^3 / 3) 6 / R^4 (derived by
hand). The idea of tying thresholds to sizes: Wang, F., Lazarov, B. S. and Sigmund, O., Struct.
Multidisc. Optim. 43 (2011) 767-784.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import binary_opening, label

from voxelmat.errors import InputError
from voxelmat.model.design_rules import Robust
from voxelmat.model.profile import PrintProfile

__all__ = ["SizeFigures", "least_size", "lost_to_opening", "minimum_from_profile", "size_figures"]

Bools = NDArray[np.bool_]


def _cumulated(x: float) -> float:
    """Share of a cone of radius 1, seen from the side, that lies below x."""
    t = min(abs(x), 1.0)
    half = t - t**3 + 0.5 * t**4
    return 0.5 + (half if x > 0 else -half)


def _bisect(low: float, high: float, rises: Any) -> float:
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (low, middle) if rises(middle) else (middle, high)
    return 0.5 * (low + high)


def least_size(radius: float, margin: float) -> float:
    """Thickness of the thinnest slab, mm, that a robust design keeps.

    Parameters
    ----------
    radius : float
        Of the filter, mm.
    margin : float
        Of `voxelmat.model.design_rules.Robust`, 0.05 to 0.4.
    """
    peak = 0.5 + Robust(margin=margin).margin
    raw = _bisect(0.0, 2.0, lambda b: _cumulated(b / 2) - _cumulated(-b / 2) > peak)

    def below(x: float) -> bool:
        return _cumulated(x + raw / 2) - _cumulated(x - raw / 2) < 0.5

    return 2.0 * radius * _bisect(0.0, 1.0 + raw, below)


def minimum_from_profile(
    profile: PrintProfile,
    *,
    margin: float = 0.2,
    spacing: tuple[float, float, float] | None = None,
    pure: bool = False,
) -> dict[str, Any]:
    """What a `DesignSpec` needs for features that a printer makes reliably.

    Solid is kept as thick as the profile's smallest wall and strut, gaps as wide as its smallest
    gap and hole; the filter is one, so the larger of them all counts. Where only pure resins may
    be printed, phases are kept as large as the profile's smallest feature.

    Parameters
    ----------
    profile : PrintProfile
    margin : float
        Of the thresholds.
    spacing : tuple of float, optional
        Of the grid, mm: refuses one that is too coarse to show such sizes.
    pure : bool
        Whether only pure resins may be printed.

    Returns
    -------
    dict
        ``filter_radius``, ``robust`` and, for pure resins, ``blend_radius`` and ``blends``: for
        ``DesignSpec(**minimum_from_profile(profile), ...)``.

    Raises
    ------
    InputError
        If the filter would not reach beyond one voxel.
    """
    sizes = profile.minimum
    unit = least_size(1.0, margin)
    wanted = max(sizes.wall, sizes.strut, sizes.gap, sizes.hole)
    out: dict[str, Any] = {"filter_radius": wanted / unit, "robust": Robust(margin=margin)}
    if pure:
        out |= {"blend_radius": sizes.feature / unit, "blends": "pure"}
    if spacing is not None:
        smallest = min(v for k, v in out.items() if k in ("filter_radius", "blend_radius"))
        if smallest <= max(spacing):
            raise InputError(
                f"Least sizes of {wanted:g} mm (phases {sizes.feature:g} mm) need a filter radius "
                f"of {smallest:.3g} mm, which does not reach beyond a voxel of {max(spacing):g} "
                "mm; take a finer grid or a smaller margin."
            )
    return out


def lost_to_opening(mask: Bools, edge: int = 2, *, goes_on: bool = False) -> float:
    """Share of the marked voxels that no cube of `edge`^3 marked voxels covers.

    Beyond the grid counts as not marked, or, where it `goes_on`, as the voxel next to it.
    """
    if not mask.any():
        return 0.0
    around = np.pad(mask, edge, mode="edge" if goes_on else "constant")
    kept = binary_opening(around, np.ones((edge, edge, edge), dtype=bool))
    inner = tuple(slice(edge, edge + n) for n in mask.shape)
    return float((mask & ~kept[inner]).sum() / mask.sum())


@dataclass(frozen=True, slots=True, kw_only=True)
class SizeFigures:
    """How much of a design is finer than a cube of so many voxels, and in how many pieces it is.

    Attributes
    ----------
    edge : int
        Of the cube, voxels.
    solid : float
        Share of the solid lost to an opening.
    gap : float
        Share of the empty voxels of the shape lost to an opening; gaps at the shape's surface go
        on outside of it.
    phases : dict of str to float
        Share of each resin's voxels (those it has most of) lost to an opening.
    pieces : int
        That the solid hangs together in, over faces.
    """

    edge: int
    solid: float
    gap: float
    phases: dict[str, float]
    pieces: int

    def __str__(self) -> str:
        lost = [("solid", self.solid), ("gaps", self.gap), *self.phases.items()]
        words = ", ".join(f"{name} {100 * share:.1f} %" for name, share in lost)
        return f"Finer than {self.edge} voxels: {words}. Pieces: {self.pieces}."


def size_figures(
    density: NDArray[Any],
    fractions: NDArray[Any],
    shape: Bools,
    names: tuple[str, ...],
    edge: int = 2,
) -> SizeFigures:
    """Measure a design.

    Parameters
    ----------
    density : ndarray, (nx, ny, nz)
        Solid where above one half.
    fractions : ndarray, (K, nx, ny, nz)
    shape : ndarray of bool, (nx, ny, nz)
        What was designed in.
    names : tuple of str
        Of the resins.
    edge : int
        Of the cube, voxels.
    """
    solid = (np.asarray(density) > 0.5) & shape
    most = np.argmax(fractions, axis=0)
    inside = solid & (np.asarray(fractions).sum(axis=0) > 0)
    around = np.pad(~solid, edge, constant_values=True)
    hollow = np.pad(shape & ~solid, edge)
    kept = binary_opening(around, np.ones((edge, edge, edge), dtype=bool))
    gap = float((hollow & ~kept).sum() / hollow.sum()) if hollow.any() else 0.0
    return SizeFigures(
        edge=edge,
        solid=lost_to_opening(solid, edge),
        gap=gap,
        phases={name: lost_to_opening(inside & (most == m), edge) for m, name in enumerate(names)},
        pieces=int(label(solid)[1]),
    )
