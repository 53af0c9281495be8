"""What a stack says of itself: its channels, and the parts that stand in its images."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from voxelmat.model.grid import VoxelGrid
from voxelmat.printing.raster import Raster

__all__ = ["Channel", "StackPart", "stack_part"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Channel:
    """One material channel of a stack.

    Attributes
    ----------
    name, resin, role : str
        Role is ``"model"`` or ``"support"``.
    sites : int
        Droplet sites that it claims.
    volume_mm3 : float
        Of these sites.
    designed_mm3 : float or None
        Volume of the resin in the part; None for support.
    density_t_mm3 : float or None
        tonne/mm^3, where known.
    sha256 : tuple of str
        Of each layer's file or page, from the tray upwards; empty for indexed images.
    """

    name: str
    resin: str
    role: str
    sites: int
    volume_mm3: float
    designed_mm3: float | None
    density_t_mm3: float | None
    sha256: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class StackPart:
    """One part of a stack.

    Attributes
    ----------
    name, kind, digest : str
    grid : VoxelGrid
        The design grid that it was made from.
    raster : Raster
        Its own window on the tray, and the transform into it.
    layers, rows, columns : slice
        Of the stack's images that hold it.
    """

    name: str
    kind: str
    digest: str
    grid: VoxelGrid
    raster: Raster
    layers: slice
    rows: slice
    columns: slice

    @property
    def start(self) -> tuple[int, int, int]:
        """Layer, row and column of its first pixel in the stack's images."""
        return (self.layers.start, self.rows.start, self.columns.start)

    def holds(self, layer: int, row: int, column: int) -> bool:
        """True where a pixel of the stack's images lies in its window."""
        ranges = (self.layers, self.rows, self.columns)
        return all(s.start <= v < s.stop for s, v in zip(ranges, (layer, row, column), strict=True))


def stack_part(entry: dict[str, Any], window: Raster) -> StackPart:
    """From an entry of the manifest's ``parts``, and the window of the images."""
    g = entry["grid"]
    raster = Raster.from_dict(entry["raster"])
    start = [a - b for a, b in zip(raster.image_offset, window.image_offset, strict=True)]
    layers, rows, columns = (
        slice(a, a + n) for a, n in zip(start, raster.image_shape, strict=True)
    )
    grid = VoxelGrid(
        shape=tuple(g["shape"]), spacing=tuple(g["spacing_mm"]), origin=tuple(g["origin_mm"])
    )
    return StackPart(
        name=entry["name"],
        kind=entry["kind"],
        digest=entry["digest"],
        grid=grid,
        raster=raster,
        layers=layers,
        rows=rows,
        columns=columns,
    )
