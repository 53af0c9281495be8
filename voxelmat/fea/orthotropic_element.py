"""The box element with nine constants in the grid's axes: moduli of its modes, and its matrices.

Of the formulations in `voxelmat.fea.element`, three have an orthotropic form. With C the
stiffness and v the axis along which a mode varies:

======  ================================  ===============  ==========================
name    linear modes along v see          parasitic shear  bilinear mode of x sees
======  ================================  ===============  ==========================
full    C_ab                              kept             C_xx
icm     Q_ab = C_ab - C_av C_bv / C_vv    dropped          C_xx
icmb    Q_ab                              dropped          mean of its two Q_xx
======  ================================  ===============  ==========================

Q is the stiffness in plane stress across v: what condensing the incompatible modes of Wilson and
Taylor leaves, also here, since shear and normal strains do not mix. A bilinear normal strain may
relax along either of the other two axes; the mean of both treats the axes alike, stays positive,
bounded where C is nearly incompressible, and is that of the isotropic element where C is isotropic.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import DTypeLike, NDArray

from voxelmat.errors import InputError
from voxelmat.fea.element import DEFAULT, Spacing

__all__ = [
    "FORMS",
    "corner_blocks",
    "element_matrices",
    "isotropic_constants",
    "kernel_constants",
    "modal_table",
]

Double = NDArray[np.float64]

#: Formulations with an orthotropic form.
FORMS = ("icmb", "icm", "full")


def _checked(element: str) -> str:
    if element not in FORMS:
        raise InputError(
            f"Element '{element}' has no orthotropic form; choose one of {', '.join(FORMS)}."
        )
    return element


def kernel_constants(
    spacing: Spacing, element: str = DEFAULT, dtype: DTypeLike = np.float64
) -> NDArray[np.floating]:
    """The 7 constants that the kernels take: mode gradients, 1/3, 1/9, kept shear / 3, 1/255."""
    h = np.asarray(spacing, dtype=np.float64)
    # Volume / 64 is folded into the gradients 2 / h, since energy is quadratic in them.
    g = 2.0 / h * np.sqrt(h.prod() / 64.0)
    kept = 1 / 3 if _checked(element) == "full" else 0.0
    return np.array([*g, 1 / 3, 1 / 9, kept, 1 / 255], dtype=dtype)


def isotropic_constants(lam: Double, mu: Double) -> Double:
    """C11 C22 C33 C12 C13 C23 C44 C55 C66 from Lame constants (n,), MPa, shape (n, 9)."""
    lam, mu = np.asarray(lam, dtype=np.float64), np.asarray(mu, dtype=np.float64)
    return np.stack([lam + 2 * mu] * 3 + [lam] * 3 + [mu] * 3, axis=1)


def modal_table(constants: Double, element: str = DEFAULT) -> Double:
    """What each mode sees, shape (21, n); the order is that of the kernel.

    Parameters
    ----------
    constants : ndarray, shape (n, 9)
        C11 C22 C33 C12 C13 C23 C44 C55 C66 (4 is yz, 5 is xz, 6 is xy) of each label, MPa; all 0
        for empty space.
    element : str
        One of `FORMS`.
    """
    c11, c22, c33, c12, c13, c23 = np.asarray(constants, dtype=np.float64).T[:6]
    if _checked(element) == "full":
        linear = [c22, c33, c23, c11, c33, c13, c11, c22, c12]
    else:
        x, y, z = (np.where(c > 0, c, 1.0) for c in (c11, c22, c33))
        linear = [
            *(c22 - c12**2 / x, c33 - c13**2 / x, c23 - c12 * c13 / x),
            *(c11 - c12**2 / y, c33 - c23**2 / y, c13 - c12 * c23 / y),
            *(c11 - c13**2 / z, c22 - c23**2 / z, c12 - c13 * c23 / z),
        ]
    bilinear = [c11, c22, c33]
    if element == "icmb":
        bilinear = [
            0.5 * (linear[3] + linear[6]),
            0.5 * (linear[0] + linear[7]),
            0.5 * (linear[1] + linear[4]),
        ]
    return np.ascontiguousarray([*np.asarray(constants).T, *linear, *bilinear])


def _mode_vectors(spacing: Spacing) -> Double:
    """Row [c, m]: from the 24 unknowns to mode m of component c."""
    corner = np.arange(8)
    signs = np.array([2 * (corner >> d & 1) - 1 for d in range(3)])
    out = np.zeros((3, 8, 24))
    for m in range(8):
        for c in range(3):
            out[c, m, c::3] = np.prod([signs[d] ** (m >> d & 1) for d in range(3)], axis=0) / 8.0
    return out


@lru_cache(maxsize=32)
def _basis(spacing: Spacing, kept: bool) -> Double:
    """The 21 matrices that a column of the table multiplies, shape (21, 24, 24)."""
    N = _mode_vectors(spacing)
    g = [2.0 / h for h in spacing]
    out = np.zeros((21, 24, 24))

    def add(q: int, weight: float, p: Double, r: Double) -> None:
        out[q] += 0.5 * weight * (np.outer(p, r) + np.outer(r, p))

    bit = (1, 2, 4)
    normal = [g[a] * N[a, bit[a]] for a in range(3)]
    for a in range(3):
        add(a, 1.0, normal[a], normal[a])
    for q, (a, b) in zip((3, 4, 5), ((0, 1), (0, 2), (1, 2)), strict=True):
        add(q, 2.0, normal[a], normal[b])
    for v in range(3):
        a, b = (d for d in range(3) if d != v)
        q = 6 + v  # Voigt's 4, 5, 6 are the shears across x, y, z
        shear = g[b] * N[a, bit[b]] + g[a] * N[b, bit[a]]
        twist = g[b] * N[a, bit[v] | bit[b]] + g[a] * N[b, bit[v] | bit[a]]
        add(q, 1.0, shear, shear)
        add(q, 1 / 3, twist, twist)
        for c, d in ((a, b), (b, a)):
            if kept:
                bent = g[d] * N[c, bit[c] | bit[d]]
                add(q, 1 / 3, bent, bent)
            add(q, 1 / 9, g[d] * N[c, 7], g[d] * N[c, 7])
        first, second = g[a] * N[a, bit[v] | bit[a]], g[b] * N[b, bit[v] | bit[b]]
        add(9 + 3 * v, 1 / 3, first, first)
        add(10 + 3 * v, 1 / 3, second, second)
        add(11 + 3 * v, 2 / 3, first, second)
        add(18 + v, 1 / 9, g[v] * N[v, 7], g[v] * N[v, 7])
    out *= float(np.prod(spacing))
    out.flags.writeable = False
    return out


def element_matrices(constants: Double, spacing: Spacing, element: str = DEFAULT) -> Double:
    """Stiffness of one voxel of each label, N/mm, shape (n, 24, 24).

    Numbered as in `voxelmat.fea.element.basis_matrices`; `constants` as in `modal_table`.
    """
    h = (float(spacing[0]), float(spacing[1]), float(spacing[2]))
    table = modal_table(constants, element)
    return np.asarray(np.tensordot(table.T, _basis(h, element == "full"), axes=1))


def corner_blocks(constants: Double, spacing: Spacing, element: str = DEFAULT) -> Double:
    """Entries xx, yy, zz, xy, xz, yz of the corner blocks of each label, shape (n, 8, 6)."""
    K = element_matrices(constants, spacing, element)
    rows, cols = np.array([0, 1, 2, 0, 0, 1]), np.array([0, 1, 2, 1, 2, 2])
    a = 3 * np.arange(8)[:, None]
    return np.ascontiguousarray(K[:, a + rows, a + cols])
