"""Where the centre of mass lies, and amounts as responses: volume, mass, cost, a resin's volume."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.mass import densities
from voxelmat.model.measure_amount import (
    CentreOfMass,
    Cost,
    InterfaceArea,
    Mass,
    Perimeter,
    ResinVolume,
    Volume,
)
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.response_area import AreaResponse, NodeGradient
from voxelmat.topopt.responses import Amount, Response, Slopes
from voxelmat.topopt.setting import Setting

__all__ = ["AMOUNTS", "CentreResponse"]

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class CentreResponse:
    """Coordinate of the centre of mass along one axis, mm.

    Attributes
    ----------
    name : str
    weight : ndarray, (nz, ny, nx)
        Volume that the shape allows each designed voxel, mm^3.
    place : ndarray, broadcastable to (nz, ny, nx)
        Coordinate of the voxels, mm.
    density : ndarray, (K,)
        tonne/mm^3.
    kept_mass, kept_moment : float
        Of voxels that are not designed: tonne, and tonne mm.
    """

    name: str
    weight: Array
    place: Array
    density: Array
    kept_mass: float = 0.0
    kept_moment: float = 0.0
    unit: str = "mm"

    def value(self, physics: Physics) -> tuple[float, Slopes]:
        """Moment over mass; needs no solve."""
        f = physics.fields
        mixed = np.tensordot(self.density, f.w, 1)
        each = self.weight * mixed * f.rho
        mass = float(each.sum()) + self.kept_mass
        centre = (float((each * self.place).sum()) + self.kept_moment) / mass
        arm = (self.place - centre) / mass
        by_w = np.multiply.outer(self.density, self.weight * f.rho * arm)
        return centre, {"rho": self.weight * mixed * arm, "w": by_w}

    def report(self, value: float) -> float:
        """As it is."""
        return value


def _weight(s: Setting, region: NDArray[np.bool_] | None, what: str) -> Array:
    """Volume that the shape allows each designed voxel of a region, mm^3."""
    inside = s.region(region, what)
    return np.where(inside, s.unknowns.choice.fill * s.part.grid.voxel_volume, 0.0)


def _volume(m: Volume | ResinVolume, s: Setting) -> Response:
    names = s.unknowns.palette.names
    if isinstance(m, ResinVolume):
        if m.resin not in names:
            raise InputError(
                f"The volume of '{m.resin}' is asked for, which is not among the resins of the "
                f"design ({', '.join(names)})."
            )
        name, factor = f"volume of {m.resin}", np.array([float(n == m.resin) for n in names])
    else:
        name, factor = "solid volume", np.ones(len(names))
    weight = _weight(s, m.region, name)
    unit = "of the shape's volume" if m.region is None else "of the region's volume"
    return Amount(name=name, unit=unit, weight=weight / float(weight.sum()), factor=factor)


def _mass(m: Mass, s: Setting) -> Response:
    weight = _weight(s, m.region, "mass")
    kept = float(_kept_masses(s, m.region).sum()) if m.with_kept else 0.0
    return Amount(
        name="mass", unit="tonne", weight=weight, factor=s.unknowns.palette.density, always=kept
    )


def _kept_masses(s: Setting, region: NDArray[np.bool_] | None) -> Array:
    """Of each voxel that is not designed, tonne."""
    each = densities(s.part) * s.part.grid.voxel_volume
    counts = ~s.unknowns.choice.domain
    if region is not None:
        counts &= s.voxels(region, "mass")
    return np.where(counts, each, 0.0)


def _cost(m: Cost, s: Setting) -> Response:
    p = s.unknowns.palette
    per_kg = [s.part.resin(name).cost_per_kg for name in p.names]
    missing = [name for name, cost in zip(p.names, per_kg, strict=True) if cost is None]
    if missing:
        raise InputError(
            f"The cost needs the cost per kg of {', '.join(missing)}, which the records do not "
            "hold; add it."
        )
    factor = 1e3 * p.density * np.array(per_kg, dtype=np.float64)  # 1 tonne is 1000 kg
    return Amount(name="cost", unit="", weight=_weight(s, m.region, "cost"), factor=factor)


def _centre(m: CentreOfMass, s: Setting) -> Response:
    axis = "xyz".index(m.axis)
    shape = [1, 1, 1]
    shape[2 - axis] = -1
    place = s.part.grid.centres()[axis].reshape(shape)
    kept = _kept_masses(s, m.region)
    return CentreResponse(
        name=f"centre of mass along {m.axis}",
        weight=_weight(s, m.region, "centre of mass"),
        place=place,
        density=s.unknowns.palette.density,
        kept_mass=float(kept.sum()),
        kept_moment=float((kept * place).sum()),
    )


def _area(m: Perimeter | InterfaceArea, s: Setting) -> Response:
    perimeter = isinstance(m, Perimeter)
    name = "area of the design's own surface" if perimeter else "area between resins"
    if not perimeter and s.unknowns.resins < 2:
        raise InputError("A design of one resin has no interface between resins; drop the measure.")
    if perimeter and s.unknowns.void is None:
        raise InputError("Without empty voxels a design has no surface of its own; set void.")
    spacing = s.part.grid.spacing
    return AreaResponse(
        kind="perimeter" if perimeter else "interface",
        gradient=NodeGradient(s.region(m.region, name), spacing),
        step=1.0 / max(spacing),
        name=name,
    )


AMOUNTS: dict[type, Callable[[Any, Setting], Response]] = {
    Volume: _volume,
    ResinVolume: _volume,
    Mass: _mass,
    Cost: _cost,
    CentreOfMass: _centre,
    Perimeter: _area,
    InterfaceArea: _area,
}
