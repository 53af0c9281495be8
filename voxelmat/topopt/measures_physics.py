"""From measures beyond statics to responses, and what they mean for the rest of a problem."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from voxelmat.model.measure_physics import (
    CellProperty,
    CellTarget,
    ConnectedSolid,
    ContactPeak,
    Frequency,
    MeanTemperature,
    PeakTemperature,
    ThermalCompliance,
    TrappedSupport,
    Warpage,
)
from voxelmat.topopt.response_cell import cell_response
from voxelmat.topopt.response_connected import connected_response
from voxelmat.topopt.response_contact import contact_response
from voxelmat.topopt.response_frequency import frequency_response
from voxelmat.topopt.response_temperature import temperature_response
from voxelmat.topopt.response_trapped import trapped_response
from voxelmat.topopt.response_warp import warp_response
from voxelmat.topopt.responses import Response
from voxelmat.topopt.setting import Setting

__all__ = ["PHYSICS"]


def _temperature(m: PeakTemperature | MeanTemperature | ThermalCompliance, s: Setting) -> Response:
    return temperature_response(m, s.part, s.unknowns, s.key)


def _cell(m: CellProperty | CellTarget, s: Setting) -> Response:
    return cell_response(m)


PHYSICS: dict[type, Callable[[Any, Setting], Response]] = {
    Frequency: lambda m, s: frequency_response(m, s.part, s.unknowns, s.key),
    CellProperty: _cell,
    CellTarget: _cell,
    ConnectedSolid: lambda m, s: connected_response(m, s.part, s.cases, s.unknowns, s.key),
    ContactPeak: lambda m, s: contact_response(m, s.part, s.unknowns, s.key),
    PeakTemperature: _temperature,
    MeanTemperature: _temperature,
    ThermalCompliance: _temperature,
    TrappedSupport: lambda m, s: trapped_response(m, s.part, s.unknowns, s.key),
    Warpage: lambda m, s: warp_response(m, s.part, s.unknowns, s.key),
}
