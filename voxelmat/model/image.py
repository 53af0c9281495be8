"""What image files a printer takes: kind, compression, orders, padding, mirrored passes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, NoReturn

from voxelmat.errors import InputError

__all__ = [
    "BIT_ORDERS",
    "COMPRESSIONS",
    "IMAGE_KINDS",
    "LAYER_ORDERS",
    "ROW_ORDERS",
    "ImageLayout",
]

#: One-bit PNG for each channel and layer; 8-bit indexed PNG for each layer, 0 for empty and m for
#: channel m; one-bit TIFF of many pages for each channel.
IMAGE_KINDS = ("png bitmap", "png index", "tiff pages")
COMPRESSIONS = ("deflate", "g4")
BIT_ORDERS = ("first high", "first low")
ROW_ORDERS = ("down", "up")
LAYER_ORDERS = ("up", "down")


@dataclass(frozen=True, slots=True, kw_only=True)
class ImageLayout:
    """How layers become files. What is said of rows and columns holds for one image.

    Attributes
    ----------
    kind : str
        One of `IMAGE_KINDS`.
    compression : str
        Of TIFF pages: "deflate", or "g4" (ITU-T T.6). PNG is always deflated.
    bit_order : str
        Whether the first of eight pixels is the highest or the lowest bit of a byte. Only TIFF
        knows the second (FillOrder 2), and only for G4 do all readers agree on it.
    row_order : str
        "down": the row next to the origin corner is the first in the file; "up": the last.
    layer_order : str
        "up": file or page 0 is the layer on the tray; "down": it is the highest.
    pad_to : tuple of int
        Rows and columns of an image are filled up with empty sites to a multiple of these, after
        the last row and at the end of each row of the file.
    mirrored_passes : bool
        For heads that print in both directions and read each pass from its own start: along tray
        y, counted from the origin corner of the tray, every second swath is reversed along
        tray x, within the window of the images.

    Raises
    ------
    InputError
        If a value is not known, or if two do not go together, naming the key.
    """

    kind: str = "png bitmap"
    compression: str = "deflate"
    bit_order: str = "first high"
    row_order: str = "down"
    layer_order: str = "up"
    pad_to: tuple[int, int] = (1, 1)
    mirrored_passes: bool = False

    def __post_init__(self) -> None:
        for key, known in (
            ("kind", IMAGE_KINDS),
            ("compression", COMPRESSIONS),
            ("bit_order", BIT_ORDERS),
            ("row_order", ROW_ORDERS),
            ("layer_order", LAYER_ORDERS),
        ):
            if getattr(self, key) not in known:
                _refuse(key, f"one of {', '.join(known)}; got {getattr(self, key)!r}")
        pads = self.pad_to
        if (
            not isinstance(pads, list | tuple)
            or len(pads) != 2
            or not all(isinstance(p, int) and 1 <= p <= 4096 for p in pads)
        ):
            _refuse("pad_to", f"two whole numbers of 1 to 4096, [rows, columns]; got {pads!r}")
        object.__setattr__(self, "pad_to", (pads[0], pads[1]))
        if not isinstance(self.mirrored_passes, bool):
            _refuse("mirrored_passes", f"true or false; got {self.mirrored_passes!r}")
        if self.compression == "g4" and self.kind != "tiff pages":
            _refuse("compression", f"'deflate' for images of kind '{self.kind}'; got 'g4'")
        if self.bit_order == "first low" and self.compression != "g4":
            _refuse(
                "bit_order",
                "'first high' unless kind is 'tiff pages' and compression 'g4': PNG knows no "
                "other, and readers of deflated TIFF do not agree on it",
            )

    def as_dict(self) -> dict[str, Any]:
        """Plain data that `from_dict` takes again."""
        return {
            "kind": self.kind,
            "compression": self.compression,
            "bit_order": self.bit_order,
            "row_order": self.row_order,
            "layer_order": self.layer_order,
            "pad_to": list(self.pad_to),
            "mirrored_passes": self.mirrored_passes,
        }

    @classmethod
    def from_dict(cls, data: Mapping[str, Any]) -> ImageLayout:
        """From the keys of `as_dict`, any of which may be left out."""
        return cls(**data)


def _refuse(key: str, wanted: str) -> NoReturn:
    raise InputError(f"A print profile takes here {wanted}.", key=f"image.{key}")
