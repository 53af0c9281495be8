"""How a part swings under a steady sinusoidal force or on a shaking base."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.modalresult import ModalResult
from voxelmat.model.region import Region, solid_nodes
from voxelmat.provenance import Provenance

__all__ = ["HarmonicResult"]

Double = NDArray[np.float64]
Complex = NDArray[np.complex128]
Vector = tuple[float, float, float]

# A mean displacement below this share of the largest one counts as none.
_STILL = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class HarmonicResult:
    """Complex amplitudes; the motion is the real part of amplitude times exp(+i 2 pi f t).

    Attributes
    ----------
    modal : ModalResult
    frequencies : ndarray of float64, shape (f,)
        Hz.
    base : tuple of float or None
        Amplitude of the base along x, y, z, mm; None where forces act.
    coordinates : ndarray of complex128, shape (f, n)
        Share of each mode shape.
    rigid_coordinates : ndarray of complex128, shape (f, r)
        Share of each rigid motion.
    rest : ndarray of float64, shape (nx+1, ny+1, nz+1, 3)
        Static answer of all modes above those that were found, mm.
    rest_factor : ndarray of complex128, shape (f,)
        What it is multiplied by.
    loss_factors : ndarray of float64, shape (n,)
        Of each mode.
    damping : str
    cautions : tuple of str
    provenance : Provenance
    """

    modal: ModalResult
    frequencies: Double
    base: Vector | None
    coordinates: Complex
    rigid_coordinates: Complex
    rest: Double
    rest_factor: Complex
    loss_factors: Double
    damping: str
    cautions: tuple[str, ...] = ()
    provenance: Provenance = field(default_factory=Provenance)

    def over(self, region: Region) -> Complex:
        """Mean displacement over the nodes of a region, mm, shape (f, 3).

        Raises
        ------
        InputError
            Where the region holds no node of the part.
        """
        out = self.coordinates @ self.modal.mean_over(region)
        out = out + self.rigid_coordinates @ self.modal.rigid_mean_over(region)
        rest = self.rest[region.nodes(self.modal.part)].mean(axis=0)
        out = out + self.rest_factor[:, None] * rest
        return np.asarray(out if self.base is None else out + np.asarray(self.base))

    def amplitude(self, region: Region, direction: str) -> Double:
        """Amplitude of the mean displacement of a region along ``"x"``, ``"y"`` or ``"z"``, mm."""
        return np.asarray(np.abs(self.over(region)[:, _axis(direction)]))

    def phase(self, region: Region, direction: str) -> Double:
        """Phase of the same against the force or the base, degrees; negative lags behind."""
        return np.asarray(np.degrees(np.angle(self.over(region)[:, _axis(direction)])))

    def transmissibility(
        self, region: Region, since: Region | None = None, *, direction: str
    ) -> Double:
        """Amplitude of a region over that of another, or of the base, dB: 20 log10 of the ratio.

        Parameters
        ----------
        region : Region
            Where the vibration arrives.
        since : Region, optional
            Where it comes from; the base where it is left out.
        direction : str
            ``"x"``, ``"y"`` or ``"z"``.

        Returns
        -------
        ndarray of float64, shape (f,)

        Raises
        ------
        InputError
            Where the source does not move.
        """
        axis = _axis(direction)
        if since is not None:
            source = self.amplitude(since, direction)
        else:
            moved = 0.0 if self.base is None else abs(self.base[axis])
            source = np.full(len(self.frequencies), moved)
        arrived = self.amplitude(region, direction)
        if not np.all(source > _STILL * max(float(arrived.max()), float(source.max()))):
            name = "the base" if since is None else f"region '{since.name}'"
            raise InputError(
                f"There is no transmissibility from {name} along {direction}: it does not move "
                f"that way. Choose another direction or source."
            )
        return np.asarray(20.0 * np.log10(np.maximum(arrived, 1e-300) / source))

    def field(self, n: int) -> Complex:
        """Displacement of every node at frequency number `n`, mm, ``[i, j, k, 3]``."""
        out = np.tensordot(self.coordinates[n], self.modal.shapes, axes=1)
        out = out + np.tensordot(self.rigid_coordinates[n], self.modal.rigid_shapes, axes=1)
        out = out + self.rest_factor[n] * self.rest
        if self.base is not None:
            out = out + solid_nodes(self.modal.part.solid)[..., None] * np.asarray(self.base)
        return np.asarray(out)


def _axis(direction: str) -> int:
    if direction not in ("x", "y", "z"):
        raise InputError(f"A direction is x, y or z; got {direction!r}.")
    return "xyz".index(direction)
