"""The manifest of a stack: what it says, how it is written, and how it is checked on reading."""

from __future__ import annotations

import json
import os
from collections.abc import Mapping
from functools import cache
from importlib.resources import files
from pathlib import Path
from typing import Any

from voxelmat.errors import FileFormatError, InputError
from voxelmat.model.image import ImageLayout
from voxelmat.model.profile import PrintProfile
from voxelmat.printing.imageorder import ImageOrder, swath_sites
from voxelmat.printing.raster import Raster

__all__ = [
    "FORMAT",
    "FORMAT_NUMBER",
    "MANIFEST",
    "image_entry",
    "manifest_schema",
    "read_manifest",
    "write_manifest",
]

FORMAT = "voxelmat-stack"
FORMAT_NUMBER = 2
MANIFEST = "manifest.json"
_V1_LAYERS = "layer 0 lies on the tray"
_FILE_NAMES = {
    "png bitmap": "channel/number.png, number with five digits",
    "png index": "layers/number.png, number with five digits; 0 is empty, m is channel m",
    "tiff pages": "channel.tif, a page a layer",
}
_LARGEST = 256 << 20  # bytes; a full tray of 64 channels stays below
_MOST_PIXELS = 1 << 32  # of one image; the largest trays have some 10^8


@cache
def manifest_schema() -> dict[str, Any]:
    """The JSON Schema of a manifest."""
    text = (files("voxelmat.printing") / "manifest.schema.json").read_text("utf-8")
    schema: dict[str, Any] = json.loads(text)
    return schema


def image_entry(window: Raster, profile: PrintProfile) -> dict[str, Any]:
    """The manifest's ``image`` entry."""
    order = ImageOrder(window, profile)
    layout = profile.image
    return {
        "kind": layout.kind,
        "layers": window.image_shape[0],
        "width": order.width,
        "height": order.height,
        "polarity": profile.polarity,
        "compression": layout.compression,
        "bit_order": layout.bit_order,
        "row_order": layout.row_order,
        "layer_order": layout.layer_order,
        "mirrored_swath_sites": swath_sites(window, profile),
        "file_name": _FILE_NAMES[layout.kind],
        "pixels_per_metre": list(window.pixels_per_metre),
    }


def _check(data: Any, name: str) -> None:
    """Against the schema, then what a schema cannot say."""
    import jsonschema

    if isinstance(data, dict) and data.get("format_number") == 1:
        _upgrade(data, name)

    validator = jsonschema.Draft202012Validator(manifest_schema())
    error = next(iter(validator.iter_errors(data)), None)
    if error is not None:
        where = ".".join(str(p) for p in error.absolute_path) or "the top"
        said = error.message if len(error.message) < 200 else error.message[:200] + "..."
        raise FileFormatError(f"{name} is not a stack manifest: at {where}: {said}")
    try:
        raster = Raster.from_dict(data["raster"])
    except (InputError, ValueError, TypeError) as problem:
        raise FileFormatError(f"{name}: the raster cannot be: {problem}") from None
    try:
        profile = PrintProfile.from_dict(data["profile"], file=MANIFEST)
    except InputError as problem:
        raise FileFormatError(f"{name}: the profile cannot be: {problem}") from None
    if profile.pitch != raster.pitch:
        raise FileFormatError(f"{name} states one pitch in its profile, another in 'raster'.")
    if data["image"] != image_entry(raster, profile):
        raise FileFormatError(f"{name}: 'image' does not agree with 'raster' and 'profile'.")
    for part in data["parts"]:
        if not raster.holds(_part_raster(part, name)):
            raise FileFormatError(
                f"{name}: part '{part['name']}' does not lie inside the images' window."
            )
    if len({p["name"] for p in data["parts"]}) != len(data["parts"]):
        raise FileFormatError(f"{name}: two parts share one name.")
    if data["image"]["width"] * data["image"]["height"] > _MOST_PIXELS:
        raise FileFormatError(f"{name}: no printer has images of that size: {data['image']}.")
    channels = data["channels"]
    indexed = profile.image.kind == "png index"
    lists = {f"channel '{c['name']}'": len(c["sha256"]) for c in channels}
    if indexed or "layer_sha256" in data:
        lists["'layer_sha256'"] = len(data.get("layer_sha256", ()))
    for which, count in lists.items():
        wanted = raster.image_shape[0] if indexed == (which == "'layer_sha256'") else 0
        if count != wanted:
            raise FileFormatError(f"{name}: {which} lists {count} files; it should list {wanted}.")
    for channel in channels:
        if channel["name"] not in profile.channels:
            raise FileFormatError(f"{name}: its profile has no channel '{channel['name']}'.")
    if len({c["name"].lower() for c in channels}) != len(channels):
        raise FileFormatError(f"{name}: two channels share one folder.")
    if sum(c["role"] == "support" for c in channels) > 1:
        raise FileFormatError(f"{name}: more than one channel lays support.")


def _part_raster(part: dict[str, Any], name: str) -> Raster:
    try:
        return Raster.from_dict(part["raster"])
    except (InputError, ValueError, TypeError) as problem:
        raise FileFormatError(
            f"{name}: the raster of part '{part['name']}' cannot be: {problem}"
        ) from None


def _upgrade(data: dict[str, Any], name: str) -> None:
    """Turn a manifest of format 1, which knew one part, into the present one, in place."""
    part = data.pop("part", None)
    if not isinstance(part, dict) or "parts" in data:
        raise FileFormatError(f"{name} is not a stack manifest: it has no 'part'.")
    data["parts"] = [{**part, "kind": "part", "raster": data.get("raster")}]
    data["notes"] = {}
    image = data.get("image")
    if not isinstance(image, dict) or image.pop("layer_order", None) != _V1_LAYERS:
        raise FileFormatError(f"{name} is not a stack manifest: 'image' is not of format 1.")
    image["file_name"] = _FILE_NAMES["png bitmap"]
    data["image"] = {**image, **ImageLayout().as_dict(), "mirrored_swath_sites": None}
    del data["image"]["pad_to"], data["image"]["mirrored_passes"]
    data["format_number"] = FORMAT_NUMBER


def read_manifest(folder: Path) -> dict[str, Any]:
    """Read and check the manifest of `folder`.

    Raises
    ------
    FileFormatError
        If there is none, or if it is not what the schema asks for.
    """
    path = folder / MANIFEST
    try:
        if path.stat().st_size > _LARGEST:
            raise FileFormatError(f"{path.name} is larger than any manifest can be.")
        data: dict[str, Any] = json.loads(path.read_text("utf-8"))
    except FileNotFoundError:
        raise FileFormatError(
            f"'{folder.name}' is not a finished stack: it has no {MANIFEST}."
        ) from None
    except (OSError, ValueError, RecursionError) as error:
        raise FileFormatError(f"{path.name} in '{folder.name}' cannot be read: {error}") from None
    _check(data, f"{path.name} in '{folder.name}'")
    return data


def write_manifest(folder: Path, data: Mapping[str, Any]) -> None:
    """Check a manifest and write it to `folder`, down to the disk."""
    _check(data, MANIFEST)
    with (folder / MANIFEST).open("w", encoding="utf-8") as handle:
        json.dump(data, handle, indent=1, ensure_ascii=False)
        handle.write("\n")
        handle.flush()
        os.fsync(handle.fileno())
