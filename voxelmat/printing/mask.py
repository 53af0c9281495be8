"""The 3-D blue-noise threshold mask: built by void-and-cluster, shipped as data, skewed in use."""

from __future__ import annotations

import hashlib
from functools import cache
from importlib.resources import files
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError, InputError

__all__ = ["SIDE", "SKEW", "build_mask", "mask_digest", "mask_phase", "thresholds", "write_mask"]

#: Sites along one side of the shipped mask.
SIDE = 64
#: The mask's z phase grows by so many sites from tile to tile along x and y; odd numbers, so
#: that a row of tiles meets every phase and one layer's mean error averages out.
SKEW = (37, 23)
_SIGMA = 1.5  # sites; width of the Gaussian that decides what is a void and what a cluster
_FILE = "mask64.npy"


def build_mask(side: int = SIDE, seed: int = 1, sigma: float = _SIGMA) -> NDArray[np.uint16]:
    """Build a periodic mask of 16-bit thresholds by void-and-cluster.

    Parameters
    ----------
    side : int
        Sites along each axis, a multiple of 4, at least 16 (64 takes some ten seconds).
    seed : int
        Of the random initial pattern.
    sigma : float
        Width of the Gaussian, sites.

    Returns
    -------
    ndarray of uint16, shape (side, side, side)
        A site with threshold T takes the first material where its fraction exceeds
        ``(T + 0.5) / 65536``.

    Notes
    -----
    R. Ulichney, "The void-and-cluster method for dither array generation", Proc. SPIE 1913,
    1993, 332-343, carried over to three dimensions.
    """
    from voxelmat.kernels.bluenoise import void_and_cluster

    if side % 4 or not 16 <= side <= 128:
        raise InputError(f"A mask has a side of 16 to 128 sites, a multiple of 4; got {side}.")
    random = np.random.Generator(np.random.Philox(key=[seed, side]))
    count = side**3
    filled = np.zeros(count, dtype=np.bool_)
    filled[random.choice(count, count // 10, replace=False)] = True
    energy = 1e-7 * random.random((side, side, side))
    reach = int(np.ceil(3.2 * sigma))
    line = np.exp(-0.5 * (np.arange(-reach, reach + 1) / sigma) ** 2)
    kernel = line[:, None, None] * line[None, :, None] * line[None, None, :]
    rank = np.empty((side, side, side), dtype=np.int32)
    void_and_cluster(energy, filled.reshape(energy.shape), kernel, rank)
    return (rank.astype(np.int64) * 65536 // count).astype(np.uint16)


def write_mask(folder: Path, seed: int = 1) -> None:
    """Write the mask file that is shipped; run once, by whoever changes the method."""
    np.save(folder / _FILE, build_mask(seed=seed))


@cache
def _shipped() -> NDArray[np.uint16]:
    with (files("voxelmat.printing") / _FILE).open("rb") as handle:
        mask: NDArray[np.uint16] = np.load(handle, allow_pickle=False)
    if mask.shape != (SIDE, SIDE, SIDE) or mask.dtype != np.uint16:
        raise FileFormatError(f"The shipped mask has shape {mask.shape} and type {mask.dtype}.")
    return mask


def mask_digest() -> str:
    """SHA-256 of the shipped thresholds."""
    return hashlib.sha256(_shipped().tobytes()).hexdigest()


def thresholds() -> NDArray[np.float32]:
    """The shipped mask as thresholds in (0, 1), indexed ``[layer, row, column]``."""
    return (_shipped().astype(np.float32) + np.float32(0.5)) / np.float32(65536)


def mask_phase(seed: int) -> tuple[int, int, int]:
    """Where `seed` starts the mask: layer, row, column."""
    random = np.random.Generator(np.random.Philox(key=[seed, 0]))
    z, y, x = (int(v) for v in random.integers(0, SIDE, 3))
    return (z, y, x)
