"""Unknowns that say which resins a voxel is made of: fractions on the simplex.

One coordinate for two resins (the fraction of the second), K for more, which a softmax turns into
fractions; or, with `simplex`, the K fractions themselves, which the optimiser then keeps above 0
and summing to 1. Blends are not penalised. Where only pure resins may be printed, the fractions are
sharpened, w_m <- w_m^q / sum_n w_n^q, with q rising in the same stages as the projection of the
densities: at the last one a blend is left only where the unknowns hardly prefer any resin.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.topopt.fields import Choice, Draft, Palette
from voxelmat.topopt.filter import ConeFilter
from voxelmat.topopt.kind import Slopes
from voxelmat.topopt.links import Mirror, Sharing

__all__ = ["Blending", "purest", "sharpen", "sharpen_back"]

Array = NDArray[np.float64]

#: Range of the exponent of the softmax over three or more resins: a fraction can fall to 2e-9.
_SHARPNESS = 20.0


def sharpen(w: Array, exponent: float, bias: Array) -> tuple[Array, Array]:
    """Fractions (K, ...) with the greatest made greater, and w'_m / w_m.

    w'_m = (w_m e^b_m)^q / sum_n (w_n e^b_n)^q: of two resins the first wins where its fraction is
    above 1 / (1 + e^(b_1 - b_2)), so a bias moves the border between them.
    """
    shape = (-1,) + (1,) * (w.ndim - 1)
    gain = np.exp(exponent * (bias - bias.max())).reshape(shape)
    top = w.max(0)  # divided out: powers of small fractions would vanish
    ratio = gain * (w / top) ** (exponent - 1.0)
    total = (ratio * w).sum(0)
    ratio = ratio / total
    return w * ratio, ratio


def sharpen_back(sharp: Array, ratio: Array, exponent: float, slope: Array) -> Array:
    """Derivative by the fractions before `sharpen`, from that by those after it."""
    return np.asarray(exponent * ratio * (slope - (slope * sharp).sum(0)))


def purest(w: Array) -> Array:
    """All of the resin of which there is most; the first of several alike."""
    out = np.zeros_like(w)
    np.put_along_axis(out, w.argmax(0)[None], 1.0, axis=0)
    out[:, w.sum(0) == 0] = 0.0
    return out


class Blending:
    """Blend coordinates of the voxels whose blend is free.

    Parameters
    ----------
    choice : Choice
    palette : Palette
    spacing : tuple of float
        mm, along x, y, z.
    radius : float
        Of the filter over the voxels whose blend is free, mm; zones are not filtered.
    pure : bool
        Whether to end at pure resins.
    width : float or None
        mm over which any fraction takes at least to go from 0 to 1.
    simplex : bool
        The coordinates are fractions: for `voxelmat.topopt.mirror.MirrorDescent`.
    """

    def __init__(
        self,
        choice: Choice,
        palette: Palette,
        spacing: tuple[float, float, float],
        radius: float,
        *,
        pure: bool = False,
        width: float | None = None,
        simplex: bool = False,
    ) -> None:
        self._choice, self.palette, self.pure = choice, palette, pure
        self.resins = palette.bulk.size
        self.simplex = simplex and self.resins > 1
        few = {1: 0} if simplex else {1: 0, 2: 1}
        self.coordinates = few.get(self.resins, self.resins)
        self._free = choice.domain & (choice.resin < 0) & ~choice.empty
        if self.coordinates == 0:
            self._free = np.zeros_like(choice.domain)
        plain = choice.group is None and choice.zones is None
        self._mirror = Mirror(choice.mirrors if plain else (), choice.domain | (choice.kept_mu > 0))
        group = choice.group if choice.zones is None else choice.zones
        self._sharing = Sharing(self._free, group)
        self._filter = (
            None
            if choice.zones is not None
            else ConeFilter(self._free, spacing, radius, periodic=choice.periodic)
        )
        self._wide = (
            None
            if width is None
            else ConeFilter(choice.domain & ~choice.empty, spacing, width, periodic=choice.periodic)
        )

    @property
    def n(self) -> int:
        """Coordinates of a blend times the number of blends."""
        return self.coordinates * self._sharing.n

    def start(self, rho: float, fractions: Array) -> Array:
        """All alike."""
        return np.repeat(self.coordinate(fractions[:, None])[:, 0], self._sharing.n)

    def coordinate(self, fractions: Array) -> Array:
        """Coordinates (c, m) of blends (K, m)."""
        if self.coordinates == 0:
            return np.empty((0, fractions.shape[1]))
        if self.simplex:
            above = np.maximum(fractions, 1e-6)
            return np.asarray(above / above.sum(0))
        if self.coordinates == 1:
            return fractions[1:2].copy()
        z = np.log(np.maximum(fractions, 1e-6)) / _SHARPNESS
        return np.asarray(np.clip(z - z.mean(0) + 0.5, 0.0, 1.0))

    def like(self, w: Array) -> Array:
        """Unknowns whose blends are, as nearly as sharing allows, w, (K, nz, ny, nx)."""
        values = w[:, self._free]
        each = np.array([self._sharing.average(v) for v in values])
        return self.coordinate(each.reshape(self.resins, -1)).reshape(-1)

    def make(self, x: Array, draft: Draft) -> None:
        """`w`."""
        c, free = self._choice, self._free
        w = np.zeros((self.resins, *c.domain.shape))
        for m in range(self.resins):
            w[m][c.domain & (c.resin == m)] = 1.0
        # A frozen-empty voxel has no blend; give it the first resin so that laws stay finite.
        w[0][c.domain & (c.resin < 0) & c.empty] = 1.0
        draft.w = w
        if self.coordinates == 0:
            w[0][c.domain] = 1.0
            return
        smooth = np.array([self._smooth(v) for v in x.reshape(self.coordinates, -1)])
        if self.simplex:
            w[:, free] = np.maximum(smooth, 0.0)
        elif self.coordinates == 1:
            second = np.clip(smooth[0], 0.0, 1.0)
            w[0][free], w[1][free] = 1.0 - second, second
        else:
            z = _SHARPNESS * (smooth - smooth.max(0))
            e = np.exp(z)
            w[:, free] = e / e.sum(0)
        if self._sharpens(draft):
            before = w[:, free]
            w[:, free], ratio = sharpen(before, self._exponent(draft), self._bias(draft))
            draft.memory["sharpen"] = (before, w[:, free], ratio)
        if self._wide is not None:
            draft.memory["narrow"] = w[:, free]
            wide = np.array([self._wide(v)[free] for v in w])
            w[:, free] = [self._sharing.level(v) for v in wide]

    def _exponent(self, draft: Draft) -> float:
        return 1.0 + 0.5 * draft.sharpness if self.pure else 1.0

    def _bias(self, draft: Draft) -> Array:
        return np.array(draft.realisation.bias or (0.0,) * self.resins)

    def _sharpens(self, draft: Draft) -> bool:
        return self._exponent(draft) > 1.0 or bool(draft.realisation.bias)

    def _smooth(self, values: Array) -> Array:
        """Coordinate of each free voxel."""
        if self._filter is None:
            return self._sharing.expand(values)
        raw = np.zeros(self._choice.domain.shape)
        raw[self._free] = self._sharing.expand(values)
        return self._sharing.level(self._filter(self._mirror(raw))[self._free])

    def stiffen(self, draft: Draft) -> None:
        """`bulk` and `shear` of the blends, by the palette's law."""
        p, factor = self.palette, draft.realisation.stiffness or (1.0,)
        blend = p.law.evaluate(
            draft.w[:, self._choice.domain].T,
            p.bulk * np.array(factor), p.shear * np.array(factor), resins=p.names,
        )  # fmt: skip
        draft.memory["blend"] = blend
        draft.bulk, draft.shear = blend.bulk, blend.shear

    def transpose(self, draft: Draft, slopes: Slopes) -> Array:
        """Slopes by `bulk` and `shear` become those by `w`."""
        c_w = np.zeros(draft.w.shape)
        if "bulk" in slopes:
            blend = draft.memory["blend"]
            c_bulk, c_shear = slopes.pop("bulk"), slopes.pop("shear")
            by_fraction = c_bulk[:, None] * blend.d_bulk + c_shear[:, None] * blend.d_shear
            c_w[:, self._choice.domain] = by_fraction.T
        if "w" in slopes:
            c_w += slopes["w"]
        if self.coordinates == 0:
            return np.empty(0)
        free = self._free
        c_w, w = c_w[:, free], draft.w[:, free]
        if self._wide is not None:
            full = np.zeros(free.shape)
            for m, slope in enumerate(c_w):
                full[free] = self._sharing.level(slope)
                c_w[m] = self._wide.transpose(full)[free]
        if self._sharpens(draft):
            w, sharp, ratio = draft.memory["sharpen"]
            c_w = sharpen_back(sharp, ratio, self._exponent(draft), c_w)
        elif self._wide is not None:
            w = draft.memory["narrow"]
        if self.simplex:
            by_coordinate = c_w
        elif self.coordinates == 1:
            by_coordinate = (c_w[1] - c_w[0])[None]
        else:
            by_coordinate = _SHARPNESS * w * (c_w - (c_w * w).sum(0))
        return np.concatenate([self._smooth_back(g) for g in by_coordinate])

    def _smooth_back(self, slope: Array) -> Array:
        if self._filter is None:
            return self._sharing.gather(slope)
        full = np.zeros(self._free.shape)
        full[self._free] = self._sharing.level(slope)
        back = self._mirror(self._filter.transpose(full))
        return self._sharing.gather(back[self._free])

    def weight(self, draft: Draft) -> Array:
        """Blends count by how solid their voxels are."""
        each = self._sharing.average(draft.rho[self._free])
        return np.tile(each, self.coordinates)
