"""A print profile: pitches held exactly, tray, image layout, channels and smallest features."""

from __future__ import annotations

import dataclasses
import math
import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from typing import Any, NoReturn

from voxelmat.errors import InputError
from voxelmat.model.image import ImageLayout
from voxelmat.model.minimum_sizes import MinimumSizes
from voxelmat.model.process import ProcessFigures
from voxelmat.model.profile_dict import profile_arguments, profile_data
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
_MOST_CHANNELS = 255


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
        Strip along each side of the usable area that must stay empty, mm.
    usable : tuple of float, optional
        Low x, low y, high x and high y of what the heads reach, mm; the whole tray if left out.
    channels : mapping
        Channel name to the resin loaded in it; ``""`` where any resin may be loaded. A resin of
        the part may stand in several: its droplets are then dealt among them.
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
    image : ImageLayout
        What the image files are like.
    bias : tuple of float
        By how much the printer puts each outline too far outwards along x, y and z, mm a side;
        negative where parts come out small. The slicer moves outlines against it.
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
    usable: tuple[float, float, float, float] | None = None
    support_channel: str = ""
    support_policy: str = "none"
    support_sizes: SupportFigures = field(default_factory=SupportFigures)
    origin_corner: str = "front left"
    row_direction: str = "x"
    polarity: str = "white is material"
    minimum: MinimumSizes = field(default_factory=MinimumSizes)
    process: ProcessFigures = field(default_factory=ProcessFigures)
    image: ImageLayout = field(default_factory=ImageLayout)
    bias: tuple[float, float, float] = (0.0, 0.0, 0.0)
    invented: bool = False
    note: str = ""

    def __post_init__(self) -> None:
        put = object.__setattr__
        put(self, "channels", dict(self.channels))
        put(self, "tray_size", tuple(float(v) for v in self.tray_size))
        if not _NAME.fullmatch(self.name):
            _refuse("name", f"letters, digits, '-' and '_' (at most 32); got {self.name!r}")
        for key in ("pitch_x", "pitch_y", "layer"):
            value = getattr(self, key)
            if not isinstance(value, Fraction) or not Fraction(1, 1000) <= value <= 5:
                _refuse(key, f"an exact fraction of 0.001 to 5 mm; got {value!r}")
        if len(self.tray_size) != 3 or not all(1 <= v <= 1e4 for v in self.tray_size):
            _refuse("tray.size_mm", f"three lengths of 1 to 10000 mm; got {self.tray_size}")
        self._check_area()
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

    def _check_area(self) -> None:
        if self.usable is not None:
            area = tuple(float(v) for v in self.usable)
            object.__setattr__(self, "usable", area)
            width, depth, _ = self.tray_size
            if len(area) != 4 or not (
                0 <= area[0] < area[2] <= width and 0 <= area[1] < area[3] <= depth
            ):
                _refuse(
                    "tray.usable_mm",
                    "the low and high corner of an area of the tray, [x, y, x, y] in mm; got "
                    f"{list(area)} on a tray of {width:g} x {depth:g} mm",
                )
        if not (
            math.isfinite(self.edge_margin)
            and self.edge_margin >= 0
            and all(low < high for low, high in self.room)
        ):
            _refuse("tray.edge_margin_mm", f"0 to half the usable tray; got {self.edge_margin}")

    def _check_channels(self) -> None:
        if not 1 <= len(self.channels) <= _MOST_CHANNELS:
            _refuse("channels", f"1 to {_MOST_CHANNELS} channels; got {len(self.channels)}")
        for channel in self.channels:
            if not _NAME.fullmatch(channel):
                _refuse("channels", f"names of letters, digits, '-' and '_'; got {channel!r}")
        if len({c.lower() for c in self.channels}) != len(self.channels):
            _refuse("channels", "names that differ by more than capitals (they become folders)")
        support = self.channels.get(self.support_channel, "")
        if support and list(self.channels.values()).count(support) > 1:
            _refuse("channels", f"the support resin in one channel only; got {self.channels}")
        if self.support_channel and self.support_channel not in self.channels:
            _refuse(
                "support.channel", f"one of {list(self.channels)}; got {self.support_channel!r}"
            )
        if self.support_policy in DRAWN_SUPPORT and not self.support_channel:
            wanted = f"a channel, because the policy '{self.support_policy}' lays support"
            _refuse("support.channel", wanted)

    def _check_figures(self) -> None:
        try:
            bias = tuple(float(b) for b in self.bias)
        except (TypeError, ValueError):
            bias = ()
        if len(bias) != 3 or not all(math.isfinite(b) and abs(b) <= 10 for b in bias):
            _refuse("bias_mm", f"three lengths of -10 to 10 mm along x, y, z; got {self.bias}")
        object.__setattr__(self, "bias", bias)
        if self.image.kind == "png index" and self.polarity != POLARITIES[0]:
            _refuse("polarity", "'white is material', for an indexed image has no black and white")

    # ------------------------------------------------------------------ derived
    @property
    def pitch(self) -> tuple[Fraction, Fraction, Fraction]:
        """Pitch along x, y, z, mm, exact."""
        return (self.pitch_x, self.pitch_y, self.layer)

    @property
    def room(self) -> tuple[tuple[float, float], tuple[float, float], tuple[float, float]]:
        """Where parts may stand: low and high along tray x, y and z, mm."""
        width, depth, height = self.tray_size
        x0, y0, x1, y1 = self.usable or (0.0, 0.0, width, depth)
        margin = self.edge_margin
        return ((x0 + margin, x1 - margin), (y0 + margin, y1 - margin), (0.0, height))

    @property
    def tray_sites(self) -> tuple[int, int, int]:
        """Whole sites along x, y, z that the tray holds."""
        x, y, z = (
            int(Fraction(size) / p) for size, p in zip(self.tray_size, self.pitch, strict=True)
        )
        return (x, y, z)

    def assign(self, resins: Iterable[str]) -> dict[str, str]:
        """Which channels lay which resin: all loaded with it, else the next one that is free.

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
        found: dict[str, list[str]] = {}
        for channel, resin in model.items():
            if resin in names:
                found.setdefault(resin, []).append(channel)
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
                found[name] = [free.pop(0)]
        by_channel = {c: r for r, channels in found.items() for c in channels}
        return {c: by_channel[c] for c in model if c in by_channel}

    def replace(self, **changes: Any) -> PrintProfile:
        """A copy with `changes`, validated again."""
        return dataclasses.replace(self, **changes)

    # ------------------------------------------------------------------ plain data
    def as_dict(self) -> dict[str, Any]:
        """Plain data that `from_dict` reads back to an equal profile."""
        return profile_data(self)

    @classmethod
    def from_dict(cls, data: Mapping[str, Any], *, file: str | None = None) -> PrintProfile:
        """From the plain data of a profile file.

        Parameters
        ----------
        data : mapping
            The tables ``pitch``, ``tray``, ``image``, ``channels``, ``support``,
            ``minimum_mm``, ``process``. A pitch is given as ``x_dpi`` or ``x_um`` (``y_``,
            ``layer_`` alike); a um value may be a text such as ``"127/3"`` to be exact.
        file : str, optional
            Named in errors.

        Raises
        ------
        InputError
            For an unknown or missing key, or a value out of range, naming file and key.
        """
        try:
            return cls(**profile_arguments(data))
        except InputError as error:
            raise InputError(error.message, file=file, key=error.key) from None
        except (TypeError, ValueError) as error:
            raise InputError(f"A value has the wrong type: {error}.", file=file) from None


def _refuse(key: str, wanted: str) -> NoReturn:
    raise InputError(f"A print profile takes here {wanted}.", key=key)


def _channel_list(channels: Mapping[str, str]) -> str:
    return ", ".join(f"{c} holds '{r}'" if r else f"{c} is free" for c, r in channels.items())
