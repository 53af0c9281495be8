"""The initial-stress (geometric) stiffness of a stressed part, as a product."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.element import DEFAULT, Spacing, coefficients
from voxelmat.kernels.geometric import apply_geometric

__all__ = ["GeometricStiffness", "stress_modes"]

Double = NDArray[np.float64]

# Axes of the six constant stresses, and of the linear ones along x, y, z, in the kernel's order.
_CONSTANT = ((0, 0), (1, 1), (2, 2), (0, 1), (0, 2), (1, 2))


def _mode(a: Double, m: int) -> Double:
    """Sums and differences of the corner values of every voxel; bits of m say along which axes."""
    for axis, bit in ((2, 1), (1, 2), (0, 4)):
        low, high = [slice(None)] * 3, [slice(None)] * 3
        low[axis], high[axis] = slice(None, -1), slice(1, None)
        first, second = a[tuple(low)], a[tuple(high)]
        a = second - first if m & bit else second + first
    return a


def stress_modes(
    u: Double, lam: Double, mu: Double, spacing: Spacing, element: str = DEFAULT
) -> Double:
    """Stress that the element carries, constant and linear over each voxel.

    The linear part is that of the element's own bending and twisting modes, so the stress of a
    plate one voxel thick in bending is there too.

    Parameters
    ----------
    u : ndarray of float64, shape (3, nz+1, ny+1, nx+1)
        mm.
    lam, mu : ndarray of float64, shape (nz, ny, nx)
        MPa, times the filled fraction.
    spacing : tuple of float
        mm.
    element : str

    Returns
    -------
    ndarray of float64, shape (15, nz, ny, nx)
        MPa, times the filled fraction: constant xx, yy, zz, xy, xz, yz; then what grows along x
        (yy, zz, yz), along y (xx, zz, xz) and along z (xx, yy, xy), at the voxel's upper end.
    """
    shape = tuple(n + 1 for n in lam.shape)
    if u.shape != (3, *shape):
        raise InputError(f"u must have shape {(3, *shape)}; got {u.shape}.")
    g = [0.25 / h for h in spacing]  # 2 / h over the 8 corners
    bit = (1, 2, 4)
    linear = coefficients(lam, mu, element)[2]
    out = np.empty((15, *lam.shape))
    normal = [g[a] * _mode(u[a], bit[a]) for a in range(3)]
    pressure = lam * (normal[0] + normal[1] + normal[2])
    for a in range(3):
        out[a] = pressure + 2.0 * mu * normal[a]
    for n, (a, b) in enumerate(_CONSTANT[3:], start=3):
        out[n] = mu * (g[b] * _mode(u[a], bit[b]) + g[a] * _mode(u[b], bit[a]))
    for v in range(3):
        a, b = (d for d in range(3) if d != v)
        ea = g[a] * _mode(u[a], bit[a] | bit[v])
        eb = g[b] * _mode(u[b], bit[b] | bit[v])
        twist = g[b] * _mode(u[a], bit[b] | bit[v]) + g[a] * _mode(u[b], bit[a] | bit[v])
        out[6 + 3 * v] = linear * (ea + eb) + 2.0 * mu * ea
        out[7 + 3 * v] = linear * (ea + eb) + 2.0 * mu * eb
        out[8 + 3 * v] = mu * twist
    return out


class GeometricStiffness:
    """Kg: virtual work of stress on the products of displacement gradients.

    ``u . Kg u`` is the integral of stress_ij (du_k/dx_i) (du_k/dx_j): the consistent initial-stress
    matrix of the 8-node hexahedron (O. C. Zienkiewicz, The Finite Element Method, from memory),
    exact for stresses that are linear over a voxel in the way of `stress_modes`.

    Parameters
    ----------
    stress : ndarray of float64, shape (15, nz, ny, nx)
        See `stress_modes`.
    full : ndarray of bool, shape (nz, ny, nx)
        Voxels that count.
    spacing : tuple of float
        mm.
    """

    def __init__(self, stress: Double, full: NDArray[np.bool_], spacing: Spacing) -> None:
        # The kernel's modes are plain sums over the 8 corners; these make gradients of them.
        g = [0.25 / h for h in spacing]
        volume = float(np.prod(spacing))
        pairs = list(_CONSTANT)
        for v in range(3):
            a, b = (d for d in range(3) if d != v)
            pairs += [(a, a), (b, b), (a, b)]
        factor = np.array([volume * g[a] * g[b] for a, b in pairs])
        self._stress = np.ascontiguousarray(stress * factor[:, None, None, None])
        self._full = np.ascontiguousarray(full)

    def apply(self, u: Double, y: Double) -> None:
        """Write Kg u to y, both ``[3, nz+1, ny+1, nx+1]``, N."""
        apply_geometric(u, self._stress, self._full, y)
