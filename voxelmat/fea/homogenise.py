"""Effective constants of a part that is one cell of a periodic material."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.assemble import moduli
from voxelmat.fea.cell import CellSolution, solve_cell
from voxelmat.fea.element import DEFAULT
from voxelmat.model.effective import EffectiveConstants
from voxelmat.model.expansion import palette_expansion
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor

__all__ = ["homogenise"]

Double = NDArray[np.float64]

# A cell counts as dithered where more than this share of its inner faces part materials that
# differ more than this many times in stiffness.
_FACES, _CONTRAST = 0.2, 10.0


def _repeated(a: Double, count: int) -> Double:
    for axis in range(3):
        a = np.repeat(a, count, axis=axis) if count > 1 else a
    return a


def _is_dithered(mu: Double) -> bool:
    faces = jumps = 0
    for axis in range(3):
        other = np.roll(mu, -1, axis=axis)
        both = (mu > 0) & (other > 0)
        low, high = np.minimum(mu, other), np.maximum(mu, other)
        faces += int(both.sum())
        jumps += int((both & (high > _CONTRAST * low)).sum())
    return jumps > _FACES * max(faces, 1)


def _cautions(found: CellSolution, mu: Double, refine: int, estimated: bool) -> list[str]:
    out = []
    if found.loose:
        share = 100.0 * found.loose_voxels / mu.size
        out.append(
            f"Islands that reach their own copies in no direction ({found.loose}, "
            f"{share / refine**3:.3g} % of the cell) carry no load and were left out; pieces that "
            f"meet along an edge or at a corner only do not count as joined."
        )
    if not found.stiffness.any():
        out.append("No material reaches through the cell: its stiffness is 0.")
    if refine < 3 and _is_dithered(mu):
        out.append(
            f"Materials change from voxel to voxel, and with refine = {refine} the cell comes out "
            f"too stiff: at contrast 1000 one element a droplet can pass the upper bound. Compare "
            f"refine = 2, 3 and 4, or use homogenise_blend, which extrapolates."
        )
    if estimated:
        out.append("The expansion of blends of three and more resins is an estimate.")
    return out


def homogenise(
    part: Part,
    *,
    element: str = DEFAULT,
    tol: float = 1e-8,
    refine: int = 1,
    warm: EffectiveConstants | None = None,
    keep_fields: bool = False,
    monitor: Monitor = SILENT,
) -> EffectiveConstants:
    """Effective stiffness, expansion and density of a cell that repeats along x, y and z.

    Parameters
    ----------
    part : Part
        One cell; its first voxels follow on its last. Partly filled voxels count with their
        filled fraction.
    element : str
        See `voxelmat.fea.element`.
    tol : float
        Relative residual of each of the six load cases.
    refine : int
        Elements a voxel along each axis.
    warm : EffectiveConstants, optional
        Of a similar cell of the same size, found with ``keep_fields=True``.
    keep_fields : bool
        Keep the displacements (144 bytes a node).
    monitor : Monitor

    Returns
    -------
    EffectiveConstants

    Raises
    ------
    InputError
        A part without material, a bad refinement, a warm start of another size.
    ConvergenceError
        With the residual history.

    Notes
    -----
    Mean strain is given and the deviation is periodic; the expansion follows from the same six
    solutions by reciprocity (V. M. Levin, Mechanics of Solids 2 (1967) 58, from memory). Error of
    discretisation makes a cell too stiff: compare refinements.
    """
    if not 1 <= refine <= 16:
        raise InputError(f"refine must lie in 1 to 16 elements a voxel; got {refine}.")
    lam, mu = moduli(part)
    if not np.any(mu > 0):
        raise InputError("The cell is empty: no voxel holds material.")
    alpha = palette_expansion(part)
    spread = None if alpha is None else _repeated(alpha[0][part.labels.T], refine)
    h = part.grid.spacing
    found = solve_cell(
        _repeated(lam, refine),
        _repeated(mu, refine),
        (h[0] / refine, h[1] / refine, h[2] / refine),
        expansion=spread,
        element=element,
        tol=tol,
        warm=None if warm is None else warm.fields,
        monitor=monitor,
    )
    cautions = _cautions(found, mu, refine, alpha is not None and alpha[1])
    count = part.filled() / mu.size
    table = count @ part.palette_fractions()
    result = EffectiveConstants(
        stiffness=found.stiffness,
        expansion=None,
        density=float(count @ part.palette_density()),
        fractions={m.name: float(v) for m, v in zip(part.resins, table, strict=True) if v > 0},
        symmetry_error=found.symmetry_error,
        iterations=found.iterations,
        element=element,
        shape=(refine * mu.shape[2], refine * mu.shape[1], refine * mu.shape[0]),
        fields=found.fields if keep_fields else None,
        cautions=tuple(cautions),
    )
    if found.thermal_stress is not None and result.is_stiff:
        expansion = result.compliance @ found.thermal_stress
        result = result.replace(expansion=expansion)
    return result
