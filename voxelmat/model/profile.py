"""A print profile: pitches held exactly, tray, image layout, channels and smallest features."""

from __future__ import annotations

import dataclasses
import difflib
import math
import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any, NoReturn

from voxelmat.errors import InputError
from voxelmat.model.support_figures import DRAWN_SUPPORT, SUPPORT_POLICIES, SupportFigures

__all__ = [
    "ORIGIN_CORNERS",
    "POLARITIES",
    "ROW_DIRECTIONS",
    "SUPPORT_POLICIES",
    "MinimumSizes",
    "PrintProfile",
    "ProcessFigures",
]

#: Tray x runs from left to right, y from front to back, z up.
ORIGIN_CORNERS = ("front left", "front right", "back left", "back right")
#: The tray axis that the pixels of one image row follow, away from the origin corner.
ROW_DIRECTIONS = ("x", "y")
POLARITIES = ("white is material", "black is material")

_NAME = re.compile(r"^[A-Za-z0-9][A-Za-z0-9_-]{0,31}$")
_INCH_UM = Fraction(25400)


@dataclass(frozen=True, slots=True, kw_only=True)
class MinimumSizes:
    """Smallest sizes that the printer makes reliably, mm."""

    wall: float = 0.4
    gap: float = 0.4
    strut: float = 0.5
    feature: float = 0.3


