"""A print job: parts in their places on the tray, and all else that decides the images."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from voxelmat.errors import InputError
from voxelmat.io.bigpart import AnyPart
from voxelmat.model.halftone import Halftone
from voxelmat.model.profile import PrintProfile
from voxelmat.model.support_figures import DRAWN_SUPPORT, SUPPORT_POLICIES
from voxelmat.printing.bias import compensated
from voxelmat.printing.designed import used_resins
from voxelmat.printing.imageorder import encoder_words
from voxelmat.printing.order import halftone_method
from voxelmat.printing.place import place
from voxelmat.printing.raster import Raster
from voxelmat.printing.skin_room import box_with_skin, part_with_skin
from voxelmat.printing.support import outline_box, outline_source
from voxelmat.provenance import text_digest, versions

__all__ = ["PART_KINDS", "PlacedPart", "PrintJob", "one_part_job", "placed"]

#: What stands on a tray: a part of the design, a mark for identification, a witness coupon.
PART_KINDS = ("part", "mark", "coupon")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PlacedPart:
    """A part and where it stands.

    Attributes
    ----------
    part : Part or StoredPart
        As it is sliced, moved against the bias of the printer. `placed` makes one from a design.
    raster : Raster
        Its own window on the tray, and the transform into it.
    name : str
        Unique on the tray.
    kind : str
        One of `PART_KINDS`.
    """

    part: AnyPart
    raster: Raster
    name: str
    kind: str = "part"

    def __post_init__(self) -> None:
        if not self.name:
            raise InputError("A part on a tray needs a name.", key="name")
        if self.kind not in PART_KINDS:
            raise InputError(
                f"What stands on a tray is one of {', '.join(PART_KINDS)}; got {self.kind!r}.",
                key="kind",
            )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class PrintJob:
    """Everything that decides the images of a stack, checked before anything is written.

    Attributes
    ----------
    profile : PrintProfile
    parts : tuple of PlacedPart
        Their windows lie inside `window`.
    window : Raster
        What the images show: for one part its own raster; for several a raster without turn
        and translation that covers them all.
    channels : mapping
        Model channel to the resin that it lays, in the order of the profile. A resin may stand
        in several; its droplets are then dealt among them.
    support : str
        One of `voxelmat.model.support_figures.SUPPORT_POLICIES`.
    seed : int
        Moves the start of the blue-noise mask.
    halftone : Halftone
    notes : mapping
        Plain data for the manifest: job number, titles.

    Raises
    ------
    InputError
        If names, windows, channels, support or seed do not go together.
    """

    profile: PrintProfile
    parts: tuple[PlacedPart, ...]
    window: Raster
    channels: Mapping[str, str]
    support: str = "none"
    seed: int = 0
    halftone: Halftone = field(default_factory=Halftone)
    notes: Mapping[str, Any] = field(default_factory=dict)

    def __post_init__(self) -> None:
        put = object.__setattr__
        put(self, "parts", tuple(self.parts))
        put(self, "channels", dict(self.channels))
        put(self, "notes", dict(self.notes))
        self._check_parts()
        self._check_channels()
        if not isinstance(self.seed, int) or not 0 <= self.seed < 2**64:
            raise InputError(
                f"A seed is a whole number of 0 to 2^64 - 1; got {self.seed!r}.", key="seed"
            )

    def _check_parts(self) -> None:
        if not self.parts:
            raise InputError("A print job needs at least one part.", key="parts")
        names = [p.name for p in self.parts]
        if len(set(names)) != len(names):
            raise InputError(f"Each part on a tray has a name of its own; got {names}.")
        resins: dict[str, Any] = {}
        for item in self.parts:
            if not self.window.holds(item.raster):
                raise InputError(
                    f"'{item.name}' does not lie inside the window of the job, or not on the "
                    f"same raster: {item.raster.shape} sites at {item.raster.offset} in "
                    f"{self.window.shape} at {self.window.offset}."
                )
            for resin in item.part.resins:
                if resins.setdefault(resin.name, resin) != resin:
                    raise InputError(
                        f"'{item.name}' has other data for resin '{resin.name}' than a part "
                        "before it on this tray; give all of them the same materials."
                    )

    def _check_channels(self) -> None:
        unknown = [c for c in self.channels if c not in self.profile.channels]
        if unknown or not self.channels:
            raise InputError(
                f"A job lays its resins through channels of '{self.profile.name}' "
                f"({', '.join(self.profile.channels)}); got {list(self.channels)}.",
                key="channels",
            )
        if self.support not in SUPPORT_POLICIES:
            raise InputError(
                f"The support policy is one of {', '.join(SUPPORT_POLICIES)}; got "
                f"{self.support!r}.",
                key="support",
            )
        if self.draws_support and not self.profile.support_channel:
            raise InputError(
                f"Profile '{self.profile.name}' has no support channel to lay {self.support} with.",
                key="support",
            )
        if self.draws_support and self.profile.support_channel in self.channels:
            raise InputError("The support channel cannot lay a resin of the part.", key="channels")

    # ------------------------------------------------------------------ derived
    @property
    def draws_support(self) -> bool:
        """True where we draw the support, as the last material."""
        return self.support in DRAWN_SUPPORT

    @property
    def resins(self) -> tuple[str, ...]:
        """Resins in the order of the slicer's materials; support, if drawn, comes after them."""
        return tuple(dict.fromkeys(self.channels.values()))

    @property
    def channel_names(self) -> tuple[str, ...]:
        """Channels in the order of the stack, support last."""
        return (*self.channels, *([self.profile.support_channel] if self.draws_support else []))

    @property
    def material_of(self) -> tuple[int, ...]:
        """For each of `channel_names` the number of the slicer's material that it lays."""
        resins = self.resins
        model = [resins.index(r) for r in self.channels.values()]
        return (*model, *([len(resins)] if self.draws_support else []))

    @property
    def method(self) -> dict[str, Any]:
        """The manifest's ``method`` entry."""
        return {
            "outline": "; ".join(dict.fromkeys(outline_source(p.part) for p in self.parts)),
            **halftone_method(
                [m for p in self.parts for m in p.part.resins], self.resins, self.halftone
            ),
            "seed": self.seed,
            "support": self.support,
            "bias_mm": list(self.profile.bias),
            "encoder": encoder_words(self.profile.image),
        }

    def digest(self, inputs: Mapping[str, str] | None = None) -> str:
        """SHA-256 over all of it and over the versions that the bytes depend on."""
        return text_digest(
            {
                "parts": [
                    {
                        "name": p.name,
                        "kind": p.kind,
                        "digest": p.part.digest,
                        "raster": p.raster.as_dict(),
                    }
                    for p in self.parts
                ],
                "profile": self.profile.as_dict(),
                "window": self.window.as_dict(),
                "channels": list(self.channels.items()),
                "method": self.method,
                "notes": self.notes,
                "inputs": dict(inputs or {}),
                "versions": {k: v for k, v in versions().items() if k in ("voxelmat", "isal")},
            }
        )

    def replace(self, **changes: Any) -> PrintJob:
        """A copy with `changes`, validated again."""
        return dataclasses.replace(self, **changes)


