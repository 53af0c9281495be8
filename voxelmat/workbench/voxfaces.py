"""The outside of a part as quadrilaterals on its nodes, for drawing, cut open or deformed."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.grid import VoxelGrid
from voxelmat.model.part import Part
from voxelmat.model.surface import Faces
from voxelmat.workflow.depth import faces_of_cut

__all__ = ["LARGEST", "Quads", "coarser", "corner_nodes", "cut_mask", "quads_from", "quads_of"]

#: Voxels with material above which a coarser preview is drawn.
LARGEST = 4_000_000


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Quads:
    """Quadrilaterals, anticlockwise seen from outside.

    Attributes
    ----------
    points : ndarray of float32, shape (4 n, 3)
        Corners, mm; each quadrilateral has its own four.
    normals : ndarray of float32, shape (n, 3)
        Of the true surface.
    faces : Faces
        The voxel faces that they come from, not moved.
    spacing : tuple of float
        Voxel edges, mm.
    """

    points: NDArray[np.float32]
    normals: NDArray[np.float32]
    faces: Faces
    spacing: tuple[float, float, float]

    def __len__(self) -> int:
        return len(self.normals)

    @property
    def voxel(self) -> NDArray[np.intp]:
        """The voxel behind each, shape (n, 3)."""
        return self.faces.voxel


def coarser(part: Part, largest: int = LARGEST) -> tuple[Part, int]:
    """The part, or every n-th voxel of it where it has more than `largest` voxels; and n."""
    step = 1
    while np.prod([-(-n // step) for n in part.grid.shape]) > largest:
        step += 1
    if step == 1:
        return part, 1
    nx, ny, nz = (-(-n // step) for n in part.grid.shape)
    hx, hy, hz = (h * step for h in part.grid.spacing)
    grid = VoxelGrid(shape=(nx, ny, nz), spacing=(hx, hy, hz), origin=part.grid.origin)
    pick = (slice(None, None, step),) * 3
    occupancy = None if part.occupancy is None else part.occupancy[pick]
    small = part.replace(
        grid=grid,
        labels=part.labels[pick],
        distance=None,
        occupancy=occupancy,
        bodies={name: mask[pick] for name, mask in part.bodies.items()},
    )
    return small, step


def cut_mask(part: Part, axis: int, share: float, above: bool = False) -> NDArray[np.bool_]:
    """Voxels that stay when one side of a plane goes; one layer always stays.

    Parameters
    ----------
    part : Part
    axis : int
        Across which the plane lies.
    share : float
        Where, 0 to 1 of the box along `axis`.
    above : bool
        What lies above it goes, else what lies below it.
    """
    keep = np.zeros(part.grid.shape, dtype=bool)
    n = part.grid.shape[axis]
    where: list[slice] = [slice(None)] * 3
    # A hair more, so that a share made from a number of voxels is that number again.
    first = int(share * n + 1e-6)
    where[axis] = slice(0, max(first, 1)) if above else slice(min(first, n - 1), None)
    keep[tuple(where)] = True
    return keep


def corner_nodes(faces: Faces) -> NDArray[np.intp]:
    """Node (i, j, k) of each corner, shape (n, 4, 3), anticlockwise seen from outside."""
    nodes = np.repeat(faces.voxel[:, None, :], 4, axis=1)
    rows = np.arange(len(faces))
    nodes[rows[:, None], np.arange(4), faces.axis[:, None]] += (faces.side > 0)[:, None]
    first, second = (faces.axis + 1) % 3, (faces.axis + 2) % 3
    ring = np.array([[0, 0], [1, 0], [1, 1], [0, 1]])
    ring = np.where((faces.side > 0)[:, None, None], ring, ring[::-1])
    for corner in range(4):
        nodes[rows, corner, first] += ring[:, corner, 0]
        nodes[rows, corner, second] += ring[:, corner, 1]
    return nodes


def quads_of(
    part: Part,
    shown: NDArray[np.bool_] | None = None,
    move: NDArray[np.float64] | None = None,
    outer: Faces | None = None,
) -> Quads:
    """The outside of the voxels in `shown`; cut faces are closed.

    Parameters
    ----------
    part : Part
    shown : ndarray of bool, optional
        ``[i, j, k]``; everything where left out.
    move : ndarray, shape (nx+1, ny+1, nz+1, 3), optional
        Displacement of the nodes to add, mm, already magnified.
    outer : Faces, optional
        The part's exposed faces, where they are known already.
    """
    faces, _ = faces_of_cut(part, part.solid if shown is None else shown, outer)
    return quads_from(part, faces, move)


def quads_from(part: Part, faces: Faces, move: NDArray[np.float64] | None = None) -> Quads:
    """Quadrilaterals of some faces of a part, moved with its nodes."""
    nodes = corner_nodes(faces).reshape(-1, 3)
    axes = part.grid.nodes()
    points = np.column_stack([axes[a][nodes[:, a]] for a in range(3)])
    if move is not None:
        points += move[tuple(nodes.T)]
    return Quads(
        points=points.astype(np.float32),
        normals=faces.normal.astype(np.float32),
        faces=faces,
        spacing=part.grid.spacing,
    )
