"""From temperatures to a heat result: flows, flux, extremes, cautions."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.fea.heat_assemble import HeatActs
from voxelmat.kernels.threads import threads
from voxelmat.model.heatcase import HeatCase
from voxelmat.model.heatresult import HeatResult, corner_mean
from voxelmat.model.part import Part
from voxelmat.model.result import Extreme
from voxelmat.model.thermal import palette_conductivity
from voxelmat.provenance import Provenance, utc_now
from voxelmat.units import number

__all__ = ["balance_of", "flows_at", "heat_result", "rounding_of"]

Double = NDArray[np.float64]

# In and outflow that miss each other by more than this get a caution.
_BALANCE = 1e-4


def flows_at(acts: HeatActs, T: Double, surplus: Double) -> dict[str, float]:
    """Heat that each thing brings, mW.

    Parameters
    ----------
    acts : HeatActs
    T : ndarray of float64, shape (nz+1, ny+1, nx+1)
        degC.
    surplus : ndarray of float64, shape of `T`
        Heat that each node would need from outside to stay in balance, mW: at held nodes that is
        what holds them.
    """
    out = {}
    for n, name in enumerate(acts.fixed):
        out[name] = float(surplus[acts.held & (acts.owner == n)].sum())
    for f in acts.films:
        out[f.name] = float((f.film * (f.ambient - T.ravel()[f.node])).sum())
    for q in acts.inflows:
        out[q.name] = float(q.heat.sum())
    return out


def balance_of(flows: dict[str, float], stored: float, rounding: float) -> float:
    """Inflow minus stored heat, over the largest of all flows, or over `rounding` if larger."""
    largest = max([rounding, abs(stored), *(abs(v) for v in flows.values())])
    return abs(sum(flows.values()) - stored) / largest if largest > 0 else 0.0


def rounding_of(acts: HeatActs, T: Double) -> float:
    """Below this, mW, a flow through films counts as none: 1e-9 of what absolute 0 would draw."""
    hottest = float(np.nanmax(np.abs(T))) + 273.15
    return 1e-9 * hottest * sum(float(f.film.sum()) for f in acts.films)


def _extreme(part: Part, T: Double, value: float) -> Extreme:
    at = np.argwhere(value == T)[0]
    place = [float(axis[i]) for axis, i in zip(part.grid.nodes(), at, strict=True)]
    return Extreme(value=value, place_mm=(place[0], place[1], place[2]))


def _flux(part: Part, T: Double) -> NDArray[np.float32]:
    """-k grad T at voxel centres."""
    k = palette_conductivity(part)[part.labels] * part.solid
    out = np.zeros((*part.grid.shape, 3), dtype=np.float32, order="F")
    for axis, h in enumerate(part.grid.spacing):
        slope = np.diff(T, axis=axis) / h
        for other in range(3):
            if other != axis:
                low, high = [slice(None)] * 3, [slice(None)] * 3
                low[other], high[other] = slice(None, -1), slice(1, None)
                slope = 0.5 * (slope[tuple(low)] + slope[tuple(high)])
        out[..., axis] = np.where(np.isfinite(slope) & part.solid, -k * slope, 0.0)
    return out


def _record_cautions(part: Part, T: Double) -> list[str]:
    """Resins that get colder or hotter than their records cover."""
    mean = corner_mean(T)
    known = part.solid & np.isfinite(mean)
    low, high = np.full(len(part.palette), np.inf), np.full(len(part.palette), -np.inf)
    np.minimum.at(low, part.labels[known], mean[known])
    np.maximum.at(high, part.labels[known], mean[known])
    fractions = part.palette_fractions()
    out = []
    for m, resin in enumerate(part.resins):
        mine = fractions[:, m] > 0
        coldest, hottest = low[mine].min(initial=np.inf), high[mine].max(initial=-np.inf)
        least, most = resin.temperature_range_degC
        if hottest > most or coldest < least:
            out.append(
                f"'{resin.name}' is at {number(coldest)} to {number(hottest)} degC; its record is "
                f"for {least:g} to {most:g} degC."
            )
        glass = resin.glass_transition_degC
        if glass is not None and coldest < glass < hottest:
            out.append(f"'{resin.name}' passes its glass transition at {glass:g} degC.")
    return out


def heat_result(
    part: Part,
    case: HeatCase,
    T: Double,
    flows: dict[str, float],
    *,
    stored: float,
    balance: float,
    iterations: int,
    residual: float,
    cautions: list[str],
    started: str,
) -> HeatResult:
    """A result from temperatures ``[nz+1, ny+1, nx+1]``, nan where there is none."""
    field = T.T
    notes = [*cautions, *_record_cautions(part, field)]
    if balance > _BALANCE:
        notes.append(f"In- and outflow of heat miss each other by {balance:.1e} of the largest.")
    return HeatResult(
        part=part,
        heat_case=case,
        temperature=field,
        flux=_flux(part, field),
        flows=flows,
        stored=stored,
        balance=balance,
        lowest=_extreme(part, field, float(np.nanmin(field))),
        highest=_extreme(part, field, float(np.nanmax(field))),
        iterations=iterations,
        residual=residual,
        cautions=tuple(notes),
        provenance=Provenance(
            inputs={"part": part.digest},
            threads=int(threads()),
            started_utc=started,
            finished_utc=utc_now(),
        ),
    )