def placed(
    part: AnyPart,
    profile: PrintProfile,
    orientation: Sequence[str] = (),
    position: tuple[float, float] | None = None,
    *,
    name: str = "",
    kind: str = "part",
    support: str = "none",
) -> PlacedPart:
    """Turn a part and set it on the tray.

    Parameters
    ----------
    part : Part or StoredPart
        The design; its outline is moved against the bias of the printer.
    profile : PrintProfile
    orientation : sequence of str
        Turns by multiples of 90 degrees about the tray's axes, in order: ``["x 90"]``.
    position : tuple of float, optional
        Low x and y corner of the part on the tray, mm; the middle of the tray if left out.
    name : str
        The part's own name if left out.
    kind : str
        One of `PART_KINDS`.
    support : str
        The policy; "skin" makes room for the skin on grid and window.

    Raises
    ------
    InputError
        If there is nothing to print, or if the part does not fit the tray.
    """
    part = compensated(part, profile, orientation)
    box = outline_box(part)
    if support == "skin":
        thickness = profile.support_sizes.skin
        part, box = part_with_skin(part, thickness), box_with_skin(box, thickness, orientation)
    raster = place(box, profile, orientation, position)
    return PlacedPart(part=part, raster=raster, name=name or part.name, kind=kind)


def one_part_job(
    part: AnyPart,
    profile: PrintProfile,
    *,
    orientation: Sequence[str] = (),
    position: tuple[float, float] | None = None,
    support: str | None = None,
    seed: int = 0,
    halftone: Halftone | None = None,
    notes: Mapping[str, Any] | None = None,
) -> PrintJob:
    """The job of one part; arguments as those of `placed` and `PrintJob`.

    Parameters
    ----------
    support : str, optional
        The profile's policy if left out.

    Raises
    ------
    InputError
        If the part does not fit the tray or the channels, or an option is not known.
    """
    policy = profile.support_policy if support is None else support
    item = placed(part, profile, orientation, position, support=policy)
    return PrintJob(
        profile=profile,
        parts=(item,),
        window=item.raster,
        channels=profile.assign(used_resins(part)),
        support=policy,
        seed=seed,
        halftone=Halftone() if halftone is None else halftone,
        notes=notes or {},
    )
