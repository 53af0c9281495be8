"""Only what is held up from below gets printed: a filter from the plate upwards.

Layer by layer along +z, a voxel comes out as the smooth minimum of its own density and of the
smooth maximum of the densities that came out right below it, within one layer's reach at the
self-support angle. The plate below the lowest layer holds everything up.

References
----------
Langelaar, M., An additive manufacturing filter for topology optimization of print-ready designs,
Struct. Multidisc. Optim. 55 (2017) 871-883 (formulas from memory; there at 45 degrees, here the
reach follows from the angle).
"""

from __future__ import annotations

import itertools
import math

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError

__all__ = ["SelfSupport"]

Array = NDArray[np.float64]
Memory = tuple[Array, Array, Array]

_POWER = 40.0  # of the smooth maximum
_ROUND = 1e-4  # of the smooth minimum
_LEAST = 1e-12  # a density of 0 has no power of the smooth maximum's inner slope


class SelfSupport:
    """Density to printed density and back.

    Parameters
    ----------
    angle : float
        Least angle of a surface from the horizontal that prints without support, degrees.
    spacing : tuple of float
        mm, along x, y, z; z is the build direction.

    Raises
    ------
    InputError
        If voxels are so flat or so tall that the angle cannot be told from upright.
    """

    def __init__(self, angle: float, spacing: tuple[float, float, float]) -> None:
        hx, hy, hz = spacing
        reach = hz / math.tan(math.radians(angle))
        nx, ny = int(reach / hx + 1e-9), int(reach / hy + 1e-9)
        self.offsets = [
            (b, a)
            for b, a in itertools.product(range(-ny, ny + 1), range(-nx, nx + 1))
            if math.hypot(a * hx, b * hy) <= reach * (1 + 1e-9)
        ]
        if nx < 1 or ny < 1:
            steepest = math.degrees(math.atan(hz / max(hx, hy)))
            raise InputError(
                f"A self-support angle of {angle:g} degrees reaches {reach:.3g} mm sideways in a "
                f"layer of {hz:g} mm, less than a voxel of {hx:g} x {hy:g} mm; on this grid it "
                f"can be at most {steepest:.3g} degrees."
            )
        # So that equal supports at one half give one half.
        self._root = _POWER + math.log(len(self.offsets)) / math.log(0.5)

    def __call__(self, rho: Array) -> tuple[Array, Memory]:
        """Printed density, (nz, ny, nx), and what `transpose` needs."""
        out, held = np.empty_like(rho), np.ones_like(rho)
        out[0] = rho[0]
        for k in range(1, len(rho)):
            held[k] = self._most(out[k - 1])
            out[k] = _least(rho[k], held[k])
        return out, (rho, held, out)

    def transpose(self, slope: Array, memory: Memory) -> Array:
        """Derivative by the density, from that by the printed density."""
        rho, held, out = memory
        back, carry = np.empty_like(rho), slope.copy()
        for k in range(len(rho) - 1, 0, -1):
            apart = (rho[k] - held[k]) / np.sqrt((rho[k] - held[k]) ** 2 + _ROUND)
            back[k] = carry[k] * 0.5 * (1.0 - apart)
            carry[k - 1] += self._most_back(out[k - 1], held[k], carry[k] * 0.5 * (1.0 + apart))
        back[0] = carry[0]
        return back

    def _most(self, below: Array) -> Array:
        total = np.zeros_like(below)
        for here, there in self._shifts(below.shape):
            total[here] += np.maximum(below[there], _LEAST) ** _POWER
        return np.asarray(np.maximum(total, _LEAST**_POWER) ** (1.0 / self._root))

    def _most_back(self, below: Array, held: Array, slope: Array) -> Array:
        positive = np.maximum(below, _LEAST)
        # held = total^(1/root), so d held / d below = P/root held^(1 - root) below^(P - 1).
        outer = slope * (_POWER / self._root) * np.maximum(held, _LEAST) ** (1.0 - self._root)
        out = np.zeros_like(below)
        for here, there in self._shifts(below.shape):
            out[there] += outer[here]
        return np.asarray(np.where(below > _LEAST, out * positive ** (_POWER - 1.0), 0.0))

    def _shifts(self, shape: tuple[int, ...]) -> list[tuple[tuple[slice, ...], tuple[slice, ...]]]:
        """Voxels that have a neighbour at an offset, and those neighbours."""
        found = []
        for offset in self.offsets:
            if any(abs(o) >= n for o, n in zip(offset, shape, strict=True)):
                continue
            here = tuple(
                slice(max(-o, 0), n - max(o, 0)) for o, n in zip(offset, shape, strict=True)
            )
            there = tuple(
                slice(max(o, 0), n + min(o, 0)) for o, n in zip(offset, shape, strict=True)
            )
            found.append((here, there))
        return found


def _least(a: Array, b: Array) -> Array:
    return np.asarray(
        np.clip(0.5 * (a + b - np.sqrt((a - b) ** 2 + _ROUND) + math.sqrt(_ROUND)), 0.0, 1.0)
    )
