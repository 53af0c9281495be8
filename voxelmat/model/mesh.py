"""A triangle mesh in millimetres: corners, faces, a name and where it came from."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, field
from typing import TypeVar

import numpy as np
from numpy.typing import ArrayLike, NDArray

from voxelmat.errors import InputError

__all__ = ["TriangleMesh"]

_Number = TypeVar("_Number", np.float64, np.int32)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TriangleMesh:
    """Triangles that bound a body, corners anticlockwise seen from outside.

    Attributes
    ----------
    vertices : (n, 3) float64
        Corner positions, mm. Read-only.
    faces : (m, 3) int32
        Corner numbers of each triangle. Read-only.
    name : str
        What the user calls the body.
    source : str
        Name (never the path) of the file that it was read from, or empty.
    source_digest : str
        SHA-256 of that file, or empty.
    cautions : tuple of str
        What the reader found odd, in words.
    digest : str
        SHA-256 of vertices and faces; filled in at construction.

    Raises
    ------
    InputError
        If an array has the wrong shape, a vertex is not finite, or a face
        points at a vertex that does not exist.
    """

    vertices: NDArray[np.float64]
    faces: NDArray[np.int32]
    name: str = "body"
    source: str = ""
    source_digest: str = ""
    cautions: tuple[str, ...] = ()
    digest: str = field(init=False, default="")

    def __post_init__(self) -> None:
        vertices = _table(np.array(self.vertices, dtype=np.float64, order="C"), "vertices")
        faces = _table(np.array(self.faces, dtype=np.int32, order="C"), "faces")
        broken = np.flatnonzero(~np.isfinite(vertices).all(axis=1))
        if broken.size:
            raise InputError(
                f"Mesh '{self.name}': {broken.size} of {len(vertices)} vertices are not finite "
                f"numbers, the first is number {broken[0]}: {vertices[broken[0]].tolist()}. "
                "Export the mesh again."
            )
        if faces.size and (faces.min() < 0 or faces.max() >= len(vertices)):
            raise InputError(
                f"Mesh '{self.name}': a face points at vertex "
                f"{int(faces.min() if faces.min() < 0 else faces.max())}, but there are only "
                f"{len(vertices)}. Export the mesh again."
            )
        vertices.setflags(write=False)
        faces.setflags(write=False)
        content = hashlib.sha256(vertices.tobytes())
        content.update(faces.tobytes())
        object.__setattr__(self, "vertices", vertices)
        object.__setattr__(self, "faces", faces)
        object.__setattr__(self, "cautions", tuple(self.cautions))
        object.__setattr__(self, "digest", content.hexdigest())

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, TriangleMesh):
            return NotImplemented
        return self.name == other.name and self.digest == other.digest

    def __hash__(self) -> int:
        return hash((self.name, self.digest))

    def __repr__(self) -> str:
        size = " x ".join(f"{edge:.4g}" for edge in self.size) if len(self.vertices) else "empty"
        return (
            f"TriangleMesh('{self.name}', {len(self.vertices)} vertices, "
            f"{len(self.faces)} faces, {size} mm)"
        )

    @property
    def bounds(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Low and high corner of the bounding box, mm."""
        if not len(self.vertices):
            raise InputError(f"Mesh '{self.name}' is empty: it has no bounding box.")
        return self.vertices.min(axis=0), self.vertices.max(axis=0)

    @property
    def size(self) -> NDArray[np.float64]:
        """Edges of the bounding box along x, y, z, mm."""
        low, high = self.bounds
        size: NDArray[np.float64] = high - low
        return size

    @property
    def triangles(self) -> NDArray[np.float64]:
        """Corner positions of each face, (m, 3, 3), mm."""
        corners: NDArray[np.float64] = self.vertices[self.faces]
        return corners

    @property
    def area(self) -> float:
        """Surface area, mm^2."""
        return float(np.linalg.norm(self._cross(), axis=1).sum() / 2)

    @property
    def volume(self) -> float:
        """Enclosed volume by the divergence theorem, mm^3; negative when inside out."""
        if not len(self.faces):
            return 0.0
        # Measured from the middle, so that a part far from the origin loses no digits.
        middle = self.vertices.mean(axis=0)
        return float(np.einsum("ij,ij->", self.triangles[:, 0] - middle, self._cross()) / 6)

    def _cross(self) -> NDArray[np.float64]:
        a, b, c = self.triangles.transpose(1, 0, 2)
        return np.cross(b - a, c - a)

    def transformed(self, matrix: ArrayLike) -> TriangleMesh:
        """The mesh under a 4 x 4 affine matrix; a mirroring matrix keeps the outside outside."""
        m = np.asarray(matrix, dtype=np.float64)
        if m.shape != (4, 4) or not np.isfinite(m).all():
            raise InputError(f"A transform is a finite 4 x 4 matrix; got shape {m.shape}.")
        mirrors = np.linalg.det(m[:3, :3]) < 0
        return TriangleMesh(
            vertices=self.vertices @ m[:3, :3].T + m[:3, 3],
            faces=self.faces[:, ::-1] if mirrors else self.faces,
            name=self.name,
            source=self.source,
            source_digest=self.source_digest,
            cautions=self.cautions,
        )


def _table(array: NDArray[_Number], what: str) -> NDArray[_Number]:
    """Check that an array has three columns."""
    if array.size == 0:
        return array.reshape(0, 3)
    if array.ndim != 2 or array.shape[1] != 3:
        raise InputError(f"Mesh {what} form a table of three columns; got shape {array.shape}.")
    return array