@dataclass(frozen=True, slots=True, kw_only=True)
class ProcessFigures:
    """What the time and droplet estimates need.

    Attributes
    ----------
    droplet_pl : float
        Volume of one droplet, picolitres (1 pl = 1e-6 mm^3).
    swath_mm : float
        Width along y that one pass of the heads covers, mm.
    swath_s, layer_s : tuple of float
        Lowest and highest seconds for one pass, and for what is done once a layer.
    """

    droplet_pl: float = 30.0
    swath_mm: float = 60.0
    swath_s: tuple[float, float] = (4.0, 6.0)
    layer_s: tuple[float, float] = (3.0, 5.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class PrintProfile:
    """How one printer lays droplets.

    Attributes
    ----------
    name : str
    pitch_x, pitch_y, layer : Fraction
        Distance between neighbouring sites along x, y and z, mm, exact.
    tray_size : tuple of float
        Tray along x, y, z, mm.
    edge_margin : float
        Strip along each side edge of the tray that must stay empty, mm.
    channels : mapping
        Channel name to the resin loaded in it; ``""`` where any resin may be loaded.
    support_channel : str
        The channel of `channels` that lays support; ``""`` where there is none.
    support_policy : str
        Default of `SUPPORT_POLICIES`.
    support_sizes : SupportFigures
        Sizes of the support that we draw.
    origin_corner, row_direction, polarity : str
        How images lie on the tray; see `ORIGIN_CORNERS`, `ROW_DIRECTIONS`, `POLARITIES`.
    minimum : MinimumSizes
    process : ProcessFigures
    invented : bool
        True for a profile that describes no real printer.
    note : str

    Raises
    ------
    InputError
        If a value is out of range, naming its key.
    """

    name: str
    pitch_x: Fraction
    pitch_y: Fraction
    layer: Fraction
    tray_size: tuple[float, float, float]
    channels: Mapping[str, str]
    edge_margin: float = 5.0
    support_channel: str = ""
    support_policy: str = "none"
    support_sizes: SupportFigures = field(default_factory=SupportFigures)
    origin_corner: str = "front left"
    row_direction: str = "x"
    polarity: str = "white is material"
    minimum: MinimumSizes = field(default_factory=MinimumSizes)
    process: ProcessFigures = field(default_factory=ProcessFigures)
    invented: bool = False
    note: str = ""

    def __post_init__(self) -> None:
        put = object.__setattr__
        put(self, "channels", dict(self.channels))
        put(self, "tray_size", tuple(float(v) for v in self.tray_size))
        if not _NAME.match(self.name):
            _refuse("name", f"letters, digits, '-' and '_' (at most 32); got {self.name!r}")
        for key in ("pitch_x", "pitch_y", "layer"):
            value = getattr(self, key)
            if not isinstance(value, Fraction) or not Fraction(1, 1000) <= value <= 5:
                _refuse(key, f"an exact fraction of 0.001 to 5 mm; got {value!r}")
        if len(self.tray_size) != 3 or not all(1 <= v <= 1e4 for v in self.tray_size):
            _refuse("tray.size_mm", f"three lengths of 1 to 10000 mm; got {self.tray_size}")
        if not 0 <= self.edge_margin < min(self.tray_size[:2]) / 2:
            _refuse("tray.edge_margin_mm", f"0 to half the tray; got {self.edge_margin}")
        self._check_channels()
        for key, known in (
            ("support_policy", SUPPORT_POLICIES),
            ("origin_corner", ORIGIN_CORNERS),
            ("row_direction", ROW_DIRECTIONS),
            ("polarity", POLARITIES),
        ):
            if getattr(self, key) not in known:
                _refuse(key, f"one of {', '.join(known)}; got {getattr(self, key)!r}")
        self._check_figures()

    def _check_channels(self) -> None:
        if not 1 <= len(self.channels) <= 64:
            _refuse("channels", f"1 to 64 channels; got {len(self.channels)}")
        for channel in self.channels:
            if not _NAME.match(channel):
                _refuse("channels", f"names of letters, digits, '-' and '_'; got {channel!r}")
        if len({c.lower() for c in self.channels}) != len(self.channels):
            _refuse("channels", "names that differ by more than capitals (they become folders)")
        loaded = [r for r in self.channels.values() if r]
        if len(set(loaded)) != len(loaded):
            _refuse("channels", f"each resin in one channel only; got {loaded}")
        if self.support_channel and self.support_channel not in self.channels:
            _refuse(
                "support.channel", f"one of {list(self.channels)}; got {self.support_channel!r}"
            )
        if self.support_policy in DRAWN_SUPPORT and not self.support_channel:
            wanted = f"a channel, because the policy '{self.support_policy}' lays support"
            _refuse("support.channel", wanted)

    def _check_figures(self) -> None:
        for key, value in dataclasses.asdict(self.minimum).items():
            if not 0 < value <= 100:
                _refuse(f"minimum_mm.{key}", f"above 0 and at most 100 mm; got {value}")
        p = self.process
        if not (0 < p.droplet_pl <= 1e6 and 0 < p.swath_mm <= 1e4):
            _refuse("process", f"a droplet and a swath above 0; got {p}")
        for low, high in (p.swath_s, p.layer_s):
            if not 0 <= low <= high < math.inf:
                _refuse("process", f"times as [lowest, highest] in s; got {p}")

    # ------------------------------------------------------------------ derived
    @property
    def pitch(self) -> tuple[Fraction, Fraction, Fraction]:
        """Pitch along x, y, z, mm, exact."""
        return (self.pitch_x, self.pitch_y, self.layer)

    @property
    def tray_sites(self) -> tuple[int, int, int]:
        """Whole sites along x, y, z that the tray holds."""
        x, y, z = (
            int(Fraction(size) / p) for size, p in zip(self.tray_size, self.pitch, strict=True)
        )
        return (x, y, z)

    def assign(self, resins: Iterable[str]) -> dict[str, str]:
        """Which channel lays which resin: channels loaded with it first, then free ones in order.

        Parameters
        ----------
        resins : iterable of str
            Names of the resins that the part uses.

        Returns
        -------
        dict
            Channel name to resin name, in the order of `channels`.

        Raises
        ------
        InputError
            If the channels do not suffice.
        """
        names = list(dict.fromkeys(resins))
        model = {c: r for c, r in self.channels.items() if c != self.support_channel}
        found = {r: c for c, r in model.items() if r in names}
        free = [c for c, r in model.items() if not r]
        for name in names:
            if name not in found:
                if not free:
                    raise InputError(
                        f"The part needs {len(names)} resins ({', '.join(names)}), but profile "
                        f"'{self.name}' has no channel for '{name}': {_channel_list(model)}. "
                        "Load it in the profile's channels, or use fewer resins.",
                        key="channels",
                    )
                found[name] = free.pop(0)
        by_channel = {c: r for r, c in found.items()}
        return {c: by_channel[c] for c in model if c in by_channel}

    def replace(self, **changes: Any) -> PrintProfile:
        """A copy with `changes`, validated again."""
        return dataclasses.replace(self, **changes)

    # ------------------------------------------------------------------ plain data
    def as_dict(self) -> dict[str, Any]:
        """Plain data that `from_dict` reads back to an equal profile."""
        um = {k: str(v * 1000) for k, v in zip(("x", "y", "layer"), self.pitch, strict=True)}
        return {
            "format": 1,
            "name": self.name,
            "invented": self.invented,
            "note": self.note,
            "pitch": {f"{k}_um": v for k, v in um.items()},
            "tray": {
                "size_mm": list(self.tray_size),
                "edge_margin_mm": self.edge_margin,
                "origin_corner": self.origin_corner,
                "row_direction": self.row_direction,
                "polarity": self.polarity,
            },
            "channels": dict(self.channels),
            "support": {
                "channel": self.support_channel,
                "policy": self.support_policy,
                **self.support_sizes.as_dict(),
            },
            "minimum_mm": dataclasses.asdict(self.minimum),
            "process": {
                "droplet_pl": self.process.droplet_pl,
                "swath_mm": self.process.swath_mm,
                "swath_s": list(self.process.swath_s),
                "layer_s": list(self.process.layer_s),
            },
        }

    @classmethod
    def from_dict(cls, data: Mapping[str, Any], *, file: str | None = None) -> PrintProfile:
        """From the plain data of a profile file.

        Parameters
        ----------
        data : mapping
            The tables ``pitch``, ``tray``, ``channels``, ``support``, ``minimum_mm``,
            ``process``. A pitch is given as ``x_dpi`` or ``x_um`` (``y_``, ``layer_`` alike); a
            um value may be a text such as ``"127/3"`` to be exact.
        file : str, optional
            Named in errors.

        Raises
        ------
        InputError
            For an unknown or missing key, or a value out of range, naming file and key.
        """
        try:
            return cls(**_parsed(data))
        except InputError as error:
            raise InputError(error.message, file=file, key=error.key) from None
        except (TypeError, ValueError) as error:
            raise InputError(f"A value has the wrong type: {error}.", file=file) from None


def _refuse(key: str, wanted: str) -> NoReturn:
    raise InputError(f"A print profile takes here {wanted}.", key=key)


def _channel_list(channels: Mapping[str, str]) -> str:
    return ", ".join(f"{c} holds '{r}'" if r else f"{c} is free" for c, r in channels.items())


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


def _parsed(data: Mapping[str, Any]) -> dict[str, Any]:
    """Constructor arguments from plain data."""
    tables = ("pitch", "tray", "channels", "support", "minimum_mm", "process")
    top = _table(data, "", ("format", "name", "invented", "note", *tables))
    if top.get("format") != 1:
        _refuse("format", f"1, the format number this version reads; got {top.get('format')!r}")
    missing = [k for k in ("name", "pitch", "tray", "channels") if k not in top]
    if missing:
        raise InputError("This key is missing.", key=missing[0])
    axes = ("x", "y", "layer")
    pitch = _table(data, "pitch", [f"{a}_{u}" for a in axes for u in ("dpi", "um")])
    layout = ("origin_corner", "row_direction", "polarity")
    tray = _table(data, "tray", ("size_mm", "edge_margin_mm", *layout))
    if "size_mm" not in tray:
        raise InputError("This key is missing.", key="tray.size_mm")
    support = _table(data, "support", ("channel", "policy", *SupportFigures.keys()))
    sizes = _table(data, "minimum_mm", [f.name for f in dataclasses.fields(MinimumSizes)])
    process = _table(data, "process", [f.name for f in dataclasses.fields(ProcessFigures)])
    for key in ("swath_s", "layer_s"):
        if key in process:
            low, high = process[key]
            process[key] = (float(low), float(high))
    channels = top["channels"]
    if not isinstance(channels, Mapping) or not all(isinstance(r, str) for r in channels.values()):
        _refuse("channels", "a table of channel = 'resin name' (or '' for any)")
    renamed = {"edge_margin_mm": "edge_margin", "size_mm": "tray_size"}
    return {
        "name": str(top["name"]),
        "invented": bool(top.get("invented", False)),
        "note": str(top.get("note", "")),
        "pitch_x": _pitch(pitch, "x"),
        "pitch_y": _pitch(pitch, "y"),
        "layer": _pitch(pitch, "layer"),
        **{renamed.get(k, k): v for k, v in tray.items()},
        "channels": dict(channels),
        **{f"support_{k}": str(v) for k, v in support.items() if k in ("channel", "policy")},
        "support_sizes": SupportFigures.from_dict(support),
        "minimum": MinimumSizes(**{k: float(v) for k, v in sizes.items()}),
        "process": ProcessFigures(**process),
    }
