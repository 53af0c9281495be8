"""What a print takes: volumes, masses, droplets, cost, file size, layers, and a range of time."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.part import Part
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.bill import BillRow, bill_row
from voxelmat.printing.imagefiles import ImageFiles
from voxelmat.printing.job import PrintJob, one_part_job
from voxelmat.printing.occupancy import Occupancy, SwathCounter, gather, packed_counts
from voxelmat.printing.readback import Stack
from voxelmat.printing.source import Dealer, source_of

__all__ = ["PrintEstimate", "bill_of_materials", "estimate", "forecast", "forecast_job"]


@dataclass(frozen=True, slots=True, kw_only=True)
class PrintEstimate:
    """Figures for one stack, or one job before it is sliced, on one printer.

    Attributes
    ----------
    volume_mm3 : dict
        Of each resin, support included.
    mass_t : dict
        Of each resin whose density is known, tonne.
    support_mm3 : float or None
        None where the machine adds its own support, which is not known here.
    droplets : dict
        Of each resin: its volume over the volume of its droplets.
    layers, passes : int
        Layers, and passes of the heads in the fullest layer.
    passes_in_all : float
        Passes over occupied swaths, over all layers.
    time_s : tuple of float
        Lowest and highest, with warm-up and cool-down, without cleaning.
    warm_up_s, cool_down_s : float
        What of it passes before the first and after the last layer.
    height_mm : float
    file_bytes : int
        Of the images.
    bill : tuple of BillRow
    cost : tuple of float or None
        Lowest and highest, resins and machine hours, in `cost_unit`; None where there are no
        prices or where those of `unpriced` are missing.
    cost_unit : str
    unpriced : tuple of str
    invented : bool
        True where the profile's figures are invented.
    basis : str
        What was counted, in words.
    volume_error_mm3 : dict
        Of each resin the largest error of `volume_mm3`; empty where every site was counted.
    file_bytes_error : float
    """

    volume_mm3: dict[str, float]
    mass_t: dict[str, float]
    support_mm3: float | None
    droplets: dict[str, float]
    layers: int
    passes: int
    time_s: tuple[float, float]
    invented: bool
    passes_in_all: float = 0.0
    warm_up_s: float = 0.0
    cool_down_s: float = 0.0
    height_mm: float = 0.0
    file_bytes: int = 0
    bill: tuple[BillRow, ...] = ()
    cost: tuple[float, float] | None = None
    cost_unit: str = ""
    unpriced: tuple[str, ...] = ()
    basis: str = "every site of the stack"
    volume_error_mm3: Mapping[str, float] = field(default_factory=dict)
    file_bytes_error: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class _Amounts:
    """What is printed, however it was counted."""

    channels: Mapping[str, tuple[str, str]]  # channel to (resin, role)
    volume: Mapping[str, float]  # channel to mm^3
    density: Mapping[str, float | None]  # resin to tonne/mm^3
    machine_support: bool
    layers: int
    height_mm: float
    swaths: tuple[float, float]  # over all layers, lowest and highest
    most: int  # in one layer
    file_bytes: int


def _estimate(printer: PrintProfile, found: _Amounts) -> PrintEstimate:
    process = printer.process
    rows = _bill(printer, found)
    low, high = (
        process.warm_up_s + process.cool_down_s + swaths * process.passes_per_layer * s + t
        for swaths, s, t in zip(
            found.swaths, process.swath_s, [found.layers * t for t in process.layer_s], strict=True
        )
    )
    unpriced = tuple(r.resin for r in rows if r.cost is None) if process.cost_unit else ()
    cost = None
    if process.cost_unit and not unpriced:
        resins = sum(r.cost or 0.0 for r in rows)
        per_s = process.machine_cost_per_h / 3600
        cost = (resins + low * per_s, resins + high * per_s)
    support = sum(r.volume_mm3 for r in rows if r.role == "support")
    return PrintEstimate(
        volume_mm3={r.resin: r.volume_mm3 for r in rows},
        mass_t={r.resin: r.printed_g * 1e-6 for r in rows if not r.density_assumed},
        support_mm3=None if found.machine_support else support,
        droplets={r.resin: r.droplets for r in rows},
        layers=found.layers,
        passes=found.most * process.passes_per_layer,
        passes_in_all=sum(found.swaths) / 2 * process.passes_per_layer,
        time_s=(low, high),
        warm_up_s=process.warm_up_s,
        cool_down_s=process.cool_down_s,
        height_mm=found.height_mm,
        file_bytes=found.file_bytes,
        bill=rows,
        cost=cost,
        cost_unit=process.cost_unit,
        unpriced=unpriced,
        invented=printer.invented,
    )


def _bill(printer: PrintProfile, found: _Amounts) -> tuple[BillRow, ...]:
    by_resin: dict[tuple[str, str], list[str]] = {}
    for channel, key in found.channels.items():
        by_resin.setdefault(key, []).append(channel)
    return tuple(
        bill_row(
            printer.process,
            resin,
            channels,
            role,
            sum(found.volume[c] for c in channels),
            found.density.get(resin),
        )
        for (resin, role), channels in by_resin.items()
    )


# ---------------------------------------------------------------- a stack on disk
def estimate(
    stack: Stack,
    profile: PrintProfile | None = None,
    *,
    occupancy: Occupancy | None = None,
    monitor: Monitor = SILENT,
) -> PrintEstimate:
    """Estimate material, time and cost of a stack.

    Parameters
    ----------
    stack : Stack
    profile : PrintProfile, optional
        The one in the manifest if left out.
    occupancy : Occupancy, optional
        As `voxelmat.printing.occupancy.gather` finds it; the stack is read if left out. Only
        swaths that hold sites take time.
    monitor : Monitor

    Returns
    -------
    PrintEstimate
    """
    printer = stack.profile if profile is None else profile
    counted = gather(stack, printer, monitor=monitor) if occupancy is None else occupancy
    swaths = float(counted.swaths.sum())
    return _estimate(
        printer,
        _Amounts(
            channels={c.name: (c.resin, c.role) for c in stack.channels},
            volume={c.name: c.volume_mm3 for c in stack.channels},
            density={c.resin: c.density_t_mm3 for c in stack.channels},
            machine_support=stack.support_policy == "machine",
            layers=stack.n_layers,
            height_mm=stack.n_layers * stack.pitch_mm[2],
            swaths=(swaths, swaths),
            most=int(counted.swaths.max()),
            file_bytes=_bytes_on_disk(stack),
        ),
    )


def _bytes_on_disk(stack: Stack) -> int:
    names = {"manifest.json"}
    return sum(
        p.stat().st_size for p in stack.folder.rglob("*") if p.is_file() and p.name not in names
    )


def bill_of_materials(given: Stack | PrintEstimate) -> tuple[BillRow, ...]:
    """The bill of materials of a stack or of an estimate, one row a resin and role."""
    return (given if isinstance(given, PrintEstimate) else estimate(given)).bill


# ---------------------------------------------------------------- before slicing
def forecast(
    part: Part,
    profile: PrintProfile,
    *,
    orientation: Sequence[str] = (),
    position: tuple[float, float] | None = None,
    support: str | None = None,
    layers: int = 48,
    monitor: Monitor = SILENT,
) -> PrintEstimate:
    """Estimate a part before it is sliced; `forecast_job` for a whole tray.

    Parameters
    ----------
    part, profile, orientation, position, support
        As for `voxelmat.printing.stack.write_stack`.
    layers, monitor
        As for `forecast_job`.
    """
    job = one_part_job(part, profile, orientation=orientation, position=position, support=support)
    return forecast_job(job, layers=layers, monitor=monitor)


def forecast_job(job: PrintJob, *, layers: int = 48, monitor: Monitor = SILENT) -> PrintEstimate:
    """Estimate a job from some of its layers, sliced for real and kept nowhere.

    Between two sliced layers amounts are taken to run straight. Where they only rise or only
    fall there, the error of what is between is at most half the step times the number of layers
    between; the sum of these is stated as the error, and widens the range of time. A feature
    that begins and ends between two sliced layers is not seen.

    Parameters
    ----------
    job : PrintJob
    layers : int
        How many layers are sliced, at least 2.
    monitor : Monitor
    """
    n = job.window.shape[2]
    at = np.unique(np.linspace(0, n - 1, min(n, max(2, layers))).round().astype(np.int64))
    found = _sampled(job, at, monitor)
    steps = np.diff(at)[:, None] - 1
    total = np.stack([np.interp(np.arange(n), at, column) for column in found.T]).sum(axis=1)
    error = (steps * np.abs(np.diff(found, axis=0)) / 2).sum(axis=0)
    site = float(job.window.site_volume)
    names = job.channel_names
    channels = {
        c: (job.channels[c], "model")
        if c in job.channels
        else (job.profile.channels[c] or "support", "support")
        for c in names
    }
    result = _estimate(
        job.profile,
        _Amounts(
            channels=channels,
            volume={c: float(v) * site for c, v in zip(names, total, strict=False)},
            density={r.name: r.density.value for p in job.parts for r in p.part.resins},
            machine_support=job.support == "machine",
            layers=n,
            height_mm=n * float(job.window.pitch[2]),
            swaths=(max(0.0, float(total[-2] - error[-2])), float(total[-2] + error[-2])),
            most=int(found[:, -2].max()),
            file_bytes=round(float(total[-1])),
        ),
    )
    doubt: dict[str, float] = {}
    for c, e in zip(names, error, strict=False):
        doubt[channels[c][0]] = doubt.get(channels[c][0], 0.0) + float(e) * site
    basis = f"{len(at)} of {n} layers, sliced; nothing is written"
    return dataclasses.replace(
        result, basis=basis, volume_error_mm3=doubt, file_bytes_error=float(error[-1])
    )


def _sampled(job: PrintJob, at: NDArray[np.int64], monitor: Monitor) -> NDArray[np.float64]:
    """Of each sliced layer: sites a channel, occupied swaths, bytes; float64 (layers, ...)."""
    if job.halftone.is_serial:  # a layer by itself would need all those below it
        job = job.replace(halftone=dataclasses.replace(job.halftone, method="blue noise"))
    source, dealer = source_of(job), Dealer(job)
    images = ImageFiles(job.window, job.channel_names, job.profile)
    counter = SwathCounter(job.window, job.profile)
    found = np.zeros((len(at), len(job.channel_names) + 2))
    for row, k in enumerate(int(k) for k in at):
        bits = np.stack(list(dealer.planes(next(source.sites(k, k + 1)), k)))
        sites, solid = packed_counts(bits)
        size = sum(len(data) for data in images.encode(bits))
        found[row] = [*sites, counter.count(solid), size]
        monitor.report("forecasting", done=row + 1, total=len(at))
    return found
