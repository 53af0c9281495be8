"""From unknowns in [0, 1] to physical fields, and the way back for derivatives."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.topopt.blending import Blending
from voxelmat.topopt.density import Density
from voxelmat.topopt.fields import NOMINAL, Choice, Draft, Fields, Palette, Realisation
from voxelmat.topopt.filter import ConeFilter
from voxelmat.topopt.interpolation import VoidLaw
from voxelmat.topopt.kind import Kind, Slopes
from voxelmat.topopt.overhang import SelfSupport
from voxelmat.topopt.projection import half_level

__all__ = ["Choice", "Fields", "Palette", "Unknowns"]

Array = NDArray[np.float64]


class Unknowns:
    """Which unknowns there are, and the two maps ``x -> fields`` and ``cotangents -> dx``.

    Order of x: densities of the free voxels (if voids are allowed), then those of `extra` kinds,
    then blend coordinates of the voxels whose blend is free, one coordinate after the other.

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
    blend_radius : float or None
        Of the filter of the blends, mm; `radius` where left out.
    pure : bool
        Whether blends end at pure resins.
    width : float or None
        Least width of the change from one resin to another, mm.
    overhang : float or None
        Self-support angle, degrees.
    simplex : bool
        Blend unknowns are fractions, see `Blending`.
    empty_beyond : bool
        What lies beyond the shape counts as empty in the filter of densities, see `ConeFilter`.
    extra : tuple of Kind
        Further kinds; they see the blends' moduli and come before the voids.
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
        blend_radius: float | None = None,
        pure: bool = False,
        width: float | None = None,
        overhang: float | None = None,
        simplex: bool = False,
        empty_beyond: bool = False,
        extra: tuple[Kind, ...] = (),
    ) -> None:
        self.choice, self.palette, self.threshold = choice, palette, threshold
        self.sharpness = 0.0
        self.resins = palette.bulk.size
        around = choice.domain | (choice.kept_mu > 0) if empty_beyond else choice.domain
        smooth = ConeFilter(
            around, spacing, radius, periodic=choice.periodic, empty_beyond=empty_beyond
        )
        self.density = Density(
            choice, void, smooth, threshold,
            None if overhang is None or void is None else SelfSupport(overhang, spacing),
        )  # fmt: skip
        self.blending = Blending(
            choice, palette, spacing, blend_radius or radius, pure=pure, width=width,
            simplex=simplex,
        )  # fmt: skip
        #: In the order in which they act; x holds them from the last to the first.
        self.kinds: tuple[Kind, ...] = (self.blending, *extra[::-1], self.density)
        self.n_rho = self.density.n
        self.n = sum(kind.n for kind in self.kinds)
        if self.n == 0:
            raise InputError(
                "Nothing is left to design: every voxel is outside the shape, kept or frozen."
            )

    @property
    def void(self) -> VoidLaw | None:
        """How moduli fall with density; may be set to another one as a run goes on."""
        return self.density.void

    @void.setter
    def void(self, law: VoidLaw | None) -> None:
        self.density.void = law

    @property
    def projected(self) -> bool:
        """Whether `sharpness` changes anything."""
        return self.n_rho > 0 or (self.blending.pure and self.blending.n > 0)

    @property
    def outline_level(self) -> float:
        """The value of `Fields.filtered` at which the outline of the solid is drawn."""
        if self.density.overhang is not None:
            return 0.5
        return half_level(self.sharpness, self.threshold)

    # ------------------------------------------------------------------ start
    def start(self, rho: float, fractions: Array) -> Array:
        """Unknowns of a uniform design: density `rho` and fractions (K,) in every free voxel."""
        return np.concatenate([kind.start(rho, fractions) for kind in self.kinds[::-1]])

    def like(self, rho: Array, w: Array) -> Array:
        """Unknowns of densities (nz, ny, nx) and fractions (K, nz, ny, nx), before filters.

        Kinds of `extra` start as in a uniform design.
        """
        inside = self.choice.domain
        mean = float(rho[inside].mean()), w[:, inside].mean(1)
        extra = [kind.start(*mean) for kind in self.kinds[-2:0:-1]]
        return np.concatenate([self.density.like(rho), *extra, self.blending.like(w)])

    def solidity(self, fields: Fields) -> Array:
        """Weight of each unknown's change: blends count by how solid their voxel is."""
        return np.concatenate([kind.weight(fields.draft) for kind in self.kinds[::-1]])

    # ------------------------------------------------------------------ forward
    def forward(self, x: Array, realisation: Realisation = NOMINAL) -> Fields:
        """Fields of the design `x`, (n,), at the present `sharpness`."""
        draft = Draft(realisation=realisation, sharpness=self.sharpness)
        place = self.n
        for kind in self.kinds:
            kind.make(x[place - kind.n : place], draft)
            place -= kind.n
        return self._fields(draft)

    def with_fractions(self, fields: Fields, w: Array) -> Fields:
        """The same densities with other fractions, (K, nz, ny, nx); it has no way back."""
        d = fields.draft
        return self._fields(
            Draft(realisation=d.realisation, sharpness=d.sharpness, rho=d.rho,
                  filtered=d.filtered, w=w, memory=dict(d.memory))
        )  # fmt: skip

    def _fields(self, draft: Draft) -> Fields:
        c = self.choice
        for kind in self.kinds:
            kind.stiffen(draft)
        lam, mu = c.kept_lam.copy(), c.kept_mu.copy()
        lam[c.domain] = draft.lam * c.fill[c.domain]
        mu[c.domain] = draft.mu * c.fill[c.domain]
        return Fields(
            lam=lam, mu=mu, rho=draft.rho, w=draft.w, filtered=draft.filtered,
            blend=draft.memory["blend"], draft=draft,
        )  # fmt: skip

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
        slopes: Slopes = {key: cotangents[key] for key in ("rho", "w") if key in cotangents}
        if "lam" in cotangents:
            for key in ("lam", "mu"):
                slopes[key] = cotangents[key][c.domain] * c.fill[c.domain]
        return np.concatenate([kind.transpose(fields.draft, slopes) for kind in self.kinds[::-1]])
