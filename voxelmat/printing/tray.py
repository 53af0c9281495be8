"""A tray: parts, copies, marks and witness coupons in their places, ready to be written."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.io.bigpart import AnyPart
from voxelmat.model.halftone import Halftone
from voxelmat.model.profile import PrintProfile
from voxelmat.monitor import SILENT, Monitor
from voxelmat.printing.arrange import Arranger
from voxelmat.printing.clearance import check_clearance
from voxelmat.printing.compose import on_whole_bytes, tray_window
from voxelmat.printing.designed import used_resins
from voxelmat.printing.engrave import FACES
from voxelmat.printing.job import PlacedPart, PrintJob
from voxelmat.printing.marks import SIDES, Mark
from voxelmat.printing.readback import Stack
from voxelmat.printing.stack import write_job

__all__ = ["MARK_KINDS", "Tray", "TrayEntry", "lay_out", "write_tray"]

#: How a part is told: by a tag beside it, by an engraving on a flat face (a tag where there is no
#: room on any allowed face), or not at all.
MARK_KINDS = ("tag", "engraved", "none")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TrayEntry:
    """A part that is to stand on a tray, once or more often.

    Attributes
    ----------
    part : Part or StoredPart
    name : str
        The part's own if left out; copies are numbered: "grip 1", "grip 2".
    copies : int
    orientation : tuple of str
        See `voxelmat.printing.place.rotation_matrix`.
    position_mm : tuple of float or None
        Low x and y corner on the tray; placed automatically if left out.
    may_turn : bool
        An automatic place may turn it by 90 degrees about z.
    side : str
        ``"left"`` or ``"right"``, written on the mark.
    mark : str
        One of `MARK_KINDS`.
    face : str
        Face to engrave, of the turned part: one of `voxelmat.printing.engrave.FACES`; the first
        that has room if left out.
    mark_depth_mm : float or None
        Depth of an engraving; from the profile if left out.
    protected : ndarray of bool or None
        Voxels ``[i, j, k]`` that an engraving must leave as they are.

    Raises
    ------
    InputError
        For a value that is out of range, naming its key.
    """

    part: AnyPart
    name: str = ""
    copies: int = 1
    orientation: tuple[str, ...] = ()
    position_mm: tuple[float, float] | None = None
    may_turn: bool = False
    side: str = ""
    mark: str = "tag"
    face: str = ""
    mark_depth_mm: float | None = None
    protected: NDArray[np.bool_] | None = None

    def __post_init__(self) -> None:
        object.__setattr__(self, "orientation", tuple(self.orientation))
        if not isinstance(self.copies, int) or not 1 <= self.copies <= 10_000:
            raise InputError(f"Copies are 1 to 10000; got {self.copies!r}.", key="copies")
        if self.position_mm is not None and (self.copies > 1 or self.may_turn):
            raise InputError(
                "A position is for one copy, turned as stated; leave the position out, or list "
                "each copy with its own.",
                key="position_mm",
            )
        for key, known in (("mark", MARK_KINDS), ("side", SIDES), ("face", ("", *FACES))):
            if getattr(self, key) not in known:
                raise InputError(
                    f"This is one of {', '.join(k for k in known if k)}; got "
                    f"{getattr(self, key)!r}.",
                    key=key,
                )
        if self.protected is not None and self.protected.shape != self.part.grid.shape:
            raise InputError(
                f"Protected voxels have shape {self.protected.shape}; the part has "
                f"{self.part.grid.shape}.",
                key="protected",
            )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Tray:
    """What stands where on a tray; `lay_out` makes it.

    Attributes
    ----------
    profile : PrintProfile
    placed : tuple of PlacedPart
        Parts in the order of their entries, then tags (kind "mark") and coupons (kind "coupon").
    designs : mapping
        Name of each part on the tray to its design as sliced, an engraving cut in.
    marks : tuple of Mark
        In tray coordinates.
    spacing_mm : float
    name, job_number : str
    notes : tuple of str
        What had to be done otherwise than asked, in words.
    """

    profile: PrintProfile
    placed: tuple[PlacedPart, ...]
    designs: Mapping[str, AnyPart]
    marks: tuple[Mark, ...]
    spacing_mm: float
    name: str = "tray"
    job_number: str = ""
    notes: tuple[str, ...] = field(default=())

    @property
    def parts(self) -> tuple[PlacedPart, ...]:
        """Parts alone, without tags and coupons."""
        return tuple(p for p in self.placed if p.kind == "part")

    @property
    def resins(self) -> tuple[str, ...]:
        """Names of all resins that are laid."""
        return tuple(dict.fromkeys(r for p in self.placed for r in used_resins(p.part)))

    @property
    def height_mm(self) -> float:
        """Height of the highest part."""
        return max(float(p.raster.shape[2] * p.raster.pitch[2]) for p in self.placed)

    def box_mm(self, item: PlacedPart) -> tuple[float, float, float, float]:
        """Low x and y, and size along x and y, of one thing on the tray, mm."""
        r = item.raster
        (x, w), (y, h) = (
            (float(r.offset[a] * r.pitch[a]), float(r.shape[a] * r.pitch[a])) for a in (0, 1)
        )
        return (x, y, w, h)

    def job(
        self,
        *,
        support: str | None = None,
        seed: int = 0,
        halftone: Halftone | None = None,
        notes: Mapping[str, Any] | None = None,
    ) -> PrintJob:
        """The print job of the tray; a part that stands alone gives the same bytes as by itself.

        Parameters
        ----------
        support : str, optional
            The profile's policy if left out.
        seed : int
        halftone : Halftone, optional
        notes : mapping, optional
            More for the manifest, beside the tray's own.

        Raises
        ------
        InputError
            If the profile has not channels enough, or parts have other data for one resin.
        """
        policy = self.profile.support_policy if support is None else support
        if policy == "skin" != self.profile.support_policy:
            raise InputError(
                "A skin of support needs room between the parts: name it as the profile's policy "
                "before the tray is laid out.",
                key="support",
            )
        parts = self.placed
        window = parts[0].raster
        if len(parts) > 1:
            first = min(p.raster.image_offset[2] for p in parts)
            parts = tuple(
                PlacedPart(
                    part=p.part, raster=on_whole_bytes(p.raster, first), name=p.name, kind=p.kind
                )
                for p in parts
            )
            window = tray_window([p.raster for p in parts], self.profile)
        return PrintJob(
            profile=self.profile,
            parts=parts,
            window=window,
            channels=self.profile.assign(self.resins),
            support=policy,
            seed=seed,
            halftone=Halftone() if halftone is None else halftone,
            notes={
                "tray": self.name,
                "job_number": self.job_number,
                "spacing_mm": self.spacing_mm,
                "marks": [m.as_dict() for m in self.marks],
                **(notes or {}),
            },
        )


def lay_out(
    entries: Sequence[TrayEntry],
    profile: PrintProfile,
    *,
    spacing_mm: float | None = None,
    marks: bool = True,
    coupons: bool | Sequence[str] = True,
    name: str = "tray",
    job_number: str = "",
    support: str | None = None,
    monitor: Monitor = SILENT,
) -> Tray:
    """Set parts, their marks and witness coupons on a tray.

    Parts with a position go there; all else is packed round them. Then the distances are checked
    on the droplet sites of all whose windows come near each other.

    Parameters
    ----------
    entries : sequence of TrayEntry
    profile : PrintProfile
    spacing_mm : float, optional
        Least free distance between any two; five smallest gaps of the profile, at least 2 mm,
        if left out (ours).
    marks : bool
        False leaves all marks out.
    coupons : bool or sequence of str
        Witness coupons of all resins, of none, or of those named.
    name, job_number : str
        The job number is written on each mark.
    support : str, optional
        The support policy with which distances are checked; the profile's if left out.
    monitor : Monitor

    Returns
    -------
    Tray

    Raises
    ------
    InputError
        If something does not fit (each is named, with its size and the room left), overlaps or
        stands too close (with the place).
    """
    if not entries:
        raise InputError("A tray needs at least one part.", key="part")
    if spacing_mm is None:
        spacing_mm = max(5 * profile.minimum.gap, 2.0)
    if not (math.isfinite(spacing_mm) and 0 <= spacing_mm <= 1000):
        raise InputError(f"The spacing is 0 to 1000 mm; got {spacing_mm}.", key="spacing_mm")
    arranger = Arranger(profile, spacing_mm, job_number)
    for number, (entry, its_name) in enumerate(_single(entries), start=1):
        arranger.add(entry, its_name, number, marked=marks and entry.mark != "none")
    if coupons is not False:
        arranger.add_coupons(None if coupons is True else tuple(coupons))
    placed, found = arranger.arranged()
    tray = Tray(
        profile=profile,
        placed=placed,
        designs=arranger.designs,
        marks=found,
        spacing_mm=spacing_mm,
        name=name,
        job_number=job_number,
        notes=tuple(arranger.notes),
    )
    if len(placed) > 1:
        window = tray_window([p.raster for p in placed], profile)
        job = tray.job(support=support).replace(parts=placed, window=window)
        check_clearance(job, spacing_mm, monitor=monitor)
    return tray


def _single(entries: Sequence[TrayEntry]) -> list[tuple[TrayEntry, str]]:
    """Each copy by itself with a name of its own."""
    base = [e.name or e.part.name for e in entries]
    total: dict[str, int] = {}
    for entry, name in zip(entries, base, strict=True):
        total[name] = total.get(name, 0) + entry.copies
    at: dict[str, int] = {}
    found = []
    for entry, name in zip(entries, base, strict=True):
        for _ in range(entry.copies):
            at[name] = at.get(name, 0) + 1
            found.append((entry, name if total[name] == 1 else f"{name} {at[name]}"))
    twice = [name for name, n in Counter(n for _, n in found).items() if n > 1]
    if twice:
        raise InputError(f"Two parts of the tray would be called '{twice[0]}'.", key="name")
    return found


def write_tray(
    tray: Tray,
    folder: str | Path,
    *,
    support: str | None = None,
    seed: int = 0,
    halftone: Halftone | None = None,
    notes: Mapping[str, Any] | None = None,
    monitor: Monitor = SILENT,
    **options: Any,
) -> Stack:
    """Write a tray as one stack.

    Parameters
    ----------
    tray : Tray
    folder : str or Path
    support, seed, halftone, notes
        As for `Tray.job`.
    monitor : Monitor
    **options
        As for `voxelmat.printing.stack.write_job`: ``resume``, ``inputs``, ``workers`` and others.

    Raises
    ------
    InputError, ResourceError, Cancelled
        As `write_job`.
    """
    job = tray.job(support=support, seed=seed, halftone=halftone, notes=notes)
    return write_job(job, folder, monitor=monitor, **options)
