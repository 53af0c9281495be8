"""A finished stack, read lazily, one layer at a time, nothing believed unchecked."""

from __future__ import annotations

import math
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import FileFormatError, InputError
from voxelmat.model.grid import VoxelGrid
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.imagefiles import ImageFiles
from voxelmat.printing.manifest import read_manifest
from voxelmat.printing.raster import Raster
from voxelmat.printing.stackfiles import StackFiles
from voxelmat.printing.stackparts import Channel, StackPart, stack_part

__all__ = ["Channel", "Stack", "StackPart", "read_stack"]


class Stack:
    """A stack of images on disk; layers are read when asked for.

    Parameters
    ----------
    folder : Path
    manifest : dict
        As `voxelmat.printing.manifest.read_manifest` returns it.

    Attributes
    ----------
    raster : Raster
        The window that the images show; with one part it is the part's own.
    parts : tuple of StackPart
    channels : tuple of Channel
    files : StackFiles
    """

    def __init__(self, folder: Path, manifest: dict[str, Any]) -> None:
        self.folder = folder
        self.manifest = manifest
        self.raster = Raster.from_dict(manifest["raster"])
        self.channels = tuple(
            Channel(**{**c, "sha256": tuple(c["sha256"])}) for c in manifest["channels"]
        )
        images = ImageFiles(self.raster, [c.name for c in self.channels], self.profile)
        indexed = manifest.get("layer_sha256")
        digests = [c.sha256 for c in self.channels] if indexed is None else [indexed]
        _, rows, columns = self.raster.image_shape
        shape = (len(self.channels), rows, (columns + 7) // 8)
        self.files = StackFiles(folder, images, digests, shape)

        self.parts = tuple(stack_part(p, self.raster) for p in manifest["parts"])

    # ------------------------------------------------------------------ what it is
    @property
    def shape(self) -> tuple[int, int, int]:
        """Sites of the window along tray x, y, z."""
        return self.raster.shape

    @property
    def n_layers(self) -> int:
        """Printed layers."""
        return self.raster.shape[2]

    @property
    def pitch_mm(self) -> tuple[float, float, float]:
        """Distance between sites along tray x, y, z, mm, rounded to a float."""
        x, y, z = (float(p) for p in self.raster.pitch)
        return (x, y, z)

    @property
    def is_indexed(self) -> bool:
        """True where one image holds all channels of a layer."""
        return "layer_sha256" in self.manifest

    @property
    def support_channel(self) -> int | None:
        """Index of the channel that lays support, if any."""
        return next((i for i, c in enumerate(self.channels) if c.role == "support"), None)

    @property
    def support_policy(self) -> str:
        """How support is made, one of `voxelmat.model.support_figures.SUPPORT_POLICIES`."""
        return str(self.manifest["method"]["support"])

    @cached_property
    def profile(self) -> PrintProfile:
        """The profile that it was written for."""
        return PrintProfile.from_dict(self.manifest["profile"], file="manifest.json")

    @property
    def grid(self) -> VoxelGrid:
        """The design grid that its first part was made from."""
        return self.parts[0].grid

    @property
    def volumes_mm3(self) -> dict[str, float]:
        """Volume of each resin over all its channels, support included, mm^3."""
        total: dict[str, float] = {}
        for channel in self.channels:
            total[channel.resin] = total.get(channel.resin, 0.0) + channel.volume_mm3
        return total

    @property
    def designed_mm3(self) -> dict[str, float]:
        """Volume of each resin in the designs, over all parts, mm^3; support is not in it."""
        total: dict[str, float] = {}
        for channel in self.channels:
            if channel.designed_mm3 is not None:
                total[channel.resin] = total.get(channel.resin, 0.0) + channel.designed_mm3
        return total

    # ------------------------------------------------------------------ parts
    def part(self, which: int | str) -> StackPart:
        """A part by its number or name.

        Raises
        ------
        InputError
            If there is none.
        """
        for number, part in enumerate(self.parts):
            if which in (number, part.name):
                return part
        names = ", ".join(repr(p.name) for p in self.parts)
        raise InputError(f"The stack holds no part {which!r}; it holds {names}.", key="part")

    def crop(self, which: int | str) -> tuple[slice, slice, slice]:
        """Rows, columns and layers of the images that hold a part."""
        part = self.part(which)
        return part.rows, part.columns, part.layers

    def locate(self, layer: int, row: int, column: int) -> tuple[str, tuple[float, float, float]]:
        """The part at a pixel, and where in it.

        Returns
        -------
        str
            Name of the part in whose window the pixel lies, the smallest window where several
            overlap as boxes; ``""`` where there is none.
        tuple of float
            The centre of the site in the coordinates of that part, mm; in those of the tray
            where there is none.
        """
        near = [p for p in self.parts if p.holds(layer, row, column)]
        if not near:
            return "", self.raster.pixel_to_tray(layer, row, column)
        part = min(near, key=lambda p: math.prod(p.raster.shape))
        z, y, x = part.start
        return part.name, part.raster.pixel_to_part(layer - z, row - y, column - x)

    def __repr__(self) -> str:
        names = ", ".join(f"{c.name} = {c.resin}" for c in self.channels)
        x, y, z = self.shape
        return f"Stack({self.folder.name!r}, {x} x {y} x {z} sites, {names})"

    # ------------------------------------------------------------------ layers
    def path(self, channel: int, layer: int) -> Path:
        """File that holds one channel's layer."""
        return self.files.path(channel, layer)

    def bits(self, layer: int) -> NDArray[np.uint8]:
        """Packed bits of one layer in image order, whatever the kind of image.

        Returns
        -------
        ndarray of uint8, shape (channels, rows, ceil(columns / 8))

        Raises
        ------
        FileFormatError
            If a file is missing, damaged, or not the one that the manifest lists.
        """
        if not 0 <= layer < self.n_layers:
            raise InputError(f"Layer {layer} is not one of 0 to {self.n_layers - 1}.")
        found = self.files.examine(layer)
        if found.changed:
            label = self.files.label(found.changed[0], layer)
            raise FileFormatError(
                f"{label} is not the file that was written: its SHA-256 differs from the "
                "manifest's. Write the stack again."
            )
        if found.bad:
            raise FileFormatError(found.bad[0][1])
        return found.bits

    def part_bits(self, which: int | str, layer: int) -> NDArray[np.uint8]:
        """As `bits`, only the window of one part; `layer` counts from the part's first."""
        part = self.part(which)
        bits = self.bits(layer + part.layers.start)[:, part.rows]
        first, width = part.columns.start, part.columns.stop - part.columns.start
        if first % 8:
            pixels = np.unpackbits(bits, axis=2, count=self.raster.image_shape[2])
            return np.packbits(pixels[:, :, part.columns], axis=2)
        own = bits[:, :, first // 8 : (part.columns.stop + 7) // 8].copy()
        if width % 8:
            own[:, :, -1] &= np.uint8((0xFF00 >> (width % 8)) & 0xFF)
        return own

    def solid(self, layer: int) -> NDArray[np.uint8]:
        """Packed bits of one layer where any channel, support included, lays a droplet."""
        return np.asarray(np.bitwise_or.reduce(self.bits(layer), axis=0), dtype=np.uint8)

    def layer(self, k: int) -> NDArray[np.uint8]:
        """The channel of every site of layer `k`, counted from the tray.

        Returns
        -------
        ndarray of uint8, shape (nx, ny)
            Indexed ``[ix, iy]`` along tray x and y: 0 for empty, m + 1 for ``channels[m]``.
            Where two channels claim a site, the first of them.
        """
        width = self.raster.image_shape[2]
        site = np.zeros(self.raster.image_shape[1:], dtype=np.uint8)
        planes = np.unpackbits(self.bits(k), axis=2, count=width)
        for channel in range(len(self.channels) - 1, -1, -1):
            site[planes[channel] > 0] = channel + 1
        return self.raster.from_image(site)


def read_stack(folder: str | Path) -> Stack:
    """Open a finished stack.

    Parameters
    ----------
    folder : str or Path
        As `write_stack` made it.

    Returns
    -------
    Stack
        The manifest is checked now, each image when it is read.

    Raises
    ------
    FileFormatError
        If the folder is no finished stack, or its manifest cannot be trusted.
    """
    path = Path(folder)
    if not path.is_dir():
        raise FileFormatError(f"There is no folder '{path.name}' to read a stack from.")
    return Stack(path, read_manifest(path))
