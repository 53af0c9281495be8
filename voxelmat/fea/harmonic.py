"""Steady vibration by superposition of modes, with the rest of the modes taken as static."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
import scipy.linalg
from numpy.typing import ArrayLike, NDArray

from voxelmat.errors import InputError
from voxelmat.fea.assemble import assemble, moduli
from voxelmat.fea.damping import Losses, used_resins
from voxelmat.fea.mass import Mass, densities
from voxelmat.fea.modal import anchors
from voxelmat.fea.operator import touched_nodes
from voxelmat.fea.system import LinearSystem
from voxelmat.kernels.threads import threads
from voxelmat.model.harmonicresult import HarmonicResult
from voxelmat.model.loadcase import Foundation, GroundSpring, Load, LoadCase
from voxelmat.model.modalresult import ModalResult
from voxelmat.model.part import Part
from voxelmat.monitor import SILENT, Monitor
from voxelmat.provenance import Provenance, utc_now

__all__ = ["DAMPINGS", "harmonic"]

Double = NDArray[np.float64]
Complex = NDArray[np.complex128]
Vector = tuple[float, float, float]

#: ``structural``: the elastic force lags by the loss angle at every frequency, as in polymers;
#: ``viscous``: dashpots with half the loss factor as damping ratio.
DAMPINGS = ("structural", "viscous")

# Above this share of the highest mode found, the modes beyond it begin to swing too; ours.
_REACH = 2.0 / 3.0
# Residual of the static solve over the force; and a force that small counts as none.
_TOL, _NOTHING = 1e-8, 1e-7


class _Grid(NamedTuple):
    """Arrays of the part, ``[k, j, i]``."""

    lam: Double
    mu: Double
    mass: Mass
    system: LinearSystem
    springs: Double | None
    shapes: Double
    rigid: Double


def _grid(modal: ModalResult, monitor: Monitor) -> _Grid:
    part, element = modal.part, modal.element
    lam, mu = moduli(part)
    acts, _ = anchors(part, modal.supports, modal.springs, "a harmonic run")
    spacing = part.grid.spacing
    rigid = modal.rigid_shapes.transpose(0, 4, 3, 2, 1)
    held = acts.held | _pins(rigid)
    return _Grid(
        lam=lam,
        mu=mu,
        mass=Mass(densities(part), spacing, modal.mass_model),
        system=LinearSystem(
            lam, mu, spacing, held, springs=acts.springs, element=element, monitor=monitor
        ),
        springs=acts.springs,
        shapes=modal.shapes.transpose(0, 4, 3, 2, 1),
        rigid=rigid,
    )


def _pins(rigid: Double) -> NDArray[np.bool_]:
    """As few unknowns as stop the rigid motions, far apart; balanced forces do not load them."""
    out = np.zeros(rigid.shape[1:], dtype=bool)
    if len(rigid):
        _, order = scipy.linalg.qr(rigid.reshape(len(rigid), -1), mode="r", pivoting=True)
        out.ravel()[order[: len(rigid)]] = True
    return out


def _force(modal: ModalResult, grid: _Grid, base: Vector | None, loads: Sequence[Load]) -> Double:
    """Amplitude of the nodal forces, N; for a base, of those at 1 rad/s."""
    if base is None:
        if any(isinstance(load, GroundSpring | Foundation) for load in loads):
            raise InputError("A spring is no force; give it to the modal run.")
        return assemble(modal.part, LoadCase(name="a harmonic run", loads=tuple(loads))).force
    if not (modal.supports or modal.springs):
        raise InputError(
            "Nothing joins the part to a base: the modal run has neither supports nor springs. Add "
            "one, or let forces act."
        )
    touched = touched_nodes(grid.mu > 0)
    moved = np.asarray(base).reshape(3, 1, 1, 1) * touched
    force = np.empty_like(moved)
    grid.mass.apply(moved, force)
    return force


def _projected(shapes: Double, force: Double) -> Double:
    return np.array([float((s * force).sum()) for s in shapes])


def _rest(grid: _Grid, force: Double) -> Double:
    """Static answer of everything but the motions and modes that are known.

    Their share is taken out of the force first: what soft modes would move is far larger than
    the rest, and rounding of it would drown the rest.
    """
    known = np.concatenate([grid.rigid, grid.shapes])
    left, inertia = force.copy(), np.empty_like(force)
    full = float(np.linalg.norm(left * grid.system.free))
    for shape, p in zip(known, _projected(known, force), strict=True):
        grid.mass.apply(np.ascontiguousarray(shape), inertia)
        left -= p * inertia
    size = float(np.linalg.norm(left * grid.system.free))
    if not size > _NOTHING * full:
        return np.zeros_like(force)
    u = grid.system.solve(left, tol=_TOL * max(1.0, full / size)).u
    grid.mass.apply(u, inertia)
    for shape, p in zip(known, _projected(known, inertia), strict=True):
        u -= p * shape
    return u


def _frequencies(given: ArrayLike, rigid: bool) -> Double:
    f = np.atleast_1d(np.asarray(given, dtype=np.float64))
    if f.ndim != 1 or not len(f) or not np.all(np.isfinite(f) & (f >= 0)):
        raise InputError("Frequencies are a list of finite numbers of 0 Hz or more.")
    if rigid and np.any(f == 0):
        raise InputError(
            "At 0 Hz a part that can move freely runs away; give frequencies above 0 Hz, or "
            "support it."
        )
    return f


def _cautions(part: Part, modal: ModalResult, f: Double, given: float | None) -> list[str]:
    notes = list(modal.cautions)
    reach = _REACH * float(modal.frequencies[-1])
    if f.max() > reach:
        notes.append(
            f"Above {reach:.4g} Hz (two thirds of the highest mode found) modes that were left out "
            f"begin to swing, and are taken as static; ask for more modes."
        )
    used = [m for m, u in zip(part.resins, used_resins(part), strict=True) if u]
    if given is None:
        vague = [m.name for m in used if m.loss_factor is not None and m.loss_factor.indicative]
        if vague:
            notes.append(
                f"The loss factor of {', '.join(vague)} is indicative: heights of resonances "
                f"follow it."
            )
    soft = [m.name for m in used if m.kind == "elastomer"]
    if soft:
        notes.append(
            f"{', '.join(soft)}: modulus and loss factor are taken as the same at every frequency; "
            f"an elastomer stiffens as the frequency rises."
        )
    return notes


def _answer(omega: Double, w: Double, loss: Double, damping: str) -> Complex:
    """Amplitude of each mode per unit of force on it, shape (f, n)."""
    lag = loss * w**2 if damping == "structural" else loss * w * omega[:, None]
    return np.asarray(1.0 / (w**2 - omega[:, None] ** 2 + 1j * lag))


def harmonic(
    modal: ModalResult,
    frequencies: ArrayLike,
    *,
    base: Vector | None = None,
    loads: Sequence[Load] = (),
    damping: str = "structural",
    loss_factor: float | None = None,
    monitor: Monitor = SILENT,
) -> HarmonicResult:
    """Answer of a part to a sinusoidal force or to a shaking base.

    Parameters
    ----------
    modal : ModalResult
        Modes of the part; those above are taken as static, so that the answer is exact towards
        0 Hz.
    frequencies : array_like of float, shape (f,)
        Hz.
    base : tuple of float, optional
        Amplitude along x, y, z of the base that supports and springs stand on, mm.
    loads : sequence of Load, optional
        Forces that act in phase, instead of a base.
    damping : str
        One of `DAMPINGS`.
    loss_factor : float, optional
        For all modes; the materials' own, weighted by strain energy, where it is left out.
    monitor : Monitor

    Returns
    -------
    HarmonicResult

    Raises
    ------
    InputError
        Neither or both of base and loads, a base that nothing stands on, a material without a
        loss factor.
    """
    started = utc_now()
    if (base is None) == (not loads):
        raise InputError("Give either a base that moves or loads.")
    if base is not None and not (np.all(np.isfinite(base)) and any(base)):
        raise InputError(f"The amplitude of the base must be finite and not 0; got {base} mm.")
    if damping not in DAMPINGS:
        raise InputError(f"damping is one of {', '.join(DAMPINGS)}; got {damping!r}.")
    if loss_factor is not None and not (np.isfinite(loss_factor) and loss_factor > 0):
        raise InputError(f"A loss factor is finite and above 0; got {loss_factor}.")
    f = _frequencies(frequencies, len(modal.rigid) > 0)
    monitor.report("answering to vibration", done=0, total=len(f))
    grid = _grid(modal, monitor)
    force = _force(modal, grid, base, loads)
    share, rigid_share = _projected(grid.shapes, force), _projected(grid.rigid, force)
    rest = _rest(grid, force)
    loss, rest_loss = _losses(modal, grid, rest, loss_factor)
    omega = 2.0 * np.pi * f
    # What the base does grows with the square of the frequency.
    growth = omega**2 if base is not None else np.ones(len(f))
    rigid_answer = -growth / omega**2 if len(modal.rigid) else growth
    rest_factor = growth / (1.0 + 1j * (rest_loss if damping == "structural" else 0.0))
    return HarmonicResult(
        modal=modal,
        frequencies=f,
        base=base,
        coordinates=growth[:, None] * _answer(omega, modal.angular, loss, damping) * share,
        rigid_coordinates=np.outer(rigid_answer, rigid_share).astype(np.complex128),
        rest=rest.T,
        rest_factor=np.asarray(rest_factor, dtype=np.complex128),
        loss_factors=loss,
        damping=damping,
        cautions=tuple(_cautions(modal.part, modal, f, loss_factor)),
        provenance=Provenance(
            inputs={"part": modal.part.digest},
            threads=threads(),
            started_utc=started,
            finished_utc=utc_now(),
        ),
    )


def _losses(
    modal: ModalResult, grid: _Grid, rest: Double, given: float | None
) -> tuple[Double, float]:
    """Loss factor of each mode and of the rest."""
    if given is not None:
        return np.full(len(modal), given), given
    losses = Losses(modal.part, grid.lam, grid.mu, modal.element, grid.springs)
    return np.array([losses.of(s) for s in grid.shapes]), losses.of(rest)
