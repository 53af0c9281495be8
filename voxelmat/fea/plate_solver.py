"""Conjugate gradients in the space of motions that plates allow: T^T K T without building T.

The space is that of node fields whose plate nodes move rigidly, and K acts in it between two
projections. The preconditioner is the multigrid V-cycle with the plates' nodes held, plus an
exact solve for a few fields, one for each free motion of each plate: that motion, and what the
part around it does, found roughly. Were these found exactly, the two would not couple at all.
"""

from __future__ import annotations

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.krylov import Iteration, Operator, conjugate_gradients
from voxelmat.fea.multigrid import Preconditioner
from voxelmat.fea.operator import dot
from voxelmat.fea.plates import PlateSet
from voxelmat.monitor import Monitor

__all__ = ["PlateOperator", "PlatePreconditioner"]

Double = NDArray[np.float64]
Single = NDArray[np.float32]

# How far, and with how many iterations at most, the part around a moved plate is relaxed.
_ROUGH, _ROUGH_STEPS = 0.1, 12


class PlateOperator:
    """K between projections; `apply` also projects u itself, in place, which rounding left."""

    def __init__(self, inner: Operator, plates: PlateSet) -> None:
        self._inner, self._plates = inner, plates

    def apply(self, u: Double, y: Double) -> None:
        """Write P K P u to y."""
        self._plates.project(u)
        self._inner.apply(u, y)
        self._plates.project(y)


class PlatePreconditioner:
    """The multigrid with plates held, and the plates' own motions.

    Parameters
    ----------
    inner : Preconditioner
        For the part with the nodes of the plates held.
    K : Operator
        Without projections.
    plates : PlateSet
    free : ndarray of uint8
        1 where an unknown exists, those of plates among them.
    monitor : Monitor
    """

    def __init__(
        self,
        inner: Preconditioner,
        K: Operator,
        plates: PlateSet,
        free: NDArray[np.uint8],
        monitor: Monitor,
    ) -> None:
        self.method = inner.method
        self.setup_iterations = 0
        self._inner = inner
        inside = free * ~plates.mask
        motions = plates.free_motions()
        self._fields = np.zeros((len(motions), *free.shape), dtype=np.float32)
        A = np.zeros((len(motions), len(motions)))
        Kz = np.empty(free.shape)
        for m, (plate, motion) in enumerate(motions):
            z = np.zeros(free.shape)
            z.reshape(3, -1)[:, plate.node] = motion
            K.apply(z, Kz)
            norm = float(np.sqrt(dot(Kz * inside, Kz)))
            if norm > 0:
                run = conjugate_gradients(
                    K,
                    inner,
                    np.zeros(free.shape),
                    inside,
                    Iteration(z),
                    norm=norm,
                    tol=_ROUGH,
                    limit=_ROUGH_STEPS,
                    monitor=monitor,
                )
                self.setup_iterations += run.iterations
            self._fields[m] = z
            K.apply(self._fields[m].astype(np.float64), Kz)
            for n in range(m + 1):
                A[m, n] = A[n, m] = dot(Kz, self._fields[n])
        try:
            self._factor = scipy.linalg.cho_factor(A) if motions else None
        except scipy.linalg.LinAlgError as error:
            raise InputError(
                "A plate moves without resistance: the part that it is joined to is not held."
            ) from error
        self._out = np.zeros(free.shape, dtype=np.float32)

    def apply(self, r: Double, scale: float) -> Single:
        """Approximate solution of P K P z = scale r."""
        out = self._out
        np.copyto(out, self._inner.apply(r, scale))
        if self._factor is not None:
            amount = np.array([dot(r, z) for z in self._fields]) * scale
            amount = scipy.linalg.cho_solve(self._factor, amount)
            for a, z in zip(amount, self._fields, strict=True):
                out += np.float32(a) * z
        return out

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        return int(self._inner.nbytes + self._fields.nbytes + self._out.nbytes)
