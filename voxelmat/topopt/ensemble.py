"""The ways in which a design may come out: which there are, and their solvers."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from voxelmat.errors import InputError
from voxelmat.fea.system import LinearSystem
from voxelmat.model.design_rules import LoadScatter, MaterialScatter, Robust
from voxelmat.model.design_spec import DesignSpec
from voxelmat.model.part import Part
from voxelmat.model.region import solid_nodes
from voxelmat.topopt.domain import resin_numbers
from voxelmat.topopt.fields import NOMINAL, Realisation
from voxelmat.topopt.physics import Case, Physics
from voxelmat.topopt.scatter import scattered_loads, scattered_resins
from voxelmat.topopt.unknowns import Unknowns

__all__ = ["Ensemble", "Scenario", "SharedSystems", "borders", "ensemble_of", "loads_of"]

Array = NDArray[np.float64]
Cases = tuple[Case, ...]

_MOST_PHASES = 6


@dataclass(frozen=True, slots=True, kw_only=True)
class Scenario:
    """One way in which a design may come out; `physics` has the loads that then act."""

    realisation: Realisation
    physics: Physics


@dataclass(frozen=True, slots=True, kw_only=True)
class Ensemble:
    """All the ways that are judged, next to the nominal one.

    Attributes
    ----------
    eroded, dilated : Scenario or None
        Borders of the solid further in, further out.
    phases : tuple of Scenario
        Borders of each resin further in, further out.
    materials, loads : tuple of (Scenario, Scenario)
        Pairs one deviation up and down.
    of_materials, of_loads : float or None
        Deviations that are added; None for loads: the worst of them.
    """

    eroded: Scenario | None = None
    dilated: Scenario | None = None
    phases: tuple[Scenario, ...] = ()
    materials: tuple[tuple[Scenario, Scenario], ...] = ()
    loads: tuple[tuple[Scenario, Scenario], ...] = ()
    of_materials: float = 0.0
    of_loads: float | None = None

    @property
    def all(self) -> tuple[Scenario, ...]:
        """Every scenario but the nominal one."""
        borders = tuple(s for s in (self.eroded, self.dilated) if s is not None)
        pairs = tuple(s for pair in (*self.materials, *self.loads) for s in pair)
        return (*borders, *self.phases, *pairs)


def borders(
    robust: Robust, unknowns: Unknowns
) -> tuple[Realisation | None, Realisation | None, tuple[Realisation, ...]]:
    """Eroded, dilated, and the realisations that move borders between resins.

    Raises
    ------
    InputError
        If that would take too many solves.
    """
    solid = unknowns.n_rho > 0
    eroded = Realisation(threshold=robust.margin) if solid else None
    dilated = Realisation(threshold=-robust.margin) if solid else None
    pure = unknowns.blending.pure and unknowns.blending.n > 0
    if not (pure if robust.phases is None else robust.phases and pure):
        return eroded, dilated, ()
    count = unknowns.resins
    if count > _MOST_PHASES:
        raise InputError(
            f"Robust borders of {count} resins take {2 * count} more solves an iteration; at most "
            f"{_MOST_PHASES} resins are allowed. Leave phases out or name fewer resins."
        )
    odds = math.log((0.5 + robust.margin) / (0.5 - robust.margin))
    # Of two resins, one further in is the other further out.
    each = range(1 if count == 2 else count)
    biases = [
        tuple(sign * odds if n == m else 0.0 for n in range(count))
        for m in each
        for sign in (-1, 1)
    ]
    return eroded, dilated, tuple(Realisation(bias=b) for b in biases)


class SharedSystems:
    """Solver set-ups of the nominal moduli, shared by the scenarios that differ in loads only."""

    def __init__(self, make: Callable[..., Any] = LinearSystem) -> None:
        self._make = make
        self._lam: Array | None = None
        self._known: list[tuple[Any, Any, Any]] = []

    def share(self, lam: Array) -> None:
        """From now on, set-ups of this very array are kept; earlier ones are forgotten."""
        self._lam = lam
        self._known.clear()

    def __call__(
        self, lam: Array, mu: Array, spacing: Any, fixed: Any, *, springs: Any, **rest: Any
    ) -> Any:
        """The system of these arrays."""
        if lam is self._lam:
            for held, held_by, system in self._known:
                if np.array_equal(held, fixed) and _same(held_by, springs):
                    return system
        system = self._make(lam, mu, spacing, fixed, springs=springs, **rest)
        if lam is self._lam:
            self._known.append((fixed, springs, system))
        return system


def _same(a: Any, b: Any) -> bool:
    return (a is None) == (b is None) and (a is None or np.array_equal(a, b))


def loads_of(spec: DesignSpec, part: Part, cases: Cases) -> list[tuple[Cases, Cases]]:
    """The load cases off one way and the other, for each way in which they scatter.

    Raises
    ------
    InputError
        As `voxelmat.topopt.scatter.scattered_loads`.
    """
    found = [s for s in spec.scatter if isinstance(s, LoadScatter)]
    if not found:
        return []
    nodes = np.ascontiguousarray(solid_nodes(part.solid).T)
    return scattered_loads(found[0], cases, part.grid.spacing, nodes)


def ensemble_of(
    spec: DesignSpec,
    part: Part,
    cases: Cases,
    loads: Sequence[tuple[Cases, Cases]],
    unknowns: Unknowns,
    physics: Callable[[Cases], Physics],
) -> Ensemble:
    """The ensemble of a specification.

    Parameters
    ----------
    spec : DesignSpec
    part : Part
    cases : tuple of Case
    loads : sequence
        Of `loads_of`.
    unknowns : Unknowns
    physics : callable
        Makes a `Physics` of load cases.
    """

    def way(realisation: Realisation, of: Cases = cases) -> Scenario:
        return Scenario(realisation=realisation, physics=physics(of))

    eroded = dilated = None
    moved: tuple[Realisation, ...] = ()
    if spec.robust is not None:
        eroded, dilated, moved = borders(spec.robust, unknowns)
    materials = [s for s in spec.scatter if isinstance(s, MaterialScatter)]
    resins = [part.resins[n] for n in resin_numbers(part, spec)]
    pairs = scattered_resins(materials[0], resins) if materials else []
    judge = [s for s in spec.scatter if isinstance(s, LoadScatter)]
    return Ensemble(
        eroded=None if eroded is None else way(eroded),
        dilated=None if dilated is None else way(dilated),
        phases=tuple(way(r) for r in moved),
        materials=tuple((way(a), way(b)) for a, b in pairs),
        loads=tuple((way(NOMINAL, a), way(NOMINAL, b)) for a, b in loads),
        of_materials=materials[0].deviations if materials else 0.0,
        of_loads=judge[0].deviations if judge and judge[0].judge == "mean" else None,
    )
