"""How far a result may move within the ranges of its materials, without another solve."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from voxelmat.model.laws import CalibratedCurve
from voxelmat.model.loadcase import Foundation, GroundSpring
from voxelmat.model.part import Part
from voxelmat.model.result import StaticResult

__all__ = ["Spread", "driven_by", "palette_range", "spread_of"]

Floats = NDArray[np.float64]

#: Energy elsewhere than in one material that may be left out of account.
_ALONE = 1e-6


@dataclass(frozen=True, slots=True, kw_only=True)
class Spread:
    """Factors on stiffness from the materials' ranges, and who carries the strain energy.

    With energy shares s and moduli that may fall to k_low or rise to k_high of their value,
    the minimum principles of complementary and of potential energy bound the work C of the loads:
    C / sum(s k_high) <= C' <= C sum(s / k_low) (textbook theorems; S. P. Timoshenko and
    J. N. Goodier, Theory of Elasticity; from memory).

    Attributes
    ----------
    softer : float
        sum(s / k_low), at least 1: by how much the loaded part may give more.
    stiffer : float
        sum(s k_high), at least 1: by how much it may give less.
    shares : mapping of str to float
        Share of the strain energy in voxels that hold the resin.
    blends : mapping of tuple of str to float
        Share of the strain energy by the set of resins, for blends of two or more.
    stress : float
        By how much stresses under given forces may shift, at least 1; an estimate. Where one
        material carries all, its modulus leaves them alone and only the range of nu counts.
    """

    softer: float
    stiffer: float
    shares: Mapping[str, float]
    blends: Mapping[tuple[str, ...], float]
    stress: float


def palette_range(part: Part) -> tuple[Floats, Floats]:
    """Smallest and largest factor on bulk and shear modulus of each palette entry, (2, n) each."""
    law = part.law
    ends = {}
    for side, pick, other in (("low", 0, 1), ("high", 1, 0)):
        E, nu = ([c.band for c in column] for column in zip(
            *((m.E, m.nu) for m in part.resins), strict=True
        ))  # fmt: skip
        bulk = np.array([e[pick] / (3 * (1 - 2 * n[pick])) for e, n in zip(E, nu, strict=True)])
        shear = np.array([e[pick] / (2 * (1 + n[other])) for e, n in zip(E, nu, strict=True)])
        edge = dataclasses.replace(law, side=side) if isinstance(law, CalibratedCurve) else law
        value = edge.evaluate(
            part.palette_fractions()[1:], bulk, shear, resins=[m.name for m in part.resins]
        )
        ends[side] = np.stack([value.bulk, value.shear])
    middle = np.stack(part.palette_moduli())[:, 1:]
    low, high = np.ones((2, len(part.palette))), np.ones((2, len(part.palette)))
    low[:, 1:] = np.minimum(ends["low"] / middle, 1.0)
    high[:, 1:] = np.maximum(ends["high"] / middle, 1.0)
    return low, high


def _energy(result: StaticResult) -> Floats:
    """Energy in change of volume and of shape by palette entry, (2, n), mJ."""
    part = result.part
    strain, stress = result.strain, result.stress
    volumetric = stress[..., :3].sum(axis=-1) * strain[..., :3].sum(axis=-1) / 6.0
    whole = 0.5 * (stress * strain).sum(axis=-1)
    share = np.clip(volumetric / np.maximum(whole, 1e-30), 0.0, 1.0)
    amount = result.energy_density * part.fill * part.grid.voxel_volume
    labels = part.labels.ravel(order="F")
    out = [
        np.bincount(labels, weights=(amount * s).ravel(order="F"), minlength=len(part.palette))
        for s in (share, 1.0 - share)
    ]
    return np.stack(out)


def _spring_energy(result: StaticResult) -> float:
    """Energy in springs to the ground, mJ: what the loads did and the part did not keep."""
    if not any(isinstance(load, GroundSpring | Foundation) for load in result.load_case.loads):
        return 0.0
    work = sum(
        along * float(np.linalg.norm(result.resultants[name]))
        for name, along in result.load_displacement.items()
    )
    for plate in result.load_case.plates:
        work += float(np.dot(plate.moment, result.plates[plate.name].rotation))
    return max(0.0, 0.5 * work - result.energy)


def spread_of(result: StaticResult) -> Spread:
    """Energy shares of a result, and the factors that its materials' ranges allow."""
    part = result.part
    energy = _energy(result)
    total = float(energy.sum()) + _spring_energy(result)
    if not total > 0:
        return Spread(softer=1.0, stiffer=1.0, shares={}, blends={}, stress=1.0)
    s = energy / total
    low, high = palette_range(part)
    rest = 1.0 - float(s.sum())  # springs, which are taken as exact
    by_entry = s.sum(axis=0)
    fractions = part.palette_fractions()
    blends: dict[tuple[str, ...], float] = {}
    for share, blend in zip(by_entry, part.palette, strict=True):
        if share > 0 and len(blend.fractions) > 1:
            names = tuple(n for n, _ in blend.fractions)
            blends[names] = blends.get(names, 0.0) + float(share)
    softer = float((s / low).sum()) + rest
    stiffer = float((s * high).sum()) + rest
    shift = softer * stiffer
    if rest < _ALONE and float(by_entry.max()) > 1.0 - _ALONE:
        # The mean factor moves all stiffness together, which stresses do not feel.
        shift *= float((s * low).sum()) * float((s / high).sum())
    return Spread(
        softer=softer,
        stiffer=stiffer,
        shares={
            m.name: float(by_entry[fractions[:, c] > 0].sum()) for c, m in enumerate(part.resins)
        },
        blends=blends,
        stress=max(shift, 1.0),
    )


def driven_by(result: StaticResult) -> str:
    """What moves the part: ``"force"``, ``"displacement"`` or ``"both"``.

    A strain that the material takes of itself, by temperature, counts as a displacement: stiffer
    material does not move less for it.
    """
    case = result.load_case
    moved = case.strains or any(s.moves for s in case.supports)
    moved |= any(p.moves for p in case.plates)
    forced = any(np.any(np.asarray(f) != 0) for f in result.resultants.values())
    forced |= any(any(p.moment) for p in case.plates)
    if moved:
        return "both" if forced else "displacement"
    return "force"
