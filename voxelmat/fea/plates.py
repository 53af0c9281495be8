"""Regions that move as one body: the space of such motions, and how forces act in it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.part import Part
from voxelmat.model.plate import Plate, PlateMotion

__all__ = ["BoundPlate", "PlateSet", "bind_plates", "point_motions"]

Double = NDArray[np.float64]
Bools = NDArray[np.bool_]
Vector = tuple[float, float, float]

# Nodes lie on one line where the rotation about it moves them by less than this share.
_LINE = 1e-6
# Plate and support say the same where they differ by less, mm or unit motions.
_SAME = 1e-12


def _vector(v: Double) -> Vector:
    return float(v[0]), float(v[1]), float(v[2])


def point_motions(r: Double) -> Double:
    """Displacement of points r (n, 3) by unit translations and rotations, (3, n, 6)."""
    out = np.zeros((3, len(r), 6))
    for d in range(3):
        e, f = (d + 1) % 3, (d + 2) % 3
        out[d, :, d] = 1.0
        out[e, :, 3 + d], out[f, :, 3 + d] = -r[:, f], r[:, e]
    return out


@dataclass(frozen=True, slots=True, kw_only=True)
class BoundPlate:
    """A plate on the nodes of a part.

    Attributes
    ----------
    plate : Plate
    point : tuple of float
        Reference point, mm.
    node : ndarray of intp, shape (n,)
        Flat nodes.
    rigid : ndarray, shape (3, n, 6)
        Displacement of each node by each unit motion about the reference point.
    free : ndarray, shape (3, n, m)
        Orthonormal basis of the motions that are not given.
    """

    plate: Plate
    point: Vector
    node: NDArray[np.intp]
    rigid: Double
    free: Double

    @property
    def given(self) -> Double:
        """Displacement of the nodes by the given motion, (3, n), mm."""
        motion = np.array([0.0 if v is None else v for v in self.plate.given])
        return np.asarray(self.rigid @ motion)

    @property
    def name(self) -> str:
        """What it goes by in results."""
        return f"plate '{self.plate.name}' on '{self.plate.region.name}'"

    @property
    def force(self) -> Double:
        """The plate's force and moment as nodal forces, (3, n), N."""
        return self.spread(self.plate.force, self.plate.moment)

    def spread(self, force: Vector, moment: Vector) -> Double:
        """The smallest nodal forces that have a force and a moment, (3, n), N."""
        acts = np.array([*force, *moment])
        gram = np.einsum("dna,dnb->ab", self.rigid, self.rigid)
        # Scaled to a unit diagonal: moments count in N mm beside forces in N.
        s = 1.0 / np.sqrt(np.diag(gram))
        return np.asarray(self.rigid @ (s * np.linalg.solve(gram * np.outer(s, s), s * acts)))

    def motion(self, u: Double, push: Double) -> PlateMotion:
        """Read off how it has moved, and what nodal forces `push` (3, n) amount to."""
        moved = u.reshape(3, -1)[:, self.node]
        gram = np.einsum("dna,dnb->ab", self.rigid, self.rigid)
        s = 1.0 / np.sqrt(np.diag(gram))
        right = s * np.einsum("dna,dn->a", self.rigid, moved)
        q = s * np.linalg.solve(gram * np.outer(s, s), right)
        total = np.einsum("dna,dn->a", self.rigid, push)
        return PlateMotion(
            point=self.point,
            translation=_vector(q[:3]),
            rotation=_vector(q[3:]),
            force=_vector(total[:3]),
            moment=_vector(total[3:]),
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class PlateSet:
    """All plates of a load case.

    Attributes
    ----------
    plates : tuple of BoundPlate
    mask : ndarray of bool, shape (nz+1, ny+1, nx+1)
        Their nodes.
    """

    plates: tuple[BoundPlate, ...]
    mask: Bools

    def project(self, u: Double) -> None:
        """Replace, in place, the motion of each plate's nodes by its nearest free rigid one.

        Sums are plain ones in a fixed order, so that the bits do not depend on threads.
        """
        flat = u.reshape(3, -1)
        for p in self.plates:
            amount = np.einsum("dnm,dn->m", p.free, flat[:, p.node])
            flat[:, p.node] = np.einsum("dnm,m->dn", p.free, amount)

    def given(self) -> Double:
        """Given motions as a node field, 0 elsewhere, mm."""
        out = np.zeros((3, *self.mask.shape))
        for p in self.plates:
            out.reshape(3, -1)[:, p.node] = p.given
        return out

    def free_motions(self) -> list[tuple[BoundPlate, Double]]:
        """Every free motion of every plate: its plate and nodal displacement (3, n)."""
        return [(p, p.free[:, :, m]) for p in self.plates for m in range(p.free.shape[2])]


def _basis(rigid: Double, given: Sequence[float | None]) -> Double:
    """Orthonormal basis of the motions that are not given."""
    columns = [c for c, value in enumerate(given) if value is None]
    if not columns:
        return np.zeros((*rigid.shape[:2], 0))
    flat = rigid[:, :, columns].reshape(-1, len(columns))
    return np.linalg.qr(flat / np.linalg.norm(flat, axis=0))[0].reshape(3, -1, len(columns))


def _bind(part: Part, plate: Plate) -> BoundPlate:
    i, j, k = np.nonzero(plate.region.nodes(part))
    if not len(i):
        raise InputError(
            f"Plate '{plate.name}': region '{plate.region.name}' holds no node of the part. Move "
            f"or enlarge the region."
        )
    place = np.stack([c[n] for c, n in zip(part.grid.nodes(), (i, j, k), strict=True)], axis=1)
    spread = np.linalg.svd(place - place.mean(axis=0), compute_uv=False)
    if len(spread) < 2 or spread[1] <= _LINE * max(spread[0], min(part.grid.spacing)):
        raise InputError(
            f"Plate '{plate.name}': the {len(i)} nodes of region '{plate.region.name}' lie on one "
            f"line, so they cannot turn a plate about it. Enlarge the region."
        )
    point = _vector(place.mean(axis=0)) if plate.point is None else plate.point
    rigid = point_motions(place - np.asarray(point))
    nx, ny, _ = part.grid.node_shape
    node = (k * ny + j) * nx + i
    order = np.argsort(node)
    rigid = np.ascontiguousarray(rigid[:, order])
    return BoundPlate(
        plate=plate,
        point=point,
        node=node[order],
        rigid=rigid,
        free=np.ascontiguousarray(_basis(rigid, plate.given)),
    )


def _take_over(new: BoundPlate, held: Bools, given: Double) -> Bools:
    """Let a plate hold what a support holds to the same value; what remains held, (3, n)."""
    flat, value = held.reshape(3, -1), given.reshape(3, -1)
    on = flat[:, new.node]
    loose = np.abs(new.free).sum(axis=2) > _SAME
    off = np.abs(new.given - value[:, new.node])
    agree = on & ~loose & (off <= _SAME * max(1.0, float(np.abs(given).max())))
    flat[:, new.node] = on & ~agree
    value[:, new.node] = np.where(agree, 0.0, value[:, new.node])
    return np.asarray(on & ~agree)


def bind_plates(
    part: Part,
    plates: Sequence[Plate],
    held: Bools,
    given: Double,
    names: Sequence[str],
    owner: NDArray[np.int16],
) -> PlateSet | None:
    """Lay plates on a part; None where there are none.

    Parameters
    ----------
    part : Part
    plates : sequence of Plate
    held, given : ndarray, shape (3, nz+1, ny+1, nx+1)
        What supports hold, and where, mm. Where a plate's given motion says the same, as at the
        edge of a symmetry plane, the plate takes over: changed in place.
    names, owner
        Of the supports, for messages.

    Raises
    ------
    InputError
        A region without nodes or with nodes on a line; a node of two plates, or of a plate and a
        support that says otherwise.
    """
    if not plates:
        return None
    bound: list[BoundPlate] = []
    mask = np.zeros(held.shape[1:], dtype=bool)
    for plate in plates:
        new = _bind(part, plate)
        clash = mask.ravel()[new.node]
        if clash.any():
            other = next(b.plate.name for b in bound if np.isin(b.node, new.node).any())
            raise InputError(
                f"Plates '{other}' and '{plate.name}' share {int(clash.sum())} nodes; two bodies "
                f"cannot own one node. Keep the regions a voxel apart, or make them one plate."
            )
        on = _take_over(new, held, given)
        if on.any():
            d, n = (int(v) for v in np.argwhere(on)[0])
            support = names[int(owner.reshape(3, -1)[d, new.node[n]])]
            raise InputError(
                f"Plate '{plate.name}' shares {int(on.any(axis=0).sum())} nodes with {support}, "
                f"which holds them along {'xyz'[d]}; the plate's given motion does not. Give the "
                f"plate the same translation along {'xyz'[d]} and no rotation out of it, or keep "
                f"the two regions a voxel apart."
            )
        mask.ravel()[new.node] = True
        bound.append(new)
    return PlateSet(plates=tuple(bound), mask=mask)
