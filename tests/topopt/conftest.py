"""Small problems on arrays, so that responses are tested without regions and files."""

import numpy as np
import pytest

from voxelmat.fea.element import basis_matrices, coefficients
from voxelmat.model.laws import LogMix
from voxelmat.topopt.interpolation import VoidLaw
from voxelmat.topopt.physics import Case
from voxelmat.topopt.unknowns import Choice, Palette, Unknowns


def _palette(E, nu, density=None, law=None):
    E, nu = np.array(E, float), np.array(nu, float)
    return Palette(
        names=tuple(f"resin{m}" for m in range(len(E))),
        bulk=E / 3 / (1 - 2 * nu),
        shear=E / 2 / (1 + nu),
        density=np.ones(len(E)) if density is None else np.array(density, float),
        law=law or LogMix(),
    )


def _block(shape):
    """Every voxel free, none frozen."""
    off = np.zeros(shape, bool)
    return Choice(
        domain=np.ones(shape, bool), solid=off, empty=off, resin=np.full(shape, -1),
        fill=np.ones(shape), kept_lam=np.zeros(shape), kept_mu=np.zeros(shape),
    )  # fmt: skip


def _cantilever(shape, second=False):
    """x = 0 clamped; a unit line load at z = 0 of the far face, and one along y."""
    nz, ny, nx = shape
    fixed = np.zeros((3, nz + 1, ny + 1, nx + 1), bool)
    fixed[:, :, :, 0] = True
    down = np.zeros(fixed.shape)
    down[2, 0, :, nx] = -1.0 / (ny + 1)
    cases = [Case(name="down", weight=1.0, force=down, fixed=fixed)]
    if second:
        side = np.zeros(fixed.shape)
        side[1, :, 0, nx] = 1.0 / (nz + 1)
        cases.append(Case(name="side", weight=0.5, force=side, fixed=fixed))
    return tuple(cases)


def _pad(shape, pressure):
    """Bottom clamped, pressure (ny, nx) in MPa on the top as consistent forces; 1 mm voxels."""
    nz, ny, nx = shape
    fixed = np.zeros((3, nz + 1, ny + 1, nx + 1), bool)
    fixed[:, 0] = True
    force = np.zeros(fixed.shape)
    for b in (0, 1):
        for a in (0, 1):
            force[2, nz, b : ny + b, a : nx + a] -= pressure / 4
    return (Case(name="press", weight=1.0, force=force, fixed=fixed),)


class _DenseSystem:
    """Same interface as the real solver, but an assembled matrix and a dense factorisation."""

    def __init__(self, lam, mu, spacing, fixed, *, springs, element, monitor):
        nz, ny, nx = lam.shape
        number = np.arange(fixed.size).reshape(fixed.shape)
        rows = np.stack([
            number[c, a >> 2 : nz + (a >> 2), (a >> 1 & 1) : ny + (a >> 1 & 1),
                   (a & 1) : nx + (a & 1)].ravel()
            for a in range(8) for c in range(3)
        ])  # fmt: skip
        values = sum(
            B[:, :, None] * v.ravel()
            for B, v in zip(
                basis_matrices(spacing, element), coefficients(lam, mu, element), strict=True
            )
        )
        K = np.zeros((fixed.size, fixed.size))
        np.add.at(K, (rows[:, None].repeat(24, 1), rows[None].repeat(24, 0)), values)
        if springs is not None:
            K[np.diag_indices_from(K)] += springs.ravel()
        self._free = np.flatnonzero(~fixed.ravel())
        self._K = K[np.ix_(self._free, self._free)]
        self._shape = fixed.shape

    def solve(self, b, *, x0=None, tol=0.0):
        u = np.zeros(b.size)
        u[self._free] = np.linalg.solve(self._K, b.ravel()[self._free])
        return _Answer(u.reshape(self._shape))


class _Answer:
    iterations = 1

    def __init__(self, u):
        self.u = u


@pytest.fixture
def dense_system():
    return _DenseSystem


@pytest.fixture
def palette():
    return _palette


@pytest.fixture
def block():
    return _block


@pytest.fixture
def cantilever():
    return _cantilever


@pytest.fixture
def pad():
    return _pad


@pytest.fixture
def unknowns():
    """Build unknowns on a block: ``unknowns(shape, E, nu, void=True, ...)``."""

    def build(
        shape, E, nu, *, void=True, radius=1.5, spacing=(1.0, 1.0, 1.0), penalty=3.0,
        kind="bounded", floor=1e-6, density=None, law=None, choice=None,
        simplex=False, empty_beyond=False,
    ):  # fmt: skip
        soft = floor * min(E)
        laws = VoidLaw(
            penalty=penalty, kind=kind, floor_shear=soft / 2.6,
            floor_lame=soft * 0.3 / 0.52 if kind == "bounded" else 0.0,
        )  # fmt: skip
        return Unknowns(
            choice or _block(shape), _palette(E, nu, density, law),
            void=laws if void else None, spacing=spacing, radius=radius, simplex=simplex,
            empty_beyond=empty_beyond,
        )  # fmt: skip

    return build
