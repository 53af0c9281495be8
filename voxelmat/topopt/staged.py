"""Designs made in more than one run: zones that the optimiser chooses, and few resins.

Few resins: the resin of which the design has least is taken away and the design made again, one
at a time (those that are hardly used go together), until few enough are left. Greedy: the set that
is left need not be the best of its size.

Zones: the blends of a free design are grouped, weighted by how solid their voxels are, as a
palette is; the groups become zones, and the design is made again with one blend a zone, from the
means of the groups on. Voxels do not change zones in the second run.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.design_result import DesignResult
from voxelmat.model.design_rules import ChosenZones, Zones
from voxelmat.model.design_spec import DesignSpec
from voxelmat.model.part import Part
from voxelmat.topopt.quantise import quantise
from voxelmat.units import number

__all__ = ["in_stages", "needs_stages"]

Array = NDArray[np.float64]
#: One run: a specification, and a design (density, fractions) to start from.
Run = Callable[[DesignSpec, DesignResult | None], DesignResult]

#: A resin below this share of the material is hardly used.
_HARDLY = 0.005
_EMPTY = 1e-3  # weight of blends in empty voxels, which may become solid


def needs_stages(spec: DesignSpec) -> bool:
    """Whether a specification takes more than one run."""
    few = spec.most_resins is not None and spec.most_resins < len(spec.resins)
    return few or isinstance(spec.zones, ChosenZones)


def in_stages(part: Part, spec: DesignSpec, run: Run) -> DesignResult:
    """Make the design of a specification that takes more than one run.

    Parameters
    ----------
    part : Part
    spec : DesignSpec
    run : callable
        ``run(spec, like)`` makes one design, from `like` on where it is given.

    Returns
    -------
    DesignResult
        Of the last run; its notes tell of those before.

    Raises
    ------
    InputError
        If resins that must stay are more than are allowed.
    """
    free = dataclasses.replace(spec, most_resins=None, zones=None)
    if isinstance(spec.zones, Zones):
        free = dataclasses.replace(free, zones=spec.zones)
    result, free, notes = _few(part, spec, free, run)
    if isinstance(spec.zones, ChosenZones) and not result.cancelled and len(free.resins) > 1:
        zones, error = _chosen(part, free, result, spec.zones.count)
        free_value = result.objective
        result = run(dataclasses.replace(free, zones=zones), result)
        notes += (
            f"The blends of the free design were grouped into {int(zones.numbers.max())} zones "
            f"(largest change of a share {number(error, 2)}) and made again: "
            f"{result.objective_name} {number(free_value)} free, {number(result.objective)} in "
            "zones.",
        )
    return dataclasses.replace(result, notes=(*result.notes, *notes))


def _few(
    part: Part, spec: DesignSpec, free: DesignSpec, run: Run
) -> tuple[DesignResult, DesignSpec, tuple[str, ...]]:
    """Take resins away until few enough are used; also the specification of what is left."""
    most = spec.most_resins or len(spec.resins)
    needed = _needed(spec)
    if len(needed) > most:
        raise InputError(
            f"At most {most} resins are allowed, but {', '.join(needed)} are fixed somewhere; "
            "allow more or free some."
        )
    result = run(free, None)
    notes: tuple[str, ...] = ()
    while not result.cancelled:
        shares = _shares(part, free, result)
        used = [n for n, s in shares.items() if s > 0 or n in needed]
        if len(used) <= most:
            break
        spare = sorted((n for n in free.resins if n not in needed), key=lambda n: shares[n])
        gone = [n for n in spare if shares[n] < _HARDLY][: len(free.resins) - most] or spare[:1]
        before = result.objective
        free = _without(free, gone)
        result = run(free, None)
        notes += (
            f"Without {', '.join(gone)}: {result.objective_name} {number(result.objective)} after "
            f"{number(before)}.",
        )
    return result, free, notes


def _needed(spec: DesignSpec) -> tuple[str, ...]:
    """Resins that are fixed somewhere, by region or as a skin."""
    fixed = set(spec.fixed_resin) | ({spec.skin.resin} if spec.skin is not None else set())
    return tuple(n for n in spec.resins if n in fixed)


def _without(spec: DesignSpec, gone: list[str]) -> DesignSpec:
    """The specification without some resins, nor limits on them alone."""
    limits = tuple(
        limit
        for limit in spec.limits
        if getattr(limit, "resin", None) not in gone
        and getattr(getattr(limit, "measure", None), "resin", None) not in gone
    )
    return dataclasses.replace(
        spec, resins=tuple(n for n in spec.resins if n not in gone), limits=limits
    )


def _shares(part: Part, spec: DesignSpec, result: DesignResult) -> dict[str, float]:
    """Share of each resin of the design in the finished part's material."""
    volumes = result.part.volumes()
    total = sum(volumes.get(n, 0.0) for n in spec.resins)
    return {n: volumes.get(n, 0.0) / max(total, 1e-300) for n in spec.resins}


def _chosen(part: Part, spec: DesignSpec, result: DesignResult, count: int) -> tuple[Zones, float]:
    """Zones of alike blends, and the largest change of a fraction by them."""
    w = np.asarray(result.fractions, dtype=np.float64)
    inside = (w.sum(0) > 0) & part.solid
    table = w[:, inside].T
    weight = np.maximum(np.asarray(result.density, dtype=np.float64)[inside], _EMPTY)
    resins = {m.name: m for m in part.resins}
    stiff = np.array([resins[n].shear for n in spec.resins])
    grouped = quantise(table, weight, np.exp(table @ np.log(stiff)), count)
    numbers = np.zeros(part.grid.shape, dtype=np.int64)
    numbers[inside] = grouped.index + 1
    return Zones(numbers=numbers), grouped.error
