"""Several runs of one question from different starts, seeded, best first."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import map_coordinates

from voxelmat.errors import InputError
from voxelmat.model.design_result import DesignResult
from voxelmat.model.design_spec import DesignSpec
from voxelmat.model.goal import Maximise
from voxelmat.model.loadcase import LoadCase
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Figure, Monitor
from voxelmat.topopt.optimise import optimise
from voxelmat.topopt.problem import LayoutProblem, start_of
from voxelmat.topopt.setup import layout_problem

__all__ = ["ranked_starts", "scattered_start"]

Array = NDArray[np.float64]

_PATCH = 3.0  # filter radii from one random value to the next
_RHO_SPREAD, _BLEND_SPREAD = 0.4, 1.0  # relative; of the logarithm of a fraction
_MOST = 50


def ranked_starts(
    part: Part,
    load_cases: Sequence[LoadCase],
    spec: DesignSpec,
    n: int,
    *,
    monitor: Monitor = SILENT,
    element: str = "icmb",
) -> tuple[DesignResult, ...]:
    """Optimise from the uniform start and from n - 1 random ones; the best design first.

    A penalised design is a local optimum; how far the objectives of several starts lie apart says
    how much that matters. The random starts depend on `DesignSpec.seed` only.

    Parameters
    ----------
    part, load_cases, spec, element
        As for `optimise`.
    n : int
        1 to 50.
    monitor : Monitor
        As for `optimise`, with the figure ``start=``, from 1. `Cancelled` ends the present run
        with its last whole design; no further start is made.

    Returns
    -------
    tuple of DesignResult
        Those that meet every limit before those that do not, each by its objective.

    Raises
    ------
    InputError
        As `optimise`, and for a number of starts out of range.
    """
    if not 1 <= n <= _MOST:
        raise InputError(f"The number of starts lies between 1 and {_MOST}; got {n}.")
    results: list[DesignResult] = []
    for k in range(n):
        start = None
        if k:
            problem, _ = layout_problem(part, load_cases, spec, element=element)
            start = scattered_start(spec, problem, part.grid.spacing, k)
        told = _Numbered(monitor, k + 1)
        results.append(optimise(part, load_cases, spec, monitor=told, element=element, start=start))
        if results[-1].cancelled:
            break
    sign = -1.0 if isinstance(spec.objective, Maximise) else 1.0
    return tuple(
        sorted(results, key=lambda r: (not all(c.met for c in r.constraints), sign * r.objective))
    )


class _Numbered:
    """Adds the number of the start to every report."""

    def __init__(self, inner: Monitor, start: int) -> None:
        self._inner, self._start = inner, start

    def report(self, stage: str, *, done: int, total: int, **figures: Figure) -> None:
        self._inner.report(stage, done=done, total=total, start=self._start, **figures)


def scattered_start(
    spec: DesignSpec,
    problem: LayoutProblem,
    spacing: tuple[float, float, float],
    number: int,
) -> Array:
    """The uniform start, changed by smooth random fields about three filter radii wide."""
    rng = np.random.default_rng([spec.seed, number])
    unknowns = problem.unknowns
    x = start_of(spec, unknowns, problem.bounds)
    fields = unknowns.forward(x)
    shape, inside = fields.rho.shape, unknowns.choice.domain
    cells = [_PATCH * spec.filter_radius / h for h in spacing[::-1]]
    rho = fields.rho * (1.0 + _RHO_SPREAD * _patches(rng, shape, cells))
    rho *= fields.rho[inside].sum() / max(float(rho[inside].sum()), 1e-300)
    w = fields.w * np.exp([_BLEND_SPREAD * _patches(rng, shape, cells) for _ in fields.w])
    w[:, inside] /= w[:, inside].sum(0)
    return unknowns.like(np.clip(rho, 0.02, 1.0), w)


def _patches(rng: np.random.Generator, shape: tuple[int, ...], cells: list[float]) -> Array:
    """Random values between -1 and 1, one every so many voxels along each axis, joined linearly."""
    knots = [int(np.ceil(n / c)) + 1 for n, c in zip(shape, cells, strict=True)]
    places = [(np.arange(n) + 0.5) / c for n, c in zip(shape, cells, strict=True)]
    grid = np.meshgrid(*places, indexing="ij")
    values = map_coordinates(rng.uniform(-1.0, 1.0, knots), grid, order=1, mode="nearest")
    return np.asarray(values, dtype=np.float64)
