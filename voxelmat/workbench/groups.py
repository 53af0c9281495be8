"""What of a part can be hidden by name: its resins, its blends, its bodies."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.part import Part
from voxelmat.workflow.colours import palette_rgb

__all__ = ["Group", "groups_of", "mask_of"]

#: Blends of the same resins beyond which they are one group: a graded part has hundreds.
_SINGLE_BLENDS = 4


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Group:
    """Voxels that go by one name.

    Attributes
    ----------
    name : str
        A resin, a blend as ``25 % rigid + 75 % soft``, ``blends of rigid, soft``, or ``body pad``
        (only where the body is not just one of these).
    colour : str
        ``#rrggbb``; empty for a body.
    labels : ndarray of bool, shape (palette,)
        Palette entries that belong to it; none for a body.
    body : str
    """

    name: str
    colour: str
    labels: NDArray[np.bool_]
    body: str = ""


def groups_of(part: Part) -> tuple[Group, ...]:
    """Everything that occurs in a part: pure resins first, then blends, then bodies."""
    count = np.bincount(part.labels.ravel(order="K"), minlength=len(part.palette))
    by_resins: dict[tuple[str, ...], list[int]] = {}
    for n, blend in enumerate(part.palette):
        if count[n] and not blend.is_empty:
            by_resins.setdefault(tuple(r for r, _ in blend.fractions), []).append(n)
    named: list[tuple[str, list[int]]] = []
    for resins, entries in sorted(by_resins.items(), key=lambda item: (len(item[0]), item[0])):
        if len(resins) == 1:
            named.append((resins[0], entries))
        elif len(entries) <= _SINGLE_BLENDS:
            named += [(str(part.palette[n]), [n]) for n in entries]
        else:
            named.append((f"blends of {', '.join(resins)}", entries))
    rgb = palette_rgb(part)
    found = []
    for name, entries in named:
        own = np.zeros(len(part.palette), dtype=bool)
        own[entries] = True
        mean = np.rint(np.average(rgb[entries], axis=0, weights=count[entries])).astype(int)
        found.append(Group(name=name, colour="#{:02x}{:02x}{:02x}".format(*mean), labels=own))
    return (*found, *_bodies(part, found))


def _bodies(part: Part, materials: Collection[Group]) -> list[Group]:
    """The bodies, less those that are one of the materials and nothing else."""
    none = np.zeros(len(part.palette), dtype=bool)
    whole = {g.labels.tobytes() for g in materials}
    count = np.bincount(part.labels.ravel(order="K"), minlength=len(part.palette))
    found = []
    for body, mask in part.bodies.items():
        own = np.bincount(part.labels[mask], minlength=len(part.palette))
        own[0] = 0
        alone = bool(np.all((own == 0) | (own == count))) and (own > 0).tobytes() in whole
        if own.any() and not alone:
            found.append(Group(name=f"body {body}", colour="", labels=none, body=body))
    return found


def mask_of(
    part: Part, groups: Collection[Group], names: Collection[str]
) -> NDArray[np.bool_] | None:
    """Voxels of the groups in `names`, ``[i, j, k]``; None for none."""
    wanted = [g for g in groups if g.name in names]
    if not wanted:
        return None
    table = np.any([g.labels for g in wanted], axis=0)
    mask: NDArray[np.bool_] = table[part.labels]
    for group in wanted:
        if group.body and group.body in part.bodies:
            mask = mask | part.bodies[group.body]
    return mask
