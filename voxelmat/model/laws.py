"""Blend laws: bulk and shear modulus of a halftoned blend from its resins, with slopes."""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass
from typing import ClassVar

import numpy as np
from numpy.typing import ArrayLike, NDArray

from voxelmat.errors import InputError
from voxelmat.model.bounds import Band, clamp, extent, generalised_mean, hashin_shtrikman
from voxelmat.model.curve import SIDES, PairCurve
from voxelmat.model.selfconsistent import self_consistent

__all__ = [
    "LAWS",
    "BlendLaw",
    "CalibratedCurve",
    "HashinShtrikmanLower",
    "HashinShtrikmanUpper",
    "LawValue",
    "LogMix",
    "Reuss",
    "SelfConsistent",
    "Voigt",
]

Floats = NDArray[np.float64]
Logs = tuple[Floats, Floats, Floats, Floats]  # log K, log G and their slopes by weight
Mask = bool | NDArray[np.bool_]

#: How far fractions may sum from 1 before they are refused; within it they are scaled to sum 1.
SUM_TOLERANCE = 0.01
#: Numbers a block: small enough that a block's work stays in cache.
_BLOCK = 1 << 14


@dataclass(frozen=True, slots=True)
class _Mixture:
    """What a law sees: weights (K, n), moduli (K,), the bounds of both, perhaps names."""

    w: Floats
    bulk: Floats
    shear: Floats
    bands: tuple[Band, Band]
    resins: Sequence[str] | None


@dataclass(frozen=True, slots=True, kw_only=True)
class LawValue:
    """What a law gives for n blends of K resins.

    Attributes
    ----------
    bulk, shear : ndarray, shape (n,)
        MPa.
    d_bulk, d_shear : ndarray, shape (n, K)
        Partial derivatives by each fraction with the others held, MPa. Off the simplex the law
        is extended by dividing the fractions by their sum, so ``sum_m w_m d_m = 0`` and any
        change of the fractions that keeps their sum sees the law's true slope.
    low_bulk, high_bulk, low_shear, high_shear : ndarray, shape (n,)
        Hashin-Shtrikman bounds, MPa.
    clipped : ndarray of bool, shape (n,)
        Where bulk or shear modulus was moved, by more than 0.1 %, to keep it within them.
    uncalibrated : ndarray of bool, shape (n,)
        Where a calibrated law had no curve for the blend and mixed logarithms instead.
    """

    bulk: Floats
    shear: Floats
    d_bulk: Floats
    d_shear: Floats
    low_bulk: Floats
    high_bulk: Floats
    low_shear: Floats
    high_shear: Floats
    clipped: NDArray[np.bool_]
    uncalibrated: NDArray[np.bool_]

    @property
    def young(self) -> Floats:
        """Young's modulus 9 K G / (3 K + G), MPa."""
        return 9.0 * self.bulk * self.shear / (3.0 * self.bulk + self.shear)

    @property
    def poisson(self) -> Floats:
        """Poisson's ratio."""
        return (3.0 * self.bulk - 2.0 * self.shear) / (2.0 * (3.0 * self.bulk + self.shear))


