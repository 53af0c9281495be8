"""The box element: five formulations of one 8-node hexahedron, as matrices and as constants.

In the basis of products of corner signs (Walsh-Hadamard modes) the stiffness of a box with
isotropic material is block-diagonal, and the formulations differ only in the modulus that its
linear and bilinear strain modes see:

======  ==========================  ===============  =======================
name    linear modes see lambda     parasitic shear  bilinear normal modulus
======  ==========================  ===============  =======================
full    lambda                      kept             lambda + 2 mu
sri     0                           kept             2 mu
bbar    -2 mu / 3                   kept             4 mu / 3
icm     l* = 2 mu lam/(lam + 2 mu)  dropped          lambda + 2 mu
icmb    l*                          dropped          l* + 2 mu
======  ==========================  ===============  =======================

``full`` is 2x2x2 Gauss, ``bbar`` mean dilatation (Hughes 1980, IJNME 15:1413), ``icm`` the nine
incompatible modes of Wilson and Taylor (Taylor, Beresford & Wilson 1976, IJNME 10:1211)
condensed; ``icmb``, the default, also relaxes the bilinear normal strains, so that it locks
neither in bending nor towards incompressibility. Attributions from memory.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import DTypeLike, NDArray

from voxelmat.errors import InputError

__all__ = [
    "DEFAULT",
    "ELEMENTS",
    "basis_matrices",
    "coefficients",
    "corner_blocks",
    "element_matrix",
    "kernel_constants",
]

Floats = NDArray[np.float64]
Spacing = tuple[float, float, float]

#: Used where nothing else is asked for.
DEFAULT = "icmb"

# (weights of l*, lambda, mu in the linear lambda), (the same for the bilinear modulus), kept
_RECIPES: dict[str, tuple[tuple[float, float, float], tuple[float, float, float], float]] = {
    "icmb": ((1.0, 0.0, 0.0), (1.0, 0.0, 2.0), 0.0),
    "icm": ((1.0, 0.0, 0.0), (0.0, 1.0, 2.0), 0.0),
    "bbar": ((0.0, 0.0, -2.0 / 3.0), (0.0, 0.0, 4.0 / 3.0), 1.0),
    "sri": ((0.0, 0.0, 0.0), (0.0, 0.0, 2.0), 1.0),
    "full": ((0.0, 1.0, 0.0), (0.0, 1.0, 2.0), 1.0),
}

#: Names of the formulations.
ELEMENTS = tuple(_RECIPES)

# Keeps l* = 0 in empty voxels; far below any modulus in MPa, and a normal single-precision number.
_TINY = 1e-30


def _recipe(element: str) -> tuple[tuple[float, float, float], tuple[float, float, float], float]:
    try:
        return _RECIPES[element]
    except KeyError:
        raise InputError(
            f"There is no element '{element}'; choose one of {', '.join(ELEMENTS)}."
        ) from None


def kernel_constants(
    spacing: Spacing, element: str, dtype: DTypeLike = np.float64
) -> NDArray[np.floating]:
    """The 13 constants that the kernels take, for voxels of `spacing` mm.

    Parameters
    ----------
    spacing : tuple of float
        Voxel edge along x, y, z, mm.
    element : str
        One of `ELEMENTS`.
    dtype : dtype
        Float type of the kernel call.
    """
    linear, bilinear, kept = _recipe(element)
    h = np.asarray(spacing, dtype=np.float64)
    # Mode gradients 2 / h, with the square root of volume / 64 folded in (energy is quadratic).
    g = 2.0 / h * np.sqrt(h.prod() / 64.0)
    return np.array([*g, 1 / 3, 1 / 9, _TINY, *linear, *bilinear, kept / 3.0], dtype=dtype)


def coefficients(
    lam: Floats, mu: Floats, element: str = DEFAULT
) -> tuple[Floats, Floats, Floats, Floats]:
    """What an element matrix is linear in: lam, mu, linear lambda, bilinear modulus."""
    linear, bilinear, _ = _recipe(element)
    lam, mu = np.asarray(lam, dtype=np.float64), np.asarray(mu, dtype=np.float64)
    star = 2.0 * mu * lam / (lam + 2.0 * mu + _TINY)
    ls = linear[0] * star + linear[1] * lam + linear[2] * mu
    lb = bilinear[0] * star + bilinear[1] * lam + bilinear[2] * mu
    return lam, mu, ls, lb


def _strain_rows(
    spacing: Spacing, kept: bool
) -> list[tuple[int, float, list[dict[tuple[int, int], float]]]]:
    """Blocks of strain modes: (kind, weight, rows), a row maps (component, mode bits) to a factor.

    Kinds: 0 the constant normal strains, 1 a shear, 2 a pair of linear normal strains, 3 a
    bilinear normal strain. Bits 1, 2, 4 of a mode say that it varies along x, y, z.
    """
    g = [2.0 / h for h in spacing]
    bit = (1, 2, 4)
    blocks: list[tuple[int, float, list[dict[tuple[int, int], float]]]] = []
    blocks.append((0, 1.0, [{(a, bit[a]): g[a]} for a in range(3)]))
    for a, b in ((0, 1), (0, 2), (1, 2)):
        blocks.append((1, 1.0, [{(a, bit[b]): g[b], (b, bit[a]): g[a]}]))
    for v in range(3):
        a, b = (d for d in range(3) if d != v)
        va, vb = bit[v] | bit[a], bit[v] | bit[b]
        blocks.append((2, 1 / 3, [{(a, va): g[a]}, {(b, vb): g[b]}]))
        blocks.append((1, 1 / 3, [{(a, vb): g[b], (b, va): g[a]}]))
        if kept:
            # Shear of a bending mode: component a of mode (a, v) sheared along v, and so on.
            blocks.extend((1, 1 / 3, [{(c, bit[c] | bit[v]): g[v]}]) for c in (a, b))
    for c in range(3):
        blocks.extend((3 if a == c else 1, 1 / 9, [{(c, 7): g[a]}]) for a in range(3))
    return blocks


@lru_cache(maxsize=32)
def _basis(spacing: Spacing, kept: bool) -> Floats:
    corners = np.arange(8)
    signs = np.array([2 * (corners >> d & 1) - 1 for d in range(3)])
    modes = (
        np.array([np.prod([signs[d] ** (m >> d & 1) for d in range(3)], axis=0) for m in range(8)])
        / 8.0
    )
    out = np.zeros((4, 24, 24))
    volume = float(np.prod(spacing))
    for kind, weight, rows in _strain_rows(spacing, kept):
        R = np.zeros((len(rows), 24))
        for r, row in enumerate(rows):
            for (c, m), factor in row.items():
                R[r, c::3] += factor * modes[m]
        w = volume * weight
        normal, trace = R.T @ R, np.outer(R.sum(axis=0), R.sum(axis=0))
        if kind == 0:
            out[0] += w * trace
            out[1] += 2.0 * w * normal
        elif kind == 1:
            out[1] += w * normal
        elif kind == 2:
            out[2] += w * trace
            out[1] += 2.0 * w * normal
        else:
            out[3] += w * normal
    out.flags.writeable = False
    return out


def basis_matrices(spacing: Spacing, element: str = DEFAULT) -> Floats:
    """The four 24x24 matrices that the `coefficients` of a voxel multiply, shape (4, 24, 24).

    Unknown ``3 a + c`` is component c at corner a; corner a sits at offset
    ``(a & 1, a >> 1 & 1, a >> 2)`` along x, y, z.
    """
    kept = _recipe(element)[2] > 0
    return _basis((float(spacing[0]), float(spacing[1]), float(spacing[2])), kept)


def element_matrix(lam: float, mu: float, spacing: Spacing, element: str = DEFAULT) -> Floats:
    """Stiffness of one voxel, N/mm, shape (24, 24), numbered as in `basis_matrices`."""
    values = [float(c) for c in coefficients(np.array(lam), np.array(mu), element)]
    return np.asarray(np.tensordot(values, basis_matrices(spacing, element), axes=1))


def corner_blocks(spacing: Spacing, element: str = DEFAULT) -> Floats:
    """Entries xx, yy, zz, xy, xz, yz of the corner blocks, shape (8 corners, 6, 4 coefficients)."""
    rows, cols = np.array([0, 1, 2, 0, 0, 1]), np.array([0, 1, 2, 1, 2, 2])
    a = 3 * np.arange(8)[:, None]
    blocks = basis_matrices(spacing, element)[:, a + rows, a + cols]
    return np.ascontiguousarray(np.moveaxis(blocks, 0, -1))
