"""A print profile as plain data, as its TOML file and the manifest of a stack hold it."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Mapping
from fractions import Fraction
from typing import TYPE_CHECKING, Any, NoReturn

from voxelmat.errors import InputError
from voxelmat.model.image import ImageLayout
from voxelmat.model.minimum_sizes import SIZES, MinimumSizes
from voxelmat.model.process import ProcessFigures
from voxelmat.model.support_figures import SupportFigures

if TYPE_CHECKING:
    from voxelmat.model.profile import PrintProfile

__all__ = ["profile_arguments", "profile_data"]

_INCH_UM = Fraction(25400)
_TABLES = ("pitch", "tray", "image", "channels", "support", "minimum_mm", "process")


def profile_data(profile: PrintProfile) -> dict[str, Any]:
    """Plain data that `profile_arguments` reads back."""
    um = {k: str(v * 1000) for k, v in zip(("x", "y", "layer"), profile.pitch, strict=True)}
    return {
        "format": 1,
        "name": profile.name,
        "invented": profile.invented,
        "note": profile.note,
        "bias_mm": list(profile.bias),
        "pitch": {f"{k}_um": v for k, v in um.items()},
        "tray": {
            "size_mm": list(profile.tray_size),
            "edge_margin_mm": profile.edge_margin,
            **({} if profile.usable is None else {"usable_mm": list(profile.usable)}),
            "origin_corner": profile.origin_corner,
            "row_direction": profile.row_direction,
            "polarity": profile.polarity,
        },
        "image": profile.image.as_dict(),
        "channels": dict(profile.channels),
        "support": {
            "channel": profile.support_channel,
            "policy": profile.support_policy,
            **profile.support_sizes.as_dict(),
        },
        "minimum_mm": profile.minimum.as_dict(),
        "process": profile.process.as_dict(),
    }


def profile_arguments(data: Mapping[str, Any]) -> dict[str, Any]:
    """Arguments of `PrintProfile` from plain data.

    Raises
    ------
    InputError
        For an unknown or missing key, or a value out of range, naming the key.
    """
    top = _table(data, "", ("format", "name", "invented", "note", "bias_mm", *_TABLES))
    if top.get("format") != 1:
        _refuse("format", f"1, the format number this version reads; got {top.get('format')!r}")
    missing = [k for k in ("name", "pitch", "tray", "channels") if k not in top]
    if missing:
        raise InputError("This key is missing.", key=missing[0])
    axes = ("x", "y", "layer")
    pitch = _table(data, "pitch", [f"{a}_{u}" for a in axes for u in ("dpi", "um")])
    support = _table(data, "support", ("channel", "policy", *SupportFigures.keys()))
    channels = top["channels"]
    if not isinstance(channels, Mapping) or not all(isinstance(r, str) for r in channels.values()):
        _refuse("channels", "a table of channel = 'resin name' (or '' for any)")
    sizes = _table(data, "minimum_mm", SIZES)
    return {
        "name": str(top["name"]),
        "invented": bool(top.get("invented", False)),
        "note": str(top.get("note", "")),
        "pitch_x": _pitch(pitch, "x"),
        "pitch_y": _pitch(pitch, "y"),
        "layer": _pitch(pitch, "layer"),
        "bias": top.get("bias_mm", (0.0, 0.0, 0.0)),
        **_layout(data),
        "channels": dict(channels),
        **{f"support_{k}": str(v) for k, v in support.items() if k in ("channel", "policy")},
        "support_sizes": SupportFigures.from_dict(support),
        "minimum": MinimumSizes.of(**sizes),
        "process": ProcessFigures(**_table(data, "process", ProcessFigures.keys())),
    }


def _layout(data: Mapping[str, Any]) -> dict[str, Any]:
    """Arguments from the tables ``tray`` and ``image``; the polarity may stand in either."""
    orders = ("origin_corner", "row_direction", "polarity")
    tray = _table(data, "tray", ("size_mm", "edge_margin_mm", "usable_mm", *orders))
    if "size_mm" not in tray:
        raise InputError("This key is missing.", key="tray.size_mm")
    image = _table(data, "image", ("polarity", *ImageLayout().as_dict()))
    polarity = image.pop("polarity", None)
    if polarity is not None and tray.setdefault("polarity", polarity) != polarity:
        _refuse("image.polarity", f"what tray.polarity says, or only one of them; got {polarity!r}")
    renamed = {"edge_margin_mm": "edge_margin", "size_mm": "tray_size", "usable_mm": "usable"}
    return {
        **{renamed.get(k, k): v for k, v in tray.items()},
        "image": ImageLayout.from_dict(image),
    }


def _refuse(key: str, wanted: str) -> NoReturn:
    raise InputError(f"A print profile takes here {wanted}.", key=key)


def _table(data: Mapping[str, Any], key: str, known: Iterable[str]) -> dict[str, Any]:
    """The sub-table `key` ("" for the top), with unknown keys refused."""
    table = data.get(key, {}) if key else data
    if not isinstance(table, Mapping):
        _refuse(key, f"a table; got {table!r}")
    names = list(known)
    for name in table:
        if name not in names:
            near = difflib.get_close_matches(str(name), names, n=1)
            hint = f" Did you mean '{near[0]}'?" if near else f" Known: {', '.join(names)}."
            raise InputError(f"Unknown key '{name}'.{hint}", key=f"{key}.{name}".strip("."))
    return dict(table)


def _pitch(table: Mapping[str, Any], axis: str) -> Fraction:
    given = [u for u in ("dpi", "um") if f"{axis}_{u}" in table]
    if len(given) != 1:
        _refuse(f"pitch.{axis}_um", f"exactly one of {axis}_dpi and {axis}_um")
    key = f"{axis}_{given[0]}"
    try:
        value = Fraction(str(table[key]))
    except (ValueError, ZeroDivisionError):
        _refuse(f"pitch.{key}", f"a number or a fraction such as '127/3'; got {table[key]!r}")
    if not value > 0:
        _refuse(f"pitch.{key}", f"a number above 0; got {table[key]!r}")
    return (_INCH_UM / value if given[0] == "dpi" else value) / 1000
