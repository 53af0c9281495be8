"""From unknowns in [0, 1] to physical fields, and the way back for derivatives."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.model.laws import BlendLaw, LawValue
from voxelmat.topopt.filter import ConeFilter
from voxelmat.topopt.interpolation import VoidLaw
from voxelmat.topopt.projection import project

__all__ = ["Choice", "Fields", "Palette", "Unknowns"]

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]

#: Range of the exponent of the softmax over three or more resins: a fraction can fall to 2e-9.
_SHARPNESS = 20.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Palette:
    """The resins to choose from: bulk, shear (MPa), density (tonne/mm^3), each (K,)."""

    names: tuple[str, ...]
    bulk: Array
    shear: Array
    density: Array
    law: BlendLaw


@dataclass(frozen=True, slots=True, kw_only=True)
class Choice:
    """What may be designed where; all arrays (nz, ny, nx).

    Attributes
    ----------
    domain : ndarray of bool
        Voxels that are designed (of the shape, and not kept).
    solid, empty : ndarray of bool
        Frozen voxels of the domain.
    resin : ndarray of int
        Frozen resin number, -1 where the blend is free.
    fill : ndarray of float
        Solid fraction of each voxel by the shape's outline: scales stiffness and volume.
    kept_lam, kept_mu : ndarray of float
        Lame constants outside the domain, MPa, with the fill in them.
    mirrors : tuple of int
        Axes (0 = z, 1 = y, 2 = x) of mirror symmetry, about the middle of the shape's box.
    """

    domain: Bools
    solid: Bools
    empty: Bools
    resin: NDArray[np.intp]
    fill: Array
    kept_lam: Array
    kept_mu: Array
    mirrors: tuple[int, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Fields:
    """Physical fields of one design, (nz, ny, nx), and what the way back needs.

    Attributes
    ----------
    lam, mu : ndarray
        Lame constants everywhere, MPa, fill included.
    rho : ndarray
        How solid, 0 to 1; 0 outside the domain.
    w : ndarray, (K, nz, ny, nx)
        Fractions that sum to 1 in the domain; 0 outside.
    filtered : ndarray
        Density before projection, frozen voxels at 0 or 1.
    """

    lam: Array
    mu: Array
    rho: Array
    w: Array
    filtered: Array
    d_projection: Array
    blend: LawValue


class Unknowns:
    """Which unknowns there are, and the two maps ``x -> fields`` and ``cotangents -> dx``.

    Order of x: densities of the free voxels (if voids are allowed), then blend coordinates of
    the voxels whose blend is free: one coordinate each for two resins (the fraction of the
    second), K for more, which a softmax turns into fractions; or, with `simplex`, the K fractions
    themselves, which the optimiser must keep above 0 and summing to 1.

    Parameters
    ----------
    choice : Choice
    palette : Palette
    void : VoidLaw or None
        None: every voxel of the domain is solid.
    spacing : tuple of float
        mm, along x, y, z.
    radius : float
        Of the filter, mm.
    threshold : float
        Of the projection.
    simplex : bool
        Blend unknowns are fractions: for `voxelmat.topopt.mirror.MirrorDescent`.
    """

    def __init__(
        self,
        choice: Choice,
        palette: Palette,
        *,
        void: VoidLaw | None,
        spacing: tuple[float, float, float],
        radius: float,
        threshold: float = 0.5,
        simplex: bool = False,
    ) -> None:
        self.choice, self.palette, self.void, self.threshold = choice, palette, void, threshold
        self.sharpness = 0.0
        self.resins = palette.bulk.size
        self.simplex = simplex and self.resins > 1
        few = {1: 0} if simplex else {1: 0, 2: 1}
        self._coordinates = few.get(self.resins, self.resins)
        self._free_rho = choice.domain & ~choice.solid & ~choice.empty
        self._free_blend = choice.domain & (choice.resin < 0) & ~choice.empty
        if void is None:
            self._free_rho = np.zeros_like(choice.domain)
        if self._coordinates == 0:
            self._free_blend = np.zeros_like(choice.domain)
        self._mirror = _Mirror(choice.mirrors, choice.domain | (choice.kept_mu > 0))
        self._rho_filter = ConeFilter(choice.domain, spacing, radius)
        self._blend_filter = ConeFilter(self._free_blend, spacing, radius)
        self.n_rho = int(self._free_rho.sum())
        self._n_blend = int(self._free_blend.sum())
        self.n = self.n_rho + self._coordinates * self._n_blend
        if self.n == 0:
            raise InputError(
                "Nothing is left to design: every voxel is outside the shape, kept or frozen."
            )

    # ------------------------------------------------------------------ start
    def start(self, rho: float, fractions: Array) -> Array:
        """Unknowns of a uniform design: density `rho` and fractions (K,) in every free voxel."""
        if self._coordinates == 0:
            blend = np.empty(0)
        elif self.simplex:
            blend = np.maximum(fractions, 1e-6) / np.maximum(fractions, 1e-6).sum()
        elif self._coordinates == 1:
            blend = np.array([fractions[1]])
        else:
            z = np.log(np.maximum(fractions, 1e-6)) / _SHARPNESS
            blend = np.clip(z - z.mean() + 0.5, 0.0, 1.0)
        return np.concatenate([np.full(self.n_rho, rho), np.repeat(blend, self._n_blend)])

    def solidity(self, fields: Fields) -> Array:
        """Weight of each unknown's change: blends count by how solid their voxel is."""
        blend = np.tile(fields.rho[self._free_blend], self._coordinates)
        return np.concatenate([np.ones(self.n_rho), blend])

    # ------------------------------------------------------------------ forward
    def forward(self, x: Array) -> Fields:
        """Fields of the design `x`, (n,), at the present `sharpness`."""
        rho, filtered, d_projection = self._density(x[: self.n_rho])
        w = self._fractions(x[self.n_rho :])
        return self._fields(rho, w, filtered, d_projection)

    def with_fractions(self, fields: Fields, w: Array) -> Fields:
        """The same densities with other fractions, (K, nz, ny, nx)."""
        return self._fields(fields.rho, w, fields.filtered, fields.d_projection)

    def _fields(self, rho: Array, w: Array, filtered: Array, d_projection: Array) -> Fields:
        c, p = self.choice, self.palette
        inside = c.domain
        blend = p.law.evaluate(w[:, inside].T, p.bulk, p.shear, resins=p.names)
        if self.void is None:
            lam_in, mu_in = blend.bulk - 2.0 * blend.shear / 3.0, blend.shear
        else:
            lam_in, mu_in = self.void.forward(rho[inside], blend.bulk, blend.shear)
        lam, mu = c.kept_lam.copy(), c.kept_mu.copy()
        lam[inside] = lam_in * c.fill[inside]
        mu[inside] = mu_in * c.fill[inside]
        return Fields(
            lam=lam, mu=mu, rho=rho, w=w, filtered=filtered, d_projection=d_projection,
            blend=blend,
        )  # fmt: skip

    def _density(self, x: Array) -> tuple[Array, Array, Array]:
        c = self.choice
        raw = np.where(c.domain & ~c.empty, 1.0, 0.0)
        if self.void is None:
            return raw, raw, np.zeros_like(raw)
        raw[self._free_rho] = x
        smooth = self._rho_filter(self._mirror(raw))
        rho, slope = project(smooth, self.sharpness, self.threshold)
        free = self._free_rho
        frozen = np.where(c.solid, 1.0, 0.0)
        return (
            np.where(free, np.clip(rho, 0.0, 1.0), frozen),
            np.where(free, smooth, frozen),
            np.where(free, slope, 0.0),
        )

    def _fractions(self, x: Array) -> Array:
        c, shape = self.choice, self.choice.domain.shape
        w = np.zeros((self.resins, *shape))
        for m in range(self.resins):
            w[m][c.domain & (c.resin == m)] = 1.0
        # A frozen-empty voxel has no blend; give it the first resin so that laws stay finite.
        w[0][c.domain & (c.resin < 0) & c.empty] = 1.0
        free = self._free_blend
        if self._coordinates == 0:
            w[0][c.domain] = 1.0
            return w
        smooth = np.array([self._smooth_blend(v)[free] for v in x.reshape(self._coordinates, -1)])
        if self.simplex:
            w[:, free] = np.maximum(smooth, 0.0)
        elif self._coordinates == 1:
            second = np.clip(smooth[0], 0.0, 1.0)
            w[0][free], w[1][free] = 1.0 - second, second
        else:
            z = _SHARPNESS * (smooth - smooth.max(0))
            e = np.exp(z)
            w[:, free] = e / e.sum(0)
        return w

    def _smooth_blend(self, values: Array) -> Array:
        raw = np.zeros(self.choice.domain.shape)
        raw[self._free_blend] = values
        return self._blend_filter(self._mirror(raw))

    # ------------------------------------------------------------------ back
    def transpose(self, fields: Fields, cotangents: Mapping[str, Array]) -> Array:
        """Derivative by x, (n,), of a response with these derivatives by fields.

        Parameters
        ----------
        fields : Fields
            What `forward` gave for the design.
        cotangents : mapping
            Derivatives by ``lam``, ``mu``, ``rho``, ``w`` (any of them), shaped like the fields.
        """
        c = self.choice
        inside, m = c.domain, fields.blend
        c_rho = np.zeros(inside.shape)
        c_w = np.zeros((self.resins, *inside.shape))
        if "lam" in cotangents:
            c_lam = cotangents["lam"][inside] * c.fill[inside]
            c_mu = cotangents["mu"][inside] * c.fill[inside]
            if self.void is None:
                c_bulk, c_shear = c_lam, c_mu - 2.0 / 3.0 * c_lam
            else:
                c_rho[inside], c_bulk, c_shear = self.void.transpose(
                    fields.rho[inside], m.bulk, m.shear, c_lam, c_mu
                )
            by_fraction = c_bulk[:, None] * m.d_bulk + c_shear[:, None] * m.d_shear
            c_w[:, inside] = by_fraction.T
        if "rho" in cotangents:
            c_rho += cotangents["rho"]
        if "w" in cotangents:
            c_w += cotangents["w"]
        density = self._density_back(c_rho * fields.d_projection)
        return np.concatenate([density, self._fractions_back(fields.w, c_w)])

    def _density_back(self, cotangent: Array) -> Array:
        if self.n_rho == 0:
            return np.empty(0)
        raw = self._mirror(self._rho_filter.transpose(cotangent))
        return raw[self._free_rho]

    def _fractions_back(self, w: Array, c_w: Array) -> Array:
        free = self._free_blend
        if self._coordinates == 0:
            return np.empty(0)
        if self.simplex:
            by_coordinate = c_w
        elif self._coordinates == 1:
            by_coordinate = (c_w[1] - c_w[0])[None]
        else:
            by_coordinate = _SHARPNESS * w * (c_w - (c_w * w).sum(0))
        out = [
            self._mirror(self._blend_filter.transpose(np.where(free, g, 0.0)))[free]
            for g in by_coordinate
        ]
        return np.concatenate(out)


class _Mirror:
    """Mean over mirror images inside the box of the shape: linear and its own transpose."""

    def __init__(self, axes: tuple[int, ...], shape: Bools) -> None:
        self._axes = axes
        places = np.argwhere(shape) if axes else np.zeros((0, 3), dtype=int)
        self._box = (
            tuple(slice(int(a), int(b) + 1) for a, b in zip(places.min(0), places.max(0),
                                                            strict=True))
            if len(places) else ()
        )  # fmt: skip

    def __call__(self, field: Array) -> Array:
        if not self._axes:
            return field
        out = field.copy()
        for axis in self._axes:
            part = out[self._box]
            out[self._box] = 0.5 * (part + np.flip(part, axis))
        return out
