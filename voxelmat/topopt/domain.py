"""What may be designed where: from a part and a specification to masks, contradictions refused."""

from __future__ import annotations

import difflib
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.assemble import moduli
from voxelmat.model.design_rules import Zones
from voxelmat.model.design_spec import DesignSpec, ResinLimit
from voxelmat.model.measure_physics import CellProperty, CellTarget
from voxelmat.model.part import DISTANCE_STEPS, Part
from voxelmat.topopt.links import box_of, groups, spread
from voxelmat.topopt.measures import asked_nodes
from voxelmat.topopt.outline import staircase_distance
from voxelmat.topopt.physics import Case
from voxelmat.topopt.setting import check_nodes
from voxelmat.topopt.unknowns import Choice

__all__ = ["build_choice", "resin_numbers", "touching"]

Bools = NDArray[np.bool_]


def resin_numbers(part: Part, spec: DesignSpec) -> list[int]:
    """Index among the part's resins of each resin of the specification."""
    names = [m.name for m in part.resins]
    found = []
    for resin in (*spec.resins, *spec.fixed_resin, *_limited(spec)):
        if resin not in names:
            near = difflib.get_close_matches(resin, names, n=1)
            hint = f" Did you mean '{near[0]}'?" if near else ""
            raise InputError(
                f"The design names resin '{resin}', which the part does not have; it has "
                f"{', '.join(names)}.{hint}"
            )
        found.append(names.index(resin))
    for resin in (*spec.fixed_resin, *_limited(spec)):
        if resin not in spec.resins:
            raise InputError(
                f"'{resin}' is fixed or limited, but is not among the resins of the design "
                f"({', '.join(spec.resins)}); add it there, or put its voxels under 'keep'."
            )
    return found[: len(spec.resins)]


def _limited(spec: DesignSpec) -> list[str]:
    return [limit.resin for limit in spec.limits if isinstance(limit, ResinLimit)]


def touching(nodes: Bools) -> Bools:
    """Voxels with at least one marked node; both shapes in any one axis order."""
    n = tuple(s - 1 for s in nodes.shape)
    out = np.zeros(n, dtype=bool)
    for corner in range(8):
        at = tuple(slice(corner >> a & 1, (corner >> a & 1) + n[a]) for a in range(3))
        out |= nodes[at]
    return out


def build_choice(
    part: Part, spec: DesignSpec, cases: tuple[Case, ...]
) -> tuple[Choice, tuple[str, ...]]:
    """Masks of the design problem, and what was frozen without being asked for.

    Parameters
    ----------
    part : Part
    spec : DesignSpec
    cases : tuple of Case
        Forces, springs and supports as arrays over the nodes.

    Returns
    -------
    choice : Choice
    notes : tuple of str

    Raises
    ------
    InputError
        If regions have another shape than the grid, contradict each other, or leave nothing.
    """
    _check_shapes(part, spec)
    notes: list[str] = []
    shape = np.ascontiguousarray(part.solid.T)
    keep = _given(spec.keep, shape) & shape | _bought_in(part)
    domain = shape & ~keep
    if not domain.any():
        raise InputError("Nothing is left to design: all voxels of the shape are kept as they are.")
    mirrors = tuple(2 - "xyz".index(a) for a in spec.symmetry)
    box = box_of(shape)
    _check_mirror(shape, keep, mirrors, box)
    group = groups(
        shape,
        mirrors,
        tuple(2 - "xyz".index(a) for a in spec.extruded),
        {2 - "xyz".index(a): int(n) for a, n in spec.repeated.items()},
    )

    def alike(mask: Bools) -> Bools:
        return spread(_mirrored(mask & domain, mirrors, box), domain, group)

    resin = np.full(shape.shape, -1, dtype=np.intp)
    empty = alike(_given(spec.empty, shape))
    solid = alike(_given(spec.solid, shape))
    for number, name in enumerate(spec.resins):
        if name in spec.fixed_resin:
            mask = alike(_given(spec.fixed_resin[name], shape))
            clash = mask & (resin >= 0)
            if clash.any():
                other = spec.resins[int(resin[clash][0])]
                raise InputError(
                    f"{int(clash.sum())} voxels are fixed both to '{name}' and to '{other}'."
                )
            resin[mask] = number
            solid |= mask
    if empty.any() and not spec.void:
        raise InputError(
            f"{int(empty.sum())} voxels must be empty, but the design allows no empty voxels; "
            "set void to true."
        )
    _refuse(solid & empty, "must be solid (or one resin) and must be empty at once")
    if spec.skin is not None:
        layer = alike(_layer(part, spec.skin.thickness, spec.skin.region)) & ~empty
        if not layer.any():
            raise InputError("The skin holds no voxel that is designed; choose another region.")
        resin[layer & (resin < 0)] = spec.resins.index(spec.skin.resin)
        solid |= layer
    if spec.void:
        solid |= _protected(part, spec, alike, empty)
        solid |= _carrying(spec, cases, alike, empty, notes)
    lam, mu = (np.where(keep, m, 0.0) for m in moduli(part))
    choice = Choice(
        domain=domain,
        solid=solid,
        empty=empty,
        resin=resin,
        fill=np.where(domain, part.fill.T, 0.0).astype(np.float64),
        kept_lam=lam,
        kept_mu=mu,
        mirrors=mirrors,
        group=group,
        periodic=any(isinstance(m, CellProperty | CellTarget) for m in spec.measures),
        zones=_zones(spec, domain & (resin < 0) & ~empty, mirrors, box),
    )
    return choice, tuple(notes)


