"""Stiffness of voxels with nine constants a label, as a product, and its isotropic likeness."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import DTypeLike, NDArray

from voxelmat.errors import InputError
from voxelmat.fea.element import DEFAULT, Spacing
from voxelmat.fea.operator import planes
from voxelmat.fea.orthotropic_element import kernel_constants, modal_table
from voxelmat.kernels.orthotropic import apply_orthotropic, orthotropic_energy
from voxelmat.kernels.threads import threads
from voxelmat.kernels.vector import add_product
from voxelmat.monitor import computing

__all__ = [
    "Comparison",
    "OrthotropicStiffness",
    "check_constants",
    "check_voxels",
    "comparison",
    "orthotropic_stress",
    "stiffness_matrices",
]

Double = NDArray[np.float64]
Labels = NDArray[np.uint16]
Fill = NDArray[np.uint8]

# From engineering shear to the orthonormal basis (Kelvin), in which eigenvalues mean something.
_KELVIN = np.array([1.0, 1.0, 1.0, np.sqrt(2.0), np.sqrt(2.0), np.sqrt(2.0)])
# Least over largest eigenvalue of a stiffness below which it counts as indefinite.
_DEFINITE = 1e-12


def stiffness_matrices(constants: Double) -> Double:
    """6x6 stiffness of each label, MPa, (n, 6, 6), in the order xx, yy, zz, xy, xz, yz."""
    c11, c22, c33, c12, c13, c23, c44, c55, c66 = np.asarray(constants, dtype=np.float64).T
    out = np.zeros((len(c11), 6, 6))
    for d, value in enumerate((c11, c22, c33, c66, c55, c44)):
        out[:, d, d] = value
    for (a, b), value in zip(((0, 1), (0, 2), (1, 2)), (c12, c13, c23), strict=True):
        out[:, a, b] = out[:, b, a] = value
    return out


def check_constants(constants: Double) -> Double:
    """The nine constants of each label as an array (n, 9), or `InputError` where impossible.

    Row 0 is empty space and all 0, other rows may be; else a stiffness is positive definite.
    """
    given = np.ascontiguousarray(constants, dtype=np.float64)
    if given.ndim != 2 or given.shape[1] != 9 or not len(given):
        raise InputError(f"Nine constants a label are needed, shape (n, 9); got {given.shape}.")
    if np.any(given[0] != 0):
        raise InputError("Label 0 is empty space: its nine constants must be 0.")
    solid = np.any(given != 0, axis=1)
    sound = np.all(np.abs(given) < 1e12, axis=1)  # false for nan too
    values = np.linalg.eigvalsh(stiffness_matrices(np.where(sound[:, None], given, 0.0)))
    sound &= values[:, 0] > _DEFINITE * values[:, -1]
    bad = np.flatnonzero(solid & ~sound)
    if len(bad):
        n = int(bad[0])
        raise InputError(
            f"Label {n} has an impossible stiffness (C11 C22 C33 C12 C13 C23 C44 C55 C66 = "
            f"{', '.join(f'{v:g}' for v in given[n])} MPa): it must be positive definite and below "
            f"1e12 MPa, or all 0."
        )
    return given


def check_voxels(labels: Labels, fill: Fill | None, count: int) -> None:
    """Raise `InputError` where labels or fill do not fit each other or the table."""
    if labels.ndim != 3 or 0 in labels.shape or labels.dtype != np.uint16:
        raise InputError(f"labels must be 3-D of uint16; got {labels.shape} of {labels.dtype}.")
    if int(labels.max()) >= count:
        raise InputError(f"Label {labels.max()} points past the {count} labels with constants.")
    if fill is not None and (fill.shape != labels.shape or fill.dtype != np.uint8):
        raise InputError(f"fill must be uint8 of shape {labels.shape}; got {fill.shape}.")


class Comparison(NamedTuple):
    """The isotropic medium nearest to each label, and how near.

    Attributes
    ----------
    lam, mu : ndarray, shape (n,)
        Lame constants, MPa.
    low, high : ndarray, shape (n,)
        Energy of the label over that of the medium lies between these for every strain; 1 and 1
        where it is isotropic. Conjugate gradients preconditioned by the medium see a condition
        number of at most ``high.max() / low.min()``.
    """

    lam: Double
    mu: Double
    low: Double
    high: Double


def comparison(constants: Double) -> Comparison:
    """The nearest isotropic medium of each label; empty labels get 0.

    Nearest in the logarithmic Euclidean distance, which treats a stiffness and its inverse alike
    (M. Moakher & A. N. Norris, J. Elasticity 85 (2006) 215, from memory): its moduli are geometric
    means, where the Frobenius distance would side with the stiffest direction.
    """
    constants = check_constants(constants)
    some = np.flatnonzero(np.any(constants != 0, axis=1))
    C = stiffness_matrices(constants[some]) * _KELVIN[:, None] * _KELVIN
    values, vectors = np.linalg.eigh(C)
    log = np.einsum("nij,nj,nkj->nik", vectors, np.log(values), vectors)
    swelling = log[:, :3, :3].sum(axis=(1, 2)) / 3.0
    shear = (np.trace(log, axis1=1, axis2=2) - swelling) / 5.0
    bulk3, shear2 = np.exp(swelling), np.exp(shear)
    # Inverse square root of the medium: one factor for the change of volume, one for the rest.
    J = np.zeros((6, 6))
    J[:3, :3] = 1.0 / 3.0
    root = J * (bulk3**-0.5)[:, None, None] + (np.eye(6) - J) * (shear2**-0.5)[:, None, None]
    ratio = np.linalg.eigvalsh(root @ C @ root)
    out = np.zeros((2, len(constants)))
    out[:, some] = (bulk3 - shear2) / 3.0, shear2 / 2.0
    ends = np.ones((2, len(constants)))
    ends[:, some] = ratio[:, 0], ratio[:, -1]
    return Comparison(out[0], out[1], ends[0], ends[1])


def orthotropic_stress(strain: Double, labels: Labels, constants: Double) -> Double:
    """Stress in the material, MPa, from strains (6, nz, ny, nx)."""
    normal = np.array([[0, 3, 4], [3, 1, 5], [4, 5, 2]])
    out = np.zeros_like(strain)
    for a in range(3):
        for b in range(3):
            out[a] += constants[labels, normal[a, b]] * strain[b]
    for c, voigt in ((3, 8), (4, 7), (5, 6)):
        out[c] = constants[labels, voigt] * strain[c]
    return out


class OrthotropicStiffness:
    """K of one grid of voxels, plus springs to ground, as a product.

    Parameters
    ----------
    labels : ndarray of uint16, shape (nz, ny, nx)
        What `constants` is looked up by; 0 is empty.
    constants : ndarray, shape (n, 9)
        C11 C22 C33 C12 C13 C23 C44 C55 C66 of each label, MPa (4 is yz, 5 is xz, 6 is xy).
    spacing : tuple of float
        Voxel edge along x, y, z, mm.
    element : str
        ``icmb``, ``icm`` or ``full``; see `voxelmat.fea.orthotropic_element`.
    fill : ndarray of uint8, shape of `labels`, optional
        What the stiffness is multiplied by, in 1/255.
    springs : ndarray or None, shape (3, nz+1, ny+1, nx+1)
        Stiffness to ground at each node and direction, N/mm.
    dtype : dtype
        Float type of the vectors.
    """

    def __init__(
        self,
        labels: Labels,
        constants: Double,
        spacing: Spacing,
        element: str = DEFAULT,
        *,
        fill: Fill | None = None,
        springs: NDArray[Any] | None = None,
        dtype: DTypeLike = np.float64,
    ) -> None:
        constants = check_constants(constants)
        check_voxels(labels, fill, len(constants))
        self.labels = np.ascontiguousarray(labels)
        none = np.zeros((0, 0, 0), dtype=np.uint8)
        self.fill = none if fill is None else np.ascontiguousarray(fill)
        self.springs = None if springs is None else np.ascontiguousarray(springs, dtype)
        self.table = modal_table(constants, element).astype(dtype)
        self.constants = kernel_constants(spacing, element, dtype)
        self.shape = (3, *(n + 1 for n in labels.shape))

    def apply(self, u: NDArray[Any], y: NDArray[Any]) -> None:
        """Write K u to y; both C-contiguous and of the float type given."""
        chunks = int(threads())
        apply_orthotropic(u, self.labels, self.fill, self.table, y, self.constants, chunks)
        if self.springs is not None:
            add_product(planes(self.springs), planes(u), planes(y))

    def energy(self, u: Double) -> Double:
        """Strain energy of each voxel, mJ, (nz, ny, nx); for a stiffness in double precision."""
        if u.shape != self.shape or u.dtype != self.table.dtype:
            raise InputError(f"u must have shape {self.shape}; got {u.shape} of {u.dtype}.")
        out = np.empty(self.labels.shape)
        with computing():
            orthotropic_energy(
                np.ascontiguousarray(u), self.labels, self.fill, self.table, self.constants, out
            )
        return 0.5 * out

    @property
    def nbytes(self) -> int:
        """Memory held, bytes."""
        extra = 0 if self.springs is None else self.springs.nbytes
        return int(self.labels.nbytes + self.fill.nbytes + self.table.nbytes + extra)
