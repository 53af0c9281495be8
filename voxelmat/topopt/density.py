"""Unknowns that say how solid a voxel is: filtered, projected, penalised."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.topopt.fields import Choice, Draft
from voxelmat.topopt.filter import ConeFilter
from voxelmat.topopt.interpolation import VoidLaw
from voxelmat.topopt.kind import Slopes
from voxelmat.topopt.links import Mirror, Sharing
from voxelmat.topopt.overhang import SelfSupport
from voxelmat.topopt.projection import project

__all__ = ["Density"]

Array = NDArray[np.float64]


class Density:
    """One unknown for each free voxel, or for each set of voxels that are alike.

    Parameters
    ----------
    choice : Choice
    void : VoidLaw or None
        None: every voxel of the domain is solid, and there is no unknown.
    smooth : ConeFilter
        Over the domain; over kept voxels, too, where what is beyond counts as empty.
    threshold : float
        Of the projection.
    overhang : SelfSupport or None
        Takes away what nothing below holds up.
    """

    def __init__(
        self,
        choice: Choice,
        void: VoidLaw | None,
        smooth: ConeFilter,
        threshold: float,
        overhang: SelfSupport | None = None,
    ) -> None:
        self.void, self.threshold, self.overhang = void, threshold, overhang
        self._choice, self._filter = choice, smooth
        self._free = choice.domain & ~choice.solid & ~choice.empty
        if void is None:
            self._free = np.zeros_like(choice.domain)
        self._kept = choice.kept_mu > 0
        alone = choice.mirrors if choice.group is None else ()
        self._mirror = Mirror(alone, choice.domain | self._kept)
        self._sharing = Sharing(self._free, choice.group)

    @property
    def n(self) -> int:
        """One for each free voxel or set of them."""
        return self._sharing.n

    def start(self, rho: float, fractions: Array) -> Array:
        """All alike."""
        return np.full(self.n, rho)

    def like(self, rho: Array) -> Array:
        """Unknowns that are, as nearly as sharing allows, rho, (nz, ny, nx), before the filter."""
        return self._sharing.average(rho[self._free]) if self.void is not None else np.empty(0)

    def make(self, x: Array, draft: Draft) -> None:
        """`rho` and `filtered`."""
        c = self._choice
        raw = np.where(c.domain & ~c.empty, 1.0, 0.0)
        if self._filter.empty_beyond:
            raw[self._kept] = 1.0
        if self.void is None:
            draft.rho = draft.filtered = np.where(c.domain, raw, 0.0)
            return
        free = self._free
        raw[free] = self._sharing.expand(x)
        smooth = self._filter(self._mirror(raw))
        if self._sharing.shared:
            smooth[free] = self._sharing.level(smooth[free])
        threshold = self.threshold + draft.realisation.threshold
        rho, slope = project(smooth, draft.sharpness, threshold)
        frozen = np.where(c.solid, 1.0, 0.0)
        draft.rho = np.where(free, np.clip(rho, 0.0, 1.0), frozen)
        draft.filtered = np.where(free, smooth, frozen)
        draft.memory["projection"] = np.where(free, slope, 0.0)
        if self.overhang is not None:
            printed, draft.memory["overhang"] = self.overhang(np.where(self._kept, 1.0, draft.rho))
            draft.rho = np.where(free, printed, frozen)
            draft.filtered = draft.rho

    def stiffen(self, draft: Draft) -> None:
        """`lam` and `mu` from `bulk` and `shear`."""
        if self.void is None:
            draft.lam, draft.mu = draft.bulk - 2.0 * draft.shear / 3.0, draft.shear
        else:
            rho = draft.rho[self._choice.domain]
            draft.lam, draft.mu = self.void.forward(rho, draft.bulk, draft.shear)

    def transpose(self, draft: Draft, slopes: Slopes) -> Array:
        """Slopes by `lam` and `mu` become those by `bulk` and `shear`."""
        inside = self._choice.domain
        c_rho = np.zeros(inside.shape)
        if "lam" in slopes:
            c_lam, c_mu = slopes.pop("lam"), slopes.pop("mu")
            if self.void is None:
                slopes["bulk"], slopes["shear"] = c_lam, c_mu - 2.0 / 3.0 * c_lam
            else:
                c_rho[inside], slopes["bulk"], slopes["shear"] = self.void.transpose(
                    draft.rho[inside], draft.bulk, draft.shear, c_lam, c_mu
                )
        if "rho" in slopes:
            c_rho += slopes["rho"]
        if self.n == 0:
            return np.empty(0)
        free = self._free
        if self.overhang is not None:
            c_rho = self.overhang.transpose(np.where(free, c_rho, 0.0), draft.memory["overhang"])
        c_rho = c_rho * draft.memory["projection"]
        if self._sharing.shared:
            c_rho[free] = self._sharing.level(c_rho[free])
        return self._sharing.gather(self._mirror(self._filter.transpose(c_rho))[free])

    def weight(self, draft: Draft) -> Array:
        """All matter alike."""
        return np.ones(self.n)
