"""Whether empty space is shut in, where support could not be washed out, by a virtual temperature.

-div(k grad T) = 1 - rho with k = 1e-3 + (1 - 1e-3) (1 - rho)^3 and T = 0 on the shape's open
surface: empty voxels make heat and conduct it, solid ones insulate. An empty place with a way out
stays cool, one without gets hot. The response is the p-norm of (1 - rho) T over the voxels, over
that of the shape when it is all empty, so that it has no unit and changes little with the size of
the shape or the grid. The idea of a virtual temperature: S. Liu, Q. Li, W. Chen, L. Tong &
G. Cheng, Front. Mech. Eng. 10 (2015) 126 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.ndimage
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.heat_system import HeatSystem
from voxelmat.fea.loads import corners_of_faces
from voxelmat.fea.scalar_element import Spacing, modal_factors
from voxelmat.fea.scalar_forms import scalar_forms
from voxelmat.model.heatresult import corner_mean
from voxelmat.model.measure_physics import TrappedSupport
from voxelmat.model.part import Part
from voxelmat.model.surface import Faces, exposed_faces
from voxelmat.monitor import SILENT, Monitor
from voxelmat.topopt.physics import Physics
from voxelmat.topopt.smooth import smooth_maximum
from voxelmat.topopt.unknowns import Unknowns

__all__ = ["TrappedResponse", "trapped_response"]

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]

# What solid voxels conduct, and how fast conduction rises with emptiness.
_SOLID, _POWER = 1e-3, 3.0
# Closeness of the one solve of the empty shape.
_CLOSE = 1e-10


def _to_corners(voxels: Array) -> Array:
    """Transpose of the mean over corners."""
    out = np.zeros(tuple(n + 1 for n in voxels.shape))
    nz, ny, nx = voxels.shape
    for a in range(8):
        z, y, x = a >> 2, a >> 1 & 1, a & 1
        out[z : z + nz, y : y + ny, x : x + nx] += voxels / 8.0
    return out


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TrappedResponse:
    """p-norm of the virtual temperature of empty voxels, over that of the empty shape.

    Attributes
    ----------
    fill : ndarray of float64, shape (nz, ny, nx)
        Filled fraction of the shape's voxels, designed or not.
    designed : ndarray of bool
        The others count as solid.
    held : ndarray of bool, shape (nz+1, ny+1, nx+1)
        Nodes of the open surface.
    empty_norm : float
        p-norm of the empty shape, mm^2.
    exponent : float
    key : str
        Tells it from other responses.
    """

    fill: Array
    designed: Bools
    held: Bools
    empty_norm: float
    exponent: float
    key: str = ""
    name: str = "trapped support"
    unit: str = ""

    def value(self, physics: Physics) -> tuple[float, dict[str, Array]]:
        """Value, and derivative by ``rho``."""
        empty = np.where(self.designed, 1.0 - physics.fields.rho, 0.0)
        system, T = self._warmed(empty, physics)
        mean = corner_mean(T)
        norm, slope = smooth_maximum(empty * np.maximum(mean, 0.0), self.exponent)
        key = f"trapped adjoint {self.key}"
        a, run = system.solve(
            _to_corners(slope * empty), x0=physics.recall(key), tol=physics.tolerance
        )
        physics.cg_iterations += run.iterations
        physics.remember(key, a)
        volume = self.fill * float(np.prod(physics.spacing))
        by_k = -scalar_forms(T, a, modal_factors(physics.spacing, "lumped")[0])
        k_slope = self.fill * (1.0 - _SOLID) * _POWER * empty ** (_POWER - 1.0)
        by_empty = slope * mean + volume * corner_mean(a) + k_slope * by_k
        by_rho = np.where(self.designed, -by_empty, 0.0)
        return norm / self.empty_norm, {"rho": by_rho / self.empty_norm}

    def report(self, value: float) -> float:
        """As it is."""
        return value

    def _warmed(self, empty: Array, physics: Physics) -> tuple[HeatSystem, Array]:
        system = _system(self.fill, empty, self.held, physics.spacing, physics.monitor)
        T, run = system.solve(
            _heat(self.fill, empty, physics.spacing),
            x0=physics.recall(f"trapped {self.key}"),
            tol=physics.tolerance,
        )
        physics.cg_iterations += run.iterations
        physics.remember(f"trapped {self.key}", T)
        return system, T


def _system(
    fill: Array, empty: Array, held: Bools, spacing: Spacing, monitor: Monitor
) -> HeatSystem:
    k = fill * (_SOLID + (1.0 - _SOLID) * empty**_POWER)
    return HeatSystem(k, spacing, held, monitor=monitor)


def _heat(fill: Array, empty: Array, spacing: Spacing) -> Array:
    return _to_corners(float(np.prod(spacing)) * fill * empty)


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
    fill = np.ascontiguousarray(np.where(part.solid.T, part.fill.T, 0.0), dtype=np.float64)
    held = _open_nodes(part, measure)
    spacing = part.grid.spacing
    empty = np.where(unknowns.choice.domain, 1.0, 0.0)
    system = _system(fill, empty, held, spacing, SILENT)
    T, _ = system.solve(_heat(fill, empty, spacing), tol=_CLOSE)
    norm = smooth_maximum(empty * np.maximum(corner_mean(T), 0.0), measure.exponent)[0]
    if norm == 0.0:
        raise InputError(
            "Every designed voxel lies at the open surface, so nothing can be trapped; drop the "
            "measure of trapped support or use a finer grid."
        )
    return TrappedResponse(
        fill=fill,
        designed=unknowns.choice.domain,
        held=held,
        empty_norm=norm,
        exponent=measure.exponent,
        key=key,
    )