@dataclass(frozen=True, slots=True)
class BlendLaw(ABC):
    """From volume fractions to moduli; subclasses say how.

    A law's value depends on nothing but what the blend holds: more resins with fraction 0, or
    the same resins in another order, change nothing.
    """

    #: The word for it in a design file.
    key: ClassVar[str] = ""

    def evaluate(
        self,
        fractions: ArrayLike,
        bulk: ArrayLike,
        shear: ArrayLike,
        *,
        resins: Sequence[str] | None = None,
    ) -> LawValue:
        """Moduli of blends, their slopes and their bounds.

        Parameters
        ----------
        fractions : array_like, shape (n, K)
            Volume fractions, each row not negative and summing to 1.
        bulk, shear : array_like, shape (K,)
            Moduli of the resins, MPa.
        resins : sequence of str, optional
            The K names, in order; only `CalibratedCurve` needs them.

        Returns
        -------
        LawValue

        Raises
        ------
        InputError
            If a shape, a fraction or a modulus is not as said above.
        """
        w, k, g = _checked(fractions, bulk, shear, resins)
        n, count = w.shape
        one = {f: np.empty(n) for f in ("bulk", "shear")}
        slope = {f: np.empty((n, count)) for f in ("bulk", "shear")}
        low, high = {f: np.empty(n) for f in one}, {f: np.empty(n) for f in one}
        clipped, uncalibrated = np.zeros(n, dtype=bool), np.zeros(n, dtype=bool)
        for start in range(0, n, max(256, _BLOCK // count)):
            rows = slice(start, start + max(256, _BLOCK // count))
            part = np.maximum(w[rows].T, 0.0)
            total = part.sum(axis=0)
            part = part / total
            pure = part.max(axis=0) == 1.0
            bands = hashin_shtrikman(part, k, g)
            logs, lost = self._logs(_Mixture(part, k, g, bands, resins))
            uncalibrated[rows] = lost
            for f, x, band, y, dy in zip(one, (k, g), bands, logs[:2], logs[2:], strict=True):
                if self._clips:
                    y, dy, moved = clamp(part, x, y, dy, band)
                    clipped[rows] |= moved
                # Within the range of the phases present: exact where these are all equal.
                least, most = extent(part, x)
                low[f][rows] = np.clip(np.exp(band.low), least, most)
                high[f][rows] = np.clip(np.exp(band.high), least, most)
                value = np.exp(y)
                if self._inside:
                    value = np.clip(np.clip(value, low[f][rows], high[f][rows]), least, most)
                one[f][rows] = np.where(pure, least, value)
                slope[f][rows] = (dy * (value / total)).T
        return LawValue(
            bulk=one["bulk"], shear=one["shear"], d_bulk=slope["bulk"], d_shear=slope["shear"],
            low_bulk=low["bulk"], high_bulk=high["bulk"],
            low_shear=low["shear"], high_shear=high["shear"],
            clipped=clipped, uncalibrated=uncalibrated,
        )  # fmt: skip

    @property
    def _clips(self) -> bool:
        """Does the law's own value have to be brought within the bounds?"""
        return False

    @property
    def _inside(self) -> bool:
        """Does the final value lie within the bounds?"""
        return True

    @abstractmethod
    def _logs(self, mix: _Mixture) -> tuple[Logs, Mask]:
        """The law itself, and where it was not calibrated."""


def _checked(
    fractions: ArrayLike, bulk: ArrayLike, shear: ArrayLike, resins: Sequence[str] | None
) -> tuple[Floats, Floats, Floats]:
    w = np.asarray(fractions, dtype=np.float64)
    k, g = np.asarray(bulk, dtype=np.float64), np.asarray(shear, dtype=np.float64)
    if w.ndim != 2 or k.shape != (w.shape[1],) or g.shape != k.shape or not k.size:
        raise InputError(
            f"A blend law takes fractions (n, K) with bulk (K,) and shear (K,); got shapes "
            f"{w.shape}, {k.shape} and {g.shape}."
        )
    if resins is not None and len(resins) != len(k):
        raise InputError(f"A blend law got {len(k)} moduli but {len(resins)} resin names.")
    if not all(np.all((x > 0) & np.isfinite(x)) for x in (k, g)):
        raise InputError(
            f"Bulk and shear moduli must be above 0 and finite, in MPa; got {k.tolist()} and "
            f"{g.tolist()}."
        )
    if not w.size:
        return w, k, g
    least, off = float(w.min()), float(np.max(np.abs(w.sum(axis=1) - 1.0)))
    if not (least >= -1e-9 and off <= SUM_TOLERANCE):
        raise InputError(
            f"Volume fractions must not be negative and each row must sum to 1; the smallest is "
            f"{least:.3g} and a sum is off by {off:.3g}."
        )
    return w, k, g


@dataclass(frozen=True, slots=True)
class _ClippedLaw(BlendLaw):
    """A law that can leave the Hashin-Shtrikman bounds.

    Attributes
    ----------
    clip : bool
        Bring it back (smoothly) where it would leave them. Without, the value is the bare
        formula's, which no isotropic blend may be able to have.
    """

    clip: bool = True

    @property
    def _clips(self) -> bool:
        return self.clip

    @property
    def _inside(self) -> bool:
        return self.clip


def _log_mix(mix: _Mixture) -> Logs:
    """Weighted sums of log G and of log(1 - 2 nu), with slopes: ``log G, log q, dG, dq``."""
    log_g, log_q = np.log(mix.shear), np.log(3.0 * mix.shear / (3.0 * mix.bulk + mix.shear))
    x, q = log_g @ mix.w, log_q @ mix.w
    return x, q, log_g[:, None] - x, log_q[:, None] - q


def _from_free(x: Floats, log_q: Floats, dx: Floats, dq: Floats) -> Logs:
    """Log K and log G from log G and log q, q = 1 - 2 nu: K = G (3 - q) / (3 q)."""
    rest = 3.0 - np.exp(log_q)
    log_k = x + np.log(rest / 3.0) - log_q
    return log_k, x, dx - dq * (3.0 / rest), dx


@dataclass(frozen=True, slots=True)
class LogMix(_ClippedLaw):
    """Logarithms of G and of 1 - 2 nu, weighted by volume."""

    key: ClassVar[str] = "log-mix"

    def _logs(self, mix: _Mixture) -> tuple[Logs, Mask]:
        return _from_free(*_log_mix(mix)), False


@dataclass(frozen=True, slots=True)
class Voigt(_ClippedLaw):
    """Moduli weighted by volume (W. Voigt 1889): equal strain."""

    key: ClassVar[str] = "voigt"

    def _logs(self, mix: _Mixture) -> tuple[Logs, Mask]:
        k, g = mix.bulk @ mix.w, mix.shear @ mix.w
        slopes = mix.bulk[:, None] / k - 1.0, mix.shear[:, None] / g - 1.0
        return (np.log(k), np.log(g), *slopes), False


@dataclass(frozen=True, slots=True)
class Reuss(_ClippedLaw):
    """Compliances weighted by volume (A. Reuss 1929): equal stress."""

    key: ClassVar[str] = "reuss"

    def _logs(self, mix: _Mixture) -> tuple[Logs, Mask]:
        (k, dk), (g, dg) = (generalised_mean(mix.w, x, np.zeros(1)) for x in (mix.bulk, mix.shear))
        return (np.log(k), np.log(g), dk, dg), False


@dataclass(frozen=True, slots=True)
class HashinShtrikmanLower(BlendLaw):
    """The lower Hashin-Shtrikman bound: the softest resin is the continuous one."""

    key: ClassVar[str] = "hashin-shtrikman-lower"

    def _logs(self, mix: _Mixture) -> tuple[Logs, Mask]:
        k, g = mix.bands
        return (k.low, g.low, k.d_low, g.d_low), False


@dataclass(frozen=True, slots=True)
class HashinShtrikmanUpper(BlendLaw):
    """The upper Hashin-Shtrikman bound: the stiffest resin is the continuous one."""

    key: ClassVar[str] = "hashin-shtrikman-upper"

    def _logs(self, mix: _Mixture) -> tuple[Logs, Mask]:
        k, g = mix.bands
        return (k.high, g.high, k.d_high, g.d_high), False


@dataclass(frozen=True, slots=True)
class SelfConsistent(BlendLaw):
    """Each resin as spheres in a medium that has the blend's own moduli; within the bounds."""

    key: ClassVar[str] = "self-consistent"

    def _logs(self, mix: _Mixture) -> tuple[Logs, Mask]:
        shear = mix.bands[1]
        return self_consistent(mix.w, mix.bulk, mix.shear, shear.low, shear.high), False


@dataclass(frozen=True, slots=True)
class CalibratedCurve(_ClippedLaw):
    """Measured (or indicative) curves for pairs of resins; log mixing where there is none.

    A blend of a pair that has a curve follows the curve, its shape stretched between the moduli
    that the two resins have. A blend of more resins adds, to log mixing, what each pair's curve
    differs from it at the pair's own ratio, times the square of the pair's share: smooth, and
    exact for each pair (the extension of F. Kohler, Monatsh. Chem. 91 (1960) 738; from memory).
    `LawValue.uncalibrated` says where any two resins of a blend have no curve.

    Attributes
    ----------
    curves : tuple of PairCurve
    side : str
        ``"value"``, or ``"low"`` or ``"high"`` for an edge of the curves' bands (Young's modulus
        goes there, the bulk modulus stays).
    """

    key: ClassVar[str] = "calibrated"
    curves: tuple[PairCurve, ...] = ()
    side: str = "value"

    def __post_init__(self) -> None:
        pairs = [c.pair for c in self.curves]
        if len(set(pairs)) != len(pairs):
            names = sorted(f"{c.first} + {c.second}" for c in self.curves)
            raise InputError(f"A pair of resins has one blend curve; got {names}.")
        if self.side not in SIDES:
            raise InputError(f"side is one of {', '.join(SIDES)}; got {self.side!r}.")

    def _logs(self, mix: _Mixture) -> tuple[Logs, Mask]:
        if mix.resins is None:
            raise InputError("A calibrated blend law needs the resins' names: pass resins=.")
        w = mix.w
        x, q, dx, dq = _log_mix(mix)
        index = {name: m for m, name in enumerate(mix.resins)}
        held = np.count_nonzero(w > 0, axis=0)
        open_pairs = held * (held - 1) // 2
        for curve in self.curves:
            i, j = index.get(curve.first), index.get(curve.second)
            if i is None or j is None:
                continue
            open_pairs -= (w[i] > 0) & (w[j] > 0)
            self._add_pair(curve, (i, j), mix, (x, q, dx, dq))
        gauge = np.einsum("kn,kn->n", w, dx), np.einsum("kn,kn->n", w, dq)
        return _from_free(x, q, dx - gauge[0], dq - gauge[1]), open_pairs > 0

    def _add_pair(self, curve: PairCurve, at: tuple[int, int], mix: _Mixture, logs: Logs) -> None:
        """Add to `logs` (log G, log q and slopes) what the curve differs from log mixing."""
        w, bulk, shear = mix.w, mix.bulk, mix.shear
        x, q, dx, dq = logs
        i, j = at
        share = w[i] + w[j]
        t = np.divide(w[j], share, out=np.zeros_like(share), where=share > 0)
        g, dg, free, dfree = curve.shape(t)
        ends = [np.log(3.0 * shear[m] / (3.0 * bulk[m] + shear[m])) for m in at]
        # E = G (3 - q), and log E runs between the resins' own moduli as the curve's does.
        rest = [np.log(3.0 - np.exp(e)) for e in ends]
        log_g = [np.log(shear[m]) for m in at]
        span = log_g[1] + rest[1] - log_g[0] - rest[0]
        # As much of the curve's bend in nu as the resins have of the curve's contrast.
        free, dfree = free * (span / curve.span), dfree * (span / curve.span)
        if self.side != "value":
            # The band is one of shear: K = E / (3 q) stays, so q goes along with E.
            g_side, dg_side, _, _ = curve.shape(t, self.side)
            free, dfree = free + span * (g_side - g), dfree + span * (dg_side - dg)
            g, dg = g_side, dg_side
        log_q = (1.0 - t) * ends[0] + t * ends[1] + free
        d_log_q = ends[1] - ends[0] + dfree
        three_q = 3.0 - np.exp(log_q)
        extra = span * g + rest[0] - np.log(three_q) - t * (log_g[1] - log_g[0])
        d_extra = span * dg + np.exp(log_q) / three_q * d_log_q - (log_g[1] - log_g[0])
        for total, slope, e, de in ((x, dx, extra, d_extra), (q, dq, free, dfree)):
            total += share**2 * e
            slope[i] += share * (2.0 * e - t * de)
            slope[j] += share * (2.0 * e + (1.0 - t) * de)


#: Blend laws by the word for them in a design file.
LAWS: dict[str, type[BlendLaw]] = {
    law.key: law
    for law in (
        CalibratedCurve, LogMix, SelfConsistent, HashinShtrikmanLower, HashinShtrikmanUpper,
        Voigt, Reuss,
    )
}  # fmt: skip
