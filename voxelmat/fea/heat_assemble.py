"""From a part and a heat case to nodal arrays."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.heatcase import Convection, HeatCase, HeatSource
from voxelmat.model.part import Part
from voxelmat.model.region import Region
from voxelmat.model.surface import Faces, exposed_faces
from voxelmat.model.thermal import palette_capacity, palette_conductivity

__all__ = ["Film", "HeatActs", "Inflow", "assemble_heat", "capacities", "conductivities"]

Double = NDArray[np.float64]
Bools = NDArray[np.bool_]


class Film(NamedTuple):
    """One convection: what each node loses a degree, mW/K, to its surroundings, degC."""

    name: str
    node: NDArray[np.intp]
    film: Double
    ambient: float


class Inflow(NamedTuple):
    """One flux or source: heat into each node, mW."""

    name: str
    node: NDArray[np.intp]
    heat: Double


@dataclass(frozen=True, slots=True, kw_only=True)
class HeatActs:
    """A heat case as arrays over the nodes ``[nz+1, ny+1, nx+1]``.

    Attributes
    ----------
    held : ndarray of bool
    given : ndarray of float64
        Temperature at held nodes, degC; 0 elsewhere.
    owner : ndarray of int16
        Which of `fixed` holds a node, -1 for none.
    fixed : tuple of str
    films : tuple of Film
    inflows : tuple of Inflow
    cautions : tuple of str
    """

    held: Bools
    given: Double
    owner: NDArray[np.int16]
    fixed: tuple[str, ...]
    films: tuple[Film, ...]
    inflows: tuple[Inflow, ...]
    cautions: tuple[str, ...] = ()

    def _sum(self, parts: list[tuple[NDArray[np.intp], Double]]) -> Double:
        out = np.zeros(self.held.size)
        for node, value in parts:
            np.add.at(out, node, value)
        return out.reshape(self.held.shape)

    def film(self) -> Double | None:
        """Sum of all films, mW/K."""
        return self._sum([(f.node, f.film) for f in self.films]) if self.films else None

    def heat(self, datum: float) -> Double:
        """Heat into each node when the part is at `datum` degC all over, mW."""
        films = [(f.node, f.film * (f.ambient - datum)) for f in self.films]
        return self._sum([*((q.node, q.heat) for q in self.inflows), *films])

    @property
    def levels(self) -> list[float]:
        """Temperatures that are given: held ones and those of the surroundings, degC."""
        return [*np.unique(self.given[self.held]).tolist(), *(f.ambient for f in self.films)]

    @property
    def datum(self) -> float:
        """A temperature to count from, degC, so that rounding is relative to differences alone.

        The one that most held nodes are at; where none is held, the mean over all films that the
        heat balance demands of a steady state.
        """
        if self.held.any():
            values, count = np.unique(self.given[self.held], return_counts=True)
            return float(values[np.argmax(count)])
        total = sum(float(f.film.sum()) for f in self.films)
        if not total > 0:
            return 0.0
        drawn = sum(float(f.film.sum()) * f.ambient for f in self.films)
        return (drawn + sum(float(q.heat.sum()) for q in self.inflows)) / total

    def within(self, touched: Bools) -> HeatActs:
        """The same without what acts on other nodes."""
        keep = touched.ravel()
        return replace(
            self,
            held=self.held & touched,
            films=tuple(
                f._replace(node=f.node[keep[f.node]], film=f.film[keep[f.node]]) for f in self.films
            ),
            inflows=tuple(
                q._replace(node=q.node[keep[q.node]], heat=q.heat[keep[q.node]])
                for q in self.inflows
            ),
        )


def _over_voxels(part: Part, palette: Double) -> Double:
    values = palette[np.ascontiguousarray(part.labels.T)] * part.fill.T
    return np.ascontiguousarray(values, dtype=np.float64)


def conductivities(part: Part) -> Double:
    """Conductivity of each voxel ``[nz, ny, nx]``, mW/(mm K), times its filled fraction."""
    return _over_voxels(part, palette_conductivity(part))


def capacities(part: Part) -> Double:
    """Heat capacity a volume of voxel ``[nz, ny, nx]``, mJ/(mm^3 K), by its filled fraction."""
    return _over_voxels(part, palette_capacity(part))


def _flat(part: Part, node: NDArray[np.intp]) -> NDArray[np.intp]:
    nx, ny, _ = part.grid.node_shape
    return np.asarray((node[:, 2] * ny + node[:, 1]) * nx + node[:, 0])


def _to_faces(part: Part, faces: Faces, value: Double) -> tuple[NDArray[np.intp], Double]:
    """A quarter of the value of each face at each of its corners."""
    rows = np.arange(len(faces))
    across = np.array([[1, 2], [0, 2], [0, 1]])[faces.axis]
    found = []
    for a in range(4):
        node = faces.voxel.copy()
        node[rows, faces.axis] += faces.side > 0
        node[rows, across[:, 0]] += a & 1
        node[rows, across[:, 1]] += a >> 1
        found.append(_flat(part, node))
    return np.concatenate(found), np.tile(value / 4, 4)


def _faces(part: Part, region: Region | None, name: str) -> Faces:
    faces = exposed_faces(part) if region is None else region.faces(part)
    if not len(faces) or not faces.true_area.sum() > 0:
        where = "the part" if region is None else f"region '{region.name}'"
        raise InputError(
            f"{name[0].upper()}{name[1:]}: {where} has no exposed surface, so no heat would pass. "
            f"Move or enlarge the region."
        )
    return faces


def _source(part: Part, source: HeatSource, name: str) -> Inflow:
    voxels = part.solid if source.region is None else source.region.voxels(part)
    at = np.argwhere(voxels)
    if not len(at):
        raise InputError(
            f"{name[0].upper()}{name[1:]}: there is no material, so the heat would be lost. Move "
            f"or enlarge the region."
        )
    volume = part.fill[tuple(at.T)].astype(np.float64) * part.grid.voxel_volume
    if source.total_mW is not None:
        heat = source.total_mW * volume / volume.sum()
    else:
        heat = (source.density_mW_per_mm3 or 0.0) * volume
    corners = np.array([[a & 1, a >> 1 & 1, a >> 2] for a in range(8)], dtype=np.intp)
    nodes = [_flat(part, at + corner) for corner in corners]
    return Inflow(name, np.concatenate(nodes), np.tile(heat / 8, 8))


def _fixed(part: Part, case: HeatCase) -> tuple[Bools, Double, NDArray[np.int16], tuple[str, ...]]:
    shape = part.grid.node_shape[::-1]
    held, given = np.zeros(shape, dtype=bool), np.zeros(shape)
    owner = np.full(shape, -1, dtype=np.int16)
    names: list[str] = []
    for number, fixed in enumerate(case.fixed):
        name = f"fixed temperature {number + 1} on '{fixed.region.name}'"
        names.append(name)
        nodes = fixed.region.nodes(part).T
        if not nodes.any():
            raise InputError(
                f"Heat case '{case.name}', {name}: the region holds no node of the part, so it "
                f"would hold nothing. Move or enlarge the region."
            )
        clash = nodes & held & (given != fixed.temperature_degC)
        if clash.any():
            raise InputError(
                f"Heat case '{case.name}': {name} gives {fixed.temperature_degC:g} degC at "
                f"{int(clash.sum())} nodes that {names[int(owner[clash][0])]} holds at "
                f"{given[clash][0]:g} degC. Keep the regions apart, or give one temperature."
            )
        new = nodes & ~held
        held |= nodes
        given[new] = fixed.temperature_degC
        owner[new] = number
    return held, given, owner, tuple(names)


def _place(region: Region | None) -> str:
    return "all surface" if region is None else f"'{region.name}'"


def _films(part: Part, convection: tuple[Convection, ...]) -> tuple[list[Film], list[str]]:
    films, faces_of = [], []
    for number, one in enumerate(convection, start=1):
        name = f"convection {number} on {_place(one.region)}"
        faces = _faces(part, one.region, name)
        films.append(
            Film(name, *_to_faces(part, faces, one.film * faces.true_area), one.ambient_degC)
        )
        faces_of.append(np.column_stack([faces.voxel, faces.axis, faces.side]))
    cautions = []
    if len(films) > 1:
        count = np.unique(np.concatenate(faces_of), axis=0, return_counts=True)[1]
        if np.any(count > 1):
            cautions.append(
                f"{int((count > 1).sum())} surface faces lie in more than one convection region; "
                f"their films were added up."
            )
    return films, cautions


def assemble_heat(part: Part, case: HeatCase) -> HeatActs:
    """Turn what acts on a part into nodal arrays.

    Raises
    ------
    InputError
        A region without material or surface, two fixed temperatures that contradict each other.
    """
    held, given, owner, names = _fixed(part, case)
    films, cautions = _films(part, case.convection)
    inflows = []
    for number, flux in enumerate(case.flux, start=1):
        name = f"heat flux {number} on {_place(flux.region)}"
        faces = _faces(part, flux.region, name)
        inflows.append(
            Inflow(name, *_to_faces(part, faces, flux.flux_mW_per_mm2 * faces.true_area))
        )
    for number, source in enumerate(case.sources, start=1):
        where = "the whole part" if source.region is None else f"'{source.region.name}'"
        inflows.append(_source(part, source, f"heat source {number} in {where}"))
    return HeatActs(
        held=held,
        given=given,
        owner=owner,
        fixed=names,
        films=tuple(films),
        inflows=tuple(inflows),
        cautions=tuple(cautions),
    )
