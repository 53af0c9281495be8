"""Where the layers of a job come from: materials site by site, then dealt to channels."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import ResourceError
from voxelmat.kernels.sites import deal_sites
from voxelmat.printing.compose import TraySource
from voxelmat.printing.halftone import Slicer, packed_planes
from voxelmat.printing.job import PlacedPart, PrintJob
from voxelmat.printing.planes import DesignPlanes
from voxelmat.printing.raster import Matrix
from voxelmat.printing.support_policies import support_fill

__all__ = ["Dealer", "LayerSource", "slicer_of", "source_of"]


class LayerSource(Protocol):
    """Gives the sites of any run of layers; the same for any split into runs."""

    @property
    def image_shape(self) -> tuple[int, int, int]:
        """Layers, rows, columns."""

    @property
    def n_channels(self) -> int:
        """Materials: the resins of the job in order, support last."""

    def sites(self, first: int, last: int) -> Iterator[NDArray[np.uint8]]:
        """Material numbers of layers ``first`` to ``last - 1``, each uint8 (rows, 8 * stride).

        The array is used again for the next layer; 0 where nothing is laid.
        """

    def layers(self, first: int, last: int) -> Iterator[NDArray[np.uint8]]:
        """Layers ``first`` to ``last - 1``, each uint8 (materials, rows, ceil(columns / 8))."""


def slicer_of(
    job: PrintJob,
    item: PlacedPart,
    scratch: Path | None = None,
    planes: DesignPlanes | None = None,
) -> Slicer:
    """The slicer of one placed part of a job; its support field goes to `scratch`, if given.

    Copies that lie the same way can share their `planes`.
    """
    number = job.parts.index(item)
    fill = support_fill(job.support, job.profile.support_sizes, item.part, item.raster)
    return Slicer(
        item.part,
        item.raster,
        job.resins,
        support=fill or False,
        seed=job.seed,
        halftone=job.halftone,
        support_file=None if scratch is None else scratch / f"support-{number}.raw",
        planes=planes,
    )


def source_of(job: PrintJob, scratch: Path | None = None) -> LayerSource:
    """The source of all layers of a job.

    Parameters
    ----------
    job : PrintJob
    scratch : Path, optional
        Folder that keeps the support fields, to be shared by several processes; fields that
        are there are taken as they are.

    Raises
    ------
    InputError
        If a window of several does not start at a whole byte of the images.
    ResourceError
        If error diffusion would carry more than there is memory for.
    """
    slicers: list[Slicer] = []
    shared: dict[tuple[int, Matrix], DesignPlanes] = {}
    for item in job.parts:
        key = (id(item.part), item.raster.rotation)
        slicers.append(slicer_of(job, item, scratch, shared.get(key)))
        shared[key] = slicers[-1].planes
    _check_state(slicers)
    if len(slicers) == 1 and job.window == job.parts[0].raster:
        return slicers[0]
    return TraySource(job.parts, slicers, job.window)


#: Share of the memory that can be had which the state of error diffusion may take. Ours.
STATE_SHARE = 0.5


def _check_state(slicers: Sequence[Slicer]) -> None:
    """Refuse error diffusion of layers whose state does not fit, before a layer is written."""
    needed = sum(s.state_bytes for s in slicers)
    if not needed:
        return
    from voxelmat.fea.resources import available_bytes  # brings the solver with it

    free = available_bytes()
    if free is not None and needed > STATE_SHARE * free:
        raise ResourceError(
            f"Error diffusion carries {needed / 2**30:.3g} GiB from layer to layer here (four "
            "bytes a site and resin, and one a site), and at most half of the "
            f"{free / 2**30:.3g} GiB of free memory may go to it. Take the halftone 'blue noise', "
            "which carries nothing, or print fewer parts at a time."
        )


class Dealer:
    """Turns the materials of a layer into the channels of a job.

    Of a resin in n channels, site (layer, row, column) of the tray's image goes to its channel
    ``(layer // 2 + row // 2 + column // 2) mod n``, so what a site gets depends on nothing but
    its place.
    """

    def __init__(self, job: PrintJob) -> None:
        self._start = job.window.image_offset
        self._channels = _by_material(job.material_of)
        self._plain = all(len(c) == 1 for c in self._channels)
        most = max(map(len, self._channels))
        self._count = np.ones(256, dtype=np.uint8)
        self._table = np.zeros((256, most), dtype=np.uint8)  # 0, nothing laid, stays 0
        for material, places in enumerate(self._channels, start=1):
            self._count[material] = len(places)
            self._table[material, : len(places)] = np.add(places, 1)

    def planes(self, sites: NDArray[np.uint8], layer: int) -> Iterator[NDArray[np.uint8]]:
        """The packed bits of the channels one after another, from material numbers.

        Parameters
        ----------
        sites : ndarray of uint8, shape (rows, 8 * stride)
            Changed where a material has several channels.
        layer : int
            Counted from the first layer of the window.

        Yields
        ------
        ndarray of uint8, shape (rows, stride)
        """
        if not self._plain:
            start = np.add(self._start, (layer, 0, 0)).astype(np.int64)
            deal_sites(sites, start, self._count, self._table)
        yield from packed_planes(sites, sum(map(len, self._channels)))


def _by_material(material_of: Sequence[int]) -> list[list[int]]:
    """Channel numbers of each material."""
    return [
        [c for c, m in enumerate(material_of) if m == material]
        for material in range(max(material_of) + 1)
    ]
