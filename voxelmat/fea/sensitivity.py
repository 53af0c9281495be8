"""How v . K u changes with the Lame constants of each voxel: what gradients are made of."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.element import DEFAULT, Spacing, kernel_constants
from voxelmat.kernels.forms import centre_strain, centre_strain_adjoint, stiffness_slopes
from voxelmat.monitor import computing

__all__ = ["stiffness_forms", "strain", "strain_adjoint"]

Double = NDArray[np.float64]


def _nodes(u: Double, shape: tuple[int, ...], name: str) -> Double:
    wanted = (3, *(n + 1 for n in shape))
    if u.shape != wanted:
        raise InputError(f"{name} must have shape {wanted}; got {u.shape}.")
    return np.ascontiguousarray(u, dtype=np.float64)


def stiffness_forms(
    u: Double, v: Double, lam: Double, mu: Double, spacing: Spacing, element: str = DEFAULT
) -> tuple[Double, Double]:
    """Derivatives of v . K u with respect to lam and mu of each voxel.

    Parameters
    ----------
    u, v : ndarray of float64, shape (3, nz+1, ny+1, nx+1)
        mm.
    lam, mu : ndarray of float64, shape (nz, ny, nx)
        MPa; needed because the condensed modes are not linear in them.
    spacing : tuple of float
        mm.
    element : str
        See `voxelmat.fea.element`.

    Returns
    -------
    dlam, dmu : ndarray of float64, shape (nz, ny, nx)
        mm^3: the derivative at fixed u and v. For compliance f . u, with K u = f, the gradient
        is minus this with v = u.
    """
    lam = np.ascontiguousarray(lam, dtype=np.float64)
    mu = np.ascontiguousarray(mu, dtype=np.float64)
    u, v = _nodes(u, lam.shape, "u"), _nodes(v, lam.shape, "v")
    dlam, dmu = np.empty_like(lam), np.empty_like(mu)
    with computing():
        stiffness_slopes(u, v, lam, mu, kernel_constants(spacing, element), dlam, dmu)
    return dlam, dmu


def strain(u: Double, spacing: Spacing) -> Double:
    """Strain at voxel centres: xx, yy, zz, xy, xz, yz, shear as engineering strain.

    Parameters
    ----------
    u : ndarray of float64, shape (3, nz+1, ny+1, nx+1)
        mm.
    spacing : tuple of float
        mm.

    Returns
    -------
    ndarray of float64, shape (6, nz, ny, nx)
    """
    shape = tuple(n - 1 for n in u.shape[1:])
    u = _nodes(u, shape, "u")
    out = np.empty((6, *shape))
    with computing():
        centre_strain(u, 1.0 / np.asarray(spacing, dtype=np.float64), out)
    return out


def strain_adjoint(s: Double, spacing: Spacing) -> Double:
    """Transpose of `strain`: (6, nz, ny, nx) to nodes (3, nz+1, ny+1, nx+1), per mm."""
    if s.ndim != 4 or s.shape[0] != 6:
        raise InputError(f"s must have shape (6, nz, ny, nx); got {s.shape}.")
    s = np.ascontiguousarray(s, dtype=np.float64)
    out = np.empty((3, *(n + 1 for n in s.shape[1:])))
    with computing():
        centre_strain_adjoint(s, 1.0 / np.asarray(spacing, dtype=np.float64), out)
    return out
