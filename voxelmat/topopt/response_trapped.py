"""Whether empty space is shut in, where support could not be washed out, by a virtual temperature.

The share that makes heat is 1 - rho, and the shape's open surface is cold: see
`voxelmat.topopt.virtual_heat`. The response is over the norm of the shape when it is all empty, so
that it has no unit and changes little with the size of the shape or the grid.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.ndimage
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.loads import corners_of_faces
from voxelmat.model.measure_physics import TrappedSupport
from voxelmat.model.part import Part
from voxelmat.model.surface import Faces, exposed_faces
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.unknowns import Unknowns
from voxelmat.topopt.virtual_heat import VirtualHeat, filled

__all__ = ["TrappedResponse", "trapped_response"]

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TrappedResponse:
    """p-norm of the virtual temperature of empty voxels, over that of the empty shape.

    Attributes
    ----------
    heat : VirtualHeat
        Cold at nodes of the open surface.
    designed : ndarray of bool, shape (nz, ny, nx)
        The others count as solid.
    empty_norm : float
        p-norm of the empty shape, mm^2.
    """

    heat: VirtualHeat
    designed: Bools
    empty_norm: float
    name: str = "trapped support"
    unit: str = ""

    def value(self, physics: Physics) -> tuple[float, dict[str, Array]]:
        """Value, and derivative by ``rho``."""
        empty = np.where(self.designed, 1.0 - physics.fields.rho, 0.0)
        norm, by_empty = self.heat.norm(empty, physics)
        by_rho = np.where(self.designed, -by_empty, 0.0)
        return norm / self.empty_norm, {"rho": by_rho / self.empty_norm}

    def report(self, value: float) -> float:
        """As it is."""
        return value


def _reaches_outside(part: Part, faces: Faces) -> Bools:
    """Faces that do not look into a cavity of the shape itself."""
    pieces = scipy.ndimage.label(np.pad(~part.solid, 1, constant_values=True))[0]
    beyond = faces.voxel + 1
    beyond[np.arange(len(faces)), faces.axis] += faces.side
    return np.asarray(pieces[tuple(beyond.T)] == pieces[0, 0, 0])


def _open_nodes(part: Part, measure: TrappedSupport) -> Bools:
    """Corners of outer faces that are not closed, [k, j, i]."""
    faces = exposed_faces(part)
    faces = faces.select(_reaches_outside(part, faces))
    if measure.closed is not None:
        shut = _keys(measure.closed.faces(part))
        faces = faces.select(~np.isin(_keys(faces), shut))
        if not len(faces):
            raise InputError(
                f"'{measure.closed.name}' closes the whole surface, so support could get out of "
                "no shape at all; leave some of it open."
            )
    held = np.zeros(part.grid.node_shape[::-1], dtype=bool)
    held.ravel()[corners_of_faces(part, faces).ravel()] = True
    return held


def _keys(faces: Faces) -> NDArray[np.int64]:
    """A number for each face of the grid."""
    i, j, k = faces.voxel.T.astype(np.int64)
    side = (faces.side > 0).astype(np.int64)
    return np.asarray(((((k << 20) + j) << 20) + i) * 6 + 2 * faces.axis.astype(np.int64) + side)


def trapped_response(
    measure: TrappedSupport, part: Part, unknowns: Unknowns, key: str = ""
) -> TrappedResponse:
    """The response that a measure stands for.

    Raises
    ------
    InputError
        A design without empty voxels, a surface that is all closed.
    """
    if unknowns.void is None:
        raise InputError(
            "Trapped support is asked about, but the design allows no empty voxels; set void to "
            "true or drop it."
        )
    designed = unknowns.choice.domain
    heat = VirtualHeat(
        fill=filled(part),
        cold=_open_nodes(part, measure),
        exponent=measure.exponent,
        key=f"trapped {key}",
    )
    norm = heat.reference(np.where(designed, 1.0, 0.0), part.grid.spacing)
    if norm == 0.0:
        raise InputError(
            "Every designed voxel lies at the open surface, so nothing can be trapped; drop the "
            "measure of trapped support or use a finer grid."
        )
    return TrappedResponse(heat=heat, designed=designed, empty_norm=norm)