def _given(mask: Bools | None, like: Bools) -> Bools:
    return np.zeros_like(like) if mask is None else np.ascontiguousarray(mask.T)


def _check_shapes(part: Part, spec: DesignSpec) -> None:
    named = {n: getattr(spec, n) for n in ("solid", "empty", "keep", "protected")}
    named |= {f"fixed_resin '{r}'": m for r, m in spec.fixed_resin.items()}
    named["skin"] = None if spec.skin is None else spec.skin.region
    for name, mask in named.items():
        if mask is not None and mask.shape != part.grid.shape:
            raise InputError(
                f"The region '{name}' has shape {mask.shape}; the grid has {part.grid.shape}."
            )
        if mask is not None and not (mask & part.solid).any():
            raise InputError(f"The region '{name}' holds no voxel of the shape.")
    for measure in spec.measures:
        for what, nodes in asked_nodes(measure):
            check_nodes(part, nodes, what)


def _bought_in(part: Part) -> Bools:
    bought = {m.name for m in part.resins if m.kind == "bought-in"}
    flag = np.array([any(n in bought for n, _ in b.fractions) for b in part.palette])
    return np.ascontiguousarray((flag[part.labels] & part.solid).T)


def _check_mirror(
    shape: Bools, keep: Bools, mirrors: tuple[int, ...], box: tuple[slice, ...]
) -> None:
    for axis in mirrors:
        for what, mask in (("shape", shape), ("kept voxels", keep)):
            off = int((mask[box] != np.flip(mask[box], axis)).sum()) // 2
            if off:
                raise InputError(
                    f"Symmetry in {'zyx'[axis]} is asked for, but the {what} differs from the "
                    f"mirror image in {off} voxels; move the part on the grid or leave it out."
                )


def _mirrored(mask: Bools, mirrors: tuple[int, ...], box: tuple[slice, ...]) -> Bools:
    out = mask.copy()
    for axis in mirrors:
        out[box] |= np.flip(out[box], axis)
    return out


def _refuse(clash: Bools, what: str) -> None:
    if clash.any():
        k, j, i = (int(n) for n in np.argwhere(clash)[0])
        raise InputError(
            f"{int(clash.sum())} voxels {what}, the first at ({i}, {j}, {k}); make the regions "
            "disjoint."
        )


def _zones(
    spec: DesignSpec, free: Bools, mirrors: tuple[int, ...], box: tuple[slice, ...]
) -> NDArray[np.intp] | None:
    """Zone of each voxel; those whose blend is free must have one."""
    if not isinstance(spec.zones, Zones):
        return None
    numbers = np.ascontiguousarray(spec.zones.numbers.T, dtype=np.intp)
    if numbers.shape != free.shape:
        raise InputError(
            f"The zones have shape {spec.zones.numbers.shape}; the grid has {free.shape[::-1]}."
        )
    none = int((free & (numbers == 0)).sum())
    if none:
        raise InputError(
            f"{none} voxels whose blend is free belong to no zone; number all of them from 1."
        )
    for axis in mirrors:
        off = int((numbers[box] != np.flip(numbers[box], axis)).sum()) // 2
        if off:
            raise InputError(
                f"Symmetry in {'zyx'[axis]} is asked for, but the zones differ from their mirror "
                f"image in {off} voxels."
            )
    return numbers


def _layer(part: Part, depth: float, region: Bools | None) -> Bools:
    """Voxels of the shape's surface, `depth` mm deep, in a region ``[i, j, k]``."""
    h = part.grid.spacing
    unit = min(h) / DISTANCE_STEPS
    if part.distance is not None and depth <= 120 * unit:
        distance = part.distance.T * unit
    else:
        distance = staircase_distance(np.ascontiguousarray(part.solid.T), h, depth + max(h))
    layer = distance > -depth
    return layer if region is None else layer & np.ascontiguousarray(region.T)


def _protected(
    part: Part, spec: DesignSpec, alike: Callable[[Bools], Bools], empty: Bools
) -> Bools:
    """Voxels of the shape's surface that must stay solid."""
    if spec.protected is None:
        return np.zeros_like(empty)
    depth = spec.protected_depth or max(part.grid.spacing)
    mask = alike(_layer(part, depth, spec.protected))
    _refuse(mask & empty, "belong to a protected surface and must be empty at once")
    return mask


def _carrying(
    spec: DesignSpec,
    cases: tuple[Case, ...],
    alike: Callable[[Bools], Bools],
    empty: Bools,
    notes: list[str],
) -> Bools:
    """Voxels that loads, springs and full supports act on, and those whose motion is asked for."""
    out = np.zeros_like(empty)
    loaded = np.zeros(tuple(n + 1 for n in empty.shape), dtype=bool)
    held = np.zeros_like(loaded)
    for case in cases:
        loaded |= (case.force != 0).any(axis=0)
        if case.springs is not None:
            loaded |= (case.springs != 0).any(axis=0)
        # A plane that slides is a symmetry plane as often as not, and is left to the design.
        held |= case.fixed.all(axis=0)
    measured = np.zeros_like(loaded)
    for measure in spec.measures:
        for _, nodes in asked_nodes(measure):
            measured |= nodes.T
    for nodes, what in (
        (loaded, "that carry a load or a spring"),
        (held, "that are held in all directions"),
        (measured, "whose deflection is asked for"),
    ):
        mask = alike(touching(nodes))
        _refuse(mask & empty, f"{what[5:]} must be empty at once")
        if mask.any():
            notes.append(f"{int(mask.sum())} voxels {what} stay solid.")
        out |= mask
    return out
