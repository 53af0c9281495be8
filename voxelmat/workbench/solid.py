"""A part as it is drawn in space: cut, hidden, ghosted, moved, coloured, and picked from."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.part import Part
from voxelmat.model.surface import Faces, exposed_faces
from voxelmat.units import number
from voxelmat.workbench.groups import Group, groups_of, mask_of
from voxelmat.workbench.look import Look
from voxelmat.workbench.picking import Hit, corners_of, first_cell, nearest_quad
from voxelmat.workbench.voxfaces import Quads, cut_mask, quads_from, quads_of

__all__ = ["Solid", "Surface", "face_keys"]

Rgb = NDArray[np.uint8]
Paint = Callable[[NDArray[np.intp]], Rgb]
_AXES = "xyz"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Surface:
    """What is drawn of a part under one look.

    Attributes
    ----------
    quads, rgb
        The opaque faces and their colours.
    ghost, ghost_rgb
        The translucent ones.
    words : tuple of str
        What the picture does not show, to be said in it.
    """

    quads: Quads
    rgb: Rgb
    ghost: Quads
    ghost_rgb: Rgb
    words: tuple[str, ...] = ()


def face_keys(faces: Faces, shape: tuple[int, int, int], step: int = 1) -> NDArray[np.int64]:
    """One number a face of a grid of `shape`, or of a grid `step` times as fine as it."""
    i, j, k = (faces.voxel // step).astype(np.int64).T
    cell = (i * shape[1] + j) * shape[2] + k
    return np.asarray(6 * cell + 2 * faces.axis.astype(np.int64) + (faces.side > 0))


class Solid:
    """A part and all that its pictures in space are made from.

    Parameters
    ----------
    part : Part
    drawn : Part
        The part itself, or every `step`-th voxel of it.
    step : int
    paint : callable
        ``paint(voxel)``: colours of voxels (n, 3) of `drawn`, shape (n, 3).
    shift : ndarray, shape (nx+1, ny+1, nz+1, 3), optional
        How far the nodes of `drawn` are drawn from their places, mm, magnified.
    only : ndarray of bool, optional
        Voxels of `drawn` that are drawn in full; the others are ghosts.
    """

    def __init__(
        self,
        part: Part,
        drawn: Part,
        step: int,
        paint: Paint,
        *,
        shift: NDArray[np.float64] | None = None,
        only: NDArray[np.bool_] | None = None,
    ) -> None:
        self.part, self.drawn, self.step = part, drawn, step
        self.paint, self.shift, self.only = paint, shift, only

    @cached_property
    def groups(self) -> tuple[Group, ...]:
        """What can be hidden by name."""
        return groups_of(self.drawn)

    @cached_property
    def _outer(self) -> Faces:
        return exposed_faces(self.drawn)

    @property
    def box(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Lowest and highest corner of the grid, mm."""
        return np.array(self.part.grid.origin), np.array(self.part.grid.upper)

    def plane_mm(self, look: Look) -> float:
        """Where the cutting plane of a look lies along its axis, mm."""
        a = _AXES.index(look.axis)
        low, high = self.box
        return float(low[a] + look.share * (high[a] - low[a]))

    def is_cut_off(self, place: tuple[float, float, float], look: Look) -> bool:
        """Whether a place, mm, lies on the side of the plane that a look takes away."""
        a = _AXES.index(look.axis)
        beyond = place[a] - self.plane_mm(look)
        slack = 1e-6 * self.part.grid.spacing[a]
        return look.cuts and (beyond > slack if look.above else beyond < -slack)

    # ------------------------------------------------------------------ drawing
    def surface(self, look: Look) -> Surface:
        """The faces that a look leaves, opaque and translucent."""
        drawn = self.drawn
        stays = cut_mask(drawn, _AXES.index(look.axis), look.share, look.above)
        hidden = mask_of(drawn, self.groups, look.hidden)
        if hidden is not None:
            stays &= ~hidden
        pale = mask_of(drawn, self.groups, look.ghosted)
        if self.only is not None:
            pale = ~self.only if pale is None else pale | ~self.only
        firm = stays if pale is None else stays & ~pale
        quads = quads_of(drawn, firm, self.shift, self._outer)
        if pale is None:
            ghost = quads_from(drawn, self._outer.select(np.zeros(0, dtype=np.intp)), self.shift)
        else:
            through = (stays & pale)[tuple(self._outer.voxel.T)]
            ghost = quads_from(drawn, self._outer.select(through), self.shift)
        return Surface(
            quads=quads,
            rgb=self.paint(quads.voxel),
            ghost=ghost,
            ghost_rgb=self.paint(ghost.voxel),
            words=self._words(look),
        )

    def _words(self, look: Look) -> tuple[str, ...]:
        known = [g.name for g in self.groups]
        found = []
        if look.cuts:
            side = ">" if look.above else "<"
            found.append(f"cut away: {look.axis} {side} {number(self.plane_mm(look))} mm")
        for what, names in (("hidden", look.hidden), ("ghost", look.ghosted)):
            there = [n for n in known if n in names]
            if there:
                found.append(f"{what}: {', '.join(there)}")
        return tuple(found)

    # ------------------------------------------------------------------ picking
    def pick(
        self, surface: Surface, axes: NDArray[np.float64], right: float, up: float, look: Look
    ) -> Hit | None:
        """What someone points at.

        Parameters
        ----------
        surface : Surface
            What is drawn.
        axes : ndarray, shape (3, 3)
            Right, up and towards the viewer, as rows.
        right, up : float
            Coordinates of the line of sight along the first two, mm.
        look : Look

        Returns
        -------
        Hit or None
            None where nothing opaque lies there.
        """
        found = nearest_quad(surface.quads, axes, right, up)
        if found is None:
            return None
        n, weights = found
        drawn_at = weights @ surface.quads.points[4 * n : 4 * n + 4].astype(float)
        face = surface.quads.faces.select(np.array([n]))
        place = weights @ corners_of(self.drawn.grid, face)[0]
        voxel = face.voxel[0] * self.step
        if self.step > 1 and self.shift is None:
            finer = self._finer(place, axes[2], look)
            if finer is not None:
                place, voxel = finer
                drawn_at = place
        i, j, k = np.minimum(voxel, np.array(self.part.grid.shape) - 1)
        return Hit(
            place_mm=(float(place[0]), float(place[1]), float(place[2])),
            voxel=(int(i), int(j), int(k)),
            drawn_mm=(float(drawn_at[0]), float(drawn_at[1]), float(drawn_at[2])),
            axis=int(face.axis[0]),
            side=int(face.side[0]),
        )

    def _finer(
        self, place: NDArray[np.float64], towards: NDArray[np.float64], look: Look
    ) -> tuple[NDArray[np.float64], NDArray[np.intp]] | None:
        """The first true voxel on a line of sight near a place on the preview."""
        reach = 2.0 * self.step * max(self.part.grid.spacing)
        return first_cell(
            self.part.grid,
            lambda cells: self._stays(cells, look),
            place + reach * towards,
            -towards,
            2.0 * reach,
        )

    def _stays(self, cells: NDArray[np.intp], look: Look) -> NDArray[np.bool_]:
        """Which voxels (n, 3) of the part itself a look leaves opaque."""
        part, at = self.part, tuple(cells.T)
        coarse = cells // self.step
        a = _AXES.index(look.axis)
        keep = cut_mask(self.drawn, a, look.share, look.above)[tuple(coarse.T)]
        stays: NDArray[np.bool_] = part.solid[at] & keep
        for group in self.groups:
            if group.name in look.hidden | look.ghosted:
                stays &= ~group.labels[part.labels[at]]
                if group.body in part.bodies:
                    stays &= ~part.bodies[group.body][at]
        if self.only is not None:
            stays &= self.only[tuple(coarse.T)]
        return stays

    def moved(self, points: NDArray[np.float64]) -> NDArray[np.float64]:
        """Where places on the part (n, 3), mm, are drawn: moved with the node nearest to each."""
        if self.shift is None:
            return points
        grid = self.drawn.grid
        node = np.rint((points - np.array(grid.origin)) / np.array(grid.spacing)).astype(int)
        node = np.clip(node, 0, np.array(grid.node_shape) - 1)
        return np.asarray(points + self.shift[tuple(node.T)])

    def material_at(self, voxel: tuple[int, int, int]) -> dict[str, Any]:
        """Material in words, blend and body of a voxel of the part."""
        blend = self.part.palette[int(self.part.labels[voxel])]
        bodies = [name for name, mask in self.part.bodies.items() if mask[voxel]]
        return {
            "material": str(blend),
            "blend": dict(blend.fractions),
            "body": bodies[0] if bodies else "",
            "voxel": voxel,
        }
