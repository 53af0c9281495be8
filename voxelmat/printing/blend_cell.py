"""Moduli of a halftoned blend, computed from a cell of droplets as the printer would lay them."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence

import numpy as np

from voxelmat.errors import InputError
from voxelmat.fea.element import DEFAULT
from voxelmat.fea.homogenise import homogenise
from voxelmat.model.blend import EMPTY, Blend
from voxelmat.model.blend_estimate import BlendEstimate, limit
from voxelmat.model.bounds import hashin_shtrikman
from voxelmat.model.effective import EffectiveConstants
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.material import Material
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.mask import build_mask

__all__ = ["dither_cell", "homogenise_blend"]

# Relative uncertainty of a modulus that gets a caution.
_UNSURE = 0.2
# Elements along a side of the finest mesh; a cell larger than this would take hours.
_LARGEST = 192


def dither_cell(
    resins: Sequence[Material],
    fractions: Blend | Mapping[str, float],
    *,
    cell: int = 16,
    spacing: tuple[float, float, float] = (1.0, 1.0, 1.0),
    seed: int = 1,
) -> Part:
    """A periodic cell of droplets, one voxel each, from a blue-noise mask.

    Parameters
    ----------
    resins : sequence of Material
        Those that `fractions` names, in the order of the printer's channels; others are left out.
    fractions : Blend or mapping
        Parts by volume.
    cell : int
        Droplets along each side, a multiple of 4 from 16 to 128.
    spacing : tuple of float
        Pitch of the droplets along x, y, z, mm.
    seed : int
        Of the mask.

    Raises
    ------
    InputError
        A blend that names a resin which is not given; a bad cell.
    """
    blend = fractions if isinstance(fractions, Blend) else Blend.of(fractions)
    used = [m for m in resins if blend.fraction(m.name) > 0]
    missing = {n for n, _ in blend.fractions} - {m.name for m in used}
    if missing or not used:
        raise InputError(f"The blend names {sorted(missing) or 'no resin'}, which is not given.")
    total = np.cumsum([blend.fraction(m.name) for m in used])[:-1]
    threshold = (build_mask(cell, seed).astype(np.float64) + 0.5) / 65536.0
    labels = np.searchsorted(total, threshold, side="right").astype(np.uint16) + 1
    return Part(
        grid=VoxelGrid(shape=(cell, cell, cell), spacing=spacing, origin=(0.0, 0.0, 0.0)),
        resins=tuple(used),
        palette=(EMPTY, *(Blend.pure(m.name) for m in used)),
        labels=np.asfortranarray(labels.T, dtype=np.uint16),
        name=f"dither of {blend}",
    )


def _bounds(part: Part) -> tuple[tuple[float, float], tuple[float, float], Blend]:
    """Bounds of bulk and shear modulus at the fractions that were placed, MPa."""
    volume = part.volumes()
    placed = Blend.of(volume)
    w = np.array([[placed.fraction(m.name)] for m in part.resins])
    bands = hashin_shtrikman(
        w, np.array([m.bulk for m in part.resins]), np.array([m.shear for m in part.resins])
    )
    pairs = [(float(np.exp(b.low[0])), float(np.exp(b.high[0]))) for b in bands]
    return pairs[0], pairs[1], placed


def _cautions(estimate: BlendEstimate) -> list[str]:
    over = [str(r) for r, ok in zip(estimate.refinements, estimate.raw_held, strict=True) if not ok]
    out = []
    if over:
        out.append(
            f"At refinement {', '.join(over)} the moduli lie outside the Hashin-Shtrikman bounds: "
            f"so few elements a droplet are too stiff."
        )
    if not estimate.held:
        out.append(
            "The extrapolated moduli lie outside the bounds by more than their uncertainty: no "
            "answer. Use finer refinements or a larger cell."
        )
    for name, v in (("bulk", estimate.bulk_limit), ("shear", estimate.shear_limit)):
        if v.uncertainty > _UNSURE * abs(v.value):
            out.append(
                f"The {name} modulus is not known well ({v.value:.3g} ± {v.uncertainty:.2g} MPa): "
                f"where droplets of high contrast meet along edges, refinement converges slowly."
            )
    out.append(
        "Computed for sharp, perfectly joined cubes of cured resin. Printed droplets blur into "
        "each other, so measured coupons decide; another seed shows the scatter of the cell."
    )
    return out


def _refinements(given: Sequence[int], cell: int) -> tuple[int, ...]:
    out = tuple(int(r) for r in given)
    if len(out) < 2 or any(b <= a for a, b in itertools.pairwise(out)) or out[0] < 1:
        raise InputError(f"refinements are two or more rising numbers of elements; got {given}.")
    if out[-1] * cell > _LARGEST:
        raise InputError(
            f"{out[-1]} elements a droplet in a cell of {cell} make {out[-1] * cell} elements a "
            f"side; the most is {_LARGEST}."
        )
    return out


def homogenise_blend(
    resins: Sequence[Material],
    fractions: Blend | Mapping[str, float],
    *,
    cell: int = 16,
    refinements: Sequence[int] = (1, 2, 3, 4),
    spacing: tuple[float, float, float] = (1.0, 1.0, 1.0),
    seed: int = 1,
    element: str = DEFAULT,
    tol: float = 1e-6,
    monitor: Monitor = SILENT,
) -> BlendEstimate:
    """Moduli of a halftoned blend from refined meshes of a dithered cell.

    One element a droplet is much too stiff, so that moduli are found for several numbers of
    elements a droplet and extrapolated to element size 0; the Hashin-Shtrikman bounds at the
    cell's own fractions judge the outcome.

    Parameters
    ----------
    resins, fractions, cell, spacing, seed
        See `dither_cell`.
    refinements : sequence of int
        Elements a droplet along each axis, rising, two at least; three above 1 fit the order.
    element : str
        See `voxelmat.fea.element`.
    tol : float
        Relative residual; the error of the moduli goes with its square.
    monitor : Monitor

    Returns
    -------
    BlendEstimate

    Raises
    ------
    InputError, ConvergenceError
    """
    steps = _refinements(refinements, cell)
    part = dither_cell(resins, fractions, cell=cell, spacing=spacing, seed=seed)
    found: list[EffectiveConstants] = []
    for done, r in enumerate(steps):
        monitor.report("refining", done=done, total=len(steps), elements=r)
        found.append(homogenise(part, element=element, tol=tol, refine=r, monitor=monitor))
    near = [f.isotropic for f in found]
    bulk, shear = tuple(n.bulk for n in near), tuple(n.shear for n in near)
    bulk_range, shear_range, placed = _bounds(part)
    estimate = BlendEstimate(
        blend=fractions if isinstance(fractions, Blend) else Blend.of(fractions),
        placed=placed,
        sites=cell,
        refinements=steps,
        bulk=bulk,
        shear=shear,
        distance=tuple(n.distance for n in near),
        bulk_limit=limit(steps, bulk),
        shear_limit=limit(steps, shear),
        bulk_range=bulk_range,
        shear_range=shear_range,
        iterations=tuple(sum(f.iterations) for f in found),
        element=element,
    )
    return estimate.replace(cautions=tuple(_cautions(estimate)))
