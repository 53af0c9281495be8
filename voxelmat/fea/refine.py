"""How far a result hangs on its grid: solved again at half resolution, and extrapolated.

With a quantity f that nears its limit like ``f + C h^p``, two grids of ratio r give the error of
the finer one as ``(f - f_coarse) / (r^p - 1)`` (L. F. Richardson, Phil. Trans. R. Soc. A 210
(1911) 307; from memory). A third grid, at a quarter, tells p; where it does not, p is taken
as 1, which errs on the large side for smooth fields.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from voxelmat.errors import ConvergenceError, InputError
from voxelmat.fea.coarsen import coarsened
from voxelmat.fea.static import solve
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part
from voxelmat.model.result import StaticResult
from voxelmat.monitor import SILENT, Monitor
from voxelmat.units import number

__all__ = ["ErrorEstimate", "error_estimate"]

#: Highest order that is believed: that of linear elements for energy.
_HIGHEST = 2.0
_LOWEST = 0.5
# Above this the quarter grid is too coarse to say anything.
_BELIEVED = 3.0
# Changes of volume or load by coarsening beyond these shares are said; ours.
_VOLUME, _LOAD = 0.05, 0.02
# Differences between grids below this share are the linear solver's.
_NOISE = 1e-6


@dataclass(frozen=True, slots=True, kw_only=True)
class ErrorEstimate:
    """Estimated error of a result by its voxel size; nan where it could not be made.

    Attributes
    ----------
    energy_error : float
        Of the strain energy, as a share of the extrapolated value; positive where the grid gives
        too much.
    displacement_error : float
        Of the largest displacement, the same way.
    load_displacement_error : mapping of str to float
        Of the mean displacement of each load, the same way.
    energy, displacement : float
        Extrapolated strain energy, mJ, and largest displacement, mm.
    order : float
        The power of the voxel size that was used.
    order_observed : bool
        It was seen on three grids; otherwise assumed.
    ratio : float
        Of the voxel sizes of the two finest grids.
    notes : tuple of str
        What to know before believing it.
    """

    energy_error: float
    displacement_error: float
    load_displacement_error: Mapping[str, float]
    energy: float
    displacement: float
    order: float
    order_observed: bool
    ratio: float
    notes: tuple[str, ...] = ()

    @property
    def words(self) -> str:
        """The estimate in a sentence."""
        if math.isnan(self.energy_error):
            return "The error by the voxel size could not be estimated. " + " ".join(self.notes)
        how = "seen on three grids" if self.order_observed else "assumed"
        return (
            f"By solving again at half resolution, the strain energy is off by about "
            f"{number(100 * abs(self.energy_error), 2)} % and the largest displacement by about "
            f"{number(100 * abs(self.displacement_error), 2)} % (order {number(self.order, 2)}, "
            f"{how})."
        )


def _ratio(fine: Part, coarse: Part) -> float:
    """Mean ratio of voxel sizes over the axes that were coarsened."""
    ratios = [c / f for f, c in zip(fine.grid.spacing, coarse.grid.spacing, strict=True)]
    changed = [r for r in ratios if r > 1.0 + 1e-9]
    return math.exp(math.fsum(map(math.log, changed)) / len(changed)) if changed else 1.0


def _figures(result: StaticResult) -> dict[str, float]:
    out = {"energy": result.energy, "largest": float(result.size.max())}
    return out | {f"load {n}": v for n, v in result.load_displacement.items()}


def _order(figures: list[dict[str, float]], ratio: float) -> float | None:
    """Observed from the energy on three grids; None where it makes no sense."""
    if len(figures) < 3:
        return None
    first, second = (figures[n]["energy"] - figures[n + 1]["energy"] for n in (0, 1))
    if first == 0 or not second / first > 1.0:
        return None
    order = math.log(second / first) / math.log(ratio)
    return min(order, _HIGHEST) if _LOWEST <= order <= _BELIEVED else None


def _lost(part: Part, coarse: Part) -> dict[str, float]:
    """Materials whose volume changes much by coarsening, and by which share."""
    before, after = part.volumes(), coarse.volumes()
    change = {name: after.get(name, 0.0) / volume - 1 for name, volume in before.items()}
    return {name: share for name, share in change.items() if abs(share) > _VOLUME}


def _change_notes(part: Part, result: StaticResult, coarse: StaticResult) -> list[str]:
    notes = [
        f"At half resolution the volume of '{name}' changes by {number(100 * change, 2)} %: "
        f"features of one or two voxels are lost, and the estimate is rough."
        for name, change in _lost(part, coarse.part).items()
    ]
    for name, force in result.resultants.items():
        size = float(np.linalg.norm(force))
        off = float(np.linalg.norm(np.subtract(coarse.resultants.get(name, (0, 0, 0)), force)))
        if off > _LOAD * max(size, 1e-300):
            notes.append(
                f"At half resolution {name} changes by {number(100 * off / size, 2)} %, which the "
                f"estimate contains."
            )
    return notes


def _none(why: str) -> ErrorEstimate:
    nan = math.nan
    return ErrorEstimate(
        energy_error=nan,
        displacement_error=nan,
        load_displacement_error={},
        energy=nan,
        displacement=nan,
        order=nan,
        order_observed=False,
        ratio=nan,
        notes=(why,),
    )


def _coarser(
    result: StaticResult, case: LoadCase, tol: float, monitor: Monitor
) -> tuple[list[StaticResult], str]:
    """Results at half and, where it can be solved, at a quarter; why the first failed."""
    found: list[StaticResult] = []
    part = result.part
    for level in (1, 2):
        monitor.report("error by voxel size", done=level - 1, total=2)
        try:
            part = coarsened(part)
            if level == 2 and _lost(result.part, part):
                break  # too coarse to see an order on
            found.append(solve(part, case, element=result.element, tol=tol, monitor=monitor))
        except (InputError, ConvergenceError) as error:
            return found, str(error)
    monitor.report("error by voxel size", done=2, total=2)
    return found, ""


def error_estimate(
    result: StaticResult, *, tol: float = 1e-8, monitor: Monitor = SILENT
) -> ErrorEstimate:
    """Estimate the error of a result by its voxel size.

    Costs two more solves, with an eighth and a sixty-fourth of the voxels.

    Parameters
    ----------
    result : StaticResult
    tol : float
        Of the linear solves.
    monitor : Monitor

    Returns
    -------
    ErrorEstimate
        nan with a note where the part cannot be solved at half resolution: a member vanished, a
        region came to hold no material. What steps of a curved outline do to a *local* stress is
        not in it: see `voxelmat.fea.peaks`.
    """
    coarse, why = _coarser(result, result.load_case, tol, monitor)
    if not coarse:
        return _none(f"At half resolution the part cannot be solved: {why}")
    ratio = _ratio(result.part, coarse[0].part)
    figures = [_figures(r) for r in (result, *coarse)]
    observed = _order(figures, ratio)
    order = 1.0 if observed is None else observed
    errors, limits = {}, {}
    for name, fine in figures[0].items():
        step = (fine - figures[1].get(name, math.nan)) / (ratio**order - 1.0)
        limits[name] = fine + step
        errors[name] = -step / limits[name] if limits[name] else math.nan
    notes = _change_notes(result.part, result, coarse[0])
    settled = all(abs(e) < _NOISE for e in errors.values())
    if observed is None and not settled:
        notes.append("The order was not to be seen on three grids; order 1 was assumed.")
    return ErrorEstimate(
        energy_error=errors["energy"],
        displacement_error=errors["largest"],
        load_displacement_error={n: errors[f"load {n}"] for n in result.load_displacement},
        energy=limits["energy"],
        displacement=limits["largest"],
        order=order,
        order_observed=observed is not None,
        ratio=ratio,
        notes=tuple(notes),
    )
